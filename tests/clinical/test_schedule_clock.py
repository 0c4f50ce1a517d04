"""The clock of timed checks, by the clock rules of our monitoring reference (section A3).

The windows are those of an MRA (our monitoring table: week 1 on days 3 to 7, week 4 on days 21 to 35, then every half
year); here they only give the clock something to turn.
"""

from __future__ import annotations

from datetime import date, timedelta

import pytest
from hypothesis import given
from hypothesis import strategies as st

from cds.clinical.schedule import CheckAnswer, Window, next_window, possible_windows
from cds.clinical.tables import Basis, ScheduledCheck
from cds.clinical.timeline import PartialDate


def check(name: str, trigger: str, opens: int, due: int, grace: int) -> ScheduledCheck:
    return ScheduledCheck(
        id=name,
        rule="check-potassium-creatinine",
        drug_classes=("mra",),
        trigger=trigger,  # type: ignore[arg-type]
        tests=("potassium", "creatinine"),
        opens_after_days=opens,
        due_after_days=due,
        grace_days=grace,
        basis=Basis(source="made-up", locator="for the clock", checked="memory"),
    )


WEEK_1 = check("week-1", "start", 3, 7, 3)
WEEK_4 = check("week-4", "start", 21, 35, 7)
HALF_YEAR = check("half-year", "steady", 150, 182, 30)
MRA = (WEEK_4, WEEK_1, HALF_YEAR)  # the order of the rows must not matter

# Day 0 is 2026-03-02. Results are days of potassium; "none": no result since then.
SPEC = """
    as of      | results                | row       | status           | days overdue | missed | why
    2026-03-02 | none                   | week-1    | not-due          | 0            | 0      | day 0
    2026-03-04 | none                   | week-1    | not-due          | 0            | 0      | the day before the window opens
    2026-03-05 | none                   | week-1    | due              | 0            | 0      | day 3, the first day
    2026-03-09 | none                   | week-1    | due              | 0            | 0      | day 7, the due day
    2026-03-10 | none                   | week-1    | overdue-in-grace | 1            | 0      | counted from the due day
    2026-03-12 | none                   | week-1    | overdue-in-grace | 3            | 0      | the last day of grace
    2026-03-13 | none                   | week-1    | overdue          | 4            | 0      | vignette 1: grace ended
    2026-03-22 | none                   | week-1    | overdue          | 13           | 0      | the day before week 4 opens
    2026-03-23 | none                   | week-4    | due              | 0            | 1      | the later check supersedes the missed one
    2026-04-06 | none                   | week-4    | due              | 0            | 1      | day 35
    2026-04-07 | none                   | week-4    | overdue-in-grace | 1            | 1      | day 36
    2026-04-14 | none                   | week-4    | overdue          | 8            | 1      | day 43
    2026-07-29 | none                   | week-4    | overdue          | 114          | 1      | the steady check counts from a result
    2026-08-02 | none                   | week-4    | overdue          | 118          | 1      | five months without any result
    2026-10-01 | none                   | week-4    | overdue          | 178          | 1      | nor does day 213 change that
    2026-08-02 | 2026-03-04             | week-4    | overdue          | 118          | 1      | a result that came too early is none
    2026-08-01 | 2026-03-05             | week-4    | overdue          | 117          | 0      | day 149 after the only valid result
    2026-08-02 | 2026-03-05             | half-year | due              | 0            | 1      | day 150 supersedes week 4
    2026-09-04 | 2026-03-05             | half-year | overdue-in-grace | 1            | 1      | day 183 after the only valid result
    2026-03-08 | 2026-03-02             | week-1    | due              | 0            | 0      | the day of the start shows the old state
    2026-03-08 | 2026-03-04             | week-1    | due              | 0            | 0      | vignette 2: day 2 is too early
    2026-03-08 | 2026-03-05             | week-4    | not-due          | 0            | 0      | day 3 counts
    2026-03-22 | 2026-03-15             | week-4    | not-due          | 0            | 0      | done late is done
    2026-03-23 | 2026-03-05             | week-4    | due              | 0            | 0      | week 1 does not stand for week 4
    2026-04-10 | 2026-03-05             | week-4    | overdue-in-grace | 4            | 0      | only week 4 is wanting
    2026-03-23 | 2026-03-22             | week-4    | due              | 0            | 0      | day 20 closes week 1 late, not week 4
    2026-03-24 | 2026-03-23             | half-year | not-due          | 0            | 0      | day 21 closes both
    2026-08-19 | 2026-03-05 2026-03-23  | half-year | not-due          | 0            | 0      | day 149 after the last result
    2026-08-20 | 2026-03-05 2026-03-23  | half-year | due              | 0            | 0      | day 150 after the last result
    2026-09-21 | 2026-03-05 2026-03-23  | half-year | due              | 0            | 0      | day 182 after the last result
    2026-09-22 | 2026-03-05 2026-03-23  | half-year | overdue-in-grace | 1            | 0      | day 183
    2026-10-22 | 2026-03-05 2026-03-23  | half-year | overdue          | 31           | 0      | grace of 30 days is over
    2026-09-22 | 2026-03-23 2026-06-01  | half-year | not-due          | 0            | 0      | an extra result moves the next one
    2026-03-08 | 2026-03-09             | week-1    | due              | 0            | 0      | a result of tomorrow is not known today
"""
START = date(2026, 3, 2)


