"""What holds for every patient, however odd."""

from __future__ import annotations

from datetime import UTC, timedelta
from decimal import Decimal
from typing import Any

import orjson
import pytest
from asking import Answer
from builders import Resource, bundle, creatinine, lvef, nt_probnp, nyha, order, potassium, weight
from hypothesis import example, given
from hypothesis import strategies as st
from random_patients import (
    AS_OF,
    CREATININES,
    POTASSIUMS,
    UNRELATED,
    day,
    later_resources,
    numbered,
    of_another_patient,
    patients,
    written_patients,
)

from cds.assessment import assess
from cds.clinical.evaluate import ANSWERS, evaluate
from cds.content.load import load_content
from cds.fhir.build_record import build_record
from cds.fhir.bundle import split_by_patient
from cds.fhir.dates import parse_as_of
from cds.fhir.reading import COMMAND_LINE_LIMITS, read_json

CONTENT = load_content()
# What a finding says but for its sentences (`because`, `missing`), where the units of the report stand.
DECISIONS = ("rule", "about", "outcome", "action", "look_again_on", "due", "recommendations", "limits")


def whole(data: bytes, as_of=AS_OF) -> bytes:
    return orjson.dumps(assess(data, CONTENT, as_of=as_of, trace=True))


def one(resources: list[Resource], as_of=AS_OF) -> Answer:
    (only,) = orjson.loads(whole(bundle(*resources), as_of))["assessments"]
    return only


def decisions(answer: Answer) -> list[dict[str, Any]]:
    return [
        {**{key: finding[key] for key in DECISIONS}, "gaps": len(finding["missing"])} for finding in answer["findings"]
    ]


def without_intake(answer: Answer) -> Answer:
    return {key: value for key, value in answer.items() if key != "intake"}


def record_from(resources: list[Resource]):
    (split,) = split_by_patient(read_json(bundle(*resources), COMMAND_LINE_LIMITS), COMMAND_LINE_LIMITS).patients
    record = build_record(split, CONTENT.codes, UTC).record
    assert record is not None
    return record


@given(resources=patients(), later=later_resources())
def test_nothing_dated_after_the_day_changes_what_is_said(resources, later):
    assert without_intake(one([*resources, *later])) == without_intake(one(resources))


@given(resources=patients(), later=later_resources(), earlier=st.sampled_from((0, 1, 8, 30, 95, 366)))
def test_the_rules_see_only_the_record_as_known_on_the_day(resources, later, earlier):
    record, as_of = record_from([*resources, *later]), AS_OF - timedelta(days=earlier)
    assert evaluate(record, CONTENT.tables, as_of=as_of) == evaluate(
        record.known_on(as_of), CONTENT.tables, as_of=as_of
    )


@given(resources=patients(), data=st.data())
def test_the_order_of_resources_never_matters(resources, data):
    shuffled = data.draw(st.permutations(resources))
    assert whole(bundle(*shuffled)) == whole(bundle(*resources))


@given(resources=patients())
def test_the_same_input_gives_the_same_bytes(resources):
    assert whole(bundle(*resources)) == whole(bundle(*resources))


@given(resources=patients(), extra=st.sampled_from(UNRELATED))
def test_an_unrelated_resource_changes_nothing_but_the_counts(resources, extra):
    before, after = one(resources), one([*resources, extra])
    assert without_intake(after) == without_intake(before)
    assert after["intake"]["issues"] == before["intake"]["issues"]
    counts = [sum(answer["intake"][key] for key in ("read", "not_needed")) for answer in (before, after)]
    assert counts[1] == counts[0] + 1


@given(resources=patients())
def test_every_rule_answers_exactly_once_about_each_subject(resources):
    findings = one(resources)["findings"]
    subjects = [(finding["rule"], finding["about"]) for finding in findings]
    assert len(set(subjects)) == len(subjects)
    assert {rule for rule, _ in subjects} == set(ANSWERS)


@given(first=patients(), second=patients())
def test_the_data_of_two_patients_never_mix(first, second):
    other = of_another_patient(second, "p2")
    together = orjson.loads(whole(bundle(*first, *other)))
    assert together["assessments"] == [one(first), one(other)]


