"""Dates, times and periods of FHIR R4: which calendar days they may be, and why a text is none."""

from __future__ import annotations

from datetime import UTC, date, datetime, timedelta, timezone
from zoneinfo import ZoneInfo

import pytest
from hypothesis import given
from hypothesis import strategies as st

from cds.clinical.timeline import PartialDate
from cds.fhir.dates import DateNotUnderstood, parse_as_of, parse_date, parse_period

NEW_YORK, BERLIN, AUCKLAND = ZoneInfo("America/New_York"), ZoneInfo("Europe/Berlin"), ZoneInfo("Pacific/Auckland")

# Grammar: FHIR R4 (4.0.1), section 2.24.0.1, date, dateTime and instant.
DAYS = """
    text                             | zone             | earliest   | latest
    2024                             | UTC              | 2024-01-01 | 2024-12-31
    0001                             | UTC              | 0001-01-01 | 0001-12-31
    9999                             | UTC              | 9999-01-01 | 9999-12-31
    2024-02                          | UTC              | 2024-02-01 | 2024-02-29
    2025-02                          | UTC              | 2025-02-01 | 2025-02-28
    2025-12                          | America/New_York | 2025-12-01 | 2025-12-31
    2024-02-29                       | Pacific/Auckland | 2024-02-29 | 2024-02-29
    2025-06-01T23:30:00-04:00        | UTC              | 2025-06-02 | 2025-06-02
    2025-06-01T23:30:00-04:00        | America/New_York | 2025-06-01 | 2025-06-01
    2026-03-02T01:30:00Z             | America/New_York | 2026-03-01 | 2026-03-01
    2025-06-01T12:30:00Z             | Pacific/Auckland | 2025-06-02 | 2025-06-02
    2025-12-31T23:00:00Z             | Europe/Berlin    | 2026-01-01 | 2026-01-01
    2025-06-01T00:00:00+14:00        | UTC              | 2025-05-31 | 2025-05-31
    2025-06-01T23:59:59-12:00        | UTC              | 2025-06-02 | 2025-06-02
    2025-06-01T10:00:00.123Z         | UTC              | 2025-06-01 | 2025-06-01
    2025-06-01T10:00:00.123456789Z   | UTC              | 2025-06-01 | 2025-06-01
    2025-06-01T10:00:00-00:00        | UTC              | 2025-06-01 | 2025-06-01
    2016-12-31T23:59:60Z             | UTC              | 2016-12-31 | 2016-12-31
"""

WRONG = """
    text                             | problem
    2025-02-29                       | names a day that does not exist
    2025-04-31                       | names a day that does not exist
    2025-00-10                       | names a day that does not exist
    2025-13                          | names a month that does not exist
    2025-00                          | names a month that does not exist
    0000                             | names a day that does not exist
    2025-02-30T10:00:00Z             | names a day or time that does not exist
    2025-02-03T25:00:00Z             | names a day or time that does not exist
    2025-02-03T24:00:00Z             | names a day or time that does not exist
    2025-02-03T10:60:00Z             | names a day or time that does not exist
    2025-02-03T10:00:61Z             | names a day or time that does not exist
    9999-12-31T23:30:00-04:00        | names a day or time that does not exist
    0001-01-01T00:30:00+04:00        | names a day or time that does not exist
    2025-02-03T10:00:00              | has a time of day but no time zone
    2025-02-03T10:00:00.5            | has a time of day but no time zone
    2025-02-03T10:00Z                | has a time of day without seconds
    2025-02-03T10:00                 | has a time of day without seconds
    2025-02-03T10:00:00+14:01        | has a time zone that does not exist
    2025-02-03T10:00:00+25:00        | has a time zone that does not exist
    2025-02-03T10:00:00+01:60        | has a time zone that does not exist
    2025-02-03T10:00:00+0100         | is not a date as FHIR R4 writes it
    2025-02-03 10:00:00Z             | is not a date as FHIR R4 writes it
    2025-02-03t10:00:00z             | is not a date as FHIR R4 writes it
    2025-2-3                         | is not a date as FHIR R4 writes it
    20250203                         | is not a date as FHIR R4 writes it
    02/03/2025                       | is not a date as FHIR R4 writes it
    03.02.2025                       | is not a date as FHIR R4 writes it
    25-02-03                         | is not a date as FHIR R4 writes it
    2025-02-03T                      | is not a date as FHIR R4 writes it
    yesterday                        | is not a date as FHIR R4 writes it
    ２０２５-02-03                    | is not a date as FHIR R4 writes it
"""


