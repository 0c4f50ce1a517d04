"""Estimated GFR by CKD-EPI 2021, and which of several values of one day counts."""

from __future__ import annotations

from datetime import date

import pytest
from hypothesis import given
from hypothesis import strategies as st

from cds.clinical import units
from cds.clinical.record import Comparator, Measurement, PatientRecord, Sex
from cds.clinical.renal import EGFR_UNIT, age_in_years, computed_egfr, egfr_ckd_epi_2021, egfr_readings, readings_of
from cds.clinical.timeline import PartialDate
from cds.clinical.units import round_half_up

# CKD-EPI 2021 creatinine: Inker LA et al. N Engl J Med 2021;385:1737. "pub": published by the documentation of the R
# package `tabletools`; "calc": computed from the printed coefficients with a calculator (our formula reference, F-01).
CHECK_VALUES = """
    sex    | age | creatinine  | eGFR   | origin
    male   | 70  | 0.8 mg/dL   | 95.2   | pub
    female | 50  | 1.0 mg/dL   | 68.6   | pub
    male   | 50  | 0.6 mg/dL   | 118    | pub
    male   | 50  | 1.5 mg/dL   | 56     | pub
    male   | 50  | 2.0 mg/dL   | 40     | pub
    male   | 70  | 0.8 mg/dL   | 95.206 | calc
    female | 50  | 1.0 mg/dL   | 68.633 | calc
    male   | 50  | 0.6 mg/dL   | 117.603 | calc
    male   | 50  | 1.5 mg/dL   | 56.366 | calc
    male   | 50  | 2.0 mg/dL   | 39.911 | calc
    female | 55  | 0.9 mg/dL   | 75.499 | calc
    female | 60  | 0.7 mg/dL   | 98.948 | calc, the hinge of the equation
    female | 80  | 2.5 mg/dL   | 18.966 | calc
    male   | 72  | 130 umol/L  | 50.340 | calc
"""


def rows() -> list[list[str]]:
    return [[cell.strip() for cell in line.split("|")] for line in CHECK_VALUES.strip().splitlines()[1:]]


def person(*measurements: Measurement, sex: Sex = "female", born: PartialDate | str | None = "1953-04-01"):
    when = PartialDate.of_day(date.fromisoformat(born)) if isinstance(born, str) else born
    return PatientRecord(patient="Patient/p1", sex=sex, born=when, measurements=measurements)


def creatinine(
    value: float,
    unit: str = "mg/dL",
    on: str | PartialDate = "2025-06-01",
    comparator: Comparator | None = None,
    *,
    haemolysed: bool = False,
) -> Measurement:
    return _measured("creatinine", value, unit, on, comparator=comparator, is_haemolysed=haemolysed)


def egfr(
    value: float,
    on: str = "2025-06-01",
    *,
    rank: int = 0,
    method: str | None = None,
    comparator: Comparator | None = None,
) -> Measurement:
    return _measured("egfr", value, EGFR_UNIT, on, rank=rank, method=method, comparator=comparator)


def _measured(analyte, value, unit, on, **more) -> Measurement:
    taken = on if isinstance(on, PartialDate) else PartialDate.of_day(date.fromisoformat(on))
    return Measurement(
        analyte=analyte,
        value=units.comparable(analyte, value, unit),
        unit=units.CANONICAL_UNIT[analyte],
        reported_value=value,
        reported_unit=unit,
        taken=taken,
        source=f"Observation/{analyte}-{taken}",
        **more,
    )


def shown(record: PatientRecord) -> list[tuple[str, bool]]:
    return sorted((reading.shown, reading.is_computed) for reading in egfr_readings(record))


@pytest.mark.parametrize(("sex", "age", "amount", "expected", "_origin"), rows())
def test_egfr_agrees_with_the_check_values_in_their_printed_digits(sex, age, amount, expected, _origin):
    value, unit = amount.split()
    mg_dl = units.convert("creatinine", float(value), unit, "mg/dL")
    digits = len(expected.partition(".")[2])
    computed = egfr_ckd_epi_2021(creatinine_mg_dl=mg_dl, age_years=int(age), sex=sex)
    assert round_half_up(computed, digits) == float(expected)


def test_a_woman_of_72_with_creatinine_of_one_has_59_9_because_the_reported_value_goes_in_unrounded():
    # ruling 1: 88 umol/L, the rounded value, would give 60.2
    record = person(creatinine(1.0))
    assert record.measurements[0].value == 88
    assert shown(record) == [("59.9", True)]
    assert shown(person(creatinine(88, "umol/L"))) == [("60.2", True)]


def test_a_computed_egfr_is_compared_at_the_tenth_it_is_shown_with():
    (reading,) = egfr_readings(person(creatinine(1.0)))
    assert reading.holds("<", 60, EGFR_UNIT) is True
    assert reading.holds(">=", 59.9, EGFR_UNIT) is True
    assert reading.unit == EGFR_UNIT
    assert reading.source == "Observation/creatinine-2025-06-01"


