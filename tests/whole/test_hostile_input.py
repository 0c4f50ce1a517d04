"""Input that is broken, odd or meant to harm: an answer or a message with the way out, never a traceback."""

from __future__ import annotations

import copy
import gzip
import itertools
import json
import time
from collections.abc import Iterator
from typing import Any

import orjson
import pytest
from builders import (
    Resource,
    admission,
    bundle,
    creatinine,
    dispense,
    lvef,
    order,
    patient,
    potassium,
    problem,
    statement,
    subject,
)
from hypothesis import given
from hypothesis import strategies as st
from random_patients import AS_OF, resources_of, written_patients

from cds.assessment import assess, describe_records
from cds.content.load import load_content

CONTENT = load_content()
ALIVE = [
    patient(),
    problem("heart failure", "2024-01-15"),
    lvef(32, "2025-12-01"),
    potassium(4.4, "2026-02-20"),
    creatinine(1.0, "2026-02-20"),
]
Path = tuple[str | int, ...]


def answered(data: bytes) -> dict[str, Any]:
    """The assessment, as JSON can carry it. Both ways through the program are gone."""
    orjson.dumps(describe_records(data, CONTENT, as_of=AS_OF))
    return dict(orjson.loads(orjson.dumps(assess(data, CONTENT, as_of=AS_OF, trace=True))))


def issues_of(answer: dict[str, Any]) -> list[dict[str, Any]]:
    return answer["issues"] + [issue for one in answer["assessments"] for issue in one["intake"]["issues"]]


# The bytes as a whole.

UNREADABLE = {
    "nothing": b"",
    "blanks": b" \n\t ",
    "half a document": bundle(*ALIVE)[:200],
    "a text": b'"Patient"',
    "a number": b"5",
    "null": b"null",
    "a list of resources": b'[{"resourceType": "Patient", "id": "p1"}]',
    "no resource type": b'{"id": "p1"}',
    "a resource type that is a list": b'{"resourceType": ["Patient"]}',
    "NaN": b'{"resourceType": "Observation", "valueQuantity": {"value": NaN}}',
    "minus infinity": b'{"resourceType": "Observation", "valueQuantity": {"value": -Infinity}}',
    "UTF-16": bundle(*ALIVE).decode().encode("utf-16"),
    "UTF-32": bundle(*ALIVE).decode().encode("utf-32"),
    "Latin-1": '{"resourceType": "Patient", "name": [{"family": "Müller"}]}'.encode("latin-1"),
    "a lone surrogate": b'{"resourceType": "Patient", "id": "\\ud800"}',
    "NDJSON": b'{"resourceType": "Patient", "id": "p1"}\n{"resourceType": "Patient", "id": "p2"}\n',
    "XML": b'<Bundle xmlns="http://hl7.org/fhir"/>',
    "comments": b'{"resourceType": "Bundle" /* none */}',
    "damaged gzip": gzip.compress(bundle(*ALIVE))[:-20],
    "gzip in gzip": gzip.compress(gzip.compress(bundle(*ALIVE))),
    "zeros": bytes(1000),
    "Parameters": b'{"resourceType": "Parameters", "parameter": []}',
}


@pytest.mark.parametrize("name", sorted(UNREADABLE))
def test_what_cannot_be_read_gets_code_10_nothing_on_stdout_and_the_way_out(command, name):
    run = command(UNREADABLE[name])
    assert (run.exit_code, run.stdout) == (10, "")
    problem_, _, way_out = run.stderr.partition("\n")
    assert problem_.startswith("gdmt-cards: ")
    assert way_out.strip()
    assert "Traceback" not in run.stderr


def test_ndjson_and_utf_16_are_named_for_what_they_are(command):
    assert "NDJSON" in command(UNREADABLE["NDJSON"]).stderr
    assert "UTF-8" in command(UNREADABLE["UTF-16"]).stderr
    assert "NaN" in command(UNREADABLE["NaN"]).stderr


