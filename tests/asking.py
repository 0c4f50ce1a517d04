"""Ask the program as a sender would: bytes in, plain data out. What every test of findings and cards goes through."""

from __future__ import annotations

from datetime import UTC, tzinfo
from typing import Any

import orjson
from builders import Resource, bundle

from cds.assessment import assess, check_orders, describe_records
from cds.content.load import load_content
from cds.fhir.dates import parse_as_of

Answer = dict[str, Any]


def assessed(*resources: Resource, as_of: str, zone: tzinfo = UTC) -> Answer:
    """The assessment of the one patient of these resources, with its trace."""
    (only,) = assessment_of(bundle(*resources), as_of=as_of, zone=zone)["assessments"]
    return dict(only)


def assessment_of(data: bytes, *, as_of: str, zone: tzinfo = UTC) -> Answer:
    """The whole assessment, as a receiver would parse it."""
    return dict(orjson.loads(orjson.dumps(assess(data, load_content(), as_of=parse_as_of(as_of, zone), trace=True))))


def record_of(*resources: Resource, as_of: str, zone: tzinfo = UTC) -> Answer:
    """The record of the one patient of these resources."""
    whole = describe_records(bundle(*resources), load_content(), as_of=parse_as_of(as_of, zone))
    (only,) = orjson.loads(orjson.dumps(whole))["records"]
    return dict(only)


def finding(answer: Answer, rule: str, about: str | None = None) -> Answer:
    """The one finding of a rule, about a subject where the rule has several."""
    found = [f for f in answer["findings"] if f["rule"] == rule and (about is None or f["about"] == about)]
    assert len(found) == 1, f"{rule} about {about}: {len(found)} findings"
    return dict(found[0])


def said(answer: Answer, rule: str, about: str | None = None) -> str:
    """Outcome and action of a rule in short: "open/start", "blocked", "met"."""
    one = finding(answer, rule, about)
    return one["outcome"] if one["action"] is None else f"{one['outcome']}/{one['action']}"


def card(answer: Answer, rule: str) -> Answer:
    """The one card of a rule."""
    found = [c for c in answer["cards"] if c["rule"] == rule]
    assert len(found) == 1, f"{rule}: {len(found)} cards"
    return dict(found[0])


def proposed(answer: Answer, rule: str) -> list[str]:
    """The drug drafts of a rule's card in words, the preferred first: "spironolactone 25 mg once daily"."""
    return [
        f"{draft['medicationCodeableConcept']['text']} {draft['dosageInstruction'][0]['text']}"
        for draft in card(answer, rule)["drafts"]
        if draft["resourceType"] == "MedicationRequest"
    ]


def order_check_of(*resources: Resource, as_of: str, zone: tzinfo = UTC) -> Answer:
    """The order check of the one patient of these resources."""
    whole = check_orders(bundle(*resources), load_content(), as_of=parse_as_of(as_of, zone))
    (only,) = orjson.loads(orjson.dumps(whole))["checks"]
    return dict(only)
