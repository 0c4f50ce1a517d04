"""The total daily dose of a regimen on a day. Lines come in milligrams a day; how senders write them is not known here."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from datetime import date

from cds.clinical.record import DoseLine
from cds.clinical.units import round_half_up

_DIGITS = 4  # doses are rounded to 0.0001 mg (ruling 36)
NO_DOSAGE = "no dosage is given"


@dataclass(frozen=True, slots=True, kw_only=True)
class Dose:
    """A total daily dose in mg, None where it cannot be known; `note` says why, or how it was derived.

    As-needed amounts are only in `max_daily_mg`. `other` is a daily amount that is not in mg, as text.
    """

    daily_mg: float | None
    note: str
    max_daily_mg: float | None = None
    other: str | None = None
    as_needed: bool = False


def resolve_dose(lines: Sequence[DoseLine], on: date) -> Dose:
    """Say what the lines of one order give on the day `on` (ruling 39).

    Lines whose bounds do not overlap are steps: those covering `on` count, or else the last one begun. Different times
    of day add up; different sequence numbers without bounds or times leave the dose unknown. Identical lines count once.
    """
    if not lines:
        return Dose(daily_mg=None, note=NO_DOSAGE)
    holding = _holding(tuple(dict.fromkeys(lines)), on)
    scheduled = [line for line in holding if not line.is_as_needed]
    if _is_sequence_without_times(scheduled):
        return Dose(daily_mg=None, note="several steps follow each other and nothing says when each begins")
    return _sum([_dose_of(line) for line in holding])


def add_up(doses: Iterable[Dose]) -> Dose:
    """Sum several orders of one day that are lines of one regimen (ruling 29)."""
    return _sum(list(doses))


def dose_starts(lines: Sequence[DoseLine]) -> tuple[DoseLine, ...]:
    """One line for each different day on which a step of the order begins, oldest first; empty without bounds."""
    by_day = {line.starts.latest: line for line in reversed(lines) if line.starts is not None}
    return tuple(by_day[day] for day in sorted(by_day))


def _holding(lines: tuple[DoseLine, ...], on: date) -> list[DoseLine]:
    covering = [line for line in lines if _covers(line, on)]
    if covering:
        return covering
    begun = [line for line in lines if line.starts is None or line.starts.earliest <= on]
    if not begun:
        first = min(line.starts.latest for line in lines if line.starts is not None)
        return [line for line in lines if line.starts is not None and line.starts.latest == first]
    last = max(_last_day(line) for line in begun)
    return [line for line in begun if _last_day(line) == last]


def _last_day(line: DoseLine) -> date:
    known = line.ends if line.ends is not None else line.starts
    return known.latest if known is not None else date.max


def _covers(line: DoseLine, on: date) -> bool:
    has_begun = line.starts is None or line.starts.earliest <= on
    return has_begun and (line.ends is None or line.ends.latest >= on)


def _is_sequence_without_times(lines: list[DoseLine]) -> bool:
    if len(lines) < 2:
        return False
    sequences = {line.sequence for line in lines if line.sequence is not None}
    times = [line.times for line in lines]
    have_own_times = all(times) and len(set(times)) == len(times)
    return len(sequences) > 1 and not have_own_times


def _dose_of(line: DoseLine) -> Dose:
    if line.is_as_needed:
        most = line.max_daily_mg if line.max_daily_mg is not None else line.daily_mg
        return Dose(daily_mg=None, max_daily_mg=most, other=line.other, note=line.note, as_needed=True)
    return Dose(daily_mg=line.daily_mg, max_daily_mg=line.max_daily_mg, other=line.other, note=line.note)


def _sum(doses: list[Dose]) -> Dose:
    """Scheduled amounts add up; one that is not known makes the sum unknown. As-needed amounts only raise the most."""
    scheduled = [dose for dose in doses if not dose.as_needed]
    note = "; ".join(dict.fromkeys(dose.note for dose in doses if dose.note))
    other = " + ".join(dict.fromkeys(dose.other for dose in doses if dose.other)) or None
    unknown = next((dose for dose in scheduled if dose.daily_mg is None), None)
    daily = None if unknown is not None or not scheduled else _total(dose.daily_mg for dose in scheduled)
    has_most = any(dose.max_daily_mg is not None for dose in doses)
    mosts = [dose.max_daily_mg if dose.max_daily_mg is not None else dose.daily_mg for dose in doses]
    most = _total(mosts) if has_most and None not in mosts else None
    return Dose(
        daily_mg=daily,
        max_daily_mg=most,
        other=other,
        note=unknown.note if unknown is not None else note,
        as_needed=bool(doses) and not scheduled,
    )


def _total(amounts: Iterable[float | None]) -> float:
    return round_half_up(sum(amount for amount in amounts if amount is not None), _DIGITS)