def lines(table: str) -> list[list[str]]:
    return [[cell.strip() for cell in line.split("|")] for line in table.strip().splitlines()[1:]]


@pytest.mark.parametrize(("text", "zone", "earliest", "latest"), lines(DAYS))
def test_a_date_is_the_calendar_days_it_may_be_in_the_zone_of_the_settings(text, zone, earliest, latest):
    when = parse_date(text, ZoneInfo(zone))
    assert (when.earliest, when.latest) == (date.fromisoformat(earliest), date.fromisoformat(latest))
    assert (when.at is not None) is ("T" in text)


@pytest.mark.parametrize(("text", "problem"), lines(WRONG))
def test_a_text_that_is_no_date_is_refused_in_words_that_do_not_repeat_it(text, problem):
    with pytest.raises(DateNotUnderstood) as caught:
        parse_date(text, UTC)
    assert caught.value.problem == problem
    assert text not in str(caught.value)


@pytest.mark.parametrize("value", [None, 2025, 20250203.0, True, ["2025"], {"value": "2025"}])
def test_a_date_is_a_json_string(value):
    with pytest.raises(DateNotUnderstood, match="a JSON string is expected"):
        parse_date(value, UTC)


@pytest.mark.parametrize("text", ["", " 2025-02-03", "2025-02-03 ", "2025-02-03\n", "9" * 100_000])
def test_white_space_and_endless_digits_make_no_date(text):
    with pytest.raises(DateNotUnderstood, match="is not a date"):
        parse_date(text, UTC)


def test_an_instant_keeps_its_moment():
    when = parse_date("2025-06-01T23:30:00.25-04:00", BERLIN)
    assert when.at == datetime(2025, 6, 2, 3, 30, 0, 250_000, UTC)
    assert when.at is not None
    assert when.at.utcoffset() == timedelta(hours=2)  # already in the zone of the settings


def test_a_leap_second_is_the_last_moment_before_midnight():
    leap, midnight = parse_date("2016-12-31T23:59:60Z", UTC).at, parse_date("2017-01-01T00:00:00Z", UTC).at
    assert leap is not None
    assert midnight is not None
    assert parse_date("2016-12-31T23:59:59Z", UTC).at < leap < midnight  # type: ignore[operator]


def test_an_hour_that_the_clock_shows_twice_is_told_apart_by_its_offset():
    # 2 November 2025, 01:30 in New York: first in summer time, then in winter time
    first, second = (parse_date(f"2025-11-02T01:30:00{offset}", NEW_YORK).at for offset in ("-04:00", "-05:00"))
    assert first is not None
    assert second is not None
    assert second.astimezone(UTC) - first.astimezone(UTC) == timedelta(hours=1)


def test_a_period_gives_both_ends_or_says_which_is_absent():
    start, end = PartialDate.of_month(2025, 3), PartialDate.of_day(date(2025, 3, 4))
    assert parse_period({"start": "2025-03", "end": "2025-03-04"}, UTC) == (start, end)
    assert parse_period({"start": "2025-03"}, UTC) == (start, None)
    assert parse_period({"end": "2025-03-04"}, UTC) == (None, end)
    assert parse_period({}, UTC) == parse_period(None, UTC) == (None, None)


