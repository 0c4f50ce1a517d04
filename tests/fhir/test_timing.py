"""How often a day an R4 Timing means, and from when until when."""

from __future__ import annotations

from datetime import UTC, date

import pytest

from cds.clinical.timeline import PartialDate
from cds.fhir.codes import CodeBook
from cds.fhir.intake import Context, Intake
from cds.fhir.timing import Place, read_timing

GTS = "http://terminology.hl7.org/CodeSystem/v3-GTSAbbreviation"
OLD_GTS = "http://hl7.org/fhir/v3/GTSAbbreviation"
SNOMED = "http://snomed.info/sct"
NEW_YEAR = PartialDate.of_day(date(2025, 1, 1))


def reading(timing, *, ordered=NEW_YEAR):
    intake = Intake()
    place = Place(
        Context(codes=CodeBook(), zone=UTC, intake=intake), "MedicationRequest/m1", "dosageInstruction[0].timing"
    )
    return read_timing(timing, place, ordered=ordered), intake.issues


def repeat(**elements):
    return {"repeat": elements}


def code(value, system=GTS):
    coding = {"code": value} if system is None else {"system": system, "code": value}
    return {"code": {"coding": [coding]}}


# frequency in period, FHIR R4 Timing.repeat; days and times are doses of their own
PER_DAY = [
    (repeat(frequency=1, period=1, periodUnit="d"), 1),
    (repeat(frequency=2, period=1, periodUnit="d"), 2),
    (repeat(period=1, periodUnit="d"), 1),
    (repeat(frequency=1, period=12, periodUnit="h"), 2),
    (repeat(frequency=1, period=8, periodUnit="h"), 3),
    (repeat(frequency=1, period=2, periodUnit="d"), 0.5),
    (repeat(frequency=1, period=1, periodUnit="wk"), 1 / 7),
    (repeat(frequency=3, period=1, periodUnit="wk"), 3 / 7),
    (repeat(frequency=3, period=1, periodUnit="wk", dayOfWeek=["mon", "wed", "fri"]), 3 / 7),
    (repeat(frequency=1, period=1, periodUnit="d", dayOfWeek=["mon", "wed", "fri"]), 3 / 7),
    (repeat(frequency=2, period=1, periodUnit="d", dayOfWeek=["mon"], timeOfDay=["08:00:00", "20:00:00"]), 2 / 7),
    (repeat(dayOfWeek=["sat", "sun"]), 2 / 7),
    (repeat(timeOfDay=["08:00:00", "20:00:00"]), 2),
    (repeat(when=["MORN", "EVE"]), 2),
    (repeat(frequency=1, period=1, periodUnit="d", when=["HS"]), 1),
    (repeat(frequency=2, period=1, periodUnit="d", when=["PC"]), 2),
    (repeat(frequency=1, period=2, periodUnit="d", when=["MORN"]), 0.5),
    (code("QD"), 1),
    (code("BID"), 2),
    (code("BID", OLD_GTS), 2),
    (code("BID", None), 2),
    (code("TID"), 3),
    (code("QID"), 4),
    (code("Q4H"), 6),
    (code("Q6H"), 4),
    (code("Q8H"), 3),
    (code("AM"), 1),
    (code("QOD"), 0.5),
    (code("WK"), 1 / 7),
    ({"code": {"coding": [{"system": SNOMED, "code": "229799001", "display": "Twice a day"}]}}, 2),
    ({"code": {"text": "three times daily"}}, 3),
    ({**code("BID"), **repeat(frequency=1, period=12, periodUnit="h")}, 2),
    ({**code("BID"), **repeat(boundsPeriod={"start": "2025-02-01"})}, 2),
    ({**code("X1", "http://hospital.example/timing"), **repeat(frequency=1, period=1, periodUnit="d")}, 1),
]


@pytest.mark.parametrize(("timing", "per_day"), PER_DAY)
def test_the_timing_says_how_often_a_day(timing, per_day):
    read, issues = reading(timing)
    assert read.rhythm.per_day == pytest.approx(per_day)
    assert not issues


UNKNOWN = [
    {**code("BID"), **repeat(frequency=1, period=1, periodUnit="d")},
    {"code": {"coding": [{"system": GTS, "code": "BID"}, {"system": OLD_GTS, "code": "TID"}]}},
    {"code": {"text": "as directed"}},
    code("BID", SNOMED),
    repeat(frequency=2, periodUnit="d"),
    repeat(frequency=1),
    repeat(when=["PC"]),
    repeat(frequency=1, period=1, periodUnit="d", when=["MORN", "EVE"]),
    repeat(frequency=1, period=1, periodUnit="wk", dayOfWeek=["mon", "thu"]),
]


