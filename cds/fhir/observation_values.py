"""value[x] of an Observation or a component -> a number in a UCUM unit, or the issue that says why not.

Which observation it is, when it was taken and whether it counts belongs to `observations.py`; what a site's analyte
converts to belongs to `cds.clinical.units`. Everything that cannot be read raises ResourceError.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from math import isfinite
from types import MappingProxyType
from typing import Any, NoReturn, get_args

from cds.clinical import units
from cds.clinical.record import Comparator
from cds.errors import ResourceError
from cds.fhir.nyha import class_of_concept, class_of_text
from cds.fhir.ucum import scale_to_known
from cds.fhir.units import UCUM_SYSTEMS, understand_text, understand_unit

# Ruling 5: the only analytes whose unit may be missing, and the unit it then is. LVEF up to 1.0 is a fraction.
UNIT_IF_NONE: Mapping[str, str] = MappingProxyType(
    {"lvef": "%", "systolic-bp": "mm[Hg]", "diastolic-bp": "mm[Hg]", "mean-bp": "mm[Hg]", "heart-rate": "/min"}
)
_COMPARATORS: Mapping[str, Comparator] = MappingProxyType(
    {word: word for word in get_args(Comparator)} | {"≤": "<=", "≥": ">="}
)
_NUMBER = r"[0-9]{1,15}(?:[.,][0-9]{1,15})?"
_TEXT = re.compile(rf"\s*(?P<comparator><=|>=|<|>|≤|≥)?\s*(?P<number>{_NUMBER})\s*(?P<unit>[^0-9\s<>=,.-].*)?")
_TEXT_RANGE = re.compile(rf"\s*(?P<low>{_NUMBER})\s*%?\s*(?:-|–|to)\s*(?P<high>{_NUMBER})\s*(?P<unit>%|percent)?\s*")
_LONGEST_TEXT = 100
_NOT_READ = "is not read"
_AS_QUANTITY = "Send valueQuantity with a number and a UCUM code"


@dataclass(frozen=True, slots=True, kw_only=True)
class Amount:
    """A value as sent, in a UCUM unit its analyte is known in. A range has `low`, `high` and its midpoint as value."""

    value: float
    unit: str
    path: str
    comparator: Comparator | None = None
    low: float | None = None
    high: float | None = None
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class _Place:
    """Where we are, for issues: the resource, the analyte asked for, and the path of the value."""

    resource: str
    analyte: str
    path: str
    default_unit: str | None = None

    def refuse(self, below: str, problem: str, fix: str = _AS_QUANTITY) -> NoReturn:
        raise ResourceError(self.resource, f"{self.path}{below}", problem, fix)


def values_in(element: Mapping[str, Any]) -> tuple[str, ...]:
    """The names of the value[x] present in an Observation or a component, sorted."""
    return tuple(sorted(key for key, value in element.items() if key.startswith("value") and value is not None))


def read_amount(
    element: Mapping[str, Any], analyte: str, resource: str, prefix: str = "", *, default_unit: str | None = None
) -> Amount:
    """Read the one value[x] of `element` for `analyte`. `prefix` is the path of the element ("component[0].").

    `default_unit` is what a site says its system leaves out.

    Raises ResourceError, without the value, for no value or several, a type that is not read, a number or unit that is
    not understood.
    """
    names = values_in(element)
    if len(names) != 1:
        problem = "is missing" if not names else "is given in more than one form"
        raise ResourceError(resource, f"{prefix}value", problem, "Send exactly one value, best as valueQuantity")
    name = names[0]
    value = element[name]
    place = _Place(resource, analyte, f"{prefix}{name}", default_unit)
    if analyte == "nyha-class":
        return _nyha(name, value, place)
    match name:
        case "valueQuantity":
            return _quantity(value, place)
        case "valueInteger":
            return _with_unit(_number(value, place, ""), None, place)
        case "valueString":
            return _text(value, place)
        case "valueRange":
            return _range(value, place)
        case "valueCodeableConcept":
            place.refuse("", f"is an answer in words, not a number, for {analyte}")
        case _:
            place.refuse("", _NOT_READ)


def _quantity(quantity: object, place: _Place) -> Amount:
    if not isinstance(quantity, Mapping):
        place.refuse("", "is not a Quantity")
    comparator = quantity.get("comparator")
    if comparator is not None and (not isinstance(comparator, str) or comparator not in get_args(Comparator)):
        place.refuse(".comparator", "is no comparator of FHIR R4", "Use <, <=, >= or >")
    number = _number(quantity.get("value"), place, ".value")
    unit, factor, notes = _unit_of(quantity, place)
    return _with_unit(number * factor, unit, place, _COMPARATORS.get(comparator or ""), notes)


def _number(value: object, place: _Place, below: str) -> float:
    if value is None:
        place.refuse(below, "is missing", "Send the number, or dataAbsentReason")
    if isinstance(value, str):
        place.refuse(below, "is a number written as text", "Send a JSON number, without quotation marks")
    if isinstance(value, bool) or not isinstance(value, (int, float)):
        place.refuse(below, "is not a number", "Send a JSON number")
    try:
        number = float(value)
    except OverflowError:
        number = float("inf")
    if not isfinite(number):
        place.refuse(below, "is too large to be a measurement", "Send the value as measured")
    return number


def _unit_of(quantity: Mapping[str, Any], place: _Place) -> tuple[str | None, float, tuple[str, ...]]:
    """The unit as a UCUM code the analyte is known in (None: no unit at all), the factor to it, and notes."""
    reading = understand_unit(quantity)
    code = quantity.get("code")
    is_known = reading.code is not None and units.is_known(place.analyte, reading.code)
    if not is_known and isinstance(code, str) and quantity.get("system") in UCUM_SYSTEMS:
        scale = scale_to_known(code.strip(), place.analyte)
        if scale is not None:
            return *scale, (f"sent in {code.strip()}, converted to {scale[0]}",)
    if reading.problem is not None:
        place.refuse(f".{reading.path}", reading.problem, _fix(place.analyte))
    if reading.code is None:
        return None, 1.0, ()
    if reading.by_text is not None and not units.is_same_scale(place.analyte, reading.code, reading.by_text):
        place.refuse(".unit", "is a different unit from code", "Send unit and code that mean the same")
    return _known(reading.code, f".{reading.path}", place), 1.0, ()


def _known(unit: str, below: str, place: _Place) -> str:
    if not units.is_known(place.analyte, unit):
        place.refuse(below, f"unit '{unit}' is not one we convert for {place.analyte}", _fix(place.analyte))
    return unit


def _fix(analyte: str) -> str:
    return f"Send one of {', '.join(units.UNITS[analyte])} (UCUM), or name the local unit in the site profile"


def _with_unit(
    number: float,
    unit: str | None,
    place: _Place,
    comparator: Comparator | None = None,
    notes: tuple[str, ...] = (),
) -> Amount:
    if unit is None:
        unit, note = _unit_if_none(number, place)
        notes = (*notes, *note)
    if place.analyte == "lvef" and unit == "1":
        notes = (*notes, "sent as a fraction")
    if place.analyte == "egfr" and unit == "mL/min":
        notes = (*notes, "sent in mL/min; taken as mL/min/{1.73_m2}")
    if place.analyte == "haemoglobin" and unit == "mmol/L" and number < _LEAST_HAEMOGLOBIN_MMOL_L:
        place.refuse("", "may be the tetramer of haemoglobin, a quarter of the usual amount", "Send g/dL or g/L")
    return Amount(value=number, unit=unit, path=place.path, comparator=comparator, notes=notes)


# 25 g/dL, the highest believable haemoglobin, is 3.9 mmol/L of the tetramer: below, the two bases cannot be told apart.
_LEAST_HAEMOGLOBIN_MMOL_L = 3.9


def _unit_if_none(number: float, place: _Place) -> tuple[str, tuple[str, ...]]:
    canonical = units.CANONICAL_UNIT[place.analyte]
    if canonical == "1":
        return canonical, ()
    if place.default_unit is not None:
        return place.default_unit, (f"sent without unit; taken as {place.default_unit} as the site profile says",)
    unit = UNIT_IF_NONE.get(place.analyte)
    if unit is None:
        below = ".code" if place.path.endswith("valueQuantity") else ""
        place.refuse(below, f"no unit for {place.analyte}", _fix(place.analyte))
    if place.analyte == "lvef" and number <= 1:
        return "1", ("sent without unit",)
    return unit, (f"sent without unit; taken as {unit}",)


def _text(text: object, place: _Place) -> Amount:
    if not isinstance(text, str):
        place.refuse("", "is not a text")
    if len(text) > _LONGEST_TEXT:
        place.refuse("", "is a text without a plain number")
    if place.analyte == "lvef" and (match := _TEXT_RANGE.fullmatch(text)):
        low, low_notes = _text_number(match["low"], place)
        high, high_notes = _text_number(match["high"], place)
        unit = "%" if match["unit"] else None
        return _between(_with_unit(low, unit, place), _with_unit(high, unit, place), place, low_notes or high_notes)
    match = _TEXT.fullmatch(text)
    if match is None:
        place.refuse("", "is a text without a plain number")
    number, notes = _text_number(match["number"], place)
    unit = None
    if match["unit"] is not None:
        understood = understand_text(match["unit"])
        if understood is None:
            place.refuse("", "holds words or a unit that is not understood")
        unit = _known(understood, "", place)
    return _with_unit(number, unit, place, _COMPARATORS.get(match["comparator"] or ""), ("number sent as text", *notes))


def _text_number(text: str, place: _Place) -> tuple[float, tuple[str, ...]]:
    if "," not in text:
        return float(text), ()
    if len(text.partition(",")[2]) > 2:
        place.refuse("", "holds a comma that may part thousands or decimals")
    return float(text.replace(",", ".")), ("decimal comma",)


def _range(value: object, place: _Place) -> Amount:
    """A Range of LVEF; with one side only it is a bound."""
    if place.analyte != "lvef":
        place.refuse("", f"is a range, and {place.analyte} needs one value")
    if not isinstance(value, Mapping):
        place.refuse("", "is not a Range")
    sides: dict[str, Amount] = {}
    for side in ("low", "high"):
        if value.get(side) is not None:
            sides[side] = _quantity(value[side], _Place(place.resource, place.analyte, f"{place.path}.{side}"))
            if sides[side].comparator is not None:
                place.refuse(f".{side}.comparator", "is not allowed in a Range", "Send the bound alone")
    match sides:
        case {"low": low, "high": high}:
            return _between(low, high, place)
        case {"low": low}:
            return Amount(value=low.value, unit=low.unit, path=low.path, comparator=">=", notes=low.notes)
        case {"high": high}:
            return Amount(value=high.value, unit=high.unit, path=high.path, comparator="<=", notes=high.notes)
        case _:
            place.refuse("", "has neither low nor high")


def _between(low: Amount, high: Amount, place: _Place, notes: tuple[str, ...] = ()) -> Amount:
    if low.unit != high.unit or low.value > high.value:
        place.refuse("", "is a range whose two ends do not fit together", "Send low and high in one unit, low first")
    notes = tuple(dict.fromkeys((*low.notes, *notes, "range: value is the midpoint")))
    middle = (low.value + high.value) / 2
    return Amount(value=middle, unit=low.unit, path=place.path, low=low.value, high=high.value, notes=notes)


def _nyha(name: str, value: object, place: _Place) -> Amount:
    """NYHA I to IV as 1 to 4, from a coded answer, a number or a text."""
    fix = "Send LOINC answer LA28404-4 to LA28407-7 as valueCodeableConcept"
    grade: int | None = None
    match name:
        case "valueCodeableConcept" if isinstance(value, Mapping):
            grade = class_of_concept(value)
        case "valueString":
            grade = class_of_text(value)
        case "valueInteger" | "valueQuantity":
            quantity = value if isinstance(value, Mapping) else {"value": value}
            number = _number(quantity.get("value"), place, "")
            is_plain = quantity.get("comparator") is None and number in (1, 2, 3, 4)
            grade = int(number) if is_plain and understand_unit(quantity).code in (None, "1") else None
        case "valueCodeableConcept":
            place.refuse("", "is not a CodeableConcept", fix)
        case _:
            place.refuse("", _NOT_READ, fix)
    if grade is None:
        place.refuse("", "is not one NYHA class from I to IV", fix)
    return Amount(value=float(grade), unit="1", path=place.path)
