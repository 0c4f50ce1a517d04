"""How a pillar stands: taken, paused, as needed only, ended, planned, old, doubtful, or not called for.

The four drug classes and their order are those of the 2022 AHA/ACC/HFSA guideline, section 7.3; how a state of an order
is read is policy.
"""

from __future__ import annotations

import pytest
from asking import assessed, card, finding, proposed, said
from builders import (
    SNOMED,
    admission,
    creatinine,
    icd,
    lvef,
    nyha,
    order,
    patient,
    potassium,
    pressure,
    problem,
    statement,
    until,
    visit,
)

TODAY = "2025-09-15T12:00:00Z"
DAY = "2025-09-12"
SPRING = "2025-03-01"
RAS, BETA, MRA, SGLT2 = "start-ras-inhibitor", "start-beta-blocker", "start-mra", "start-sglt2-inhibitor"
RULES = (RAS, BETA, MRA, SGLT2)
MEMBERS = [(RAS, "enalapril", 10), (BETA, "bisoprolol", 5), (MRA, "spironolactone", 25), (SGLT2, "dapagliflozin", 10)]


def failing(percent=30, *, nyha_class=2):
    """Heart failure with fresh values and nothing against any class."""
    return [
        patient(born="1960-02-02"),
        problem("heart failure", "2024-05-01"),
        lvef(percent, "2025-05-01"),
        *visit(DAY, bp=(122, 74), pulse=72, k=4.4, crea=1.0, nyha_class=nyha_class, kg=80),
    ]


def on(*resources):
    return assessed(*resources, as_of=TODAY)


def four(answer):
    return [said(answer, rule) for rule in RULES]


@pytest.mark.parametrize(("rule", "drug", "dose"), MEMBERS)
def test_a_running_order_or_statement_closes_its_pillar_and_no_other(rule, drug, dose):
    for medicine in (order(drug, dose, since=SPRING), statement(drug, dose, since=SPRING)):
        answer = on(*failing(), medicine)
        assert [r for r in RULES if said(answer, r) == "met"] == [rule]
        assert f"{drug.capitalize()} is on the medication list since 2025-03-01." == finding(answer, rule)["because"]


@pytest.mark.parametrize(("rule", "drug", "dose"), MEMBERS)
def test_a_paused_order_is_neither_therapy_nor_a_gap_but_a_restart_to_review(rule, drug, dose):
    held = order(drug, dose, since=SPRING, status="on-hold")
    answer = on(*failing(), held)
    assert said(answer, rule) == "open/review"
    assert finding(answer, rule)["because"] == (
        f"{drug.capitalize()} is on hold (no reason recorded): restart, or say why not."
    )
    assert f"MedicationRequest/{held['id']}" in {f["resource"] for f in card(answer, rule)["evidence"]}


def test_a_paused_beta_blocker_gives_its_reason():
    reason = {"coding": [{"system": SNOMED, "code": "48867003"}], "text": "bradycardia"}
    held = order("bisoprolol", 5, since=SPRING, status="on-hold", statusReason=reason)
    assert "on hold (bradycardia)" in finding(on(*failing(), held), BETA)["because"]


def test_a_drug_taken_as_needed_only_closes_no_pillar():
    as_needed = order("bisoprolol", 5, since=SPRING)
    as_needed["dosageInstruction"][0]["asNeededBoolean"] = True
    answer = on(*failing(), as_needed)
    assert said(answer, BETA) == "open/start"
    assert "bisoprolol is ordered as needed only" in finding(answer, BETA)["because"]


@pytest.mark.parametrize(
    "inactive",
    [
        {"status": "draft"},
        {"status": "cancelled"},
        {"status": "entered-in-error"},
        {"doNotPerform": True},
        {"intent": "proposal"},
        {"intent": "plan"},
    ],
    ids=str,
)
def test_an_order_that_was_never_given_closes_no_pillar(inactive):
    answer = on(*failing(), order("dapagliflozin", 10, since=SPRING, **inactive))
    assert said(answer, SGLT2) == "open/start"
    assert "no SGLT2 inhibitor on the medication list" in finding(answer, SGLT2)["because"]


def test_an_order_dated_tomorrow_closes_no_pillar_today():
    assert said(on(*failing(), order("dapagliflozin", 10, since="2025-09-16")), SGLT2) == "open/start"


def test_a_drug_that_ended_is_named_where_it_is_offered_again():
    answer = on(*failing(), until(order("dapagliflozin", 10, since=SPRING), "2025-08-20"))
    assert said(answer, SGLT2) == "open/start"
    assert "dapagliflozin ended on 2025-08-20" in finding(answer, SGLT2)["because"]


