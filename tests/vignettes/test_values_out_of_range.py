"""Values that ask for attention by themselves, and what they do to the drugs they bear on: worked patients."""

from __future__ import annotations

import pytest
from asking import assessed, card, finding, proposed, said
from builders import (
    creatinine,
    egfr,
    heart_rate,
    lvef,
    observation,
    order,
    patient,
    potassium,
    pressure,
    problem,
    sodium,
)


def failing(*more, as_of, born="1958-01-01", sex="male"):
    return assessed(
        patient(born=born, sex=sex),
        problem("heart failure", "2024-01-01"),
        lvef(32, "2025-12-01"),
        *more,
        as_of=as_of,
    )


def spoken(answer, rule, about):
    """The card that speaks for a finding: its own, or the one it was folded into."""
    into = {i["into"] for i in answer["held_back"] if (i["rule"], i["about"]) == (rule, about)}
    (only,) = [c for c in answer["cards"] if (c["rule"], c["about"]) == (rule, about) or c["card_id"] in into]
    return only


def windows(one):
    """Every drafted test with its first and last day."""
    return {
        d["code"]["text"]: (d["occurrencePeriod"].get("start"), d["occurrencePeriod"]["end"])
        for d in one["drafts"]
        if d["resourceType"] == "ServiceRequest"
    }


def changes(answer):
    return {
        f"{f['action']} {f['about']}"
        for f in answer["findings"]
        if f["outcome"] == "open" and f["action"] in ("stop", "lower", "raise")
    }


def test_a_rise_of_45_percent_in_micromoles_under_an_arni_is_tolerated_and_repeated():
    # heart-failure practice tables (Postgrad Med J): up to 50 % and 266 umol/L tolerate; Clark 2019: from 30 % review
    answer = failing(
        order("sacubitril/valsartan", 50, 2, since="2026-02-02"),
        creatinine(104, "2026-01-28", "umol/L"),
        creatinine(151, "2026-02-12", "umol/L"),
        potassium(4.9, "2026-02-12"),
        as_of="2026-02-12",
    )
    one = finding(answer, "lab-out-of-range", "creatinine")
    assert (one["outcome"], one["action"]) == ("open", "test")
    assert "45.2 % above 104 on 2026-01-28" in one["because"]
    assert said(answer, "lower-dose", "sacubitril/valsartan") == "open/review"
    assert said(answer, "raise-dose", "sacubitril/valsartan") == "blocked"
    # to be repeated 7 to 14 days after the value (practice tables)
    assert windows(spoken(answer, "lab-out-of-range", "creatinine"))["creatinine"] == ("2026-02-19", "2026-02-26")
    assert changes(answer) == set()


def test_a_rise_of_exactly_35_percent_with_potassium_5_2_stops_nothing_and_is_repeated():
    answer = failing(
        order("ramipril", 5, since="2025-06-01"),
        order("ramipril", 10, since="2026-04-01"),
        creatinine(1.20, "2026-03-20"),
        creatinine(1.62, "2026-04-10"),
        potassium(5.2, "2026-04-10"),
        as_of="2026-04-10",
        born="1960-01-01",
    )
    assert "35 % above 1.2 on 2026-03-20" in finding(answer, "lab-out-of-range", "creatinine")["because"]
    assert said(answer, "lab-out-of-range", "creatinine") == "open/test"
    assert said(answer, "lower-dose", "ramipril") == "open/review"
    assert said(answer, "stop-harmful-drug", "ramipril") == "not-applicable"
    assert windows(spoken(answer, "lab-out-of-range", "creatinine"))["creatinine"] == ("2026-04-17", "2026-04-24")
    # STRONG-HF safety indicator: potassium above 5.0, no raise; look for what else raises it
    assert said(answer, "lab-out-of-range", "potassium") == "open/test"
    assert "NSAIDs, supplements and salt substitutes" in finding(answer, "lab-out-of-range", "potassium")["because"]
    assert changes(answer) == set()


HAEMOLYSED = {
    "interpretation": [{"coding": [{"system": "http://terminology.hl7.org/CodeSystem/v2-0493", "code": "HEM"}]}]
}


