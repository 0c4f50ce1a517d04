"""Patient: sex, birth and death, and what to make of nonsense there."""

from __future__ import annotations

from datetime import UTC

import pytest

from cds.fhir.codes import CodeBook
from cds.fhir.intake import Context, Intake
from cds.fhir.patient import read_patient


def read(**elements):
    context = Context(codes=CodeBook(), zone=UTC, intake=Intake())
    return read_patient({"resourceType": "Patient", "id": "p1", **elements}, context), context.intake


def told(intake):
    return [(issue.resource, issue.path, issue.severity) for issue in intake.issues]


def test_a_plain_patient_is_read_without_doubt():
    facts, intake = read(gender="female", birthDate="1950-05-10", deceasedBoolean=False)
    assert (facts.sex, str(facts.born), facts.is_deceased, facts.died) == ("female", "1950-05-10", False, None)
    assert intake.issues == []


def test_nothing_sent_is_nothing_known():
    facts, intake = read()
    assert (facts.sex, facts.born, facts.is_deceased) == ("unknown", None, False)
    assert intake.issues == []


@pytest.mark.parametrize("gender", ["Female", "F", "weiblich", 1, ["female"], {}])
def test_a_gender_word_outside_r4_is_unknown_with_a_doubt(gender):
    facts, intake = read(gender=gender)
    assert facts.sex == "unknown"
    assert told(intake) == [("Patient/p1", "gender", "doubtful")]


@pytest.mark.parametrize("birth", ["10.05.1950", "1950-13", 1950, "1950-02-30"])
def test_a_birth_date_that_is_none_is_not_known_with_a_doubt(birth):
    facts, intake = read(birthDate=birth)
    assert facts.born is None
    assert told(intake) == [("Patient/p1", "birthDate", "doubtful")]


def test_a_birth_year_alone_is_kept_as_a_year():
    assert str(read(birthDate="1950")[0].born) == "1950"


def test_a_death_by_date_or_by_word_is_a_death():
    assert read(deceasedBoolean=True)[0].is_deceased
    facts, _ = read(deceasedDateTime="2024-11-02T10:00:00Z")
    assert (facts.is_deceased, str(facts.died)) == (True, "2024-11-02")


def test_a_death_whose_date_is_none_is_still_a_death():
    facts, intake = read(deceasedDateTime="yesterday")
    assert (facts.is_deceased, facts.died) == (True, None)
    assert told(intake) == [("Patient/p1", "deceasedDateTime", "doubtful")]


@pytest.mark.parametrize(
    ("value", "is_deceased"),
    [("true", True), ("TRUE", True), (1, True), ("false", False), (0, False), ("perhaps", False), ([True], False)],
)
def test_a_death_written_carelessly_is_believed_where_it_can_be_read_and_doubted_always(value, is_deceased):
    facts, intake = read(deceasedBoolean=value)
    assert facts.is_deceased is is_deceased
    assert told(intake) == [("Patient/p1", "deceasedBoolean", "doubtful")]


def test_a_death_before_the_birth_is_doubted():
    _, intake = read(birthDate="2050-01-01", deceasedDateTime="2024-01-01")
    assert told(intake) == [("Patient/p1", "deceasedDateTime", "doubtful")]
