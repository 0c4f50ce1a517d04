"""Timing (R4) -> how often a day, at what times, and from when until when. What is taken belongs to `dosage.py`."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

from cds.clinical.timeline import PartialDate, recency
from cds.fhir.codings import codings_of, texts_of
from cds.fhir.dates import DateNotUnderstood, parse_date, parse_period
from cds.fhir.dosage_text import read_rhythm_text
from cds.fhir.dosage_words import DAYS_PER_MONTH, Rhythm
from cds.fhir.intake import Context

# UCUM units of time (FHIR R4, value set units-of-time), in days.
DAYS_IN = {
    "s": 1 / 86400,
    "min": 1 / 1440,
    "h": 1 / 24,
    "d": 1.0,
    "wk": 7.0,
    "mo": DAYS_PER_MONTH,
    "a": 365.25,
}
_TIME_WORDS = {
    **dict.fromkeys(("hour", "hours"), "h"),
    **dict.fromkeys(("day", "days"), "d"),
    **dict.fromkeys(("week", "weeks"), "wk"),
    **dict.fromkeys(("month", "months"), "mo"),
    **dict.fromkeys(("year", "years"), "a"),
}
_DAYS_OF_WEEK = frozenset({"mon", "tue", "wed", "thu", "fri", "sat", "sun"})
# FHIR R4, value set event-timing. Those left out ("AC", "C", "PC") mean every meal, and nobody says how many meals.
_EVENTS = frozenset(
    {"WAKE", "PHS", "HS", "NIGHT", "NOON", "CM", "CD", "CV", "ACM", "ACD", "ACV", "PCM", "PCD", "PCV"}
    | {f"{part}{side}" for part in ("MORN", "AFT", "EVE") for side in ("", ".early", ".late")}
)
_MEALS = frozenset({"C", "AC", "PC"})
_GTS = frozenset(
    {
        "http://terminology.hl7.org/CodeSystem/v3-GTSAbbreviation",
        "http://hl7.org/fhir/v3/GTSAbbreviation",
        "urn:oid:2.16.840.1.113883.5.1022",
        "",
    }
)
# FHIR R4, value set timing-abbreviation; the intervals in hours are read for every divisor of a day.
_CODES: dict[str, tuple[float, tuple[str, ...]]] = {
    "QD": (1, ()),
    "BID": (2, ()),
    "TID": (3, ()),
    "QID": (4, ()),
    "QOD": (1 / 2, ()),
    "AM": (1, ("MORN",)),
    "PM": (1, ("EVE",)),
    "BED": (1, ("HS",)),
    "WK": (1 / 7, ()),
    "WEEK": (1 / 7, ()),
    "MO": (1 / DAYS_PER_MONTH, ()),
    "MONTH": (1 / DAYS_PER_MONTH, ()),
    **{f"Q{hours}H": (24 / hours, ()) for hours in (1, 2, 3, 4, 6, 8, 12, 24, 36, 48, 72)},
}
_CLOCK = re.compile(r"([01][0-9]|2[0-3]):[0-5][0-9](:[0-5][0-9](\.[0-9]{1,9})?)?")
_MOST_A_DAY = 96  # every quarter of an hour: more is a pump or a mistake
_LONGEST_DAYS = 36525.0  # a century
_LONGEST_LIST = 100


@dataclass(frozen=True, slots=True)
class Place:
    """Where in a resource we are; issues are raised from here."""

    context: Context
    source: str
    path: str

    def below(self, name: str) -> Place:
        return replace(self, path=f"{self.path}.{name}" if self.path else name)

    def refuse(self, problem: str, fix: str) -> None:
        self.context.intake.refuse(self.source, self.path, problem, fix)

    def doubt(self, problem: str, fix: str) -> None:
        self.context.intake.doubt(self.source, self.path, problem, fix)


@dataclass(frozen=True, slots=True, kw_only=True)
class TimingReading:
    """What a Timing says. `rhythm` is None where it says nothing about how often."""

    rhythm: Rhythm | None = None
    starts: PartialDate | None = None
    ends: PartialDate | None = None


def read_timing(timing: object, place: Place, *, ordered: PartialDate | None) -> TimingReading:
    """Read a Timing at `place`; empty where it is absent.

    Lengths and counts run from the start of boundsPeriod, else from `ordered` (ruling 38); without either the end is
    None. A value that cannot be is an issue and makes the rhythm unknown. Raises nothing.
    """
    if timing is None:
        return TimingReading()
    if not isinstance(timing, Mapping):
        place.refuse("is not a Timing: a JSON object is expected", "Send timing.repeat or timing.code")
        return TimingReading(rhythm=_unknown("the timing cannot be read"))
    repeat = timing.get("repeat")
    if repeat is not None and not isinstance(repeat, Mapping):
        place.below("repeat").refuse("is not an object", "Send frequency, period and periodUnit")
        return TimingReading(rhythm=_unknown("the timing cannot be read"))
    repeat = repeat or {}
    rhythm = _settled(_rhythm_of_repeat(repeat, place.below("repeat")), _rhythm_of_code(timing.get("code")))
    starts, ends = _bounds(repeat, place.below("repeat"), ordered, rhythm)
    events = _events(timing.get("event"), place.below("event"))
    if events:
        rhythm = _settled(rhythm, _single("given on the days listed")) if rhythm is None else rhythm
        starts = starts if starts is not None else events[0]
        ends = ends if ends is not None or not (rhythm and rhythm.is_single) else events[-1]
    return TimingReading(rhythm=rhythm, starts=starts, ends=ends)


def days_of(duration: object) -> float | None:
    """The length of a Duration in days, None where it is no length we understand. A bare number has no unit: None."""
    if not isinstance(duration, Mapping):
        return None
    value = positive(duration.get("value"))
    unit = _time_unit(duration.get("code")) or _time_unit(duration.get("unit"))
    if value is None or unit is None or duration.get("comparator") is not None:
        return None
    days = value * DAYS_IN[unit]
    return days if days <= _LONGEST_DAYS else None


def positive(value: object) -> float | None:
    """The number if it is a JSON number above 0 and finite, else None."""
    if isinstance(value, bool) or not isinstance(value, (int, float)):
        return None
    try:
        number = float(value)
    except OverflowError:
        return None
    return number if math.isfinite(number) and number > 0 else None


def _time_unit(text: object) -> str | None:
    if not isinstance(text, str) or len(text) > 20:
        return None
    plain = text.strip()
    return plain if plain in DAYS_IN else _TIME_WORDS.get(plain.lower())


def _unknown(note: str, most: float | None = None) -> Rhythm:
    return Rhythm(per_day=None, max_per_day=most, note=note)


def _single(note: str) -> Rhythm:
    return Rhythm(per_day=None, note=note, is_single=True)


def _settled(repeat: Rhythm | None, code: Rhythm | None) -> Rhythm | None:
    """What code and repeat say together; where they disagree neither counts (ruling 39)."""
    if repeat is None or code is None:
        return repeat if repeat is not None else code
    if repeat.per_day is None or code.per_day is None:
        return repeat
    if not math.isclose(repeat.per_day, code.per_day, rel_tol=1e-3):
        return _unknown("timing.code and timing.repeat disagree")
    return repeat if repeat.times else replace(repeat, times=code.times)


def _rhythm_of_code(concept: object) -> Rhythm | None:
    """A code of the GTS abbreviations, else the text or display if it says how often and nothing else."""
    if not isinstance(concept, Mapping):
        return None
    found: list[Rhythm] = []
    for coding in codings_of(concept):
        meaning = _CODES.get(coding.code.upper()) if coding.system in _GTS else None
        if meaning is not None:
            found.append(Rhythm(per_day=meaning[0], times=meaning[1]))
    if not found:
        read = [read_rhythm_text(text) for text in texts_of(concept)]
        found = [rhythm for rhythm in read if rhythm is not None]
    if not found:
        return _unknown("the timing code is not understood") if codings_of(concept) or texts_of(concept) else None
    if any(not math.isclose(rhythm.per_day or 0, found[0].per_day or 0) for rhythm in found):
        return _unknown("the codes of the timing disagree")
    return found[0]


def _rhythm_of_repeat(repeat: Mapping[str, Any], place: Place) -> Rhythm | None:
    period_names = ("frequency", "frequencyMax", "period", "periodMax", "periodUnit")
    stated = [name for name in period_names if repeat.get(name) is not None]
    days, day_times = _list(repeat.get("dayOfWeek")), _list(repeat.get("timeOfDay"))
    when = _list(repeat.get("when"))
    if not stated and not days and not day_times and not when:
        return _single("a single dose") if _count(repeat) == 1 else None
    numbers: dict[str, float] = {}
    for name in ("frequency", "frequencyMax", "period", "periodMax"):
        if name in stated:
            number = positive(repeat[name])
            if number is None:
                place.below(name).refuse("is not a number above 0", "Send how often, as JSON numbers")
                return _unknown(f"{name} of the timing cannot be read")
            numbers[name] = number
    bad = next((n for n, items, ok in _named_lists(days, day_times, when) if not all(ok(item) for item in items)), None)
    if bad is not None:
        place.below(bad).refuse("holds what FHIR R4 does not know", "Send codes and times as FHIR R4 lists them")
        return _unknown(f"{bad} of the timing cannot be read")
    if _count(repeat) == 1 and not stated:
        return _single("a single dose")
    base = _base_rhythm(repeat, numbers, place) if stated else None
    if base is not None and base.per_day is None:
        return base
    return _with_named_times(base, days, [item[:5] for item in day_times], when)


def _named_lists(days: list[Any], day_times: list[Any], when: list[Any]) -> Any:
    return (
        ("dayOfWeek", days, lambda item: isinstance(item, str) and item in _DAYS_OF_WEEK),
        ("timeOfDay", day_times, lambda item: isinstance(item, str) and _CLOCK.fullmatch(item) is not None),
        ("when", when, lambda item: isinstance(item, str) and item in _EVENTS | _MEALS),
    )


def _base_rhythm(repeat: Mapping[str, Any], numbers: Mapping[str, float], place: Place) -> Rhythm:
    """frequency in period: FHIR R4, Timing.repeat. A missing frequency is once, a missing period is not known."""
    unit = repeat.get("periodUnit")
    if "period" not in numbers or not isinstance(unit, str) or unit not in DAYS_IN:
        if unit is not None and (not isinstance(unit, str) or unit not in DAYS_IN):
            place.below("periodUnit").refuse("is no unit of time of UCUM", "Send s, min, h, d, wk, mo or a")
        return _unknown("the timing names no period")
    period = numbers["period"] * DAYS_IN[unit]
    longest = numbers.get("periodMax", numbers["period"]) * DAYS_IN[unit]
    least = numbers.get("frequency", 1.0)
    most = numbers.get("frequencyMax", least)
    if longest < period or most < least or most / period > _MOST_A_DAY or longest > _LONGEST_DAYS:
        place.refuse("is a timing that cannot be", "Check frequency and period and send them as ordered")
        return _unknown("the timing cannot be")
    if most > least or longest > period:
        return _unknown("how often is given as a range", most / period)
    return Rhythm(per_day=least / period)


def _with_named_times(base: Rhythm | None, days: list[str], clock: list[str], when: list[str]) -> Rhythm:
    """Days of the week and times of day: each named time is one dose, and must fit frequency and period if given."""
    share = len(set(days)) / 7 if days else 1.0
    names = list(dict.fromkeys([*clock, *(name for name in when if name in _EVENTS)]))
    times = tuple(names)
    if days:
        in_order = [day for day in ("mon", "tue", "wed", "thu", "fri", "sat", "sun") if day in days]
        times = tuple(f"{day} {name}" for day in in_order for name in names) if names else tuple(in_order)
    if base is None or base.per_day is None:
        if not names and when:
            return _unknown("taken with meals, but not how many")
        return Rhythm(per_day=max(1, len(names)) * share, times=times)
    per_day = base.per_day
    if days and per_day >= 1:
        per_day *= share
    named_per_day = max(1, len(names)) * share if names or days else per_day
    is_once_in_days = base.per_day < 1 and len(names) == 1 and not days  # "every other day, in the morning"
    if names and not is_once_in_days and not math.isclose(named_per_day, per_day, rel_tol=1e-3):
        return _unknown("the times of day do not fit frequency and period")
    if days and not names and base.per_day < 1 and not math.isclose(share, base.per_day, rel_tol=1e-3):
        return _unknown("the days of the week do not fit frequency and period")
    return replace(base, per_day=per_day, times=times)


def _bounds(
    repeat: Mapping[str, Any], place: Place, ordered: PartialDate | None, rhythm: Rhythm | None
) -> tuple[PartialDate | None, PartialDate | None]:
    starts = ends = None
    try:
        starts, ends = parse_period(repeat.get("boundsPeriod"), place.context.zone)
    except DateNotUnderstood as error:
        place.below("boundsPeriod").doubt(error.problem, "Send the bounds as dates; the dose is used without them")
    begin = starts if starts is not None else ordered
    shortest = longest = None
    if repeat.get("boundsDuration") is not None:
        shortest = longest = days_of(repeat["boundsDuration"])
        if longest is None:
            place.below("boundsDuration").doubt("is not a length of time", "Send a number and a UCUM unit of time")
    elif isinstance(bounds := repeat.get("boundsRange"), Mapping):
        shortest, longest = days_of(bounds.get("low")), days_of(bounds.get("high"))
        shortest = shortest if shortest is not None else longest
    count = _count(repeat)
    if longest is None and count is not None and rhythm is not None and rhythm.per_day:
        shortest = longest = min(count / rhythm.per_day, _LONGEST_DAYS)
    if ends is None and begin is not None and longest is not None and shortest is not None:
        # The last day is meant, as the end of a Period is: seven days from the first end on the seventh.
        first, last = begin.plus_days(max(0, math.ceil(shortest) - 1)), begin.plus_days(max(0, math.ceil(longest) - 1))
        ends = PartialDate(min(first.earliest, last.earliest), last.latest)
    return starts, ends


def _count(repeat: Mapping[str, Any]) -> float | None:
    return positive(repeat.get("count"))


def _events(events: object, place: Place) -> list[PartialDate]:
    found: list[PartialDate] = []
    for item in _list(events):
        try:
            found.append(parse_date(item, place.context.zone))
        except DateNotUnderstood as error:
            place.doubt(error.problem, "Send the times as FHIR R4 writes them; the others are used")
    return sorted(found, key=recency)


def _list(value: object) -> list[Any]:
    return value[:_LONGEST_LIST] if isinstance(value, list) else []
