"""Free text of a dosage -> amounts and how often a day, as the last resort. Structured elements belong to `dosage.py`.

A text is read whole or not at all: one word that is not understood ("directed", "then", "until") makes all of it unclear,
because what it adds cannot be known. Nothing here guesses.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterable
from dataclasses import dataclass, replace

from cds.fhir.dosage_words import (
    AS_NEEDED,
    COUNT_UNITS,
    DAYS,
    FILLERS,
    FRACTIONS,
    HOURS,
    MG_PER_MASS_UNIT,
    NUMBER_WORDS,
    OTHER_UNITS,
    PER,
    PER_DAY_SIGNS,
    RHYTHMS,
    VOLUME_UNITS,
    VULGAR_SIGNS,
    Amount,
    Kind,
    Rhythm,
)


@dataclass(frozen=True, slots=True, kw_only=True)
class TextPart:
    """One amount with its rhythm. Two amounts are the same dose said twice: "2 tablets (50 mg)"."""

    amounts: tuple[Amount, ...]
    rhythm: Rhythm | None


@dataclass(frozen=True, slots=True, kw_only=True)
class TextDose:
    """A text that was understood whole; several parts have different times of day and add up."""

    parts: tuple[TextPart, ...]
    is_as_needed: bool = False
    days: float | None = None


_LONGEST_TEXT = 300
_MOST_TABLETS_IN_A_SCHEME = 10
_LONGEST_PHRASE = 4
_DOTTED = re.compile(r"\b([a-z])\.(?=[a-z]\b)")
_TOKEN = re.compile(r"[0-9]+(?:[.,][0-9]+)?|[a-z]+|[^\s]")
_NUMBER = re.compile(r"[0-9]{1,6}(?:\.[0-9]{1,4}|,[0-9]{1,2})?")


def read_dosage_text(text: object, names: Iterable[str] = ()) -> TextDose | None:
    """Read a text such as "take 1/2 tablet by mouth twice a day"; None where any of it is unclear.

    `names` are words that may stand in it without meaning anything here: those of the medicine itself.
    """
    if not isinstance(text, str) or len(text) > _LONGEST_TEXT:
        return None
    reader = _Reader(_tokens(text), frozenset(names))
    return reader.dose() if reader.read() else None


def read_rhythm_text(text: object) -> Rhythm | None:
    """Read a text that says how often and nothing else ("twice daily"); None where it is unclear."""
    if not isinstance(text, str) or len(text) > _LONGEST_TEXT:
        return None
    reader = _Reader(_tokens(text), frozenset())
    if not reader.read() or reader.is_as_needed or len(reader.parts) != 1 or reader.parts[0].amounts:
        return None
    return _together(reader.parts[0].rhythms)


@dataclass(slots=True)
class _Part:
    amounts: list[Amount]
    rhythms: list[Rhythm]


class _Reader:
    """Eats the tokens from left to right; `read` is False as soon as one is not understood."""

    def __init__(self, tokens: list[str], names: frozenset[str]) -> None:
        self.tokens, self.names = tokens, names
        self.parts: list[_Part] = [_Part([], [])]
        self.is_as_needed = False
        self.days: float | None = None
        self.place = 0

    def read(self) -> bool:
        eaters = (
            self._eat_as_needed,
            self._eat_length,
            self._eat_scheme,
            self._eat_rhythm,
            self._eat_amount,
            self._eat_filler,
        )
        while self.place < len(self.tokens):
            if not any(eat() for eat in eaters):
                return False
        return True

    def dose(self) -> TextDose | None:
        parts: list[TextPart] = []
        for part in self.parts:
            rhythm = _together(part.rhythms)
            if part.rhythms and rhythm is None:
                return None
            amounts = tuple(part.amounts)
            if len(amounts) > 2 or (len(amounts) == 2 and not _may_be_one_dose(*amounts)):
                return None
            parts.append(TextPart(amounts=amounts, rhythm=rhythm))
        if len(parts) > 1:
            named = [time for part in parts for time in (part.rhythm.times if part.rhythm else ("",))]
            if (
                "" in named
                or len(set(named)) < len(named)
                or not all(p.amounts and p.rhythm and p.rhythm.times for p in parts)
            ):
                return None
        return TextDose(parts=tuple(parts), is_as_needed=self.is_as_needed, days=self.days)

    def _peek(self, count: int = 1, ahead: int = 0) -> tuple[str, ...]:
        return tuple(self.tokens[self.place + ahead : self.place + ahead + count])

    def _phrase(self, phrases: Iterable[tuple[str, ...]] | dict[tuple[str, ...], object]) -> tuple[str, ...] | None:
        """The longest phrase that stands here."""
        for length in range(_LONGEST_PHRASE, 0, -1):
            here = self._peek(length)
            if len(here) == length and here in phrases:
                return here
        return None

    def _eat_as_needed(self) -> bool:
        phrase = self._phrase(AS_NEEDED)
        if phrase is None:
            return False
        self.is_as_needed = True
        self.place += len(phrase)
        rest = self.tokens[self.place :]
        if rest[:1] == ["for"] and all(token.isalpha() or token == "." for token in rest):
            self.place = len(self.tokens)  # what for changes nothing about how much
        return True

    def _eat_length(self) -> bool:
        if self._peek() != ("for",):
            return False
        number, used = self._number(1)
        unit = self._peek(1, 1 + used)
        if number is None or not unit or unit[0] not in DAYS or self.days is not None:
            return False
        self.days = number * DAYS[unit[0]]
        self.place += used + 2
        return True

    def _eat_scheme(self) -> bool:
        """ "1-0-1" or "1-0-0-1": morning, noon, evening, (night). Common practice in continental Europe."""
        numbers: list[float] = []
        ahead = 0
        while True:
            number, used = self._number(ahead)
            if number is None:
                return False
            numbers.append(number)
            ahead += used
            if self._peek(1, ahead) != ("-",):
                break
            ahead += 1
        if len(numbers) not in (3, 4) or self.parts[-1].rhythms or len(self.parts) > 1:
            return False
        unit = self._peek(1, ahead)
        named = ("MORN", "NOON", "EVE", "NIGHT")
        times = tuple(time for time, number in zip(named, numbers, strict=False) if number > 0)
        total = sum(numbers)
        if total <= 0:
            return False
        amount = Amount(kind="count", low=total, high=total)
        if unit and unit[0] in MG_PER_MASS_UNIT:
            total *= MG_PER_MASS_UNIT[unit[0]]
            amount = Amount(kind="mass", low=total, high=total)
        elif max(numbers) > _MOST_TABLETS_IN_A_SCHEME:
            return False
        if unit and (unit[0] in COUNT_UNITS or unit[0] in MG_PER_MASS_UNIT):
            ahead += 1
        part = self.parts[-1]
        if len(part.amounts) == 1 and part.amounts[0].kind == "mass" and amount.kind == "count":
            amount = replace(amount, each_mg=part.amounts.pop().low)
        if part.amounts:
            return False
        part.amounts.append(amount)
        part.rhythms.append(Rhythm(per_day=1, times=times, note="a scheme of the day", is_from_text=True))
        self.place += ahead
        return True

    def _eat_rhythm(self) -> bool:
        phrase = self._phrase(RHYTHMS)
        if phrase is not None:
            per_day, times = RHYTHMS[phrase]
            return self._add_rhythm(per_day, times, len(phrase))
        if (sign := self._peek(2)) in PER_DAY_SIGNS:
            return self._add_rhythm(1.0, (), len(sign))
        if self._peek() in (("every",), ("q",)):
            number, used = self._number(1)
            unit = self._peek(1, 1 + used)
            if number and unit and unit[0] in HOURS:
                return self._add_rhythm(24 / number, (), used + 2)
            if number and unit and unit[0] in DAYS:
                return self._add_rhythm(1 / (number * DAYS[unit[0]]), (), used + 2)
            return False
        number, used = self._number(0)
        if number is None or self._peek(1, used) not in (("times",), ("x",), ("time",)):
            return False
        for length in (2, 1):
            per = self._peek(length, used + 1)
            if per in PER or per in PER_DAY_SIGNS:
                return self._add_rhythm(number / (PER | PER_DAY_SIGNS)[per], (), used + 1 + length)
        return False

    def _add_rhythm(self, per_day: float, times: tuple[str, ...], used: int) -> bool:
        if per_day <= 0:
            return False
        self.parts[-1].rhythms.append(Rhythm(per_day=per_day, times=times, is_from_text=True))
        self.place += used
        return True

    def _eat_amount(self) -> bool:
        start, amount = self.place, self._amount()
        if amount is None:
            self.place = start
            return False
        part = self.parts[-1]
        if part.amounts and part.rhythms:
            part = _Part([], [])
            self.parts.append(part)
        part.amounts.append(amount)
        return True

    def _amount(self) -> Amount | None:
        if (pair := self._pair()) is not None:
            return pair
        low, used = self._number(0)
        if low is None:
            return None
        self.place += used
        high = low
        if self._peek() in (("-",), ("to",), ("or",)):
            number, used = self._number(1)
            if number is None or number <= low:
                return None
            high = number
            self.place += used + 1
        times = None
        if self._peek() == ("x",) and low == high:
            times, (number, used) = low, self._number(1)
            if number is None:
                return None
            low = high = number
            self.place += used + 1
        unit = (*self._peek(), "")[0]
        following = (*self._peek(1, 1), "")[0]
        if times is None and low == high and following not in COUNT_UNITS and (each := self._each()) is not None:
            return Amount(kind="count", low=low, high=high, each_mg=each)
        if unit in ("a", "of") and following in COUNT_UNITS:  # "half a tablet"
            self.place += 1
            unit = following
        kind, factor = _kind_of(unit)
        if low <= 0 or (times is not None and kind != "mass"):
            return None
        self.place += 0 if kind == "bare" else 1
        if times is not None:
            if self._peek() and self._peek()[0] in COUNT_UNITS:
                self.place += 1
            return Amount(kind="mass", low=low * factor * times, high=low * factor * times, times=times)
        meaning, after = OTHER_UNITS.get(unit, ""), (*self._peek(), "")[0]
        if kind == "mass" and after == "/" and self._peek(2) not in PER_DAY_SIGNS:
            return None
        if kind == "mass" and (after in COUNT_UNITS or after == "total"):
            self.place += 1
            meaning = "total" if after == "total" else "strength"  # "25 mg tablet": of one, not yet how many
        return Amount(kind=kind, low=low * factor, high=high * factor, unit=meaning)

    def _each(self) -> float | None:
        """The mg of "25 mg tablet" standing here, after the number of them."""
        number, used = self._number(0)
        unit, tablet = (*self._peek(2, used), "", "")[:2]
        if number is None or unit not in MG_PER_MASS_UNIT or tablet not in COUNT_UNITS:
            return None
        self.place += used + 2
        return number * MG_PER_MASS_UNIT[unit]

    def _pair(self) -> Amount | None:
        """ "24/26 mg" or "24 mg/26 mg": the strengths of a fixed combination."""
        here = self._peek(5)
        if len(here) >= 4 and here[1] == "/" and here[3] == "mg":
            first, second, used = _plain(here[0]), _plain(here[2]), 4
        elif len(here) == 5 and here[1] == "mg" and here[2] == "/" and here[4] == "mg":
            first, second, used = _plain(here[0]), _plain(here[3]), 5
        else:
            return None
        if not first or not second or (first, second) in FRACTIONS:
            return None
        self.place += used
        if self._peek() and self._peek()[0] in COUNT_UNITS:
            self.place += 1
        return Amount(kind="pair", low=1, high=1, parts=(first, second))

    def _number(self, ahead: int) -> tuple[float | None, int]:
        """The number that stands `ahead`, and how many tokens it takes: "2", "2.5", "1/2", "1 1/2", "one and a half"."""
        token = (*self._peek(1, ahead), "")[0]
        number = NUMBER_WORDS.get(token, _plain(token))
        if number is None:
            return None, 0
        fraction, used = self._fraction(ahead)
        if fraction is not None:
            return fraction, used
        if self._peek(3, ahead + 1) == ("and", "a", "half"):
            return number + 0.5, 4
        if token == "one" and (*self._peek(1, ahead + 1), "")[0] in ("half", "quarter"):
            return NUMBER_WORDS[self._peek(1, ahead + 1)[0]], 2
        gap = 2 if self._peek(1, ahead + 1) == ("and",) else 1
        fraction, used = self._fraction(ahead + gap)
        if fraction is not None:
            return number + fraction, used + gap
        return number, 1

    def _fraction(self, ahead: int) -> tuple[float | None, int]:
        here = self._peek(3, ahead)
        if len(here) < 3 or here[1] != "/":
            return None, 0
        above, below = _plain(here[0]), _plain(here[2])
        if above is None or below is None or (above, below) not in FRACTIONS:
            return None, 0
        return above / below, 3

    def _eat_filler(self) -> bool:
        phrase = self._phrase(FILLERS)
        if phrase is None and self._peek()[0] in self.names:
            phrase = self._peek()
        if phrase is None:
            return False
        self.place += len(phrase)
        return True


def _tokens(text: str) -> list[str]:
    plain = text.lower()
    for sign, letters in VULGAR_SIGNS.items():
        plain = plain.replace(sign, letters)
    plain = _DOTTED.sub(r"\1", plain)
    return _TOKEN.findall(plain)


def _plain(token: str) -> float | None:
    return float(token.replace(",", ".")) if _NUMBER.fullmatch(token) else None


def _kind_of(unit: str) -> tuple[Kind, float]:
    if unit in MG_PER_MASS_UNIT:
        return "mass", MG_PER_MASS_UNIT[unit]
    if unit in COUNT_UNITS:
        return "count", 1.0
    if unit in VOLUME_UNITS:
        return "volume", 1.0
    return ("other", 1.0) if unit in OTHER_UNITS else ("bare", 1.0)


def _may_be_one_dose(first: Amount, second: Amount) -> bool:
    """True for a number of tablets and a number of mg side by side; what they mean together the strength tells."""
    kinds = {first.kind, second.kind}
    return kinds in ({"count", "mass"}, {"count", "pair"}, {"bare", "mass"}, {"volume", "mass"}) and (
        first.low == first.high and second.low == second.high
    )


def _together(rhythms: list[Rhythm]) -> Rhythm | None:
    """One rhythm of all that a part says: named times add up, and must fit what is said in general."""
    if not rhythms:
        return None
    general = {rhythm.per_day for rhythm in rhythms if not rhythm.times}
    named = [rhythm for rhythm in rhythms if rhythm.times]
    if len(general) > 1:
        return None
    times = tuple(time for rhythm in named for time in rhythm.times)
    if len(set(times)) < len(times):
        return None
    per_day = sum(rhythm.per_day or 0 for rhythm in named)
    if general:
        said = general.pop() or 0
        if named and not math.isclose(per_day, said) and not (said < 1 and len(named) == 1):
            return None
        per_day = said
    return Rhythm(per_day=per_day, times=times, is_from_text=True, note=named[0].note if named else "")