def test_an_old_order_nobody_ended_closes_the_pillar_and_asks_whether_it_is_taken():
    # policy: without a known supply an active order is called old after 400 days
    answer = on(*failing(), order("bisoprolol", 5, since="2024-01-10"))
    assert said(answer, BETA) == "met"
    assert "whether it is still taken must be confirmed" in finding(answer, BETA)["because"]
    assert said(answer, "confirm-still-taken", "bisoprolol") == "open/document"
    asked = card(answer, "confirm-still-taken")
    assert (asked["tier"], asked["family"]) == ("note", "data")


@pytest.mark.parametrize(("since", "answer"), [("2024-08-11", "met"), ("2024-08-10", "open/document")])
def test_an_order_is_old_on_its_401st_day(since, answer):
    # 11 August 2024 is 400 days before 15 September 2025
    assert said(on(*failing(), order("bisoprolol", 5, since=since)), "confirm-still-taken", "bisoprolol") == answer


def supplied(days, since):
    supply = {
        "expectedSupplyDuration": {"value": days, "unit": "d", "system": "http://unitsofmeasure.org", "code": "d"}
    }
    return order("bisoprolol", 5, since=since, dispenseRequest=supply)


@pytest.mark.parametrize(("since", "answer"), [("2025-05-18", "met"), ("2025-05-17", "open/document")])
def test_an_order_is_old_91_days_after_its_supply_ran_out(since, answer):
    # 30 days from 18 May 2025 end on 17 June, 90 days before 15 September
    assert said(on(*failing(), supplied(30, since)), "confirm-still-taken", "bisoprolol") == answer


def test_codes_that_disagree_on_the_class_leave_the_pillar_open():
    concept = {
        "coding": [
            {"system": "http://www.nlm.nih.gov/research/umls/rxnorm", "code": "19484"},  # bisoprolol
            {"system": "http://www.whocc.no/atc", "code": "C09AA05"},  # ramipril
        ]
    }
    answer = on(*failing(), order("bisoprolol", 5, since=SPRING, concept=concept))
    assert [said(answer, rule) for rule in (RAS, BETA)] == ["unknown", "unknown"]


# 2022 AHA/ACC/HFSA guideline, section 7.3.3: an MRA in NYHA class II to IV
@pytest.mark.parametrize(
    ("grade", "answer"), [(1, "not-applicable"), (2, "open/start"), (3, "open/start"), (4, "open/start")]
)
def test_an_mra_is_for_nyha_class_2_to_4(grade, answer):
    assert said(on(*failing(nyha_class=grade)), MRA) == answer


# 2022 AHA/ACC/HFSA guideline, section 7.3.1: an ARNI in NYHA class II to III, else ACE inhibitor
@pytest.mark.parametrize(
    ("grade", "first"), [(1, "enalapril"), (2, "sacubitril/valsartan"), (3, "sacubitril/valsartan"), (4, "enalapril")]
)
def test_an_arni_is_for_nyha_class_2_to_3(grade, first):
    assert proposed(on(*failing(nyha_class=grade)), RAS)[0].split(" ")[0] == first


def test_without_a_nyha_class_the_mra_is_unknown_and_the_ace_inhibitor_comes_first():
    answer = on(*failing(nyha_class=None))
    assert said(answer, MRA) == "unknown"
    assert finding(answer, MRA)["missing"] == ["NYHA class"]
    assert proposed(answer, RAS)[0] == "enalapril 2.5 mg twice daily"


STAND_INS = [order("furosemide", 40, since=SPRING), admission("2024-11-01", "2024-11-08")]


@pytest.mark.parametrize("sign", STAND_INS, ids=["loop diuretic", "admission"])
def test_a_loop_diuretic_or_an_admission_stands_in_for_a_missing_nyha_class(sign):
    # policy: for drugs only
    answer = on(*failing(nyha_class=None), sign)
    assert said(answer, MRA) == "open/start"
    assert proposed(answer, RAS)[0] == "sacubitril/valsartan 24/26 mg twice daily"


@pytest.mark.parametrize(("stay", "answer"), [("2024-09-15", "open/start"), ("2024-09-14", "unknown")])
def test_an_admission_stands_in_for_365_days(stay, answer):
    assert said(on(*failing(nyha_class=None), admission(stay, stay)), MRA) == answer


@pytest.mark.parametrize(("taken", "answer"), [("2025-03-19", "open/start"), ("2025-03-18", "unknown")])
def test_a_nyha_class_counts_for_180_days(taken, answer):
    assert said(on(*failing(nyha_class=None), nyha(2, taken)), MRA) == answer


# Freshness before a start (policy): 30 days for potassium and creatinine, 7 with potassium 5.0 and above or eGFR below 45,
# 90 for the eGFR before an SGLT2 inhibitor, 30 for pressure and heart rate.
def measured(day, *, k=4.4, crea=1.0, vitals=DAY):
    return [
        patient(born="1960-02-02"),
        problem("heart failure", "2024-05-01"),
        lvef(30, "2025-05-01"),
        nyha(2, DAY),
        *visit(vitals, bp=(122, 74), pulse=72),
        potassium(k, day),
        creatinine(crea, day),
    ]


