"""Dates as senders give them: a day, a month, a year or an instant. Nothing clinical belongs here."""

from __future__ import annotations

import calendar
from dataclasses import dataclass
from datetime import date, datetime, time, timedelta, tzinfo

_WHOLE_CALENDAR = date.max.toordinal()  # days


@dataclass(frozen=True, slots=True)
class PartialDate:
    """A date known to the day, the month or the year: the closed interval of calendar days it may be.

    Days are calendar days in the zone of the settings. `at` is the instant (with its zone), only where
    the sender gave a time of day; then `earliest == latest`.
    """

    earliest: date
    latest: date
    at: datetime | None = None

    @classmethod
    def of_day(cls, day: date) -> PartialDate:
        return cls(day, day)

    @classmethod
    def of_month(cls, year: int, month: int) -> PartialDate:
        return cls(date(year, month, 1), date(year, month, calendar.monthrange(year, month)[1]))

    @classmethod
    def of_year(cls, year: int) -> PartialDate:
        return cls(date(year, 1, 1), date(year, 12, 31))

    @classmethod
    def of_instant(cls, instant: datetime) -> PartialDate:
        """The instant must already be in the zone whose calendar days count."""
        return cls(instant.date(), instant.date(), instant)

    @property
    def is_day(self) -> bool:
        """True if the calendar day is known."""
        return self.earliest == self.latest

    def is_known_by(self, as_of: datetime) -> bool:
        """True unless it certainly lies after `as_of`."""
        if self.at is not None:
            return self.at <= as_of
        return self.earliest <= as_of.date()

    def last_instant(self, zone: tzinfo | None) -> datetime:
        """The instant, or the last minute of the latest day it may be."""
        return self.at if self.at is not None else datetime.combine(self.latest, time(23, 59), zone)

    def age_in_days(self, as_of: date) -> tuple[int, int]:
        """Fewest and most days from this date to `as_of`."""
        return (as_of - self.latest).days, (as_of - self.earliest).days

    def plus_days(self, days: float) -> PartialDate:
        """Both ends moved by whole days (a fraction is cut off); the instant, if any, is dropped.

        What would leave the calendar stops at its first or last day.
        """
        move = timedelta(days=int(max(-_WHOLE_CALENDAR, min(days, _WHOLE_CALENDAR))))
        return PartialDate(_shift(self.earliest, move), _shift(self.latest, move))

    def __str__(self) -> str:
        """ISO 8601 at the precision that is known: 2025, 2025-03 or 2025-03-04; else 2025-03-02/2025-04-01."""
        if self.is_day:
            return self.earliest.isoformat()
        if self == PartialDate.of_month(self.earliest.year, self.earliest.month):
            return self.earliest.isoformat()[:7]
        if self == PartialDate.of_year(self.earliest.year):
            return self.earliest.isoformat()[:4]
        return f"{self.earliest.isoformat()}/{self.latest.isoformat()}"


def recency(when: PartialDate) -> tuple[date, float, date]:
    """Sort key: later is greater; of one day, a later time of day, a date without time first."""
    time_of_day = when.at.timestamp() if when.at is not None else float("-inf")
    return when.latest, time_of_day, when.earliest


def _shift(day: date, move: timedelta) -> date:
    try:
        return day + move
    except OverflowError:
        return date.max if move > timedelta(0) else date.min