@pytest.mark.parametrize("mark", [HAEMOLYSED, {"note": [{"text": "Sample haemolysed"}]}], ids=["code", "note"])
def test_potassium_6_3_from_a_haemolysed_sample_stops_nothing_and_is_repeated_today(mark):
    answer = failing(
        order("spironolactone", 25, since="2026-03-02"),
        potassium(4.5, "2026-02-25"),
        potassium(6.3, "2026-03-09", **mark),
        creatinine(1.0, "2026-03-09"),
        as_of="2026-03-09",
    )
    one = finding(answer, "lab-out-of-range", "potassium")
    assert (one["outcome"], one["action"]) == ("open", "test")
    assert "haemolysed" in one["because"]
    assert "The next dose of spironolactone can wait until the repeat is seen." in one["because"]
    assert windows(spoken(answer, "lab-out-of-range", "potassium"))["potassium"][1] == "2026-03-09"
    assert said(answer, "stop-harmful-drug", "spironolactone") == "not-applicable"
    assert changes(answer) == set()


def test_a_clean_sample_of_the_same_day_counts_beside_the_haemolysed_one():
    answer = failing(
        order("spironolactone", 25, since="2026-01-02"),
        potassium(6.3, "2026-03-09T08:00:00Z", **HAEMOLYSED),
        potassium(4.6, "2026-03-09T11:00:00Z"),
        creatinine(1.0, "2026-03-09"),
        as_of="2026-03-09",
    )
    assert said(answer, "lab-out-of-range", "potassium") == "met"


# label of eplerenone: 5.5 to 5.9 lower; spironolactone alike by policy. An MRA at its lowest rung goes to every other day
@pytest.mark.parametrize(
    ("drug", "dose_mg", "lower"),
    [
        ("eplerenone", 50, "eplerenone 25 mg once daily"),
        ("spironolactone", 50, "spironolactone 25 mg once daily"),
        ("spironolactone", 25, "spironolactone 12.5 mg once daily"),
        ("spironolactone", 12.5, "spironolactone 12.5 mg every other day"),
    ],
)
def test_potassium_of_exactly_5_5_lowers_an_mra_and_is_repeated_within_a_week(drug, dose_mg, lower):
    answer = failing(
        order(drug, dose_mg, since="2025-06-01"),
        potassium(5.5, "2026-03-09"),
        creatinine(1.0, "2026-03-09"),
        as_of="2026-03-09",
    )
    assert said(answer, "lower-dose", drug) == "open/lower"
    assert proposed(answer, "lower-dose") == [lower]
    assert windows(card(answer, "lower-dose"))["potassium"] == ("2026-03-12", "2026-03-16")
    assert changes(answer) == {f"lower {drug}"}


def test_potassium_of_19_6_mg_per_decilitre_is_5_0_and_nothing_is_said():
    # 39.098 g/mol: 5.01 mmol/L, compared at its reporting precision as 5.0 (policy)
    answer = failing(
        order("ramipril", 5, since="2025-06-01"),
        observation("potassium", "75940-7", 19.6, "mg/dL", "2026-03-09"),
        creatinine(1.0, "2026-03-09"),
        as_of="2026-03-09",
    )
    assert said(answer, "lab-out-of-range", "potassium") == "met"


def test_heart_rate_47_on_bisoprolol_is_looked_at_and_lowers_nothing_by_itself():
    # heart-failure practice tables (Postgrad Med J): below 50 with symptoms lower; without symptoms review (policy)
    answer = failing(
        order("bisoprolol", 2.5, since="2026-03-02"),
        heart_rate(47, "2026-03-12"),
        pressure(118, 70, "2026-03-12"),
        as_of="2026-03-12",
    )
    assert said(answer, "lower-dose", "bisoprolol") == "open/review"
    assert said(answer, "raise-dose", "bisoprolol") == "blocked"
    one = finding(answer, "lab-out-of-range", "heart-rate")
    assert (one["outcome"], one["action"]) == ("open", "review")
    assert "ECG" in one["because"]
    assert changes(answer) == set()


def test_two_heart_rates_below_50_on_two_days_lower_the_beta_blocker():
    answer = failing(
        order("bisoprolol", 5, since="2026-01-02"),
        heart_rate(48, "2026-03-05"),
        heart_rate(47, "2026-03-12"),
        as_of="2026-03-12",
    )
    assert changes(answer) == {"lower bisoprolol"}
    assert proposed(answer, "lower-dose") == ["bisoprolol 2.5 mg once daily"]  # halved


def test_two_heart_rates_below_50_on_one_day_are_one_reading():
    answer = failing(
        order("bisoprolol", 5, since="2026-01-02"),
        heart_rate(48, "2026-03-12T08:00:00Z"),
        heart_rate(47, "2026-03-12T18:00:00Z"),
        as_of="2026-03-12T20:00:00Z",
    )
    assert said(answer, "lower-dose", "bisoprolol") == "open/review"