def test_age_is_that_of_the_specimen_not_of_today():
    before, after = person(creatinine(1.0, on="2025-03-31")), person(creatinine(1.0, on="2025-04-01"))
    assert shown(before) == [("60.2", True)]  # 71 completed years
    assert shown(after) == [("59.9", True)]  # 72 on the birthday


def test_unknown_sex_gives_both_values_and_leaves_a_limit_between_them_open():
    (reading,) = egfr_readings(person(creatinine(1.0), sex="unknown"))
    assert reading.shown == "59.9-80"
    assert reading.holds(">=", 60, EGFR_UNIT) is None
    assert reading.holds(">=", 30, EGFR_UNIT) is True


def test_a_birth_year_alone_gives_the_range_of_both_ages():
    (reading,) = egfr_readings(person(creatinine(1.0), born=PartialDate.of_year(1953)))
    assert reading.shown == "59.9-60.2"
    assert reading.holds(">=", 60, EGFR_UNIT) is None


def test_a_specimen_dated_to_the_year_gives_the_range_of_both_ages():
    (reading,) = egfr_readings(person(creatinine(1.0, on=PartialDate.of_year(2025))))
    assert reading.shown == "59.9-60.2"


@pytest.mark.parametrize(
    "record",
    [
        person(creatinine(1.0), born=None),
        person(creatinine(0.3, comparator="<")),
        person(creatinine(1.0), born="2007-06-02"),  # a day before the eighteenth birthday
        person(creatinine(1.0), born="2030-01-01"),
    ],
    ids=["no birth date", "a bound is no creatinine", "a child", "not born yet"],
)
def test_no_egfr_is_computed_where_the_equation_does_not_hold(record):
    assert computed_egfr(record, record.measurements[0]) is None
    assert egfr_readings(record) == ()


def test_an_egfr_is_computed_from_the_eighteenth_birthday_on():
    record = person(creatinine(1.0), born="2007-06-01")
    assert computed_egfr(record, record.measurements[0]) is not None


def test_reported_and_computed_egfr_of_one_day_both_stand_so_the_one_that_blocks_can_be_taken():
    assert shown(person(creatinine(1.0), egfr(61))) == [("59.9", True), ("61", False)]


def test_an_mdrd_value_stands_beside_a_computed_one_so_that_the_one_that_blocks_counts():
    mdrd = egfr(58, rank=2, method="mdrd")
    assert shown(person(creatinine(1.0), mdrd)) == [("58", False), ("59.9", True)]
    assert shown(person(mdrd)) == [("58", False)]
    assert shown(person(creatinine(1.0), mdrd, born=None)) == [("58", False)]


def test_only_the_newest_day_counts():
    assert shown(person(creatinine(1.0, on="2025-06-01"), egfr(45, on="2025-05-01"))) == [("59.9", True)]
    assert shown(person(creatinine(1.0, on="2025-05-01"), egfr(45, on="2025-06-01"))) == [("45", False)]


def test_a_newest_creatinine_that_gives_no_egfr_leaves_the_last_one_known():
    bound = creatinine(0.3, on="2025-06-01", comparator="<")
    assert shown(person(bound, egfr(45, on="2025-05-01"))) == [("45", False)]
    assert shown(person(bound, creatinine(1.0, on="2025-05-01"))) == [("59.9", True)]


def test_a_haemolysed_sample_gives_no_egfr():
    assert egfr_readings(person(creatinine(1.0, haemolysed=True))) == ()


def test_an_egfr_reported_as_above_60_satisfies_30_and_leaves_90_open():
    # our formula reference, section 0.4
    (reading,) = readings_of(person(egfr(60, comparator=">")), "egfr")
    assert reading.shown == ">60"
    assert reading.holds(">=", 30, EGFR_UNIT) is True
    assert reading.holds(">=", 90, EGFR_UNIT) is None
    assert reading.holds("<", 60, EGFR_UNIT) is False


def test_age_is_told_only_where_one_age_is_possible():
    today = date(2025, 6, 1)
    assert age_in_years(person(), today) == 72
    assert age_in_years(person(born=PartialDate.of_month(1953, 6)), today) is None
    assert age_in_years(person(born=PartialDate.of_month(1953, 7)), today) == 71
    assert age_in_years(person(born=None), today) is None


@given(
    low=st.integers(20, 2000),
    more=st.integers(1, 500),
    age=st.integers(18, 110),
    sex=st.sampled_from(["male", "female"]),
)
def test_more_creatinine_or_more_years_never_mean_a_better_kidney(low, more, age, sex):
    def at(hundredths: int, years: int) -> float:
        return egfr_ckd_epi_2021(creatinine_mg_dl=hundredths / 100, age_years=years, sex=sex)

    assert at(low + more, age) < at(low, age)
    assert at(low, age + 1) < at(low, age)
