"""Values as limits see them: what a comparator or a range leaves open, and what a card shows."""

from __future__ import annotations

from datetime import date
from math import inf

import pytest
from hypothesis import given
from hypothesis import strategies as st

from cds.clinical import units
from cds.clinical.readings import Bounds, days_old, of_newest_day, reading_of, show, usable
from cds.clinical.record import Comparator, Measurement, PatientRecord
from cds.clinical.timeline import PartialDate

EXACTLY_5 = Bounds(5, 5)
BELOW_5 = Bounds(-inf, 5, is_high_open=True)
AT_MOST_5 = Bounds(-inf, 5)
ABOVE_5 = Bounds(5, inf, is_low_open=True)
AT_LEAST_5 = Bounds(5, inf)
FROM_4_TO_5 = Bounds(4, 5)

HOLDS = """
    value   | >4    | >=4   | <4    | <=4   | >5    | >=5   | <5    | <=5   | >6    | >=6   | <6    | <=6
    exactly | True  | True  | False | False | False | True  | False | True  | False | False | True  | True
    <5      | None  | None  | None  | None  | False | False | True  | True  | False | False | True  | True
    <=5     | None  | None  | None  | None  | False | None  | None  | True  | False | False | True  | True
    >5      | True  | True  | False | False | True  | True  | False | False | None  | None  | None  | None
    >=5     | True  | True  | False | False | None  | True  | False | None  | None  | None  | None  | None
    4 to 5  | None  | True  | False | None  | False | None  | None  | True  | False | False | True  | True
"""
NAMED = {
    "exactly": EXACTLY_5,
    "<5": BELOW_5,
    "<=5": AT_MOST_5,
    ">5": ABOVE_5,
    ">=5": AT_LEAST_5,
    "4 to 5": FROM_4_TO_5,
}


def comparisons() -> list[tuple[str, str, float, bool | None]]:
    head, *lines = ([cell.strip() for cell in line.split("|")] for line in HOLDS.strip().splitlines())
    answers = {"True": True, "False": False, "None": None}
    return [
        (line[0], limit.rstrip("456"), float(limit[-1]), answers[answer])
        for line in lines
        for limit, answer in zip(head[1:], line[1:], strict=True)
    ]


def measured(
    analyte: str,
    value: float,
    unit: str,
    on: str = "2025-06-01",
    *,
    comparator: Comparator | None = None,
    ends: tuple[float, float] | None = None,
    rank: int = 0,
    haemolysed: bool = False,
) -> Measurement:
    low, high = (None, None) if ends is None else (units.comparable(analyte, end, unit) for end in ends)
    return Measurement(
        analyte=analyte,
        value=units.comparable(analyte, value, unit),
        unit=units.CANONICAL_UNIT[analyte],
        reported_value=value,
        reported_unit=unit,
        taken=PartialDate.of_day(date.fromisoformat(on)),
        source=f"Observation/{analyte}-{value}",
        comparator=comparator,
        low=low,
        high=high,
        rank=rank,
        is_haemolysed=haemolysed,
    )


@pytest.mark.parametrize(("value", "sign", "limit", "answer"), comparisons())
def test_a_bound_is_held_against_a_limit_and_says_when_it_cannot_tell(value, sign, limit, answer):
    assert NAMED[value].holds(sign, limit) is answer


@given(
    bounds=st.sampled_from([EXACTLY_5, BELOW_5, AT_MOST_5, ABOVE_5, AT_LEAST_5, FROM_4_TO_5]),
    sign=st.sampled_from([">", ">=", "<", "<="]),
    limit=st.integers(30, 70).map(lambda tenths: tenths / 10),
    inside=st.integers(-200, 200).map(lambda twentieths: 5 + twentieths / 20),
)
def test_an_answer_is_true_of_every_value_the_bound_allows(bounds, sign, limit, inside):
    is_above = inside > bounds.low or (inside == bounds.low and not bounds.is_low_open)
    is_below = inside < bounds.high or (inside == bounds.high and not bounds.is_high_open)
    answer = bounds.holds(sign, limit)
    if is_above and is_below and answer is not None:
        assert answer is {">": inside > limit, ">=": inside >= limit, "<": inside < limit, "<=": inside <= limit}[sign]


@given(value=st.floats(allow_nan=False, allow_infinity=False), limit=st.floats(allow_nan=False, allow_infinity=False))
def test_a_plain_value_is_never_left_open(value, limit):
    plain = Bounds(value, value)
    assert all(plain.holds(sign, limit) is not None for sign in (">", ">=", "<", "<="))
    assert plain.holds(">", limit) is not plain.holds("<=", limit)
    assert plain.holds("<", limit) is not plain.holds(">=", limit)


