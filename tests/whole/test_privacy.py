"""No message ever repeats what a patient's data hold, however broken the data are.

Every text, name, note, identifier, display and number of this patient is a sentinel. Messages (issues, errors, standard error)
must hold none of them. They may name a resource as "Type/id" and a place in it: that is how the sender finds it. So the ids
of resources are no sentinels here, except where an id is itself broken. Two other places show what was sent, on purpose, and
are no messages: the record (`display`, `not_recognised`, reported values), whose whole point is to show what was understood
and what was not, and the evidence of a card, which is the patient's own fact with its number and date.
"""

from __future__ import annotations

import copy
import io
import logging
from collections.abc import Iterator
from contextlib import redirect_stderr, redirect_stdout
from datetime import UTC
from typing import Any

import orjson
import pytest
from builders import (
    Resource,
    administration,
    admission,
    allergy,
    bundle,
    creatinine,
    dispense,
    lvef,
    nyha,
    order,
    patient,
    potassium,
    pressure,
    problem,
    statement,
    subject,
    test_order,
)
from random_patients import AS_OF

from cds.assessment import assess, describe_records
from cds.content.load import load_content
from cds.errors import InputError
from cds.fhir.dates import parse_as_of
from cds.fhir.reading import COMMAND_LINE_LIMITS, Limits

CONTENT = load_content()
TEXT, NUMBER, DAY = "ZEBRA-SENTINEL", 6.660666, "1966-06-16"
SECRETS = ("zebra", "sentinel", "6.66", "660666", "1966")
Path = tuple[str | int, ...]

PERSON = {
    "name": [{"family": f"{TEXT}-family", "given": [f"{TEXT}-given"], "text": f"{TEXT} name"}],
    "identifier": [{"system": "http://example.org/mrn", "value": f"{TEXT}-mrn"}],
    "telecom": [{"system": "phone", "value": f"{TEXT}-phone"}],
    "address": [{"line": [f"{TEXT}-street"], "city": f"{TEXT}-city", "text": f"{TEXT} address"}],
    "text": {"status": "generated", "div": f'<div xmlns="http://www.w3.org/1999/xhtml">{TEXT}-narrative</div>'},
}
NOTED = {"note": [{"text": f"{TEXT} note", "authorString": f"{TEXT} author"}]}
REPORTED = {"identifier": [{"system": "http://example.org/lab", "value": f"{TEXT}-accession"}], **NOTED}
PERFORMED = {"performer": [{"display": f"{TEXT} laboratory"}]}


def chart() -> list[Resource]:
    """One resource of every kind we read, sentinels wherever R4 has room for a text."""
    ordered = order("spironolactone", 25, since="2026-01-10", requester={"display": f"{TEXT} doctor"}, **NOTED)
    ordered["dosageInstruction"][0] |= {"text": f"{TEXT} dosage", "patientInstruction": f"{TEXT} instruction"}
    ordered["medicationCodeableConcept"]["text"] = f"{TEXT} medicine"
    by_reference = order("bisoprolol", 5, since="2025-11-02", id="by-reference", **NOTED)
    del by_reference["medicationCodeableConcept"]
    by_reference["medicationReference"] = {"reference": "#m", "display": f"{TEXT} product"}
    by_reference["contained"] = [
        {"resourceType": "Medication", "id": "m", "code": {"text": f"{TEXT} tablet", "coding": _coding("19484")}}
    ]
    failing = problem("heart failure", "2024-01-15", **NOTED)
    failing["code"]["text"] = f"{TEXT} problem"
    reacting = allergy("lisinopril", "angioedema", **NOTED)
    reacting["reaction"][0] |= {"description": f"{TEXT} description"}
    stay = admission("2025-07-01", "2025-07-05", serviceProvider={"display": f"{TEXT} hospital"})
    implanted = {
        "resourceType": "Procedure",
        "id": "procedure",
        "status": "completed",
        "code": {"coding": [{"system": "http://snomed.info/sct", "code": "233575001"}], "text": f"{TEXT} procedure"},
        "subject": subject(),
        "performedDateTime": "2020-06-01",
        **NOTED,
    }
    device = {
        "resourceType": "Device",
        "id": "device",
        "status": "active",
        "type": {"coding": [{"system": "http://snomed.info/sct", "code": "14106009"}], "text": f"{TEXT} device"},
        "patient": subject(),
        "serialNumber": f"{TEXT}-serial",
        "lotNumber": f"{TEXT}-lot",
    }
    medication = {
        "resourceType": "Medication",
        "id": "medication",
        "code": {"coding": _coding("1202"), "text": f"{TEXT} box"},
        "batch": {"lotNumber": f"{TEXT}-batch"},
    }
    box = {**order("atenolol", 50, since="2025-10-01"), "medicationReference": {"reference": "Medication/medication"}}
    del box["medicationCodeableConcept"]
    return [
        patient(**PERSON),
        potassium(4.4, "2026-02-20", **REPORTED, **PERFORMED),
        creatinine(1.1, "2026-02-20", **REPORTED, **PERFORMED),
        lvef(32, "2025-12-01", **NOTED),
        pressure(118, 70, "2026-02-20", **NOTED),
        nyha(2, "2026-02-20", **NOTED),
        ordered,
        by_reference,
        box,
        medication,
        statement("furosemide", 40, since="2025-05-01", **NOTED),
        dispense("empagliflozin", "2026-02-01", **NOTED),
        administration("digoxin", "2026-02-19T08:00:00Z", 0.25, **NOTED),
        failing,
        reacting,
        implanted,
        device,
        stay,
        test_order("2823-3", "2026-02-25", display=f"{TEXT} test", **NOTED),
    ]