@pytest.mark.parametrize("timing", UNKNOWN)
def test_what_is_open_or_contradicts_itself_is_not_guessed(timing):
    read, _ = reading(timing)
    assert read.rhythm.per_day is None
    assert read.rhythm.note


HOSTILE = [
    7,
    [],
    {"repeat": []},
    repeat(frequency=0, period=1, periodUnit="d"),
    repeat(frequency=-1, period=1, periodUnit="d"),
    repeat(frequency=True, period=1, periodUnit="d"),
    repeat(frequency="2", period=1, periodUnit="d"),
    repeat(frequency=2, period=0, periodUnit="d"),
    repeat(frequency=10**400, period=1, periodUnit="d"),
    repeat(frequency=10**9, period=1, periodUnit="d"),
    repeat(frequency=1, period=1e300, periodUnit="a"),
    repeat(frequency=1, period=1, periodUnit="day"),
    repeat(frequency=1, period=1, periodUnit={"d": 1}),
    repeat(frequency=3, frequencyMax=2, period=1, periodUnit="d"),
    repeat(dayOfWeek=["someday"]),
    repeat(dayOfWeek=[{}]),
    repeat(timeOfDay=["25:00:00"]),
    repeat(when=[["MORN"]]),
]


@pytest.mark.parametrize("timing", HOSTILE)
def test_a_timing_that_cannot_be_is_refused_and_gives_no_frequency(timing):
    read, issues = reading(timing)
    assert read.rhythm.per_day is None
    assert [issue.severity for issue in issues] == ["refused"]
    assert issues[0].path.startswith("dosageInstruction[0].timing")


def test_a_range_of_frequency_keeps_its_upper_end():
    read, _ = reading(repeat(frequency=1, frequencyMax=3, period=1, periodUnit="d"))
    assert (read.rhythm.per_day, read.rhythm.max_per_day) == (None, 3)


def test_a_range_of_the_period_keeps_the_shortest_interval():
    read, _ = reading(repeat(frequency=1, period=4, periodMax=6, periodUnit="h"))
    assert (read.rhythm.per_day, read.rhythm.max_per_day) == (None, pytest.approx(6))


def test_times_of_day_are_named():
    assert reading(repeat(timeOfDay=["08:00:00"]))[0].rhythm.times == ("08:00",)
    assert reading(repeat(when=["MORN"], dayOfWeek=["wed", "mon"]))[0].rhythm.times == ("mon MORN", "wed MORN")
    assert reading(code("AM"))[0].rhythm.times == ("MORN",)


def test_a_count_of_one_is_a_single_dose():
    assert reading(repeat(count=1))[0].rhythm.is_single


def test_a_listed_day_is_a_single_dose_on_that_day():
    read, _ = reading({"event": ["2025-03-04"]})
    assert read.rhythm.is_single
    assert str(read.starts) == "2025-03-04"


# The last day is meant: a week from 1 January ends on 7 January (ruling 38: without a start, from the order's date)
BOUNDS = [
    ({"boundsPeriod": {"start": "2025-02-01", "end": "2025-02-10"}}, "2025-02-01", "2025-02-10"),
    ({"boundsPeriod": {"start": "2025-02"}}, "2025-02", "None"),
    ({"boundsDuration": {"value": 7, "code": "d"}}, "None", "2025-01-07"),
    ({"boundsDuration": {"value": 2, "unit": "weeks"}}, "None", "2025-01-14"),
    (
        {"boundsRange": {"low": {"value": 7, "code": "d"}, "high": {"value": 10, "code": "d"}}},
        "None",
        "2025-01-07/2025-01-10",
    ),
    ({"count": 10}, "None", "2025-01-05"),
    ({"count": 14, "boundsPeriod": {"start": "2025-02-01"}}, "2025-02-01", "2025-02-07"),
]


@pytest.mark.parametrize(("bounds", "starts", "ends"), BOUNDS)
def test_bounds_and_counts_end_a_line(bounds, starts, ends):
    read, issues = reading(repeat(frequency=2, period=1, periodUnit="d", **bounds))
    assert (str(read.starts), str(read.ends)) == (starts, ends)
    assert not issues


def test_a_length_from_an_unknown_day_ends_on_an_unknown_day():
    read, _ = reading(repeat(frequency=2, period=1, periodUnit="d", count=14), ordered=None)
    assert read.ends is None


def test_bounds_that_are_not_understood_are_doubted_and_the_frequency_still_counts():
    read, issues = reading(repeat(frequency=2, period=1, periodUnit="d", boundsPeriod={"start": "next week"}))
    assert read.rhythm.per_day == 2
    assert [(issue.severity, issue.path) for issue in issues] == [
        ("doubtful", "dosageInstruction[0].timing.repeat.boundsPeriod")
    ]