def test_a_gzip_bomb_is_refused_before_it_is_unpacked_whole(command):
    """300 MiB of zeros in 300 kB; the limit is 256 MiB after decompression (ruling 43)."""
    bomb = gzip.compress(bytes(300 * 1024 * 1024), compresslevel=1)
    run = command(bomb)
    assert (run.exit_code, run.stdout) == (12, "")
    assert "larger than" in run.stderr


@pytest.mark.parametrize("level", [201, 5_000, 1_000_000])
def test_a_nesting_bomb_is_refused(command, level):
    for opened, closed in (("[", "]"), ('{"a":', "}")):
        inner = opened * level + "1" + closed * level
        run = command(f'{{"resourceType": "Patient", "x": {inner}}}'.encode())
        assert (run.exit_code, run.stdout) == (12, "")
        assert "nested" in run.stderr


def test_nesting_within_the_limit_costs_its_resource_alone():
    deep: Any = {"url": "x"}
    for _ in range(90):
        deep = {"url": "x", "extension": [deep]}
    answer = answered(bundle(*ALIVE, potassium(4.4, "2026-02-22", extension=[deep])))
    assert len(answer["assessments"]) == 1


def test_one_entry_too_many_is_refused(command):
    """200,000 entries are allowed (ruling 43)."""
    entry = b'{"resource":{"resourceType":"Claim"}}'
    data = b'{"resourceType":"Bundle","type":"collection","entry":[' + b",".join([entry] * 200_001) + b"]}"
    run = command(data)
    assert (run.exit_code, run.stdout) == (12, "")
    assert "200000 entries" in run.stderr


# Bundles of an odd shape.


@pytest.mark.parametrize(
    "entries", [None, {}, "x", 5, [], [None], [5], [[]], ["x"], [{}], [{"resource": []}], [{"resource": {}}]]
)
def test_a_bundle_of_odd_entries_has_no_patient_and_gets_code_13(command, entries):
    run = command(json.dumps({"resourceType": "Bundle", "type": "collection", "entry": entries}).encode())
    assert run.exit_code == 13
    answer = json.loads(run.stdout)
    assert answer["assessments"] == []
    assert answer["issues"]


def test_odd_entries_beside_a_patient_cost_only_themselves():
    data = json.loads(bundle(*ALIVE))
    plain = answered(json.dumps(data).encode())
    data["entry"] += [None, 5, "x", [], {}, {"resource": 5}, {"resource": {"resourceType": 7}}, {"fullUrl": []}]
    odd = answered(json.dumps(data).encode())
    (one,), (other,) = plain["assessments"], odd["assessments"]
    assert {k: v for k, v in one.items() if k != "intake"} == {k: v for k, v in other.items() if k != "intake"}
    assert len(issues_of(odd)) > len(issues_of(plain))


def test_bundles_inside_bundles_end_somewhere():
    inner: Any = json.loads(bundle(*ALIVE))
    for _ in range(20):
        inner = {"resourceType": "Bundle", "type": "collection", "entry": [{"resource": inner}]}
    answer = answered(json.dumps(inner).encode())
    assert answer["assessments"] == []
    assert any("too many Bundles" in issue["problem"] for issue in answer["issues"])


def test_an_order_in_the_shape_of_r5_is_refused_by_name():
    r5 = order("spironolactone", 25, since="2026-01-01", id="r5")
    r5["medication"] = {"concept": r5.pop("medicationCodeableConcept")}
    found = [issue for issue in issues_of(answered(bundle(*ALIVE, r5))) if issue["resource"] == "MedicationRequest/r5"]
    assert [issue["severity"] for issue in found] == ["refused"]
    assert "R5" in found[0]["problem"]
    assert "medicationCodeableConcept" in found[0]["fix"]


def test_one_id_with_two_contents_is_settled_by_date_or_not_at_all():
    one, other = potassium(4.4, "2026-02-22", id="k"), potassium(6.9, "2026-02-22", id="k")
    undecided = answered(bundle(*ALIVE, one, other))
    assert any(
        issue["resource"] == "Observation/k" and issue["severity"] == "refused" for issue in issues_of(undecided)
    )
    newer = {**other, "meta": {"lastUpdated": "2026-02-23T08:00:00Z"}}
    older = {**one, "meta": {"lastUpdated": "2026-02-22T08:00:00Z"}}
    decided = describe_records(bundle(*ALIVE, newer, older), CONTENT, as_of=AS_OF)["records"][0]
    assert [m["value"] for m in decided["measurements"] if m["source"] == "Observation/k"] == [6.9]


