"""Canonical unit, conversions, reporting precision and plausible range of each analyte. Units are UCUM codes.

Rounding happens here and nowhere else: a value reported in the canonical unit stands as reported (at most two decimals),
a converted one is rounded once, half up. Calculation is decimal, so 1.25 mg/dL is exactly 110.5 umol/L. How a sender
spells a unit belongs to `cds.fhir.units`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from decimal import ROUND_HALF_UP, Decimal
from math import isfinite
from types import MappingProxyType

REPORTED_DECIMALS = 2  # ruling 1: longer tails are rounded once
_SIGNIFICANT_DIGITS = 3  # ruling 36: after conversion, where no precision is listed


@dataclass(frozen=True, slots=True)
class Conversion:
    """`canonical = value * factor + offset`. `basis` is the molar mass, definition or publication of the factor."""

    factor: Decimal
    basis: str
    offset: Decimal = Decimal(0)


def _same(*names: str) -> dict[str, Conversion]:
    return {unit: Conversion(Decimal(1), "same scale") for unit in names}


def _times(factor: str | Decimal, basis: str) -> Conversion:
    return Conversion(Decimal(factor), basis)


def _over(divisor: str, basis: str, *, times: str = "1") -> Conversion:
    return Conversion(Decimal(times) / Decimal(divisor), basis)


_PERCENT = _same("%") | {"1": _times("100", "percent is a hundredth")}
_PRESSURE = _same("mm[Hg]") | {"kPa": _times("7.50062", "conventional mmHg, 133.322 Pa")}
_RATE = _same("/min")
_MILLISECONDS = _same("ms") | {"s": _times("1000", "definition")}
_ENZYME = _same("U/L", "[IU]/L") | {"ukat/L": _times("60", "1 U is 1 umol/min, 1 kat is 1 mol/s")}
_MONOVALENT = _same("mmol/L", "meq/L")
_TROPONIN = _same("ng/L", "pg/mL") | {"ng/mL": _times("1000", "definition"), "ug/L": _times("1000", "definition")}
_IRON = _same("ug/dL") | {"umol/L": _times("5.5845", "iron 55.845 g/mol, IUPAC standard atomic weight")}
_NUMBER = _same("1")  # scores, classes and INR have no unit by nature (ruling 41)

# The first unit of each row is the canonical one.
UNITS: Mapping[str, Mapping[str, Conversion]] = MappingProxyType(
    {
        "potassium": _MONOVALENT | {"mg/dL": _over("39.098", "potassium 39.098 g/mol", times="10")},
        "sodium": _MONOVALENT | {"mg/dL": _over("22.990", "sodium 22.990 g/mol", times="10")},
        "lithium": _MONOVALENT
        | {"ug/mL": _over("6.94", "lithium 6.94 g/mol"), "mg/L": _over("6.94", "lithium 6.94 g/mol")},
        "magnesium": _same("mmol/L")
        | {
            "mg/dL": _over("24.305", "magnesium 24.305 g/mol", times="10"),
            "meq/L": _times("0.5", "divalent"),
        },
        "creatinine": _same("umol/L")
        | {
            "mg/dL": _times("88.4", "creatinine 113.12 g/mol; the rounded factor laboratories and guidelines use"),
            "mmol/L": _times("1000", "definition"),
            "mg/L": _times("8.84", "a tenth of mg/dL"),
        },
        "egfr": _same("mL/min/{1.73_m2}", "mL/min")  # mL/min is taken with a note (ruling 41)
        | {"mL/s/{1.73_m2}": _times("60", "definition")},
        "creatinine-clearance": _same("mL/min") | {"mL/s": _times("60", "definition")},
        "cystatin-c": _same("mg/L", "ug/mL") | {"mg/dL": _times("10", "definition")},
        "nt-probnp": _same("pg/mL", "ng/L")
        | {
            "pmol/L": _times("8.457", "8457 g/mol"),
            "ng/mL": _times("1000", "definition"),
            "ug/L": _times("1000", "definition"),
        },
        "bnp": _same("pg/mL", "ng/L")
        | {"pmol/L": _times("3.464", "3464 g/mol"), "ng/mL": _times("1000", "definition")},
        "lvef": _PERCENT,
        "systolic-bp": _PRESSURE,
        "diastolic-bp": _PRESSURE,
        "mean-bp": _PRESSURE,
        "heart-rate": _RATE,
        "body-weight": _same("kg")
        | {
            "g": _over("1000", "definition"),
            "[lb_av]": _times("0.45359237", "exact, international pound 1959"),
            "[oz_av]": _times("0.028349523125", "exact, a sixteenth of the pound"),
        },
        "body-height": _same("cm")
        | {
            "m": _times("100", "definition"),
            "mm": _times("0.1", "definition"),
            "[in_i]": _times("2.54", "exact, international inch 1959"),
            "[in_us]": _over("39.37", "exact, US survey inch", times="100"),
            "[ft_i]": _times("30.48", "exact, twelve inches"),
        },
        "bmi": _same("kg/m2"),
        "body-surface-area": _same("m2"),
        "oxygen-saturation": _PERCENT,
        "qrs-duration": _MILLISECONDS,
        "qrs-duration-lead": _MILLISECONDS,
        "qtc": _MILLISECONDS,
        "qt": _MILLISECONDS,
        "pr": _MILLISECONDS,
        "rr": _MILLISECONDS,
        "cardiac-output": _same("L/min") | {"mL/min": _over("1000", "definition")},
        "cardiac-index": _same("L/min/m2"),
        "ferritin": _same("ng/mL", "ug/L") | {"pmol/L": _over("2.247", "1 ng/mL is 2.247 pmol/L, 445 kg/mol")},
        "iron": _IRON | {"ug/L": _times("0.1", "definition")},
        "tibc": _IRON,
        "tsat": _PERCENT,
        "transferrin": _same("umol/L"),
        "haemoglobin": _same("g/dL")
        | {"g/L": _times("0.1", "definition"), "mmol/L": _over("0.6206", "monomer, 16114 g/mol")},
        "haematocrit": _PERCENT | {"L/L": _times("100", "percent is a hundredth")},
        "tsh": _same("m[IU]/L", "u[IU]/mL"),
        "free-t4": _same("ng/dL") | {"pmol/L": _over("12.87", "thyroxine 776.87 g/mol")},
        "digoxin": _same("ng/mL", "ug/L") | {"nmol/L": _times("0.78094", "digoxin 780.94 g/mol")},
        "inr": _NUMBER,
        "hba1c": _same("%")
        | {"mmol/mol": Conversion(Decimal("0.09148"), "IFCC to NGSP master equation", Decimal("2.152"))},
        "ketones-bhb": _same("mmol/L"),
        "glucose": _same("mg/dL") | {"mmol/L": _times("18.016", "glucose 180.16 g/mol")},
        "bun": _same("mg/dL") | {"mmol/L": _times("2.8014", "urea nitrogen, 28.014 g per mol of urea")},
        "urea": _same("mmol/L") | {"mg/dL": _over("60.06", "urea 60.06 g/mol", times="10")},
        "alt": _ENZYME,
        "ast": _ENZYME,
        "bilirubin-total": _same("mg/dL") | {"umol/L": _over("17.1", "bilirubin 584.66 g/mol")},
        "albumin": _same("g/dL") | {"g/L": _times("0.1", "definition")},
        "urate": _same("mg/dL") | {"umol/L": _over("59.48", "uric acid 168.11 g/mol")},
        "urine-acr": _same("mg/g", "ug/mg") | {"mg/mmol": _times("8.84", "creatinine 113.12 g/mol")},
        "troponin-t-hs": _TROPONIN,
        "troponin-i-hs": _TROPONIN,
        "nyha-class": _NUMBER,
        "kccq": _NUMBER,
        "mlhfq": _NUMBER,
    }
)

CANONICAL_UNIT: Mapping[str, str] = MappingProxyType({analyte: next(iter(row)) for analyte, row in UNITS.items()})

# Decimals in the canonical unit (ruling 1).
PRECISION: Mapping[str, int] = MappingProxyType(
    {
        "potassium": 1,
        "sodium": 0,
        "magnesium": 2,
        "creatinine": 0,
        "egfr": 1,
        "lvef": 1,
        "body-weight": 1,
        "body-height": 1,
        "systolic-bp": 0,
        "diastolic-bp": 0,
        "heart-rate": 0,
        "nt-probnp": 0,
        "bnp": 0,
        "ferritin": 0,
        "tsat": 1,
        "haemoglobin": 1,
        "digoxin": 2,
        "tsh": 2,
        "qrs-duration": 0,
        "qrs-duration-lead": 0,
        "qtc": 0,
    }
)

# Creatinine limits are printed in both units, so mg/dL has a precision of its own: 0.01 converted, 0.001 as reported (ruling 1).
_OTHER_PRECISION: Mapping[tuple[str, str], int] = MappingProxyType({("creatinine", "mg/dL"): 2})
_OTHER_REPORTED_DECIMALS: Mapping[tuple[str, str], int] = MappingProxyType({("creatinine", "mg/dL"): 3})

# Decimals a reader expects even where they are zero (common practice).
_LEAST_DECIMALS: Mapping[tuple[str, str], int] = MappingProxyType(
    {
        ("potassium", "mmol/L"): 1,
        ("potassium", "meq/L"): 1,
        ("creatinine", "mg/dL"): 1,
        ("magnesium", "mmol/L"): 1,
        ("haemoglobin", "g/dL"): 1,
        ("digoxin", "ng/mL"): 1,
    }
)

# Lowest and highest believable value in the canonical unit; outside is an error of unit, sample or typing, never a fact.
# Source: our table of LOINC codes, column plausible_range (survivable extremes and measuring ranges), checked "read" there.
PLAUSIBLE: Mapping[str, tuple[float, float]] = MappingProxyType(
    {
        "potassium": (1.5, 10),
        "sodium": (95, 180),
        "lithium": (0.05, 10),
        "magnesium": (0.2, 5),
        "creatinine": (18, 1768),  # 0.2 to 20 mg/dL
        "egfr": (2, 200),
        "creatinine-clearance": (2, 250),
        "cystatin-c": (0.3, 8),
        "nt-probnp": (5, 100_000),
        "bnp": (1, 10_000),
        "lvef": (5, 85),
        "systolic-bp": (40, 300),
        "diastolic-bp": (20, 200),
        "mean-bp": (30, 200),
        "heart-rate": (20, 250),
        "body-weight": (25, 350),
        "body-height": (100, 250),
        "bmi": (10, 90),
        "body-surface-area": (1.0, 3.2),
        "oxygen-saturation": (30, 100),
        "qrs-duration": (40, 300),
        "qrs-duration-lead": (40, 300),
        "qtc": (250, 800),
        "qt": (200, 800),
        "pr": (80, 500),
        "rr": (240, 3000),
        "cardiac-output": (1, 20),
        "cardiac-index": (0.5, 8),
        "ferritin": (1, 100_000),
        "iron": (5, 500),
        "tibc": (50, 800),
        "tsat": (1, 100),
        "transferrin": (10, 60),
        "haemoglobin": (2, 25),
        "haematocrit": (10, 75),
        "tsh": (0.001, 500),
        "free-t4": (0.1, 10),
        "digoxin": (0.05, 20),
        "inr": (0.5, 20),
        "hba1c": (3, 20),
        "ketones-bhb": (0, 20),
        "glucose": (10, 2000),
        "bun": (1, 250),
        "urea": (0.4, 90),
        "alt": (1, 20_000),
        "ast": (1, 20_000),
        "bilirubin-total": (0.1, 60),
        "albumin": (0.5, 7),
        "urate": (0.5, 25),
        "urine-acr": (0, 20_000),
        "troponin-t-hs": (0, 100_000),
        "troponin-i-hs": (0, 500_000),
        "nyha-class": (1, 4),
        "kccq": (0, 100),
        "mlhfq": (0, 40),
    }
)


def round_half_up(value: float, digits: int) -> float:
    """Round as a reader would: 2.5 to 3, 0.125 at two digits to 0.13, judged by the decimal digits shown."""
    return float(_rounded(Decimal(repr(value)), digits)) if isfinite(value) else value


def is_known(analyte: str, unit: str) -> bool:
    """True if a value of `analyte` in `unit` can be converted."""
    return unit in UNITS.get(analyte, {})


def is_same_scale(analyte: str, one: str, other: str) -> bool:
    """True if both units are known for `analyte` and the number is the same in both (mEq/L and mmol/L of potassium)."""
    row = UNITS.get(analyte, {})
    if one not in row or other not in row:
        return False
    return (row[one].factor, row[one].offset) == (row[other].factor, row[other].offset)


def as_reported(analyte: str, value: float, unit: str) -> float:
    """A reported value as limits see it in its own unit: as sent, with longer tails rounded once.

    Two decimals on the scale of the canonical unit (so a fraction keeps four), creatinine in mg/dL three.
    """
    if not isfinite(value):
        return value
    digits = _OTHER_REPORTED_DECIMALS.get((analyte, unit))
    if digits is None:
        conversion = UNITS.get(analyte, {}).get(unit)
        coarser = 0 if conversion is None else max(0, conversion.factor.adjusted())
        digits = REPORTED_DECIMALS + coarser
    return round_half_up(value, digits)


def shown(analyte: str, value: float, unit: str) -> str:
    """The value as people write it: as reported, potassium and the like with at least their usual decimals."""
    text = format(Decimal(repr(as_reported(analyte, value, unit))), "f")
    whole, _, decimals = text.partition(".")
    decimals = decimals.rstrip("0").ljust(_LEAST_DECIMALS.get((analyte, unit), 0), "0")
    return f"{whole}.{decimals}" if decimals else whole


def convert(analyte: str, value: float, from_unit: str, to_unit: str) -> float:
    """`value` in `to_unit`, unrounded: what formulas take. Raises KeyError for a unit the analyte is not known in."""
    return float(_converted(analyte, value, from_unit, to_unit)) if isfinite(value) else value


def comparable(analyte: str, value: float, from_unit: str, to_unit: str | None = None) -> float:
    """`value` as it is compared and shown in `to_unit` (default: the canonical unit).

    On the same scale it stands as reported; converted, it is rounded once to the precision of the analyte there, or to
    three significant digits where none is listed. Raises KeyError for a unit the analyte is not known in.
    """
    target = CANONICAL_UNIT[analyte] if to_unit is None else to_unit
    if not isfinite(value):
        return value
    if is_same_scale(analyte, from_unit, target):
        return as_reported(analyte, value, from_unit)
    converted = _converted(analyte, value, from_unit, target)
    return float(_rounded(converted, _digits(analyte, target, converted)))


def _digits(analyte: str, unit: str, value: Decimal) -> int:
    listed = _OTHER_PRECISION.get((analyte, unit))
    if listed is None and is_same_scale(analyte, unit, CANONICAL_UNIT[analyte]):
        listed = PRECISION.get(analyte)
    return listed if listed is not None else _SIGNIFICANT_DIGITS - 1 - value.adjusted()


def _converted(analyte: str, value: float, from_unit: str, to_unit: str) -> Decimal:
    row = UNITS[analyte]
    source, target = row[from_unit], row[to_unit]
    exact = Decimal(repr(value))
    if from_unit == to_unit:
        return exact
    return (exact * source.factor + source.offset - target.offset) / target.factor


def _rounded(value: Decimal, digits: int) -> Decimal:
    exponent = value.as_tuple().exponent
    if isinstance(exponent, int) and exponent >= -digits:
        return value  # nothing to cut off; quantize would only fill up with zeros, and refuse huge numbers
    return value.quantize(Decimal(1).scaleb(-digits), rounding=ROUND_HALF_UP)
