"""A Quantity of medicine -> an amount, and what an amount weighs in mg for each ingredient of the product.

How often belongs to `timing.py`. An amount that could mean two things has no weight (ruling 39).
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import NamedTuple

from cds.fhir.code_matches import DrugComponent
from cds.fhir.codings import words_of
from cds.fhir.dosage_words import COUNT_UNITS, MG_PER_MASS_UNIT, OTHER_UNITS, VOLUME_UNITS, Amount, Kind
from cds.fhir.timing import Place, positive

ARNI = "arni"
# Codes of HL7 v3 orderableDrugForm and SNOMED CT units of presentation (428673006 tablet, 732936001 tablet,
# 428641000 capsule, 732937005 capsule) that count pieces. Source: memory of both code systems.
_PIECE_CODES = frozenset(
    {
        "tab",
        "ortab",
        "ectab",
        "ertab",
        "ertab24",
        "chewtab",
        "disintab",
        "drtab",
        "cap",
        "orcap",
        "ercap",
        "ercap24",
        "entcap",
    }
    | {"caplet", "pill", "428673006", "732936001", "428641000", "732937005"}
)
_STRENGTHS_OF_ONE_PIECE = frozenset({None, "", "MG", "MCG", "UG", "G"})
# The two parts of the sacubitril/valsartan tablets 24/26, 49/51 and 97/103 mg (label): mg of one part are not the sum.
_ARNI_PARTS = frozenset({24.0, 26.0, 49.0, 51.0, 97.0, 103.0})
_MOST_PIECES = 60
_MOST_BARE = 10  # more without a unit may as well be mg
_MOST_MG = 100_000
_LONGEST_UNIT = 40
_DIGITS = 4  # ruling 36


@dataclass(frozen=True, slots=True)
class Mg:
    """The mg of one intake for one component; None where not known, and why. `may_help` lets a text say what is missing."""

    low: float | None = None
    high: float | None = None
    problem: str = ""
    may_help: bool = False
    other: tuple[float, str] | None = None


class _Unit(NamedTuple):
    kind: Kind
    factor: float
    name: str


def read_quantity(quantity: object, place: Place, *, most: float = _MOST_PIECES) -> Amount | None:
    """Read an amount of medicine; None, with an issue, where it is none. `most` is the most pieces believed."""
    if not isinstance(quantity, Mapping):
        place.refuse("is not a Quantity", "Send a JSON object with value and unit")
        return None
    value = positive(quantity.get("value"))
    if value is None:
        place.below("value").refuse("is not a number above 0", "Send the amount of one intake as a JSON number")
        return None
    if quantity.get("comparator") is not None:
        place.below("comparator").refuse("makes the amount a bound", "Send the amount itself")
        return None
    said = [_unit(text) for key in ("code", "unit") if (text := quantity.get(key)) is not None and text != ""]
    kinds = {unit for unit in said if unit is not None} if said else {_Unit("bare", 1.0, "")}
    if len(kinds) != 1:  # a local code beside a plain unit, or the other way round, is one kind
        problem = "is a unit different from code" if kinds else "is a unit that is not understood"
        place.below("unit").refuse(problem, "Send mg, or the number of tablets, with one UCUM code")
        return None
    unit = kinds.pop()
    number = value * unit.factor
    if number > (most if unit.kind == "count" else _MOST_MG):
        place.below("value").refuse("is more than anyone takes at once", "Check the amount and its unit")
        return None
    return Amount(kind=unit.kind, low=number, high=number, unit=unit.name)


def _unit(text: object) -> _Unit | None:
    """What a unit's code or text means; None where it is not understood."""
    if not isinstance(text, str) or len(text) > _LONGEST_UNIT:
        return None
    plain = text.strip().lower().replace("µ", "u").replace("μ", "u").replace("(s)", "")
    if plain in MG_PER_MASS_UNIT:
        return _Unit("mass", MG_PER_MASS_UNIT[plain], "")
    bare = plain.strip("{}[] ")
    words = words_of(bare)
    if bare in COUNT_UNITS or bare in _PIECE_CODES or (words and words[-1] in COUNT_UNITS and not words[0].isdigit()):
        return _Unit("count", 1.0, "")
    if plain in VOLUME_UNITS:
        return _Unit("volume", 1.0, "")
    if plain == "l":
        return _Unit("volume", 1000.0, "")
    if plain in ("1", "{each}", "each"):
        return _Unit("bare", 1.0, "")
    return _Unit("other", 1.0, OTHER_UNITS[bare]) if bare in OTHER_UNITS else None