@pytest.mark.parametrize(("potassiums", "repeat_by"), [((6.5, 5.9), "2026-03-12"), ((5.9, 6.5), "2026-03-12")])
def test_of_two_potassiums_of_one_day_the_alarming_one_speaks_and_both_are_shown(potassiums, repeat_by):
    first, second = potassiums
    answer = failing(
        potassium(first, "2026-03-12T08:00:00Z"),
        potassium(second, "2026-03-12T15:00:00Z"),
        as_of="2026-03-12T18:00:00Z",
    )
    one = finding(answer, "lab-out-of-range", "potassium")
    assert one["limits"] == ["potassium-emergency"]
    assert {fact["value"] for fact in one["evidence"]} == {5.9, 6.5}
    assert windows(card(answer, "lab-out-of-range"))["potassium"][1] == repeat_by


@pytest.mark.parametrize(
    ("value", "words", "tier"),
    [
        (6.5, "an emergency", "danger"),
        (6.0, "ECG, and repeat at once", "danger"),
        (2.9, "replace at once", "danger"),
        (5.6, "repeat within days", "act"),
        (3.4, "an MRA helps", "act"),
    ],
)
def test_potassium_asks_for_more_the_further_it_is_out_of_range(value, words, tier):
    answer = failing(potassium(value, "2026-03-12"), as_of="2026-03-12")
    one = card(answer, "lab-out-of-range")
    assert one["tier"] == tier
    assert words in " ".join(one["because"])


def test_an_emergency_says_not_to_wait_for_this_list():
    answer = failing(order("spironolactone", 25, since="2025-06-01"), potassium(6.7, "2026-03-12"), as_of="2026-03-12")
    (danger,) = [c for c in answer["cards"] if c["tier"] == "danger"]
    assert "do not wait for this list" in " ".join(danger["cautions"])
    assert changes(answer) == {"stop spironolactone"}


def test_without_any_value_nothing_is_called_in_range():
    answer = failing(as_of="2026-03-12")
    for analyte in ("potassium", "sodium", "egfr", "systolic-bp", "heart-rate"):
        assert said(answer, "lab-out-of-range", analyte) == "unknown"
    assert not [c for c in answer["cards"] if c["rule"] == "lab-out-of-range"]


def test_a_potassium_with_a_comparator_is_held_against_the_limit_it_is_sure_of():
    above = failing(potassium(6.0, "2026-03-12", **above_six()), as_of="2026-03-12")
    assert said(above, "lab-out-of-range", "potassium") == "open/test"
    assert finding(above, "lab-out-of-range", "potassium")["limits"] == ["potassium-very-high"]


def above_six():
    quantity = {"value": 6.0, "comparator": ">", "unit": "mmol/L", "system": "http://unitsofmeasure.org"}
    return {"valueQuantity": {**quantity, "code": "mmol/L"}}


def test_a_low_egfr_says_which_drugs_it_bears_on():
    answer = failing(
        order("spironolactone", 25, since="2025-06-01"),
        order("ramipril", 5, since="2025-06-01"),
        egfr(28, "2026-03-12"),
        as_of="2026-03-12",
    )
    assert "It bears on ramipril and spironolactone." in finding(answer, "lab-out-of-range", "egfr")["because"]


def test_sodium_129_is_a_matter_for_a_specialist_before_a_ras_inhibitor():
    # UK practical guidance on ACE inhibitors: below 130 mmol/L
    answer = failing(sodium(129, "2026-03-12"), as_of="2026-03-12")
    assert "a specialist before a RAS inhibitor" in finding(answer, "lab-out-of-range", "sodium")["because"]


def test_values_out_of_range_are_not_looked_at_without_heart_failure():
    answer = assessed(
        patient(), problem("hypertension", "2015-03-01"), potassium(6.2, "2026-03-12"), as_of="2026-03-12"
    )
    assert {f["outcome"] for f in answer["findings"] if f["rule"] == "lab-out-of-range"} == {"not-applicable"}


def test_a_new_potassium_of_the_same_kind_makes_no_new_card():
    # the card's id holds no measured value
    drug = order("spironolactone", 25, since="2025-06-01")
    first = card(failing(drug, potassium(5.6, "2026-03-11"), as_of="2026-03-11"), "lower-dose")
    second = card(failing(drug, potassium(5.7, "2026-03-12"), as_of="2026-03-12"), "lower-dose")
    assert first["card_id"] == second["card_id"]