def test_creatinine_is_held_against_the_limit_printed_in_the_unit_of_the_report():
    # our formula reference, section 7: 3.0 mg/dL is 265.2 umol/L, but guidelines print 266
    reading = reading_of(measured("creatinine", 3.0, "mg/dL"))
    assert reading.holds(">", 3.0, "mg/dL") is False
    assert reading.holds(">", 264, "umol/L") is True
    assert float(reading.shown) == 3
    assert reading.unit == "mg/dL"


def test_a_potassium_of_5_46_in_meq_is_5_46_in_mmol():
    reading = reading_of(measured("potassium", 5.46, "meq/L"))
    assert reading.holds(">", 5.4, "mmol/L") is True
    assert reading.holds(">=", 5.5, "mmol/L") is False
    assert reading.holds(">=", 5.5, "meq/L") is False


def test_a_potassium_in_mg_is_compared_at_the_precision_it_is_shown_with():
    # our monitoring reference, vignette 10: 19.6 mg/dL is 5.013, compared as 5.0
    assert reading_of(measured("potassium", 19.6, "mg/dL")).holds(">", 5.0, "mmol/L") is False


def test_a_comparator_is_shown_and_binds_in_both_units():
    reading = reading_of(measured("nt-probnp", 5.9, "pmol/L", comparator="<"))
    assert reading.shown == "<5.9"
    assert reading.holds("<", 125, "pg/mL") is True
    assert reading.holds(">=", 5, "pmol/L") is None
    assert reading.evidence("supports").value == "<5.9"


def test_a_range_is_shown_with_both_ends_and_held_against_limits_with_both():
    reading = reading_of(measured("lvef", 37.5, "%", ends=(35, 40)))
    assert reading.shown == "35-40"
    assert reading.holds("<=", 40, "%") is True
    assert reading.holds("<=", 35, "%") is None
    assert reading.evidence("supports").value == "35-40"


def test_a_range_of_fractions_is_shown_in_percent_because_its_ends_are():
    reading = reading_of(measured("lvef", 0.375, "1", ends=(0.35, 0.4)))
    assert (reading.shown, reading.unit) == ("35-40", "%")
    assert reading.holds("<=", 40, "%") is True


def test_a_fraction_is_shown_as_sent():
    reading = reading_of(measured("lvef", 0.35, "1"))
    assert (reading.shown, reading.unit) == ("0.35", "1")
    assert reading.holds("<=", 35, "%") is True


def test_a_number_with_a_long_tail_is_shown_and_cited_as_it_is_compared():
    reading = reading_of(measured("lvef", 39.952520898, "%"))
    assert reading.shown == "39.95"
    assert reading.evidence("supports").value == 39.95


@pytest.mark.parametrize(
    ("value", "text"),
    [(4.0, "4"), (87.3, "87.3"), (1e6, "1000000"), (1e-05, "0.00001"), (1e22, "1" + "0" * 22), (100.0, "100")],
)
def test_a_number_is_shown_without_needless_tail_or_powers_of_ten(value, text):
    assert show(value) == text


@given(value=st.floats(allow_nan=False, allow_infinity=False))
def test_a_shown_number_is_the_number(value):
    assert float(show(value)) == value


def test_a_haemolysed_potassium_is_not_acted_on_but_its_neighbours_are():
    clean, spoilt = measured("potassium", 4.5, "mmol/L"), measured("potassium", 6.3, "mmol/L", haemolysed=True)
    sodium = measured("sodium", 138, "mmol/L")
    record = PatientRecord(patient="Patient/p1", measurements=(spoilt, clean, sodium))
    assert usable(record, "potassium") == (clean,)


def test_only_the_best_ranked_values_of_the_newest_day_count():
    old = measured("lvef", 25, "%", on="2025-01-01")
    good, also_good = measured("lvef", 35, "%"), measured("lvef", 45, "%")
    last_resort = measured("lvef", 55, "%", rank=2)
    assert of_newest_day([old, last_resort, good, also_good]) == (good, also_good)
    assert of_newest_day([old, last_resort]) == (last_resort,)
    assert of_newest_day([]) == ()


def test_a_value_dated_to_the_month_is_as_old_as_its_first_day():
    assert days_old(PartialDate.of_month(2025, 3), date(2025, 4, 10)) == 40
    assert days_old(PartialDate.of_day(date(2025, 4, 1)), date(2025, 4, 10)) == 9