def _coding(code: str) -> list[Resource]:
    return [
        {"system": "http://www.nlm.nih.gov/research/umls/rxnorm", "code": code, "display": f"{TEXT} display {code}"}
    ]


def leaves(value: Any, path: Path = ()) -> Iterator[tuple[Path, Any]]:
    """Every text, number and truth value of a resource with its place."""
    if isinstance(value, dict):
        for key, inner in value.items():
            yield from leaves(inner, (*path, key))
    elif isinstance(value, list):
        for position, inner in enumerate(value):
            yield from leaves(inner, (*path, position))
    else:
        yield path, value


def replaced(resource: Resource, path: Path, value: object) -> Resource:
    """A copy with another value at a place."""
    made = copy.deepcopy(resource)
    inner: Any = made
    for step in path[:-1]:
        inner = inner[step]
    inner[path[-1]] = value
    return made


def messages(data: bytes) -> str:
    """Everything the program says about an input besides the answer itself, in lower case."""
    spoken = io.StringIO()
    handler = logging.StreamHandler(spoken)
    logging.getLogger().addHandler(handler)
    try:
        with redirect_stderr(spoken), redirect_stdout(spoken):
            answer = assess(data, CONTENT, as_of=AS_OF, trace=True)
            record = describe_records(data, CONTENT, as_of=AS_OF)
    except InputError as error:
        return f"{error} {error.problem} {error.fix} {error.issues} {spoken.getvalue()}".lower()
    finally:
        logging.getLogger().removeHandler(handler)
    issues = [*answer["issues"], *record["issues"]]
    for one in answer["assessments"]:
        issues += one["intake"]["issues"]
    for one in record["records"]:
        issues += one["issues"]
    return f"{orjson.dumps(issues).decode()} {spoken.getvalue()}".lower()


def assert_discreet(data: bytes, where: object) -> None:
    said = messages(data)
    for secret in SECRETS:
        assert secret not in said, (
            f"{where}: a message holds {secret!r}: …{said[max(0, said.find(secret) - 200) :][:400]}…"
        )


CHART = chart()
PLACES = [(number, path) for number, resource in enumerate(CHART) for path, _ in leaves(resource)]
# Broken in ways a sender breaks things: another text, a number for a text, a date that is none, a list, an object.
BREAKS: tuple[object, ...] = (
    f"{TEXT}-BROKEN 6.660666 {DAY}",
    NUMBER,
    -NUMBER,
    DAY,
    f"{DAY}T25:61:00",
    [TEXT],
    {TEXT: TEXT},
    {"reference": f"Patient/{TEXT}", "display": TEXT},
)


def test_the_chart_of_sentinels_is_read_and_raises_no_refusal():
    """So that the tests below break one thing at a time."""
    (one,) = assess(bundle(*CHART), CONTENT, as_of=AS_OF)["assessments"]
    assert one["intake"]["read"] == len(CHART)
    assert [issue for issue in one["intake"]["issues"] if issue["severity"] == "refused"] == []


def test_a_chart_full_of_sentinels_is_assessed_without_repeating_one():
    assert_discreet(bundle(*CHART), "the whole chart")


@pytest.mark.parametrize("number", range(len(CHART)), ids=lambda number: CHART[number]["id"])
def test_whatever_is_broken_in_a_resource_no_message_repeats_it(number):
    resource = CHART[number]
    around = [CHART[0]] if number else []
    medication = [other for other in CHART if other["resourceType"] == "Medication" and other is not resource]
    for path, value in leaves(resource):
        if path == ("resourceType",):
            continue
        for broken in BREAKS:
            if path == ("id",) and broken == DAY:
                continue  # a legal id, which a message may name
            changed = replaced(resource, path, f"{TEXT} {DAY}" if path == ("id",) and value == broken else broken)
            assert_discreet(bundle(*around, *medication, changed), f"{'.'.join(map(str, path))} = {broken!r}")


