"""Every conversion factor against UCUM itself, as pint and ucumvert know it. Molar factors through the molar mass."""

from __future__ import annotations

from collections.abc import Iterator
from decimal import Decimal

import pytest
from ucumvert import PintUcumRegistry

from cds.clinical.units import CANONICAL_UNIT, UNITS

# The figure as printed in its source (one side of the conversion or the other), with the molar mass it rests on.
# The tolerance is half a step of the last printed digit. Masses: IUPAC standard atomic weights; those of the natriuretic
# peptides and of ferritin are common practice.
MOLAR = """
    analyte         | mass unit | molar unit | g/mol   | printed
    potassium       | mg/dL     | mmol/L     | 39.098  | 0.25577
    sodium          | mg/dL     | mmol/L     | 22.990  | 0.43497
    lithium         | mg/L      | mmol/L     | 6.94    | 0.1441
    lithium         | ug/mL     | mmol/L     | 6.94    | 0.1441
    magnesium       | mg/dL     | mmol/L     | 24.305  | 0.4114
    creatinine      | mg/dL     | umol/L     | 113.12  | 88.4
    creatinine      | mg/L      | umol/L     | 113.12  | 8.84
    nt-probnp       | pg/mL     | pmol/L     | 8457    | 0.11825
    bnp             | pg/mL     | pmol/L     | 3464    | 0.28868
    ferritin        | ng/mL     | pmol/L     | 445000  | 2.247
    iron            | ug/dL     | umol/L     | 55.845  | 0.179
    tibc            | ug/dL     | umol/L     | 55.845  | 0.179
    haemoglobin     | g/dL      | mmol/L     | 16114   | 0.6206
    free-t4         | ng/dL     | pmol/L     | 776.87  | 12.87
    digoxin         | ng/mL     | nmol/L     | 780.94  | 1.2805
    glucose         | mg/dL     | mmol/L     | 180.16  | 0.0555
    bun             | mg/dL     | mmol/L     | 28.014  | 0.357
    urea            | mg/dL     | mmol/L     | 60.06   | 0.1665
    bilirubin-total | mg/dL     | umol/L     | 584.66  | 17.1
    urate           | mg/dL     | umol/L     | 168.11  | 59.48
"""

# What UCUM cannot check, because the factor is chemistry, a definition outside UCUM or a convention.
NOT_FOR_UCUM = {
    ("magnesium", "meq/L"): "two equivalents in a mole of a divalent ion; UCUM calls an equivalent a mole",
    ("urine-acr", "mg/mmol"): "per millimole of creatinine, 113.12 g/mol",
    ("hba1c", "mmol/mol"): "a published regression, not a scale",
    ("alt", "[IU]/L"): "laboratories mean the enzyme unit U, UCUM an arbitrary unit",
    ("ast", "[IU]/L"): "as alt",
}


@pytest.fixture(scope="module")
def ucum() -> PintUcumRegistry:
    return PintUcumRegistry()


def molar_rows() -> Iterator[tuple[str, str, str, float, str]]:
    for line in MOLAR.strip().splitlines()[1:]:
        analyte, mass, molar, weight, printed = (cell.strip() for cell in line.split("|"))
        yield analyte, mass, molar, float(weight), printed


MOLAR_ROWS = list(molar_rows())
IS_MOLAR = {(analyte, unit) for analyte, mass, molar, _, _ in MOLAR_ROWS for unit in (mass, molar)} - set(
    CANONICAL_UNIT.items()
)
PHYSICAL_ROWS = [
    (analyte, unit)
    for analyte, row in UNITS.items()
    for unit in row
    if (analyte, unit) not in IS_MOLAR and (analyte, unit) not in NOT_FOR_UCUM
]


def factor(analyte: str, from_unit: str, to_unit: str) -> float:
    row = UNITS[analyte]
    return float(row[from_unit].factor / row[to_unit].factor)


@pytest.mark.parametrize("unit", sorted({unit for row in UNITS.values() for unit in row}))
def test_every_unit_is_written_as_ucum_writes_it(ucum, unit):
    ucum.from_ucum(unit)  # raises for anything that is no UCUM code


@pytest.mark.parametrize(("analyte", "unit"), PHYSICAL_ROWS)
def test_a_factor_between_two_physical_units_is_the_one_of_ucum(ucum, analyte, unit):
    ratio = (ucum.from_ucum(unit) / ucum.from_ucum(CANONICAL_UNIT[analyte])).to_base_units()
    assert ratio.dimensionless
    # 7.50062 is printed with six digits; every other physical factor is exact
    digits_printed = 1e-6 if unit == "kPa" else 1e-12
    assert factor(analyte, unit, CANONICAL_UNIT[analyte]) == pytest.approx(ratio.magnitude, rel=digits_printed)
    assert UNITS[analyte][unit].offset == 0


@pytest.mark.parametrize(("analyte", "mass", "molar", "weight", "printed"), MOLAR_ROWS)
def test_a_factor_between_mass_and_moles_rests_on_the_molar_mass(ucum, analyte, mass, molar, weight, printed):
    of_one_mass_unit = ucum.from_ucum(mass) / (weight * ucum.from_ucum("g/mol"))
    by_ucum = (of_one_mass_unit / ucum.from_ucum(molar)).to_base_units().magnitude
    half_a_step = float(Decimal(1).scaleb(Decimal(printed).as_tuple().exponent)) / 2
    assert by_ucum == pytest.approx(float(printed), abs=half_a_step)
    assert factor(analyte, mass, molar) == pytest.approx(float(printed), abs=half_a_step)


def test_every_conversion_is_checked_or_says_why_it_cannot_be():
    converted = {(analyte, unit) for analyte, row in UNITS.items() for unit in row}
    checked = {*PHYSICAL_ROWS, *IS_MOLAR}
    assert converted - checked == set(NOT_FOR_UCUM)
    assert converted >= checked


def test_a_milligram_of_albumin_per_millimole_of_creatinine_is_8_84_per_gram(ucum):
    one = ucum.from_ucum("mg/mmol") / (113.12 * ucum.from_ucum("g/mol"))
    per_gram = (one / ucum.from_ucum("mg/g")).to_base_units().magnitude
    assert factor("urine-acr", "mg/mmol", "mg/g") == pytest.approx(per_gram, abs=0.005)


def test_an_equivalent_of_potassium_is_a_mole_and_of_magnesium_half_a_mole(ucum):
    assert (ucum.from_ucum("meq/L") / ucum.from_ucum("mmol/L")).to_base_units().magnitude == pytest.approx(1)
    assert factor("potassium", "meq/L", "mmol/L") == 1
    assert factor("magnesium", "meq/L", "mmol/L") == 0.5


def test_the_area_of_an_egfr_is_an_annotation_so_only_the_analyte_tells_it_from_a_clearance(ucum):
    assert ucum.from_ucum("mL/min/{1.73_m2}") == ucum.from_ucum("mL/min")
    assert "mL/min/{1.73_m2}" not in UNITS["creatinine-clearance"]