def test_references_in_circles_come_to_an_end():
    looped = order("spironolactone", None, since="2026-01-01", id="looped")
    del looped["medicationCodeableConcept"]
    looped["medicationReference"] = {"reference": "#a"}
    ingredient = {"itemReference": {"reference": "#b"}}
    looped["contained"] = [
        {"resourceType": "Medication", "id": "a", "ingredient": [ingredient]},
        {"resourceType": "Medication", "id": "b", "ingredient": [{"itemReference": {"reference": "#a"}}]},
    ]
    first = order("bisoprolol", 5, since="2026-01-01", id="first", basedOn=[{"reference": "MedicationRequest/second"}])
    second = order("bisoprolol", 5, since="2026-01-05", id="second", basedOn=[{"reference": "MedicationRequest/first"}])
    first["priorPrescription"] = {"reference": "MedicationRequest/second"}
    second["priorPrescription"] = {"reference": "MedicationRequest/first"}
    itself = order("enalapril", 5, since="2026-01-01", id="itself")
    itself["priorPrescription"] = {"reference": "MedicationRequest/itself"}
    member = potassium(4.4, "2026-02-21", id="member", hasMember=[{"reference": "Observation/member"}])
    derived = potassium(4.5, "2026-02-22", id="derived", derivedFrom=[{"reference": "Observation/derived"}])
    handed = dispense("enalapril", "2026-02-01", authorizingPrescription=[{"reference": "MedicationDispense/handed"}])
    stay = admission("2026-01-01", "2026-01-05", partOf={"reference": "Encounter/stay-2026-01-01"})
    data = bundle(*ALIVE, looped, first, second, itself, member, derived, {**handed, "id": "handed"}, stay)
    assert len(answered(data)["assessments"]) == 1


def test_a_patient_who_is_linked_to_itself_is_one_patient():
    linked = {**patient(), "link": [{"other": subject(), "type": "seealso"}]}
    assert len(answered(bundle(linked, *ALIVE[1:]))["assessments"]) == 1


# Texts and values.

TEXTS = {
    "a huge dosage": "take one tablet " * 20_000,
    "digits without end": "1" * 100_000,
    "dashes without end": "1-" * 50_000,
    "blanks without end": "take" + " " * 100_000 + "one",
    "nested brackets": "(" * 20_000 + "1" + ")" * 20_000,
    "many numbers": "1 or 2 or " * 20_000 + "mg",
    "fractions": "1/2" * 30_000,
    "commas": "1,0" * 30_000,
    "letters": "a" * 100_000 + "!",
    "control characters": "\u0001\u0002\u001b[31m take \u0007one\u0000 daily",
    "right to left": "\u202eone tablet daily\u202c",
    "combining marks": "e\u0301" * 20_000,
    "an emoji a day": "\U0001f48a" * 1000,
    "prototype keys": "__proto__ constructor prototype",
    "a format string": "{0.__class__} %s %n ${jndi:ldap://x}",
    "markup": "<script>alert(1)</script>",
    "a query": "'; DROP TABLE patients; --",
    "only a minus": "-",
    "infinite": "1e999 mg",
    "not a number": "NaN mg",
    "digits of another script": "٣ tablets",
    "superscripts": "²⁵ mg",
}


