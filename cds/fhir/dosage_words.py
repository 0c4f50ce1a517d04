"""The words of a dosage: units, amounts, how often. Read from texts in `dosage_text.py`, from elements elsewhere."""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import Literal

Kind = Literal["mass", "count", "bare", "volume", "pair", "other"]

MG_PER_MASS_UNIT = {
    **dict.fromkeys(("mg", "mgs", "milligram", "milligrams"), 1.0),
    **dict.fromkeys(("g", "gm", "gram", "grams"), 1000.0),
    **dict.fromkeys(("ug", "mcg", "microgram", "micrograms"), 0.001),
}
COUNT_UNITS = frozenset(
    [
        "tab",
        "tabs",
        "tabl",
        "tbl",
        "tablet",
        "tablets",
        "cap",
        "caps",
        "capsule",
        "capsules",
        "caplet",
        "caplets",
        "pill",
        "pills",
        "softgel",
        "softgels",
    ]
)
VOLUME_UNITS = frozenset({"ml", "mls", "milliliter", "milliliters", "millilitre", "millilitres"})
OTHER_UNITS = {"meq": "meq", "meqs": "meq", "mmol": "mmol", "unit": "units", "units": "units", "iu": "units"}


@dataclass(frozen=True, slots=True, kw_only=True)
class Amount:
    """What is taken at one time: mg ("mass"), tablets ("count"), a number without unit ("bare"), mL, or another unit.

    `low` and `high` differ for a range. `each_mg` is the strength the text itself gives one tablet. `parts` are the mg of
    a "pair" ("24/26 mg"). `times` is N of "N x 25 mg", already multiplied in: it may also say how often.
    `unit` of a mass is "strength" for "25 mg tablet" and "total" for "(50 mg total)", both only in texts.
    """

    kind: Kind
    low: float
    high: float
    unit: str = ""
    each_mg: float | None = None
    parts: tuple[float, ...] = ()
    times: float | None = None

    def __str__(self) -> str:
        number = f"{self.low:g}" if self.low == self.high else f"{self.low:g} to {self.high:g}"
        unit = {"mass": " mg", "count": " of the product", "volume": " mL", "bare": " of the product"}.get(self.kind)
        if self.kind == "pair":
            return f"{'/'.join(f'{part:g}' for part in self.parts)} mg"
        return number + (unit if unit is not None else f" {self.unit}")


@dataclass(frozen=True, slots=True, kw_only=True)
class Rhythm:
    """How often a day. `per_day` None: not known, and `note` says why; `max_per_day` is then the most there may be.

    `times` are named times: FHIR event codes ("MORN"), clock times ("08:00"), days ("mon", "mon MORN"). `is_single` is
    True for doses that do not repeat.
    """

    per_day: float | None
    max_per_day: float | None = None
    times: tuple[str, ...] = ()
    note: str = ""
    is_single: bool = False
    is_from_text: bool = False

    @property
    def most(self) -> float | None:
        return self.per_day if self.per_day is not None else self.max_per_day


DAYS_PER_MONTH = 30.4375  # UCUM: mo = a/12, a = 365.25 d