FRESH = [
    # day of the values, potassium, creatinine, the four answers
    ("2025-08-16", 4.4, 1.0, ["open/start", "open/start", "open/start", "open/start"]),  # 30 days
    ("2025-08-15", 4.4, 1.0, ["unknown", "open/start", "unknown", "open/start"]),  # 31 days
    ("2025-06-17", 4.4, 1.0, ["unknown", "open/start", "unknown", "open/start"]),  # 90 days
    ("2025-06-16", 4.4, 1.0, ["unknown", "open/start", "unknown", "unknown"]),  # 91 days
    ("2025-09-08", 5.0, 1.0, ["open/start", "open/start", "open/review", "open/start"]),  # 7 days
    ("2025-09-07", 5.0, 1.0, ["unknown", "open/start", "unknown", "open/start"]),  # 8 days
    ("2025-09-08", 4.4, 2.0, ["open/start", "open/start", "open/start", "open/start"]),  # eGFR 37, 7 days
    ("2025-09-07", 4.4, 2.0, ["unknown", "open/start", "unknown", "open/start"]),  # eGFR 37, 8 days
]


@pytest.mark.parametrize(("day", "k", "crea", "answers"), FRESH)
def test_a_value_too_old_decides_nothing(day, k, crea, answers):
    assert four(on(*measured(day, k=k, crea=crea))) == answers


def test_pressure_and_heart_rate_of_31_days_ago_decide_nothing():
    assert four(on(*measured(DAY, vitals="2025-08-15"))) == ["unknown", "unknown", "open/start", "unknown"]
    assert four(on(*measured(DAY, vitals="2025-08-16"))) == ["open/start"] * 4


def test_what_several_pillars_wait_for_is_asked_for_on_one_card():
    answer = on(*measured("2025-05-01", vitals="2025-05-01"))
    assert four(answer) == ["unknown"] * 4
    (only,) = answer["cards"]
    assert only["family"] == "data"
    assert {d["code"]["text"] for d in only["drafts"]} == {"potassium", "creatinine", "systolic pressure", "heart rate"}


def test_heart_failure_without_an_ejection_fraction_is_offered_only_the_sglt2_inhibitor():
    # 2022 AHA/ACC/HFSA guideline: an SGLT2 inhibitor helps whatever the ejection fraction
    answer = on(*(r for r in failing() if not r["id"].startswith("lvef")))
    assert answer["phenotype"]["kind"] == "unclassified"
    assert four(answer) == ["unknown", "unknown", "unknown", "open/start"]
    assert said(answer, "ejection-fraction-missing") == "open/test"
    assert {c["rule"] for c in answer["cards"]} == {"ejection-fraction-missing", SGLT2}


@pytest.mark.parametrize(("measured_on", "answer"), [("2023-09-16", "met"), ("2023-09-15", "open/test")])
def test_an_ejection_fraction_older_than_730_days_is_used_and_asked_for_again(measured_on, answer):
    old = [r for r in failing() if not r["id"].startswith("lvef")]
    found = on(*old, lvef(30, measured_on))
    assert said(found, "ejection-fraction-missing") == answer
    assert (found["phenotype"]["kind"], four(found)) == ("hfref", ["open/start"] * 4)


def test_without_heart_failure_no_rule_asks_for_anything():
    answer = on(patient(), problem("hypertension", "2020-01-01"), lvef(60, "2025-05-01"), pressure(150, 90, DAY))
    assert answer["phenotype"]["kind"] == "none"
    assert four(answer) == ["not-applicable"] * 4
    assert answer["cards"] == []


def test_a_low_ejection_fraction_without_symptoms_asks_for_ras_inhibitor_and_beta_blocker():
    # 2022 AHA/ACC/HFSA guideline, section 6.1
    silent = [r for r in failing(nyha_class=1) if r["resourceType"] != "Condition"]
    answer = on(*silent)
    assert answer["phenotype"]["kind"] == "pre-hf"
    assert four(answer) == ["open/start", "open/start", "not-applicable", "not-applicable"]
    assert proposed(answer, RAS)[0] == "enalapril 2.5 mg twice daily"


@pytest.mark.parametrize(("age", "answer"), [("2007-09-15", "open/start"), ("2007-09-16", "not-applicable")])
def test_adult_guidance_applies_from_the_18th_birthday(age, answer):
    assert said(on(patient(born=age), *failing()[1:]), BETA) == answer


def test_amyloid_cardiomyopathy_leaves_the_usual_therapy_to_the_specialist():
    answer = on(*failing(), problem("senile cardiac amyloidosis", "2024-01-01"))
    assert answer["phenotype"]["flags"] == ["amyloidosis"]
    assert four(answer) == ["blocked/refer"] * 4


def test_a_second_code_for_the_failing_heart_changes_nothing():
    answer = on(*failing(), problem("again", "2024-05-01", code=icd("I50.22", "Chronic systolic heart failure")))
    assert four(answer) == ["open/start"] * 4
