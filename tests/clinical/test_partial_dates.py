"""Dates known to the day, the month or the year: what may still be true of them."""

from __future__ import annotations

from datetime import UTC, date, datetime, timedelta

import pytest
from hypothesis import given
from hypothesis import strategies as st

from cds.clinical.timeline import PartialDate, recency

DAYS = st.dates(date(1900, 1, 1), date(2100, 12, 31))


def day(text: str) -> PartialDate:
    return PartialDate.of_day(date.fromisoformat(text))


def at(text: str) -> PartialDate:
    return PartialDate.of_instant(datetime.fromisoformat(text))


def between(first: str, last: str) -> PartialDate:
    return PartialDate(date.fromisoformat(first), date.fromisoformat(last))


@pytest.mark.parametrize(
    ("when", "earliest", "latest"),
    [
        (PartialDate.of_year(2024), "2024-01-01", "2024-12-31"),
        (PartialDate.of_month(2024, 2), "2024-02-01", "2024-02-29"),
        (PartialDate.of_month(2025, 2), "2025-02-01", "2025-02-28"),
        (PartialDate.of_month(2025, 12), "2025-12-01", "2025-12-31"),
        (day("2025-03-04"), "2025-03-04", "2025-03-04"),
        (at("2025-03-04T23:30:00+00:00"), "2025-03-04", "2025-03-04"),
    ],
)
def test_a_date_is_every_day_it_may_be(when, earliest, latest):
    assert (when.earliest.isoformat(), when.latest.isoformat()) == (earliest, latest)


@pytest.mark.parametrize(
    ("when", "text"),
    [
        (PartialDate.of_year(2024), "2024"),
        (PartialDate.of_year(987), "0987"),
        (PartialDate.of_month(2025, 2), "2025-02"),
        (PartialDate.of_month(987, 2), "0987-02"),
        (day("2025-03-04"), "2025-03-04"),
        (at("2025-03-04T23:30:00+00:00"), "2025-03-04"),
        (between("2025-03-02", "2025-04-01"), "2025-03-02/2025-04-01"),
        (between("2025-03-01", "2025-03-28"), "2025-03-01/2025-03-28"),  # not the whole of March
    ],
)
def test_a_date_is_written_as_precisely_as_it_is_known(when, text):
    assert str(when) == text


@pytest.mark.parametrize(
    ("when", "as_of", "is_known"),
    [
        (day("2025-03-04"), "2025-03-04T00:00:00+00:00", True),
        (day("2025-03-04"), "2025-03-03T23:59:59+00:00", False),
        (at("2025-03-04T12:00:00+00:00"), "2025-03-04T12:00:00+00:00", True),
        (at("2025-03-04T12:00:01+00:00"), "2025-03-04T12:00:00+00:00", False),
        (PartialDate.of_month(2025, 3), "2025-03-01T08:00:00+00:00", True),  # it may have been today
        (PartialDate.of_month(2025, 3), "2025-02-28T23:00:00+00:00", False),
        (PartialDate.of_year(2025), "2025-01-01T00:00:00+00:00", True),
    ],
)
def test_only_what_certainly_lies_ahead_is_not_known_yet(when, as_of, is_known):
    assert when.is_known_by(datetime.fromisoformat(as_of)) is is_known


def test_age_in_days_is_a_span_where_the_day_is_not_known():
    assert day("2025-03-04").age_in_days(date(2025, 3, 11)) == (7, 7)
    assert PartialDate.of_month(2025, 3).age_in_days(date(2025, 4, 10)) == (10, 40)


def test_moving_a_date_moves_both_ends_and_forgets_the_time_of_day():
    assert PartialDate.of_month(2025, 2).plus_days(28) == between("2025-03-01", "2025-03-28")
    assert at("2025-03-04T23:30:00+00:00").plus_days(1) == day("2025-03-05")
    assert day("2025-03-04").plus_days(29.9) == day("2025-04-02")
    assert day("2025-03-04").plus_days(-4) == day("2025-02-28")


@pytest.mark.parametrize("days", [4e6, 1e12, float("inf")])
def test_a_supply_for_thousands_of_years_ends_at_the_end_of_the_calendar(days):
    assert day("2025-03-04").plus_days(days) == PartialDate(date.max, date.max)
    assert day("2025-03-04").plus_days(-days) == PartialDate(date.min, date.min)


def test_of_one_day_the_later_hour_is_newer_and_a_date_without_hour_the_oldest():
    morning, evening = at("2025-03-04T08:00:00+00:00"), at("2025-03-04T20:00:00+00:00")
    whole_month = PartialDate.of_month(2025, 2)
    mixed = [evening, day("2025-03-05"), day("2025-03-04"), whole_month, morning]
    assert sorted(mixed, key=recency) == [whole_month, day("2025-03-04"), morning, evening, day("2025-03-05")]


@given(day=DAYS)
def test_a_day_lies_within_its_month_and_its_month_within_its_year(day):
    month, year = PartialDate.of_month(day.year, day.month), PartialDate.of_year(day.year)
    assert year.earliest <= month.earliest <= day <= month.latest <= year.latest
    assert (month.latest + timedelta(days=1)).day == 1


@given(day=DAYS, as_of=DAYS)
def test_a_date_without_hour_is_known_from_midnight_of_its_first_possible_day(day, as_of):
    midnight = datetime(as_of.year, as_of.month, as_of.day, tzinfo=UTC)
    month = PartialDate.of_month(day.year, day.month)
    assert month.is_known_by(midnight) == (month.earliest <= as_of)


@given(day=DAYS, days=st.integers(-10_000, 10_000))
def test_a_date_moved_there_and_back_is_the_same_date(day, days):
    month = PartialDate.of_month(day.year, day.month)
    assert month.plus_days(days).plus_days(-days) == month
