"""The published schemas and what the program prints agree in both directions."""

from __future__ import annotations

import json
from datetime import UTC
from typing import Any

import orjson
import pytest
from asking import assessment_of
from builders import ATC, SNOMED, bundle, creatinine, lvef, order, patient, potassium, problem, subject
from jsonschema import Draft202012Validator
from published import SCHEMAS, faults, registry, schema
from random_patients import written_patients

from cds.assessment import assess, describe_records
from cds.content.load import load_content
from cds.fhir.dates import parse_as_of

NAMES = ("assessment", "card", "record")


def printed(name: str, *, trace: bool = True) -> tuple[dict[str, Any], dict[str, Any]]:
    """The assessment and the record of a written patient, as a receiver parses them."""
    data, day = written_patients()[name]
    moment, content = parse_as_of(day, UTC), load_content()
    answers = assess(data, content, as_of=moment, trace=trace), describe_records(data, content, as_of=moment)
    return orjson.loads(orjson.dumps(answers[0])), orjson.loads(orjson.dumps(answers[1]))


@pytest.mark.parametrize("path", sorted(SCHEMAS.glob("*.schema.json")), ids=lambda path: path.name)
def test_a_schema_is_itself_valid_and_names_itself(path):
    document = json.loads(path.read_text(encoding="utf-8"))
    Draft202012Validator.check_schema(document)
    assert document["$schema"] == "https://json-schema.org/draft/2020-12/schema"
    assert document["$id"].endswith(f"/{path.name}")


@pytest.mark.parametrize("name", sorted(written_patients()))
def test_a_written_patient_is_printed_as_published(name):
    assessment, record = printed(name)
    assert faults("assessment", assessment) == []
    assert faults("record", record) == []
    short, _ = printed(name, trace=False)
    assert faults("assessment", short) == []
    assert all("findings" not in one for one in short["assessments"])


def test_an_input_without_a_patient_is_printed_as_published():
    answer = assessment_of(bundle(potassium(4.4, "2026-02-01")), as_of="2026-03-01")
    assert answer["assessments"] == []
    assert faults("assessment", answer) == []


def test_a_misspelt_or_missing_property_does_not_pass():
    """So that the tests above mean something."""
    assessment, _ = printed("hfref-no-mra-potassium-4-9")
    (one,) = assessment["assessments"]
    first, *rest = one["cards"]
    for wrong in ({**first, "tiers": "act"}, {k: v for k, v in first.items() if k != "because"}):
        assert faults("assessment", {**assessment, "assessments": [{**one, "cards": [wrong, *rest]}]})


def _rarely_seen() -> list[tuple[str, dict[str, Any]]]:
    """A patient with a device and eye drops, and a test overdue by a number of days that is known only within a range."""
    pacemaker = {
        "resourceType": "Device",
        "id": "pacemaker",
        "status": "active",
        "type": {"coding": [{"system": SNOMED, "code": "14106009"}]},
        "patient": subject(),
    }
    data = bundle(
        patient(),
        problem("heart failure", "2024-01-15"),
        lvef(30, "2025-06-01"),
        order("spironolactone", 25, since="2025-12"),
        creatinine(1.0, "2025-09-01"),
        potassium(4.4, "2025-09-01"),
        order("timolol", None, since="2025-05-05", concept={"coding": [{"system": ATC, "code": "S01ED01"}]}),
        pacemaker,
    )
    moment, content = parse_as_of("2026-03-01", UTC), load_content()
    answers = assess(data, content, as_of=moment, trace=True), describe_records(data, content, as_of=moment)
    return [
        (name, orjson.loads(orjson.dumps(one))) for name, one in zip(("assessment", "record"), answers, strict=True)
    ]


def test_no_schema_promises_a_property_that_is_never_printed():
    seen: set[tuple[str, str]] = set()
    answers = [(name, document) for patient_ in written_patients() for name, document in _both(patient_)]
    for name, document in [*answers, *_rarely_seen()]:
        _walk(schema(name), schema(name)["$id"], document, seen)
    promised = {pair for name in NAMES for pair in _properties(schema(name), schema(name)["$id"])}
    assert sorted(promised - seen) == []


def _both(name: str) -> list[tuple[str, dict[str, Any]]]:
    assessment, record = printed(name)
    return [("assessment", assessment), ("record", record)]


def _place(node: dict[str, Any], properties: dict[str, Any]) -> str:
    """Names an object of a schema by the properties it has: enough to tell ours apart."""
    return f"{node.get('description', '')}:{','.join(sorted(properties))}"


def _properties(node: Any, home: str) -> set[tuple[str, str]]:
    """Every property any object in a schema describes, but for those of our promise about drafts (FHIR's own shape)."""
    if isinstance(node, list):
        return set[tuple[str, str]]().union(*(_properties(item, home) for item in node))
    if not isinstance(node, dict):
        return set()
    found = set[tuple[str, str]]().union(*(_properties(item, home) for item in node.values()))
    if isinstance(node.get("properties"), dict) and node.get("additionalProperties") is False:
        found |= {(_place(node, node["properties"]), key) for key in node["properties"]}
    return found


def _walk(node: dict[str, Any], home: str, value: Any, seen: set[tuple[str, str]]) -> None:
    """Note which described properties a printed value fills, following references from `home`."""
    if "$ref" in node:
        target = registry().resolver(home).lookup(node["$ref"]).contents
        file = node["$ref"].partition("#")[0]
        _walk(target, home.rpartition("/")[0] + f"/{file}" if file else home, value, seen)
    for branch in node.get("oneOf", ()):
        if value is not None and branch.get("type") != "null":
            _walk(branch, home, value, seen)
    if isinstance(value, dict):
        for key, inner in node.get("properties", {}).items():
            if key in value:
                seen.add((_place(node, node["properties"]), key))
                _walk(inner, home, value[key], seen)
    if isinstance(value, list) and isinstance(node.get("items"), dict):
        for item in value:
            _walk(node["items"], home, item, seen)