@pytest.mark.parametrize("name", sorted(TEXTS))
def test_a_hostile_text_is_only_a_text_and_costs_no_time(name):
    text = TEXTS[name]
    drug = order("spironolactone", None, since="2026-01-01", concept={"text": text[:5000] + " spironolactone"})
    drug["dosageInstruction"] = [{"text": text, "patientInstruction": text}]
    named = potassium(4.4, "2026-02-22")
    named["valueQuantity"] = {"value": 4.4, "unit": text}
    worded = {k: v for k, v in potassium(4.4, "2026-02-23").items() if k != "valueQuantity"} | {"valueString": text}
    told = problem("heart failure", id="told", code={"text": text})
    noted = statement("furosemide", 40, since="2025-05-01", note=[{"text": text}])
    noted["dosage"] = [{"text": text}]
    started = time.process_time()
    assert len(answered(bundle(*ALIVE, drug, named, worded, told, noted))["assessments"]) == 1
    assert time.process_time() - started < 5  # seconds; a pattern that backtracks would need hours


@pytest.mark.parametrize(
    "key", ["__proto__", "constructor", "toString", "hasOwnProperty", "", "resourceType ", "\u0000"]
)
def test_keys_that_other_languages_stumble_over_are_elements_nobody_knows(key):
    data = json.loads(bundle(*ALIVE))
    for entry in data["entry"]:
        entry["resource"][key] = {"polluted": True}
    answer = answered(json.dumps(data).encode())
    assert all(issue["severity"] for issue in issues_of(answer))


@pytest.mark.parametrize(
    "day", ["0001-01-01", "9999-12-31", "0001", "9999-12", "0000-01-01", "10000-01-01", "2026-02-31"]
)
def test_dates_at_the_ends_of_time_are_dates_or_issues(day):
    dated = [
        patient(born=day),
        problem("heart failure", day),
        lvef(32, day),
        potassium(4.4, day),
        order("spironolactone", 25, since=day),
        statement("furosemide", 40, since=day),
        dispense("enalapril", day),
        admission(day, day),
    ]
    for resource in dated[1:]:
        resource["id"] = resource["id"][:40]
    assert len(answered(bundle(*dated, *ALIVE[3:]))["assessments"]) <= 1
    assert len(answered(bundle(ALIVE[0], *dated[1:]))["assessments"]) == 1


@pytest.mark.parametrize(
    "instant",
    [
        "0001-01-01T00:00:00+14:00",
        "9999-12-31T23:59:59-14:00",
        "2026-02-20T24:00:00Z",
        "2026-02-20T23:59:60Z",
        "2026-02-20T10:00:00+99:00",
        "2026-02-20T10:00:00.123456789Z",
    ],
)
def test_instants_at_the_ends_of_time_are_instants_or_issues(instant):
    resources = [potassium(4.4, instant, id="k"), order("spironolactone", 25, since=instant, id="s")]
    assert len(answered(bundle(*ALIVE, *resources))["assessments"]) == 1


@pytest.mark.parametrize(
    ("as_of", "code"),
    [
        ("0001-01-01", 2),
        ("1899-12-31", 2),
        ("1900-01-01", 0),
        ("2199-12-31", 0),
        ("2200-01-01", 2),
        ("9999-12-31", 2),
        ("9999-12-31T23:59:59Z", 2),
    ],
)
def test_a_moment_beyond_the_calendar_is_wrong_use(command, as_of, code):
    """Days are counted back and ahead from the moment, so no calendar must end beside it."""
    data, _ = written_patients()["messy-export"]
    run = command(data, "assess", "--as-of", as_of)
    assert run.exit_code == code, run.stderr
    assert ("1900 to 2199" in run.stderr) == (code == 2)


NUMBERS = (0, -1, -0.0, 1e-300, 1e300, -1e300, 2**63, 2**64, 10**30, 0.1 + 0.2, 4.4444444444444444)


@pytest.mark.parametrize("number", NUMBERS)
def test_a_number_beyond_all_sense_is_a_value_or_an_issue(number):
    dosed = order("spironolactone", 25, since="2026-01-01")
    dosed["dosageInstruction"][0]["doseAndRate"][0]["doseQuantity"]["value"] = number
    timed = order("bisoprolol", 5, since="2026-01-01")
    timed["dosageInstruction"][0]["timing"]["repeat"] |= {"frequency": 10**9, "period": abs(number) or 1}
    supplied = dispense("enalapril", "2026-02-01")
    supplied["daysSupply"]["value"] = number
    measured = [potassium(number, "2026-02-22"), lvef(number, "2026-02-22"), creatinine(number, "2026-02-22")]
    assert len(answered(bundle(*ALIVE, dosed, timed, supplied, *measured))["assessments"]) == 1


