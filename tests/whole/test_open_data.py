"""Synthetic charts of other makers, where they are at hand: whatever they hold, an answer of the published shape."""

from __future__ import annotations

import gzip
import json
import os
import re
from collections.abc import Iterator
from datetime import UTC, datetime, time
from pathlib import Path
from typing import Any

import orjson
import pytest
from published import faults

from cds.assessment import assess, assess_patient
from cds.clinical.evaluate import ANSWERS
from cds.content.load import load_content
from cds.fhir.build_record import build_record
from cds.fhir.bundle import split_by_patient
from cds.fhir.dates import DateNotUnderstood, parse_date
from cds.fhir.reading import COMMAND_LINE_LIMITS, read_json

FOLDER = os.environ.get("GDMT_CARDS_OPEN_DATA")
BUNDLES = sorted((Path(FOLDER) / "bundles").glob("*.json.gz")) if FOLDER else []
pytestmark = pytest.mark.skipif(
    not BUNDLES, reason="GDMT_CARDS_OPEN_DATA names no folder that holds bundles/*.json.gz (open data, not kept here)"
)
CONTENT = load_content()
_DATES = ("effectiveDateTime", "authoredOn", "onsetDateTime", "recordedDate", "issued", "performedDateTime")
_LOOKS_LIKE_A_VALUE = re.compile(r"\b\d{4}-\d{2}-\d{2}|\b\d+\.\d+\b")


def opened(path: Path) -> dict[str, Any]:
    return dict(json.loads(gzip.decompress(path.read_bytes())))


def moments(document: dict[str, Any]) -> list[datetime]:
    """Three days inside the history of a chart: when 60 and 85 per cent of it had been written, and its last."""
    days = sorted(_days(document))
    return [datetime.combine(days[int((len(days) - 1) * share)], time.max, UTC) for share in (0.6, 0.85, 1)]


def _days(document: dict[str, Any]) -> Iterator[Any]:
    for entry in document["entry"]:
        for key in _DATES:
            try:
                yield parse_date(entry["resource"][key], UTC).latest
            except (KeyError, DateNotUnderstood):
                continue


def values_of(document: dict[str, Any]) -> set[str]:
    """What is the patient's own in a chart: names, numbers of measurements, identifiers, free text."""
    found: set[str] = set()
    for entry in document["entry"]:
        resource = entry["resource"]
        for name in resource.get("name", ()) if resource["resourceType"] == "Patient" else ():
            found |= {name.get("family", ""), *name.get("given", ())}
        found |= {str(pair.get("value", "")) for pair in resource.get("identifier", ()) if isinstance(pair, dict)}
        quantity = resource.get("valueQuantity", {})
        if "." in str(quantity.get("value", "")):
            found.add(str(quantity["value"]))
        found |= {line["text"] for line in resource.get("dosageInstruction", ()) if len(line.get("text", "")) > 12}
        found |= {note["text"] for note in resource.get("note", ()) if len(note.get("text", "")) > 12}
    return {text for text in found if len(text) > 3}


@pytest.mark.parametrize("path", BUNDLES, ids=lambda path: path.name.partition(".")[0])
def test_a_chart_is_answered_in_the_published_shape_on_three_days_of_its_history(path):
    document = opened(path)
    split = split_by_patient(read_json(path.read_bytes(), COMMAND_LINE_LIMITS), COMMAND_LINE_LIMITS)
    assert len(split.patients) == sum(entry["resource"]["resourceType"] == "Patient" for entry in document["entry"])
    assert split.patients or split.issues  # a file of hospitals and practitioners says that it holds no patient
    values = values_of(document)
    for patient in split.patients:
        built = build_record(patient, CONTENT.codes, UTC)
        assert built.record is not None
        for as_of in moments(document):
            answer = orjson.loads(orjson.dumps(assess_patient(built, CONTENT, as_of=as_of, trace=True)))
            assert faults("assessment", answer, "#/properties/assessments/items") == []
            assert {finding["rule"] for finding in answer["findings"]} == set(ANSWERS)
            for issue in (*answer["intake"]["issues"], *(vars_of(one) for one in split.issues)):
                words = f"{issue['path']} {issue['problem']} {issue['fix']}"
                assert not _LOOKS_LIKE_A_VALUE.search(words), words
                assert not any(text in words for text in values), words


def vars_of(issue: Any) -> dict[str, str]:
    return {key: getattr(issue, key) for key in ("path", "problem", "fix")}


def test_a_whole_chart_goes_the_one_path():
    """The smallest that has a history, by the function the command calls."""
    by_size = sorted(BUNDLES, key=lambda path: path.stat().st_size)
    smallest = next(path for path in by_size if list(_days(opened(path))))
    answer = assess(smallest.read_bytes(), CONTENT, as_of=moments(opened(smallest))[-1])
    assert len(answer["assessments"]) == 1