def lines() -> list[list[str]]:
    return [[cell.strip() for cell in line.split("|")] for line in SPEC.strip().splitlines()[1:]]


def days(text: str) -> list[date]:
    return [] if text == "none" else [date.fromisoformat(part) for part in text.split()]


def exact(text: str) -> PartialDate:
    return PartialDate.of_day(date.fromisoformat(text))


def answer(day_zero: PartialDate, *results: PartialDate, as_of: str) -> CheckAnswer:
    return possible_windows(MRA, day_zero=day_zero, results=results, today=date.fromisoformat(as_of))


def overdue_span(found: CheckAnswer, as_of: str) -> tuple[int, int]:
    counts = [w.days_overdue_on(date.fromisoformat(as_of)) for w in found.windows if w is not None]
    return min(counts), max(counts)


@pytest.mark.parametrize(("as_of", "results", "row", "status", "overdue", "missed", "_why"), lines())
def test_a_check_is_due_by_the_clock(as_of, results, row, status, overdue, missed, _why):
    today = date.fromisoformat(as_of)
    window = next_window(MRA, day_zero=START, results=days(results), today=today)
    assert window is not None
    assert (window.row, window.status_on(today), window.days_overdue_on(today), window.missed_before) == (
        row,
        status,
        int(overdue),
        int(missed),
    )


def test_a_window_names_its_four_days():
    window = next_window(MRA, day_zero=START, results=[], today=START)
    assert window == Window(row="week-1", opens=date(2026, 3, 5), due_by=date(2026, 3, 9), grace_ends=date(2026, 3, 12))


def test_a_series_without_a_steady_check_ends_with_its_last_result():
    early = (WEEK_1, WEEK_4)
    assert next_window(early, day_zero=START, results=days("2026-03-30"), today=date(2026, 5, 1)) is None
    assert next_window((), day_zero=START, results=[], today=START) is None


def test_a_drug_with_a_steady_check_alone_counts_from_its_start_until_there_is_a_result():
    steady = (HALF_YEAR,)
    first = next_window(steady, day_zero=START, results=[], today=START)
    assert first is not None
    assert first.due_by == START + timedelta(days=182)
    later = next_window(steady, day_zero=START, results=days("2026-05-01"), today=date(2026, 5, 2))
    assert later is not None
    assert later.due_by == date(2026, 5, 1) + timedelta(days=182)


def test_a_result_from_before_the_start_does_not_count():
    window = next_window((HALF_YEAR,), day_zero=START, results=days("2026-02-27"), today=date(2026, 8, 1))
    assert window is not None
    assert window.due_by == START + timedelta(days=182)


def test_a_start_known_to_the_month_gives_one_answer_where_every_day_of_it_does():
    march = PartialDate.of_month(2026, 3)
    assert answer(march, as_of="2026-03-02").is_wanted_on(date(2026, 3, 2)) is False  # day 1 at the most
    assert answer(march, as_of="2026-03-20").is_wanted_on(date(2026, 3, 20)) is None  # day 0 to 19
    assert answer(march, as_of="2026-04-20").is_wanted_on(date(2026, 4, 20)) is True  # day 20 to 50, never tested