# Any element of any resource, of any wrong type.

JUNK: tuple[object, ...] = (
    None,
    True,
    0,
    -1.5,
    1e300,
    "",
    " ",
    "x",
    "9999-12-31",
    "0001-01-01",
    "#",
    [],
    {},
    [None],
    [[]],
    [{}],
    ["x", "x"],
    {"x": {}},
    {"coding": [{"system": 5, "code": []}]},
    {"reference": "#loop"},
)


def places(value: Any, path: Path = ()) -> Iterator[Path]:
    """Every place in a resource, branches and leaves."""
    if path:
        yield path
    if isinstance(value, dict):
        for key, inner in value.items():
            yield from places(inner, (*path, key))
    elif isinstance(value, list):
        for position, inner in enumerate(value):
            yield from places(inner, (*path, position))


def replaced(resource: Resource, path: Path, value: object) -> Resource:
    made = copy.deepcopy(resource)
    inner: Any = made
    for step in path[:-1]:
        inner = inner[step]
    inner[path[-1]] = value
    return made


def written_resources() -> list[dict[str, Any]]:
    return [resource for data, _ in written_patients().values() for resource in resources_of(data)]


def examples_by_place() -> dict[tuple[str, str], tuple[Resource, Path]]:
    """One example resource for every kind of place in the written patients: ("Observation", "code.coding[].code")."""
    found: dict[tuple[str, str], tuple[Resource, Path]] = {}
    for resource in written_resources():
        for path in places(resource):
            kind = ".".join("[]" if isinstance(step, int) else step for step in path)
            found.setdefault((resource["resourceType"], kind), (resource, path))
    return found


PLACES = examples_by_place()
TYPES = sorted({kind for kind, _ in PLACES})


@pytest.mark.parametrize("kind", TYPES)
def test_junk_at_any_place_of_a_resource_costs_that_resource_at_most(kind):
    for (type_, name), (resource, path) in PLACES.items():
        if type_ != kind or path == ("resourceType",):
            continue
        holder = resource if kind == "Patient" else {**patient(), "id": "p1"}
        for number, junk in enumerate(JUNK):
            changed = replaced(resource, path, junk)
            if kind != "Patient" and path[0] not in ("subject", "patient"):
                changed = {key: subject() if key in ("subject", "patient") else value for key, value in changed.items()}
            try:
                answer = answered(bundle(*([changed] if kind == "Patient" else [holder, changed])))
            except Exception as error:  # the place is what the reader of a failure needs
                error.add_note(f"{kind}.{name} = junk {number}: {junk!r}")
                raise
            if kind != "Patient":
                assert len(answer["assessments"]) == 1


@given(data=st.data())
def test_a_written_patient_with_junk_in_several_places_is_answered(data):
    name = data.draw(st.sampled_from(sorted(written_patients())))
    resources = resources_of(written_patients()[name][0])
    for _ in range(data.draw(st.integers(1, 4))):
        number = data.draw(st.integers(0, len(resources) - 1))
        path = data.draw(st.sampled_from(list(places(resources[number]))))
        resources[number] = replaced(resources[number], path, data.draw(st.sampled_from(JUNK)))
    answer = answered(bundle(*resources))
    assert all(issue["resource"] and issue["problem"] and issue["fix"] for issue in issues_of(answer))


@pytest.mark.deep
@pytest.mark.parametrize("name", sorted(written_patients()))
def test_junk_at_any_place_of_a_whole_written_patient_is_answered(name):
    """One kind of junk a place, each kind in turn: all kinds at all places would take hours."""
    resources = resources_of(written_patients()[name][0])
    kinds = itertools.cycle(JUNK)
    for number, resource in enumerate(resources):
        for path in places(resource):
            changed = replaced(resource, path, next(kinds))
            answered(bundle(*resources[:number], changed, *resources[number + 1 :]))
