"""The clock of timed checks: windows after a start or an increase, then steady repeats, with imprecise dates honoured.

Clock rules: day 0 is the first evidence of exposure; a result before the window opens shows the old state and does not
count; a later check of a series supersedes an earlier missed one; repeats count from the last valid result; an imprecise
date is every day it may be.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from datetime import date, timedelta
from typing import Literal

from cds.clinical.tables import ScheduledCheck
from cds.clinical.timeline import PartialDate

Status = Literal["not-due", "due", "overdue-in-grace", "overdue"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Window:
    """One check wanted: its days, and how many of the series before it were missed."""

    row: str
    opens: date
    due_by: date
    grace_ends: date
    missed_before: int = 0

    def status_on(self, today: date) -> Status:
        if today < self.opens:
            return "not-due"
        if today <= self.due_by:
            return "due"
        return "overdue-in-grace" if today <= self.grace_ends else "overdue"

    def days_overdue_on(self, today: date) -> int:
        """Calendar days past `due_by`; 0 when not past. Grace does not shorten it."""
        return max(0, (today - self.due_by).days)


def next_window(
    rows: Sequence[ScheduledCheck], *, day_zero: date, results: Iterable[date], today: date
) -> Window | None:
    """The check of one analyte that counts on `today`, given exact days; None where the rows hold no check.

    `rows` are the early rows of the trigger (in any order) and at most one steady row; `results` are days on which a
    valid result was taken.
    """
    taken = sorted(day for day in results if day <= today)
    early = sorted((row for row in rows if row.trigger != "steady"), key=lambda row: row.opens_after_days)
    steady = next((row for row in rows if row.trigger == "steady"), None)
    if steady is not None:
        window = _steady_window(steady, early, day_zero, taken, today)
        if window is not None:
            return window
    return _early_window(early, day_zero, taken, today)


def _early_window(early: list[ScheduledCheck], day_zero: date, taken: list[date], today: date) -> Window | None:
    """The last early check whose window has opened, unless satisfied; else the next one to come."""
    windows = [_window(row, day_zero) for row in early]
    if not windows:
        return None
    opened = [w for w in windows if w.opens <= today]
    if not opened:
        return windows[0]
    current = opened[-1]
    if not any(day >= current.opens for day in taken):
        return replace(current, missed_before=_missed(opened[:-1], taken))
    coming = windows[len(opened) :]
    return coming[0] if coming else None


def _steady_window(
    steady: ScheduledCheck, early: list[ScheduledCheck], day_zero: date, taken: list[date], today: date
) -> Window | None:
    """The steady check, once a result closed the early series, or opens after a result that closed part of it.

    Repeats count from a result: with none since the start, the last early check stays outstanding however late it is.
    Only rows without any early check count their first repeat from the start.
    """
    if not early:
        valid = [day for day in taken if day >= day_zero]
        return _window(steady, valid[-1] if valid else day_zero)
    valid = [day for day in taken if day >= day_zero + timedelta(days=early[0].opens_after_days)]
    if not valid:
        return None
    repeat = _window(steady, valid[-1])
    if valid[-1] >= day_zero + timedelta(days=early[-1].opens_after_days):
        return repeat
    if repeat.opens > today:
        return None
    return replace(repeat, missed_before=_missed([_window(row, day_zero) for row in early], taken))


def _missed(windows: Iterable[Window], taken: Sequence[date]) -> int:
    """How many of the windows no result closed, not even a late one."""
    return sum(not any(day >= window.opens for day in taken) for window in windows)


def _window(row: ScheduledCheck, from_day: date) -> Window:
    due_by = from_day + timedelta(days=row.due_after_days)
    return Window(
        row=row.id,
        opens=from_day + timedelta(days=row.opens_after_days),
        due_by=due_by,
        grace_ends=due_by + timedelta(days=row.grace_days),
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class CheckAnswer:
    """All that may be true of one analyte's check: `windows` of every possible day 0 and reading of imprecise results."""

    windows: tuple[Window | None, ...]

    def statuses_on(self, today: date) -> frozenset[Status]:
        return frozenset("not-due" if w is None else w.status_on(today) for w in self.windows)

    def is_wanted_on(self, today: date) -> bool | None:
        """True if due or overdue whatever the dates are, False if not due whatever they are, else None."""
        wanted = {status != "not-due" for status in self.statuses_on(today)}
        return wanted.pop() if len(wanted) == 1 else None


def possible_windows(
    rows: Sequence[ScheduledCheck], *, day_zero: PartialDate, results: Sequence[PartialDate], today: date
) -> CheckAnswer:
    """Every answer the imprecise dates allow (at most one per day day 0 may be, twice where results are imprecise)."""
    latest_zero = min(day_zero.latest, today)
    days = [day_zero.earliest + timedelta(days=n) for n in range(max(0, (latest_zero - day_zero.earliest).days) + 1)]
    past = [r for r in results if r.earliest <= today]
    readings = [[r.earliest for r in past]]
    if any(not r.is_day for r in past):
        readings.append([min(r.latest, today) for r in past])
    windows = [
        next_window(rows, day_zero=day, results=days_taken, today=today) for day in days for days_taken in readings
    ]
    return CheckAnswer(windows=tuple(dict.fromkeys(windows)))