@pytest.mark.parametrize(
    ("start", "end", "is_possible"),
    [
        ("2025-03-04", "2025-03-04", True),
        ("2025-03-05", "2025-03-04", False),
        ("2025-03", "2025-03-04", True),
        ("2025-03-04", "2025", True),
        ("2025-04", "2025-03", False),
        ("2025-03-04T10:00:00Z", "2025-03-04T09:00:00Z", False),
        ("2025-03-04T10:00:00+02:00", "2025-03-04T09:00:00Z", True),
        ("2025-03-04T10:00:00Z", "2025-03-04", True),
    ],
)
def test_a_period_that_certainly_starts_after_it_ends_is_none(start, end, is_possible):
    if is_possible:
        assert None not in parse_period({"start": start, "end": end}, UTC)
    else:
        with pytest.raises(DateNotUnderstood, match="starts after it ends"):
            parse_period({"start": start, "end": end}, UTC)


@pytest.mark.parametrize("period", ["2025-03", ["2025-03"], 7, {"start": 7}, {"end": "soon"}])
def test_what_is_no_period_is_refused(period):
    with pytest.raises(DateNotUnderstood):
        parse_period(period, UTC)


def test_an_assessment_of_a_day_sees_the_whole_day_where_the_clinic_is():
    assert parse_as_of("2025-03-04", UTC) == datetime(2025, 3, 4, 23, 59, 59, 999_999, UTC)
    assert parse_as_of("2025-03-04", NEW_YORK).astimezone(UTC) == datetime(2025, 3, 5, 4, 59, 59, 999_999, UTC)
    assert parse_as_of("2025-07-04", NEW_YORK).astimezone(UTC) == datetime(2025, 7, 5, 3, 59, 59, 999_999, UTC)


def test_an_assessment_of_a_moment_is_of_that_moment_in_the_zone_of_the_clinic():
    as_of = parse_as_of("2026-03-02T01:30:00Z", NEW_YORK)
    assert as_of == datetime(2026, 3, 2, 1, 30, tzinfo=UTC)
    assert as_of.date() == date(2026, 3, 1)


@pytest.mark.parametrize("text", ["2025", "2025-03"])
def test_an_assessment_needs_a_day(text):
    with pytest.raises(DateNotUnderstood, match="is not a day"):
        parse_as_of(text, UTC)


def test_what_happened_today_is_known_to_an_assessment_of_today_in_any_zone():
    for zone in (UTC, NEW_YORK, BERLIN, AUCKLAND):
        as_of = parse_as_of("2025-03-04", zone)
        assert parse_date("2025-03-04", zone).is_known_by(as_of)
        assert not parse_date("2025-03-05", zone).is_known_by(as_of)


@given(
    moment=st.datetimes(datetime(1900, 1, 1), datetime(2100, 12, 31)),  # noqa: DTZ001 - the zone is drawn apart
    minutes=st.integers(-12 * 60, 14 * 60),
    zone=st.sampled_from([UTC, NEW_YORK, BERLIN, AUCKLAND]),
)
def test_an_instant_of_any_offset_is_the_same_moment_and_the_day_of_the_zone(moment, minutes, zone):
    sent = moment.replace(tzinfo=timezone(timedelta(minutes=minutes)))
    when = parse_date(sent.isoformat(), zone)
    assert when.at == sent
    assert when.earliest == when.latest == sent.astimezone(zone).date()


@given(day=st.dates())
def test_a_day_is_that_day_in_every_zone(day):
    assert parse_date(day.isoformat(), AUCKLAND) == PartialDate.of_day(day) == parse_date(day.isoformat(), NEW_YORK)


@given(text=st.text(max_size=40) | st.text(alphabet="0123456789-:TZ+.", max_size=40))
def test_no_text_whatever_does_more_than_be_no_date(text):
    try:
        when = parse_date(text, NEW_YORK)
    except DateNotUnderstood:
        return
    assert when.earliest <= when.latest