@pytest.mark.parametrize("number", range(len(CHART)), ids=lambda number: CHART[number]["id"])
def test_whatever_is_missing_from_a_resource_no_message_repeats_the_rest(number):
    resource = CHART[number]
    for key in resource:
        without = {name: value for name, value in resource.items() if name != key}
        assert_discreet(bundle(*CHART[:number], without, *CHART[number + 1 :]), f"without {key}")


@pytest.mark.parametrize("kind", [f"{TEXT}", "Patient ", "observation", 6.660666, None, [TEXT]])
def test_a_resource_type_nobody_knows_is_not_repeated(kind):
    changed = {**CHART[1], "resourceType": kind, "valueString": TEXT}
    assert_discreet(bundle(CHART[0], changed), kind)


def test_an_element_nobody_knows_is_not_repeated():
    for number, resource in enumerate(CHART):
        changed = {**resource, f"{TEXT}-6.660666": TEXT, "extension": [{"url": TEXT, f"value{TEXT}": NUMBER}]}
        assert_discreet(bundle(*CHART[:number], changed, *CHART[number + 1 :]), resource["id"])


def test_values_that_are_not_believed_are_not_repeated():
    """Impossible, unitless or in a unit nobody knows: the issue says so, and not what was sent."""
    for unit in ("mmol/L", "furlong", f"{TEXT}", "", "mg/dL"):
        for value in (666.0666, NUMBER, -NUMBER, 0, 6.660666e30):
            changed = replaced(CHART[1], ("valueQuantity",), {"value": value, "unit": unit, "code": unit})
            assert_discreet(bundle(CHART[0], changed), (value, unit))
        text = {key: value for key, value in CHART[1].items() if key != "valueQuantity"} | {
            "valueString": f"6.66 {unit}"
        }
        assert_discreet(bundle(CHART[0], text), text["valueString"])


def test_two_charts_with_one_id_are_refused_without_repeating_either():
    other = {**CHART[0], "birthDate": DAY, "name": [{"family": TEXT}]}
    assert_discreet(bundle(*CHART, other), "two patients of one id")


@pytest.mark.parametrize(
    "data",
    [
        f'{{"resourceType": "Bundle", "{TEXT}": }}'.encode(),
        f"{TEXT} is not JSON".encode(),
        f'"{TEXT}"'.encode(),
        f'["{TEXT}"]'.encode(),
        f'{{"resourceType": "{TEXT}", "id": "{TEXT}"}}'.encode(),
        f'{{"resourceType": "Parameters", "id": "{TEXT}"}}'.encode(),
        f'{{"{TEXT}": NaN}}'.encode(),
        f'{{"resourceType": "Patient"}}\n{{"resourceType": "Patient", "id": "{TEXT}"}}'.encode(),
        f'{{"resourceType": "Patient", "id": "{TEXT}"}}'.encode("utf-16"),
        b"\x1f\x8b" + TEXT.encode(),
        f'{{"resourceType": "Patient", "name": "{TEXT}\xff"}}'.encode("latin-1"),
        f'{{"resourceType": "Bundle", "entry": "{TEXT}"}}'.encode(),
        f'{{"resourceType": "Bundle", "entry": ["{TEXT}", {{"resource": "{TEXT}"}}, {{"fullUrl": "{TEXT}"}}]}}'.encode(),
    ],
)
def test_an_input_that_cannot_be_read_is_not_repeated(command, data):
    run = command(data, "assess", "--strict")
    assert run.exit_code in (10, 13)
    assert_discreet(data, "as a whole")
    assert "zebra" not in run.stderr.lower()


def test_an_input_beyond_the_limits_is_not_repeated():
    data = bundle(*CHART)
    for limits in (
        Limits(max_bytes=100, max_entries=10),
        Limits(max_bytes=10**8, max_entries=2),
        Limits(max_bytes=10**8, max_entries=100, max_depth=3),
    ):
        with pytest.raises(InputError) as caught:
            assess(data, CONTENT, as_of=parse_as_of("2026-03-01", UTC), limits=limits)
        assert "zebra" not in str(caught.value).lower()
    assert COMMAND_LINE_LIMITS.max_depth == 200


def test_standard_error_of_the_command_holds_nothing_of_the_patient(command):
    broken = [replaced(CHART[1], ("valueQuantity", "unit"), TEXT), replaced(CHART[6], ("authoredOn",), f"{DAY}T25:00")]
    run = command(bundle(CHART[0], *broken), "record", "--strict")
    assert run.exit_code == 11
    assert not any(secret in run.stderr.lower() for secret in SECRETS)
