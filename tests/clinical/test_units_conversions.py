"""Conversion, rounding and comparison of values, as a reader with a pocket calculator would check them."""

from __future__ import annotations

from decimal import Decimal

import pytest
from hypothesis import given
from hypothesis import strategies as st

from cds.clinical.units import (
    CANONICAL_UNIT,
    PLAUSIBLE,
    PRECISION,
    UNITS,
    as_reported,
    comparable,
    convert,
    is_known,
    is_same_scale,
    round_half_up,
)

# Our formula reference, section 7, column "check"; every line is arithmetic from the factor it names.
PUBLISHED = """
    analyte         | value | unit     | converted | unit    | factor
    potassium       | 4.5   | meq/L    | 4.5       | mmol/L  | monovalent
    potassium       | 19.55 | mg/dL    | 5.00      | mmol/L  | 39.098 g/mol
    magnesium       | 1.7   | mg/dL    | 0.70      | mmol/L  | 24.305 g/mol
    magnesium       | 1.6   | meq/L    | 0.80      | mmol/L  | divalent
    creatinine      | 1.5   | mg/dL    | 132.6     | umol/L  | 88.4
    creatinine      | 2.5   | mg/dL    | 221.0     | umol/L  | 88.4
    creatinine      | 3.0   | mg/dL    | 265.2     | umol/L  | 88.4
    creatinine      | 3.5   | mg/dL    | 309.4     | umol/L  | 88.4
    bun             | 28    | mg/dL    | 10.0      | mmol/L  | 28.014 g per mol of urea
    urea            | 60    | mg/dL    | 9.99      | mmol/L  | 60.06 g/mol
    glucose         | 126   | mg/dL    | 6.99      | mmol/L  | 180.16 g/mol
    digoxin         | 0.5   | ng/mL    | 0.64      | nmol/L  | 780.94 g/mol
    digoxin         | 0.9   | ng/mL    | 1.15      | nmol/L  | 780.94 g/mol
    digoxin         | 1.2   | ng/mL    | 1.54      | nmol/L  | 780.94 g/mol
    digoxin         | 2.0   | ng/mL    | 2.56      | nmol/L  | 780.94 g/mol
    nt-probnp       | 125   | pg/mL    | 14.8      | pmol/L  | 8457 g/mol
    nt-probnp       | 300   | pg/mL    | 35.5      | pmol/L  | 8457 g/mol
    nt-probnp       | 1800  | pg/mL    | 212.8     | pmol/L  | 8457 g/mol
    bnp             | 35    | pg/mL    | 10.1      | pmol/L  | 3464 g/mol
    bnp             | 100   | pg/mL    | 28.9      | pmol/L  | 3464 g/mol
    bnp             | 400   | pg/mL    | 115.5     | pmol/L  | 3464 g/mol
    ferritin        | 100   | ng/mL    | 100       | ug/L    | same scale
    iron            | 300   | ug/dL    | 53.7      | umol/L  | 55.845 g/mol
    haemoglobin     | 12.5  | g/dL     | 125       | g/L     | 10
    haemoglobin     | 10    | g/dL     | 6.21      | mmol/L  | 0.6206, monomer
    hba1c           | 6.5   | %        | 47.5      | mmol/mol | IFCC
    hba1c           | 7.0   | %        | 53.0      | mmol/mol | IFCC
    hba1c           | 8.0   | %        | 63.9      | mmol/mol | IFCC
    bilirubin-total | 2.0   | mg/dL    | 34.2      | umol/L  | 17.1
    urate           | 7     | mg/dL    | 416       | umol/L  | 59.48
    albumin         | 3.5   | g/dL     | 35        | g/L     | 10
    body-weight     | 5     | [lb_av]  | 2.27      | kg      | exact pound
    body-weight     | 3     | [lb_av]  | 1.36      | kg      | exact pound
    body-height     | 70    | [in_i]   | 177.8     | cm      | exact inch
    systolic-bp     | 16    | kPa      | 120.0     | mm[Hg]  | 7.50062
"""

# Ruling 1: rounded once, half up, to the precision of the analyte; what stands in its own unit stands as reported.
COMPARED = """
    analyte     | sent         | unit     | compared | why
    creatinine  | 1.25         | mg/dL    | 111      | 110.5, half up
    creatinine  | 2.0          | mg/dL    | 177      | 176.8
    creatinine  | 1.0          | mg/dL    | 88       | 88.4
    creatinine  | 110.5        | umol/L   | 110.5    | as reported
    potassium   | 5.14         | mmol/L   | 5.14     | as reported
    potassium   | 5.46         | meq/L    | 5.46     | same scale: as reported, ruling 36
    potassium   | 5.125        | mmol/L   | 5.13     | a longer tail is rounded once, half up
    potassium   | 19.6         | mg/dL    | 5.0      | 5.013: our monitoring reference, vignette 10
    lvef        | 39.952520898 | %        | 39.95    | the tail of ruling 1
    lvef        | 0.35         | 1        | 35.0     | fraction
    lvef        | 0.4049       | 1        | 40.5     | 40.49, to 0.1
    haemoglobin | 125          | g/L      | 12.5     | tenth
    haemoglobin | 7.5          | mmol/L   | 12.1     | 12.085
    digoxin     | 1.15         | nmol/L   | 0.9      | 0.898
    digoxin     | 1.40         | nmol/L   | 1.09     | our monitoring reference, vignette 11
    body-weight | 180          | [lb_av]  | 81.6     | 81.647
    body-height | 70           | [in_i]   | 177.8    | exact
    systolic-bp | 16           | kPa      | 120      | 120.01
    nt-probnp   | 212.8        | pmol/L   | 1800     | 1799.6
    glucose     | 5.55         | mmol/L   | 100.0    | no precision listed: three digits of 99.99
    free-t4     | 15           | pmol/L   | 1.17     | three digits of 1.1655
    tsh         | 4.125        | u[IU]/mL | 4.13     | same scale, two decimals
"""


