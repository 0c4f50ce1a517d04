"""Patients to try the whole path on: random ones built outward from a target situation, and the written fixtures.

A random patient starts as someone the rules have much to say about (heart failure, an ejection fraction, a few of the
drugs) and is then disturbed: values beside the limits, dates beside the windows, odd statuses, doubtful orders.
"""

from __future__ import annotations

import json
import re
from collections.abc import Mapping
from datetime import UTC, date, datetime, time, timedelta
from functools import cache
from pathlib import Path
from typing import Any

from builders import (
    Resource,
    administration,
    admission,
    allergy,
    creatinine,
    dispense,
    egfr,
    heart_rate,
    icd,
    lvef,
    nt_probnp,
    nyha,
    order,
    patient,
    potassium,
    pressure,
    problem,
    sodium,
    statement,
    subject,
    test_order,
    until,
    weight,
)
from hypothesis import strategies as st

TODAY = date(2026, 3, 1)
AS_OF = datetime.combine(TODAY, time.max, UTC)
FIXTURES = Path(__file__).parents[2] / "fixtures" / "patients"

# Days before today: the edges of test windows (3, 7, 14, 28 days), of freshness (7, 30, 90 days), of supplies and stale orders.
DAYS_AGO = (0, 1, 2, 3, 4, 6, 7, 8, 9, 13, 14, 15, 27, 28, 29, 30, 31, 41, 60, 89, 90, 91, 120, 181, 365, 366, 401, 900)
DOSES = {
    "bisoprolol": ((1.25, 1), (5, 1), (10, 1)),
    "candesartan": ((4, 1), (32, 1)),
    "carvedilol": ((3.125, 2), (25, 2)),
    "dapagliflozin": ((10, 1),),
    "digoxin": ((0.125, 1), (0.25, 1)),
    "empagliflozin": ((10, 1), (25, 1)),
    "enalapril": ((2.5, 2), (10, 2)),
    "eplerenone": ((25, 1), (50, 1)),
    "furosemide": ((40, 1), (80, 2)),
    "ibuprofen": ((400, 3),),
    "lisinopril": ((5, 1), (40, 1)),
    "losartan": ((50, 1), (150, 1)),
    "metformin": ((500, 2),),
    "metoprolol": ((50, 1),),
    "metoprolol succinate": ((25, 1), (200, 1)),
    "metoprolol tartrate": ((50, 2),),
    "potassium chloride": ((600, 2),),
    "sacubitril/valsartan": ((100, 2), (400, 1)),
    "spironolactone": ((12.5, 1), (25, 1), (25, 0.5), (50, 1)),
    "verapamil": ((80, 3),),
}
STATUSES = ("active", "active", "active", "completed", "on-hold", "stopped", "unknown", "draft", "entered-in-error")
POTASSIUMS = (3.4, 3.5, 4.4, 4.9, 5.0, 5.1, 5.4, 5.5, 5.6, 5.9, 6.0, 6.5)
CREATININES = (0.8, 1.0, 1.5, 2.0, 2.01, 2.5, 2.55, 3.0, 3.5, 4.0)  # mg/dL
EJECTION_FRACTIONS = (15, 30, 35, 39.9, 40, 40.1, 41, 45, 49, 50, 55, 62)


def day(ago: int) -> str:
    """The day so many days before today (after it, where negative), as FHIR writes it."""
    return (TODAY - timedelta(days=ago)).isoformat()


def numbered(resources: list[Resource], start: int = 1) -> list[Resource]:
    """The resources, each with a legal id of its own (Patients keep theirs)."""
    return [
        resource
        if resource["resourceType"] == "Patient"
        else {**resource, "id": re.sub("[^A-Za-z0-9.-]", "", f"{resource['id']}-{number}")[-64:]}
        for number, resource in enumerate(resources, start=start)
    ]


ago = st.sampled_from(DAYS_AGO)


@st.composite
def when(draw: st.DrawFn, days: st.SearchStrategy[int] = ago) -> str:
    """A day, rarely only its month, its year or an instant in it."""
    text = day(draw(days))
    form = draw(st.sampled_from(("day",) * 6 + ("instant", "instant", "month", "year")))
    if form == "instant":
        return f"{text}T{draw(st.integers(0, 23)):02d}:30:00{draw(st.sampled_from(('Z', '+02:00', '-08:00')))}"
    return {"day": text, "month": text[:7], "year": text[:4]}[form]


@st.composite
def orders(draw: st.DrawFn) -> Resource:
    """A drug in some form: ordered, stated, dispensed or given."""
    drug = draw(st.sampled_from(sorted(DOSES)))
    dose, times = draw(st.sampled_from(DOSES[drug]))
    since = draw(when())
    kind = draw(st.sampled_from(("order",) * 6 + ("ended", "undated", "doseless", "statement", "dispense", "given")))
    match kind:
        case "ended":
            return until(order(drug, dose, times, since=since), draw(when()), draw(st.sampled_from(STATUSES)))
        case "undated":
            return order(drug, dose, times, since=None)
        case "doseless":
            return order(drug, None, since=since, status=draw(st.sampled_from(STATUSES)))
        case "statement":
            return statement(drug, dose, times, since=since)
        case "dispense":
            return dispense(drug, draw(when()), days=draw(st.sampled_from((30, 90))))
        case "given":
            return administration(drug, draw(when()), dose)
        case _:
            return order(drug, dose, times, since=since, status=draw(st.sampled_from(STATUSES)))