def read_range(value: object, place: Place) -> Amount | None:
    """Read a Range of amounts; without a lower end any less is meant too. None, with an issue, where it is none."""
    if not isinstance(value, Mapping):
        place.refuse("is not a Range", "Send low and high")
        return None
    high = read_quantity(value.get("high"), place.below("high"))
    low = high if value.get("low") is None else read_quantity(value["low"], place.below("low"))
    if high is None or low is None:
        return None
    if low.kind != high.kind or low.unit != high.unit or low.low > high.high:
        place.refuse("has ends that do not fit together", "Send low and high in one unit, low first")
        return None
    return Amount(kind=high.kind, low=0.0 if value.get("low") is None else low.low, high=high.high, unit=high.unit)


def mg_of(amount: Amount, component: DrugComponent, components: Sequence[DrugComponent]) -> Mg:
    """What an amount weighs for one of the components of a product; None with the problem where that is not known."""
    match amount.kind:
        case "mass":
            return _of_mass(amount, component, components)
        case "pair":
            return _of_pair(amount, component, components)
        case "count" | "bare":
            return _of_pieces(amount, component, components)
        case "volume":
            if component.strength_mg is not None and _is_per_ml(component):
                return Mg(amount.low * component.strength_mg, amount.high * component.strength_mg)
            return Mg(problem="the strength of one mL is not known", may_help=True)
        case "other":
            return Mg(problem="the amount is not in mg", other=(amount.high, amount.unit))


def _of_mass(amount: Amount, component: DrugComponent, components: Sequence[DrugComponent]) -> Mg:
    if len(components) > 1:
        pieces = _pieces_of_combination(amount, components)
        if pieces is None or component.strength_mg is None:
            return Mg(problem="mg of a combination that do not tell how many tablets")
        return Mg(component.strength_mg * pieces, component.strength_mg * pieces)
    if component.drug_class == ARNI and not _is_arni_sum(amount, component):
        return Mg(problem="mg of a combination that do not tell how many tablets")
    return Mg(amount.low, amount.high)


def _is_arni_sum(amount: Amount, component: DrugComponent) -> bool:
    """True if the mg may be the sum of both parts: not those of one part, and half tablets at the least."""
    if amount.low in _ARNI_PARTS or amount.high in _ARNI_PARTS:
        return False
    strength = component.strength_mg
    return strength is None or all(_is_whole(2 * mg / strength) for mg in (amount.low, amount.high))


def _pieces_of_combination(amount: Amount, components: Sequence[DrugComponent]) -> float | None:
    """One tablet if the mg equal the strength of a part or of all together, and nothing else (ruling 39)."""
    strengths = [component.strength_mg for component in components]
    if amount.low != amount.high or any(
        strength is None or _is_per_ml(c) for strength, c in zip(strengths, components, strict=True)
    ):
        return None
    known = [strength for strength in strengths if strength is not None]
    return 1.0 if any(math.isclose(amount.low, reading) for reading in (*known, sum(known))) else None


def _of_pair(amount: Amount, component: DrugComponent, components: Sequence[DrugComponent]) -> Mg:
    total = sum(amount.parts)
    if component.drug_class == ARNI and len(components) == 1:
        strength = component.strength_mg
        is_fitting = strength is None or _is_whole(2 * total / strength)
        return Mg(total, total) if is_fitting else Mg(problem="the two strengths are not those of the product")
    strengths = sorted(c.strength_mg for c in components if c.strength_mg is not None)
    if len(strengths) == len(components) == 2 and all(map(math.isclose, strengths, sorted(amount.parts))):
        return Mg(component.strength_mg, component.strength_mg)
    return Mg(problem="the two strengths are not those of the product")


def _of_pieces(amount: Amount, component: DrugComponent, components: Sequence[DrugComponent]) -> Mg:
    strength = component.strength_mg
    if amount.each_mg is not None:
        if len(components) > 1:
            return Mg(problem="one strength is given for a combination")
        if strength is not None and not math.isclose(strength, amount.each_mg):
            return Mg(problem="the text names another strength than the product has")
        strength = amount.each_mg
    elif component.strength_unit and component.strength_unit.upper() == "MEQ" and component.strength is not None:
        return Mg(problem="the amount is not in mg", other=(amount.high * component.strength, "meq"))
    elif strength is None or (component.strength_unit or "").upper() not in _STRENGTHS_OF_ONE_PIECE:
        return Mg(problem="the strength of the product is not known", may_help=True)
    if amount.kind == "bare" and (
        amount.high > _MOST_BARE or (amount.high > 1 and math.isclose(amount.high, strength))
    ):
        return Mg(problem="a number without unit that may be tablets or mg")
    return Mg(amount.low * strength, amount.high * strength)


def _is_per_ml(component: DrugComponent) -> bool:
    return (component.strength_unit or "").upper().endswith("/ML")


def _is_whole(number: float) -> bool:
    return math.isclose(number, round(number), rel_tol=1e-3) and round(number) > 0


def plain_number(number: float) -> str:
    """Write a number as notes show it, at the precision of doses (ruling 36)."""
    return f"{round(number, _DIGITS):g}"


def _joined(*parts: str) -> str:
    return "; ".join(part for part in parts if part)