def lines(table: str) -> list[list[str]]:
    return [[cell.strip() for cell in line.split("|")] for line in table.strip().splitlines()[1:]]


@pytest.mark.parametrize(("analyte", "value", "unit", "converted", "to_unit", "_basis"), lines(PUBLISHED))
def test_a_conversion_agrees_with_the_published_figure_in_its_printed_digits(
    analyte, value, unit, converted, to_unit, _basis
):
    digits = -int(Decimal(converted).as_tuple().exponent)
    assert round_half_up(convert(analyte, float(value), unit, to_unit), digits) == float(converted)


@pytest.mark.parametrize(("analyte", "sent", "unit", "compared", "_why"), lines(COMPARED))
def test_what_is_compared_is_rounded_once_and_half_up(analyte, sent, unit, compared, _why):
    assert comparable(analyte, float(sent), unit) == float(compared)


def test_creatinine_of_one_and_a_quarter_is_exactly_110_and_a_half():
    assert convert("creatinine", 1.25, "mg/dL", "umol/L") == 110.5
    assert convert("creatinine", 2.0, "mg/dL", "umol/L") == 176.8


def test_creatinine_limits_in_mg_dl_are_compared_at_two_decimals_and_reported_ones_at_three():
    assert comparable("creatinine", 221, "umol/L", "mg/dL") == 2.5
    assert comparable("creatinine", 110, "umol/L", "mg/dL") == 1.24
    assert as_reported("creatinine", 2.505, "mg/dL") == 2.505
    assert as_reported("creatinine", 2.50049, "mg/dL") == 2.5
    assert as_reported("creatinine", 221.456, "umol/L") == 221.46


def test_a_fraction_keeps_the_digits_that_its_percentage_would():
    assert as_reported("lvef", 0.3725, "1") == 0.3725
    assert as_reported("lvef", 37.251, "%") == 37.25


@pytest.mark.parametrize(
    ("value", "digits", "rounded"),
    [(2.5, 0, 3), (0.125, 2, 0.13), (1.005, 2, 1.01), (110.5, 0, 111), (-2.5, 0, -3), (0.15, 1, 0.2), (41.25, 1, 41.3)],
)
def test_half_is_rounded_up_by_the_digits_a_reader_sees(value, digits, rounded):
    assert round_half_up(value, digits) == rounded


def test_35_percent_stays_35_although_floating_point_lands_above_it():
    # our monitoring reference, B2: (1.62 - 1.20) / 1.20 is 35.00000000000001 %
    rise = (1.62 - 1.20) / 1.20 * 100
    assert rise > 35
    assert round_half_up(rise, 1) == 35.0


def test_mass_and_moles_are_never_the_same_scale():
    assert is_same_scale("potassium", "meq/L", "mmol/L")
    assert is_same_scale("nt-probnp", "ng/L", "pg/mL")
    assert not is_same_scale("magnesium", "meq/L", "mmol/L")
    assert not is_same_scale("creatinine", "mg/dL", "umol/L")
    assert not is_same_scale("potassium", "mmol/L", "kg")


def test_natriuretic_peptides_are_not_converted_into_one_another():
    assert convert("bnp", 100, "pmol/L", "pg/mL") != convert("nt-probnp", 100, "pmol/L", "pg/mL")
    with pytest.raises(KeyError):
        convert("bnp", 100, "nt-probnp", "pg/mL")


def test_a_unit_of_another_analyte_is_refused():
    assert not is_known("potassium", "umol/L")
    assert not is_known("no-such-analyte", "mmol/L")
    with pytest.raises(KeyError):
        comparable("potassium", 5.0, "umol/L")


def test_every_analyte_has_a_plausible_range_and_every_precision_an_analyte():
    assert set(PLAUSIBLE) == set(UNITS)
    assert set(PRECISION) <= set(UNITS)
    assert all(least < most for least, most in PLAUSIBLE.values())


ANALYTE_AND_UNIT = st.sampled_from([(analyte, unit) for analyte, row in UNITS.items() for unit in row])
READABLE = st.integers(0, 10**7).map(lambda number: number / 1000)


@given(pair=ANALYTE_AND_UNIT, value=READABLE)
def test_a_value_converted_there_and_back_is_the_same_value(pair, value):
    analyte, unit = pair
    canonical = CANONICAL_UNIT[analyte]
    there = convert(analyte, value, unit, canonical)
    assert convert(analyte, there, canonical, unit) == pytest.approx(value, rel=1e-12, abs=1e-9)


@given(pair=ANALYTE_AND_UNIT, value=st.floats(allow_nan=False))
def test_no_number_however_large_or_small_stops_the_arithmetic(pair, value):
    analyte, unit = pair
    assert isinstance(comparable(analyte, value, unit), float)
    assert isinstance(as_reported(analyte, value, unit), float)


@given(pair=ANALYTE_AND_UNIT, one=READABLE, other=READABLE)
def test_the_larger_of_two_values_is_never_compared_as_the_smaller(pair, one, other):
    analyte, unit = pair
    low, high = sorted((one, other))
    assert comparable(analyte, low, unit) <= comparable(analyte, high, unit)


@given(value=READABLE, digits=st.integers(0, 4))
def test_rounding_moves_a_value_by_at_most_half_a_step_and_only_once(value, digits):
    rounded = round_half_up(value, digits)
    assert abs(Decimal(repr(rounded)) - Decimal(repr(value))) <= Decimal(1).scaleb(-digits) / 2
    assert round_half_up(rounded, digits) == rounded