@st.composite
def measurements(draw: st.DrawFn) -> Resource:
    """A value at or beside a limit, on a day at or beside the edge of a window."""
    taken = draw(when())
    choices = {
        "potassium": lambda: potassium(draw(st.sampled_from(POTASSIUMS)), taken),
        "creatinine": lambda: creatinine(draw(st.sampled_from(CREATININES)), taken),
        "creatinine-si": lambda: creatinine(draw(st.sampled_from((70, 176.84, 221, 222, 265, 310))), taken, "umol/L"),
        "egfr": lambda: egfr(draw(st.sampled_from((14, 15, 19, 20, 24, 25, 29, 30, 31, 44, 45, 60, 90))), taken),
        "sodium": lambda: sodium(draw(st.sampled_from((124, 125, 129, 130, 140))), taken),
        "lvef": lambda: lvef(draw(st.sampled_from(EJECTION_FRACTIONS)), taken),
        "pressure": lambda: pressure(draw(st.sampled_from((84, 89, 90, 99, 100, 120, 180))), 60, taken),
        "pulse": lambda: heart_rate(draw(st.sampled_from((44, 49, 50, 51, 59, 60, 70, 110))), taken),
        "nyha": lambda: nyha(draw(st.integers(1, 4)), taken),
        "weight": lambda: weight(draw(st.sampled_from((48.0, 84.9, 85.0, 85.1, 110.0))), taken),
        "nt-probnp": lambda: nt_probnp(draw(st.sampled_from((80, 125, 1200))), taken),
    }
    name = draw(st.sampled_from(("potassium", "potassium", "creatinine", "creatinine", "lvef", *choices)))
    made = choices[name]()
    status = draw(st.sampled_from(("final",) * 6 + ("preliminary", "amended", "entered-in-error")))
    return {**made, "status": status}


@st.composite
def problems(draw: st.DrawFn) -> Resource:
    """A problem, an intolerance, a stay or an order for a test that bears on the pillars."""
    since = draw(when())
    kind = draw(st.sampled_from(("problem",) * 4 + ("allergy", "stay", "test")))
    if kind == "allergy":
        drug = draw(st.sampled_from(("lisinopril", "spironolactone", "empagliflozin", "bisoprolol")))
        return allergy(drug, draw(st.sampled_from((None, "angioedema", "cough"))), recorded=since)
    if kind == "stay":
        first, last = sorted((draw(ago), draw(ago)), reverse=True)
        return admission(day(first), day(last))
    if kind == "test":
        return test_order(draw(st.sampled_from(("2823-3", "2160-0", "10230-1"))), since)
    names = (
        "hypertension",
        "type 1 diabetes",
        "type 2 diabetes",
        "pregnancy",
        "asthma",
        "hyperkalaemia",
        "obstructive cardiomyopathy",
        "dependence on dialysis",
        "hospice care",
    )
    return problem(
        draw(st.sampled_from(names)), since, status=draw(st.sampled_from(("active", "active", "active", "resolved")))
    )


@st.composite
def patients(draw: st.DrawFn) -> list[Resource]:
    """The resources of one patient, the Patient first, each with its own id."""
    born = draw(st.sampled_from(("1941-05-04", "1967-05-04", "1967", "1990-02-28", None)))
    sex = draw(st.sampled_from(("male", "female", None)))
    found = [patient(born=born, sex=sex)]
    target = draw(
        st.sampled_from(("reduced", "reduced", "reduced", "mildly reduced", "preserved", "unmeasured", "none"))
    )
    if target != "none":
        found.append(problem("heart failure", draw(when(st.sampled_from((91, 181, 400, 900))))))
    limits = {"reduced": (25, 35, 40), "mildly reduced": (41, 45, 49), "preserved": (50, 60)}
    if target in limits:
        found.append(lvef(draw(st.sampled_from(limits[target])), day(draw(st.sampled_from((31, 181, 366))))))
    if draw(st.sampled_from((True, True, True, False))):  # a clinic visit with all that a start asks for
        seen = day(draw(st.sampled_from((0, 1, 3, 6, 7, 8, 14, 30, 31))))
        found += [pressure(118, 70, seen), heart_rate(68, seen), nyha(draw(st.sampled_from((2, 2, 3, 1))), seen)]
        found.append(potassium(draw(st.sampled_from((4.2, 4.4, 4.6, 4.9, 4.9, *POTASSIUMS))), seen))
        found.append(creatinine(draw(st.sampled_from((0.8, 0.9, 1.0, 1.1, 1.2, *CREATININES))), seen))
        found.append(sodium(139, seen))
    begun = draw(st.sampled_from((None, None, "spironolactone", "enalapril", "sacubitril/valsartan")))
    if begun is not None:  # a drug whose checks have windows
        found.append(order(begun, *draw(st.sampled_from(DOSES[begun])), since=day(draw(ago))))
    found += draw(st.lists(orders(), max_size=draw(st.sampled_from((2, 6)))))
    found += draw(st.lists(measurements(), max_size=draw(st.sampled_from((0, 2, 8)))))
    found += draw(st.lists(problems(), max_size=draw(st.sampled_from((0, 1, 3)))))
    return numbered(found)