# Latin and everyday words of prescriptions: common practice.
_WORDS_OF_RHYTHM: dict[str, tuple[float, tuple[str, ...]]] = {
    "daily": (1, ()),
    "every day": (1, ()),
    "each day": (1, ()),
    "a day": (1, ()),
    "per day": (1, ()),
    "once daily": (1, ()),
    "one time daily": (1, ()),
    "once a day": (1, ()),
    "once per day": (1, ()),
    "once every day": (1, ()),
    "qd": (1, ()),
    "od": (1, ()),
    "twice daily": (2, ()),
    "twice a day": (2, ()),
    "twice per day": (2, ()),
    "bid": (2, ()),
    "bd": (2, ()),
    "thrice daily": (3, ()),
    "tid": (3, ()),
    "tds": (3, ()),
    "qid": (4, ()),
    "qds": (4, ()),
    "every other day": (1 / 2, ()),
    "every second day": (1 / 2, ()),
    "on alternate days": (1 / 2, ()),
    "alternate days": (1 / 2, ()),
    "qod": (1 / 2, ()),
    "weekly": (1 / 7, ()),
    "once weekly": (1 / 7, ()),
    "once a week": (1 / 7, ()),
    "once per week": (1 / 7, ()),
    "every week": (1 / 7, ()),
    "twice weekly": (2 / 7, ()),
    "twice a week": (2 / 7, ()),
    "monthly": (1 / DAYS_PER_MONTH, ()),
    "once a month": (1 / DAYS_PER_MONTH, ()),
    "every month": (1 / DAYS_PER_MONTH, ()),
    **dict.fromkeys(("qam", "every morning", "each morning", "in the morning", "in am", "am", "mane"), (1, ("MORN",))),
    **dict.fromkeys(("with breakfast", "before breakfast", "after breakfast"), (1, ("MORN",))),
    **dict.fromkeys(("at noon", "midday", "at midday", "with lunch", "at lunch"), (1, ("NOON",))),
    **dict.fromkeys(
        ("qpm", "every evening", "each evening", "in the evening", "in pm", "pm", "evening"), (1, ("EVE",))
    ),
    **dict.fromkeys(("with dinner", "with supper", "in the afternoon"), (1, ("EVE",))),
    **dict.fromkeys(("at night", "every night", "each night", "nightly", "nocte", "night"), (1, ("NIGHT",))),
    **dict.fromkeys(("at bedtime", "every bedtime", "before bed", "qhs", "hs", "bedtime"), (1, ("HS",))),
}
RHYTHMS = {tuple(phrase.split()): meaning for phrase, meaning in _WORDS_OF_RHYTHM.items()}
PER = {  # what may follow "3 times" or "2 x"
    tuple(phrase.split()): days
    for days, phrases in (
        (1.0, ("daily", "a day", "per day", "each day", "every day", "/ day")),
        (7.0, ("weekly", "a week", "per week", "each week", "every week", "/ week")),
    )
    for phrase in phrases
}
PER_DAY_SIGNS = {("/", "day"): 1.0, ("/", "d"): 1.0}
HOURS = frozenset({"h", "hr", "hrs", "hour", "hours"})
DAYS = {"day": 1.0, "days": 1.0, "week": 7.0, "weeks": 7.0, "month": DAYS_PER_MONTH, "months": DAYS_PER_MONTH}
NUMBER_WORDS = {
    **dict(
        zip(
            ["one", "two", "three", "four", "five", "six", "seven", "eight", "nine", "ten"],
            map(float, range(1, 11)),
            strict=True,
        )
    ),
    "half": 0.5,
    "quarter": 0.25,
}
AS_NEEDED = {tuple(p.split()) for p in ("prn", "as needed", "if needed", "when needed", "as required", "when required")}
FILLERS = {
    tuple(phrase.split())
    for phrase in (
        "take",
        "taken",
        "give",
        "swallow",
        "whole",
        "to be taken",
        "by mouth",
        "po",
        "p o",
        "per os",
        "oral",
        "orally",
        "by oral route",
        "oral route",
        "the",
        "of",
        "and",
        "with food",
        "with meals",
        "with a meal",
        "with water",
        "with or without food",
        "for heart failure",
        "for the heart",
        "for blood pressure",
        "for high blood pressure",
        "for hypertension",
        "extended release",
        "er",
        "xl",
        ",",
        ";",
        ".",
        ":",
        "(",
        ")",
        "=",
    )
}
FRACTIONS = {(1, 2), (1, 3), (2, 3), (1, 4), (3, 4)}
VULGAR_SIGNS = {"½": " 1/2 ", "¼": " 1/4 ", "¾": " 3/4 ", "×": " x ", "–": "-", "−": "-", "µ": "u", "μ": "u"}
_LONGEST_TEXT = 500
_STRENGTH = re.compile(
    r"(?<![0-9.,/])([0-9]{1,5}(?:[.,][0-9]{1,4})?)(?:\s?[/-]\s?([0-9]{1,5}(?:\.[0-9]{1,4})?))?"
    r"\s?(mg|mcg|ug|g)\b(?:\s?/\s?([0-9]{0,4}(?:\.[0-9]{1,2})?)\s?(ml|h|hr|hour|24)\b)?"
)


def strengths_in(text: str) -> tuple[tuple[float, bool], ...]:
    """List the strengths a medicine's text gives, in mg, each with whether it is of one mL; () where one is unclear."""
    found: list[tuple[float, bool]] = []
    for match in _STRENGTH.finditer(text.lower()[:_LONGEST_TEXT]):
        first, second, unit, volume, per = match.groups()
        if per not in (None, "ml") or (first.find(",") >= 0 and len(first.partition(",")[2]) > 2):
            return ()
        try:
            millilitres = float(volume) if volume else 1.0
        except ValueError:
            return ()
        if millilitres <= 0:
            return ()
        numbers = [float(number.replace(",", ".")) for number in (first, second) if number is not None]
        found += [(number * MG_PER_MASS_UNIT[unit] / millilitres, per == "ml") for number in numbers]
    return tuple(found)
