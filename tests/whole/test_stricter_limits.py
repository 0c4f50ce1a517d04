"""A site that makes a limit stricter never hears of fewer dangers."""

from __future__ import annotations

from dataclasses import replace
from datetime import UTC
from pathlib import Path
from typing import TypeVar

import pytest
from expectations import AS_OF, PATIENTS

from cds.clinical.evaluate import evaluate
from cds.clinical.record import PatientRecord
from cds.clinical.safety_tables import OutOfRange, TreatmentLimit
from cds.clinical.tables import ClinicalTables
from cds.content.load import load_content
from cds.fhir.build_record import build_record
from cds.fhir.bundle import split_by_patient
from cds.fhir.dates import parse_as_of
from cds.fhir.reading import COMMAND_LINE_LIMITS, read_json

CONTENT = load_content()
MOMENT = parse_as_of(AS_OF, UTC)
SAFETY = ("stop-harmful-drug", "interaction", "lab-out-of-range", "lower-dose")


Row = TypeVar("Row", OutOfRange, TreatmentLimit)


def stricter(row: Row, share: float) -> Row:
    """The limit moved towards the healthy side by a share of itself."""
    factor = 1 - share if row.sign in (">", ">=") else 1 + share
    return replace(row, value=row.value * factor)


def with_stricter_limits(tables: ClinicalTables, share: float) -> ClinicalTables:
    safety = tables.safety
    return replace(
        tables,
        safety=replace(
            safety,
            treatment_limits=tuple(
                replace(stricter(row, share), also_value=None, also_unit=None) for row in safety.treatment_limits
            ),
            out_of_range=tuple(stricter(row, share) for row in safety.out_of_range),
        ),
    )


def records(folder: Path) -> list[PatientRecord]:
    split = split_by_patient(read_json((folder / "bundle.json").read_bytes(), COMMAND_LINE_LIMITS), COMMAND_LINE_LIMITS)
    built = (build_record(patient, CONTENT.codes, UTC) for patient in split.patients)
    return [one.record for one in built if one.record is not None]


def subjects_in_danger(record: PatientRecord, tables: ClinicalTables) -> set[str | None]:
    found = evaluate(record, tables, as_of=MOMENT)
    return {finding.about for finding in found if finding.rule in SAFETY and finding.outcome == "open"}


@pytest.mark.parametrize("share", [0.02, 0.1, 0.3])
@pytest.mark.parametrize("folder", sorted(PATIENTS.iterdir()), ids=lambda folder: folder.name)
def test_stricter_limits_never_hide_a_drug_or_value_that_was_in_danger(folder: Path, share: float):
    tables = with_stricter_limits(CONTENT.tables, share)
    for record in records(folder):
        assert subjects_in_danger(record, CONTENT.tables) <= subjects_in_danger(record, tables)