def test_overdue_is_a_span_of_days_where_the_start_is_known_to_the_month():
    # ruling 21: overdue at the latest possible date, so a range. Week 4 of a start on 1 or 31 March
    found = answer(PartialDate.of_month(2026, 3), as_of="2026-05-20")
    assert found.statuses_on(date(2026, 5, 20)) == {"overdue"}
    assert overdue_span(found, "2026-05-20") == (15, 45)


def test_a_start_in_this_month_lies_not_in_the_future():
    found = answer(PartialDate.of_month(2026, 3), as_of="2026-03-04")
    assert {w.opens for w in found.windows if w is not None} == {date(2026, 3, day) for day in (4, 5, 6, 7)}


def test_a_result_satisfies_for_sure_only_if_it_lies_in_the_window_of_the_latest_possible_start():
    march = PartialDate.of_month(2026, 3)
    # 31 March + 3 days is the earliest day that counts whatever the start; week 4 is not open for any start
    assert answer(march, exact("2026-04-03"), as_of="2026-03-24").is_wanted_on(date(2026, 3, 24)) is None
    sure = answer(PartialDate(date(2026, 3, 2), date(2026, 3, 4)), exact("2026-03-07"), as_of="2026-03-10")
    assert sure.is_wanted_on(date(2026, 3, 10)) is False
    unsure = answer(PartialDate(date(2026, 3, 2), date(2026, 3, 4)), exact("2026-03-06"), as_of="2026-03-10")
    assert unsure.is_wanted_on(date(2026, 3, 10)) is None


def test_a_result_known_to_the_month_may_or_may_not_have_come_in_time():
    march = PartialDate.of_month(2026, 3)
    start = PartialDate.of_day(START)
    assert answer(start, march, as_of="2026-03-20").is_wanted_on(date(2026, 3, 20)) is None  # from 1 to 20 March
    april = PartialDate.of_month(2026, 4)
    assert answer(start, april, as_of="2026-04-20").is_wanted_on(date(2026, 4, 20)) is False  # week 4 whenever it was


def test_a_result_of_the_future_is_not_moved_to_today_by_an_imprecise_one_beside_it():
    february, tomorrow = PartialDate.of_month(2026, 2), exact("2026-03-11")
    found = answer(PartialDate.of_day(START), february, tomorrow, as_of="2026-03-10")
    assert found.statuses_on(date(2026, 3, 10)) == {"overdue-in-grace"}


RESULTS = st.lists(st.integers(-30, 400).map(lambda n: START + timedelta(days=n)), max_size=5)
TODAY = st.integers(0, 500).map(lambda n: START + timedelta(days=n))


@given(results=RESULTS, today=TODAY, data=st.data())
def test_neither_the_order_of_rows_nor_of_results_matters(results, today, data):
    rows = data.draw(st.permutations(MRA))
    shuffled = data.draw(st.permutations(results))
    assert next_window(rows, day_zero=START, results=shuffled, today=today) == next_window(
        MRA, day_zero=START, results=results, today=today
    )


@given(results=RESULTS, today=TODAY)
def test_a_result_of_today_leaves_nothing_overdue_once_the_first_window_is_open(results, today):
    window = next_window(MRA, day_zero=START, results=[*results, today], today=today)
    assert window is not None
    if today >= START + timedelta(days=3):
        assert window.status_on(today) == "not-due"


@given(results=RESULTS, today=TODAY, more=st.integers(1, 100))
def test_nothing_taken_after_today_changes_the_answer(results, today, more):
    later = today + timedelta(days=more)
    assert next_window(MRA, day_zero=START, results=[*results, later], today=today) == next_window(
        MRA, day_zero=START, results=results, today=today
    )


@given(results=RESULTS, today=TODAY)
def test_exact_dates_give_exactly_one_answer(results, today):
    found = possible_windows(
        MRA, day_zero=PartialDate.of_day(START), results=[PartialDate.of_day(r) for r in results], today=today
    )
    assert found.windows == (next_window(MRA, day_zero=START, results=results, today=today),)
    assert found.is_wanted_on(today) is not None
