"""The invented patients: what is expected of each is written beside it, with the reason in words."""

from __future__ import annotations

import json
from pathlib import Path
from statistics import median

import pytest
from expectations import PATIENTS, expectation

FOLDERS = sorted(PATIENTS.iterdir())


@pytest.mark.parametrize("folder", FOLDERS, ids=lambda folder: folder.name)
def test_an_invented_patient_gets_what_is_expected_of_them(folder: Path):
    expected = json.loads((folder / "expected.json").read_text(encoding="utf-8"))
    assert expected.pop("why"), "say in words what the situation is"
    assert expectation(folder) == expected


def test_there_are_at_least_thirty_invented_situations():
    assert len(FOLDERS) >= 30


def test_a_patient_gets_few_cards():
    counts = [
        len(one["cards"])
        for folder in FOLDERS
        for one in json.loads((folder / "expected.json").read_text(encoding="utf-8"))["assessments"]
    ]
    assert median(counts) <= 6
    assert max(counts) <= 12