@given(resources=patients(), value=st.sampled_from(POTASSIUMS), unit=st.sampled_from(("meq/L", "mEq/L", "umol/mL")))
def test_potassium_decides_alike_in_millimoles_and_milliequivalents(resources, value, unit):
    """Ruling 36: a unit of factor 1 counts as reported."""
    here, there = ([*resources, potassium(value, day(2), unit, id="k")] for unit in ("mmol/L", unit))
    assert decisions(one(here)) == decisions(one(there))


@given(resources=patients(), steps=st.integers(10, 90))
def test_creatinine_exact_in_both_units_decides_alike(resources, steps):
    """A step of 0.05 mg/dL is 4.42 umol/L exactly (88.4), so neither report is rounded (rulings 1 and 36)."""
    mg_dl, umol_l = float(Decimal("0.05") * steps), float(Decimal("4.42") * steps)
    kept = [resource for resource in resources if not resource["id"].startswith("creatinine")]
    here = [*kept, creatinine(mg_dl, day(2), id="crea")]
    there = [*kept, creatinine(umol_l, day(2), "umol/L", id="crea")]
    assert decisions(one(here)) == decisions(one(there))


@given(resources=patients(), tenths=st.integers(450, 1200))
def test_weight_decides_alike_in_kilograms_and_grams(resources, tenths):
    here = [*resources, weight(tenths / 10, day(1), id="kg")]
    there = [*resources, weight(tenths * 100, day(1), "g", id="kg")]
    assert decisions(one(here)) == decisions(one(there))


@given(resources=patients(), value=st.sampled_from((80, 124, 125, 126, 900)))
def test_nt_probnp_decides_alike_in_pg_per_ml_and_ng_per_l(resources, value):
    here = [*resources, nt_probnp(value, day(1), id="np")]
    there = [*resources, nt_probnp(value, day(1), id="np")]
    there[-1]["valueQuantity"].update(unit="ng/L", code="ng/L")
    assert decisions(one(here)) == decisions(one(there))


def is_start(finding: Answer) -> bool:
    return finding["rule"].startswith("start-") and finding["outcome"] == "open" and finding["action"] == "start"


@given(resources=patients(), low=st.sampled_from(POTASSIUMS), more=st.integers(1, 20))
@example(resources=[], low=5.0, more=1)
def test_a_higher_potassium_never_opens_a_start_that_was_not_open_before(resources, low, more):
    """From 3.5 mmol/L up: below, a low potassium may itself speak against a start."""
    low = max(low, 3.5)
    kept = [resource for resource in resources or _ready_for_an_mra() if not resource["id"].startswith("potassium")]
    before, after = (
        {f["rule"] for f in one([*kept, potassium(value, day(0), id="k")])["findings"] if is_start(f)}
        for value in (low, round(low + more / 10, 1))
    )
    assert after <= before


def _ready_for_an_mra() -> list[Resource]:
    from builders import heart_rate, patient, pressure, problem

    return numbered(
        [
            patient(),
            problem("heart failure", "2024-01-15"),
            lvef(32, "2025-12-01"),
            nyha(2, day(1)),
            pressure(118, 70, day(1)),
            heart_rate(66, day(1)),
            creatinine(1.0, day(1)),
            order("enalapril", 10, 2, since="2025-06-01"),
        ]
    )


def test_a_patient_ready_for_an_mra_is_offered_one_at_4_9_and_not_at_5_1():
    """So that the property above is about something."""
    offered, not_offered = (
        {f["rule"] for f in one([*_ready_for_an_mra(), potassium(value, day(0), id="k")])["findings"] if is_start(f)}
        for value in (4.9, 5.1)
    )
    assert "start-mra" in offered
    assert "start-mra" not in not_offered


@given(resources=patients(), value=st.sampled_from(CREATININES), more=st.integers(1, 30))
def test_a_worse_kidney_never_opens_a_start_that_was_not_open_before(resources, value, more):
    kept = [r for r in resources if not r["id"].startswith(("creatinine", "egfr"))]
    before, after = (
        {f["rule"] for f in one([*kept, creatinine(crea, day(0), id="crea")])["findings"] if is_start(f)}
        for crea in (value, round(value + more / 10, 2))
    )
    assert after <= before


@pytest.mark.parametrize("name", sorted(written_patients()))
def test_a_written_patient_is_read_alike_backwards(name):
    data, as_of = written_patients()[name]
    document = orjson.loads(data)
    backwards = orjson.dumps({**document, "entry": document["entry"][::-1]})
    moment = parse_as_of(as_of, UTC)
    assert whole(backwards, moment) == whole(data, moment)
