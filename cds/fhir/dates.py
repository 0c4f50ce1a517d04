"""FHIR R4 date, dateTime, instant and Period -> `PartialDate`. What a date means clinically belongs elsewhere.

An instant is converted into the zone of the settings before its calendar day is taken, so 23:30 in one zone may be
the next day in another. Grammar: FHIR R4 (4.0.1), section 2.24.0.1, data types date, dateTime and instant.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from datetime import UTC, date, datetime, time, timedelta, timezone, tzinfo

from cds.clinical.timeline import PartialDate

_DATE = re.compile(r"([0-9]{4})(?:-([0-9]{2})(?:-([0-9]{2}))?)?")
_INSTANT = re.compile(
    r"([0-9]{4})-([0-9]{2})-([0-9]{2})T([0-9]{2}):([0-9]{2}):([0-9]{2})(?:\.([0-9]+))?(Z|[+-][0-9]{2}:[0-9]{2})"
)
_WITHOUT_SECONDS = re.compile(r"[0-9]{4}-[0-9]{2}-[0-9]{2}T[0-9]{2}:[0-9]{2}(?:Z|[+-][0-9]{2}:[0-9]{2})?")
_WITHOUT_ZONE = re.compile(r"[0-9]{4}-[0-9]{2}-[0-9]{2}T[0-9]{2}:[0-9]{2}:[0-9]{2}(?:\.[0-9]+)?")
_LONGEST_TEXT = 64  # nobody writes a longer date; keeps a hostile one from costing time
_LARGEST_OFFSET = timedelta(hours=14)
_YEARS_TO_ASSESS = range(1900, 2200)  # days are counted back and ahead from the moment, and no calendar must end there


class DateNotUnderstood(ValueError):  # noqa: N818 - says what happened, as a reader would
    """A text is no FHIR date; `problem` says why, without repeating it."""

    def __init__(self, problem: str) -> None:
        super().__init__(problem)
        self.problem = problem


def parse_date(text: object, zone: tzinfo) -> PartialDate:
    """Read a date, dateTime or instant; calendar days are days in `zone`.

    A leap second counts as the second before it; fractions beyond the microsecond are cut off. Raises
    `DateNotUnderstood` for anything else, also for a time without zone or without seconds.
    """
    if not isinstance(text, str):
        raise DateNotUnderstood("is not a date: a JSON string is expected")
    if len(text) > _LONGEST_TEXT:
        raise DateNotUnderstood("is not a date: it is too long")
    if match := _DATE.fullmatch(text):
        return _partial(*match.groups())
    if match := _INSTANT.fullmatch(text):
        return PartialDate.of_instant(_instant(match, zone))
    if _WITHOUT_ZONE.fullmatch(text):
        raise DateNotUnderstood("has a time of day but no time zone")
    if _WITHOUT_SECONDS.fullmatch(text):
        raise DateNotUnderstood("has a time of day without seconds")
    raise DateNotUnderstood("is not a date as FHIR R4 writes it")


def parse_period(period: object, zone: tzinfo) -> tuple[PartialDate | None, PartialDate | None]:
    """Read start and end of a Period; None for an end that is absent, both None for an absent Period.

    Raises `DateNotUnderstood` where one of the two is no date or the start certainly lies after the end.
    """
    if period is None:
        return None, None
    if not isinstance(period, Mapping):
        raise DateNotUnderstood("is not a Period: a JSON object is expected")
    start, end = (None if period.get(key) is None else parse_date(period[key], zone) for key in ("start", "end"))
    if start is not None and end is not None and _is_after(start, end):
        raise DateNotUnderstood("starts after it ends")
    return start, end


def parse_as_of(text: str, zone: tzinfo) -> datetime:
    """Read the moment of an assessment, in `zone`: an instant as it is, a date as the last microsecond of that day.

    Raises `DateNotUnderstood`, also for a month or a year, and outside the years 1900 to 2199.
    """
    when = parse_date(text, zone)
    if when.earliest.year not in _YEARS_TO_ASSESS:
        raise DateNotUnderstood("is outside the years 1900 to 2199")
    if when.at is not None:
        return when.at
    if not when.is_day:
        raise DateNotUnderstood("is not a day: write YYYY-MM-DD, or an instant with its time zone")
    return datetime.combine(when.earliest, time.max, zone)


def _partial(year: str, month: str | None, day: str | None) -> PartialDate:
    try:
        if month is None:
            return PartialDate.of_year(int(year))
        if day is None:
            if not 1 <= int(month) <= 12:
                raise DateNotUnderstood("names a month that does not exist")
            return PartialDate.of_month(int(year), int(month))
        return PartialDate.of_day(date(int(year), int(month), int(day)))
    except DateNotUnderstood:
        raise
    except ValueError:
        raise DateNotUnderstood("names a day that does not exist") from None


def _instant(match: re.Match[str], zone: tzinfo) -> datetime:
    year, month, day, hour, minute, second = (int(part) for part in match.groups()[:6])
    microsecond = int((match[7] or "")[:6].ljust(6, "0"))
    if second == 60:
        second, microsecond = 59, 999_999
    try:
        sent = datetime(year, month, day, hour, minute, second, microsecond, _offset(match[8]))
        return sent.astimezone(zone)
    except DateNotUnderstood:
        raise
    except (ValueError, OverflowError):  # Overflow: the conversion leaves the years 1 to 9999
        raise DateNotUnderstood("names a day or time that does not exist") from None


def _offset(text: str) -> tzinfo:
    if text == "Z":
        return UTC
    hours, minutes = int(text[1:3]), int(text[4:6])
    size = timedelta(hours=hours, minutes=minutes)
    if minutes > 59 or size > _LARGEST_OFFSET:
        raise DateNotUnderstood("has a time zone that does not exist")
    return timezone(-size if text[0] == "-" else size)


def _is_after(start: PartialDate, end: PartialDate) -> bool:
    if start.at is not None and end.at is not None:
        return start.at > end.at
    return start.earliest > end.latest