@st.composite
def later_resources(draw: st.DrawFn) -> list[Resource]:
    """Resources of every kind, all dated after today."""
    ahead = st.sampled_from((-1, -2, -8, -31, -400))
    kinds = (
        lambda: order(*_dosed(draw), since=draw(when_later(ahead))),
        lambda: statement(*_dosed(draw), since=draw(when_later(ahead))),
        lambda: dispense(_dosed(draw)[0], draw(when_later(ahead))),
        lambda: administration(_dosed(draw)[0], draw(when_later(ahead))),
        lambda: potassium(draw(st.sampled_from(POTASSIUMS)), draw(when_later(ahead))),
        lambda: creatinine(draw(st.sampled_from(CREATININES)), draw(when_later(ahead))),
        lambda: lvef(draw(st.sampled_from(EJECTION_FRACTIONS)), draw(when_later(ahead))),
        lambda: pressure(80, 50, draw(when_later(ahead))),
        lambda: nyha(draw(st.integers(1, 4)), draw(when_later(ahead))),
        lambda: problem("dependence on dialysis", draw(when_later(ahead))),
        lambda: problem("heart failure", draw(when_later(ahead))),
        lambda: allergy("lisinopril", "angioedema", recorded=draw(when_later(ahead))),
        lambda: admission(day(-3), day(-5)),
        lambda: test_order("2823-3", draw(when_later(ahead))),
    )
    made = [draw(st.sampled_from(kinds))() for _ in range(draw(st.integers(1, 5)))]
    return [{**resource, "id": f"later-{number}"} for number, resource in enumerate(made, start=1)]


@st.composite
def when_later(draw: st.DrawFn, ahead: st.SearchStrategy[int]) -> str:
    """A day after today, or the first instants of tomorrow."""
    text = day(draw(ahead))
    return draw(st.sampled_from((text, f"{text}T00:00:00Z", f"{text}T09:00:00Z")))


def _dosed(draw: st.DrawFn) -> tuple[str, float, float]:
    drug = draw(st.sampled_from(sorted(DOSES)))
    return (drug, *draw(st.sampled_from(DOSES[drug])))


UNRELATED = (
    {
        "resourceType": "Immunization",
        "id": "influenza",
        "status": "completed",
        "vaccineCode": {"coding": [{"system": "http://hl7.org/fhir/sid/cvx", "code": "140"}]},
        "patient": subject(),
        "occurrenceDateTime": "2025-10-01",
    },
    problem("ingrown nail", "2024-05-05", code=icd("L60.0", "Ingrowing nail")),
    {
        "resourceType": "Observation",
        "id": "shoe-size",
        "status": "final",
        "code": {"coding": [{"system": "http://example.org/local", "code": "shoe-size"}]},
        "subject": subject(),
        "effectiveDateTime": "2026-02-20",
        "valueQuantity": {"value": 43, "unit": "1", "system": "http://unitsofmeasure.org", "code": "1"},
    },
    {"resourceType": "Claim", "id": "bill", "patient": subject(), "status": "active"},
    {
        "resourceType": "CarePlan",
        "id": "plan",
        "status": "active",
        "intent": "plan",
        "subject": subject(),
        "description": "potassium 6.9 mmol/L",
    },
)


def of_another_patient(resources: list[Resource], name: str) -> list[Resource]:
    """The same resources as those of another patient of that id, with ids of their own."""
    renamed: list[Resource] = []
    for resource in resources:
        is_patient = resource["resourceType"] == "Patient"
        made = {**resource, "id": name if is_patient else f"{resource['id'][-50:]}-{name}"}
        renamed.append({key: subject(name) if key in ("subject", "patient") else made[key] for key in made})
    return renamed


@cache
def written_patients() -> Mapping[str, tuple[bytes, str]]:
    """The fixtures by name: their bundle as bytes, and the day they are meant for."""
    return {
        folder.name: (
            (folder / "bundle.json").read_bytes(),
            str(json.loads((folder / "expected.json").read_bytes())["as_of"]),
        )
        for folder in sorted(FIXTURES.iterdir())
    }


def resources_of(data: bytes) -> list[dict[str, Any]]:
    """The resources of a written Bundle, each a fresh copy."""
    return [entry["resource"] for entry in json.loads(data)["entry"]]
