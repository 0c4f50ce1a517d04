"""What every heart-failure clinic takes for granted: which medicine counts for which pillar, and which for none.

Facts marked "common practice" are of the trade; a published source stands beside those that have one.
"""

from __future__ import annotations

import pytest
from asking import assessed, card, finding, proposed, record_of, said
from builders import ATC, allergy, lvef, order, patient, problem, visit

TODAY = "2025-09-15T12:00:00Z"
SPRING = "2025-03-01"
RAS, BETA, MRA, SGLT2 = "start-ras-inhibitor", "start-beta-blocker", "start-mra", "start-sglt2-inhibitor"
RULES = (RAS, BETA, MRA, SGLT2)


def hfref(*medicines):
    return [
        patient(born="1960-02-02"),
        problem("heart failure", "2024-05-01"),
        lvef(30, "2025-05-01"),
        *visit("2025-09-12", bp=(122, 74), pulse=72, k=4.4, crea=1.0, nyha_class=2, kg=80),
        *medicines,
    ]


def on(*medicines):
    return assessed(*hfref(*medicines), as_of=TODAY)


def four(answer):
    return [said(answer, rule) for rule in RULES]


# 2022 AHA/ACC/HFSA guideline, section 7.3.2; common practice
@pytest.mark.parametrize(("blocker", "dose"), [("bisoprolol", 5), ("carvedilol", 12.5), ("metoprolol succinate", 100)])
def test_bisoprolol_carvedilol_and_metoprolol_succinate_close_the_beta_blocker_pillar(blocker, dose):
    assert said(on(order(blocker, dose, since=SPRING)), BETA) == "met"


# common practice in the United States; European practice counts nebivolol as well
@pytest.mark.parametrize(
    ("blocker", "dose"), [("metoprolol tartrate", 50), ("atenolol", 50), ("propranolol", 40), ("nebivolol", 5)]
)
def test_any_other_beta_blocker_is_to_be_switched(blocker, dose):
    answer = on(order(blocker, dose, since=SPRING))
    assert said(answer, BETA) == "open/switch"
    assert f"{blocker} is not one of the agents shown to help" in finding(answer, BETA)["because"]
    assert blocker not in {text.partition(" dose")[0] for text in proposed(answer, BETA)}


# policy: another beta blocker than the three is switched in reduced, reviewed before heart failure
def test_atenolol_before_heart_failure_is_reviewed_and_not_switched():
    asymptomatic = [r for r in hfref(order("atenolol", 50, since=SPRING)) if r["resourceType"] != "Condition"]
    without_symptoms = [r for r in asymptomatic if not r["id"].startswith("nyha")]
    answer = assessed(*without_symptoms, as_of=TODAY)
    assert answer["phenotype"]["kind"] == "pre-hf"
    assert said(answer, BETA) == "open/review"


# common practice: a loop diuretic relieves congestion and changes no prognosis
@pytest.mark.parametrize(("diuretic", "dose"), [("furosemide", 40), ("torasemide", 20), ("bumetanide", 1)])
def test_a_loop_diuretic_relieves_symptoms_and_closes_no_pillar(diuretic, dose):
    answer = on(order(diuretic, dose, since=SPRING))
    assert four(answer) == ["open/start"] * 4


# common practice: amlodipine lowers the pressure and treats no heart failure (2022 AHA/ACC/HFSA guideline, section 7.3.7)
@pytest.mark.parametrize(("drug", "dose"), [("amlodipine", 5), ("digoxin", 0.125)])
def test_amlodipine_and_digoxin_close_no_pillar(drug, dose):
    assert four(on(order(drug, dose, since=SPRING))) == ["open/start"] * 4


# 2022 AHA/ACC/HFSA guideline, section 7.3.1: ARNI, or ACE inhibitor, or ARB; common practice
RAS_INHIBITORS = [
    ("enalapril", 10),
    ("lisinopril", 20),
    ("ramipril", 5),
    ("captopril", 25),
    ("candesartan", 16),
    ("losartan", 50),
    ("valsartan", 80),
    ("telmisartan", 40),
    ("sacubitril/valsartan", 100),
]


@pytest.mark.parametrize(("drug", "dose"), RAS_INHIBITORS)
def test_an_ace_inhibitor_or_an_arb_or_an_arni_closes_the_ras_pillar(drug, dose):
    answer = on(order(drug, dose, since=SPRING))
    assert said(answer, RAS) == "met"
    assert not [c for c in answer["cards"] if c["rule"] == RAS]


def test_a_plain_valsartan_order_beside_sacubitril_valsartan_is_a_second_drug():
    # common practice: the valsartan inside the ARNI is no separate ARB, but a plain order is one
    both = [order("sacubitril/valsartan", 100, 2, since=SPRING), order("valsartan", 80, 2, since=SPRING)]
    courses = record_of(*hfref(*both), as_of=TODAY)["courses"]
    assert {(c["drug"], c["drug_class"]) for c in courses} == {("sacubitril/valsartan", "arni"), ("valsartan", "arb")}
    assert said(on(*both), RAS) == "met"


def test_sacubitril_valsartan_alone_is_one_drug_and_no_arb():
    courses = record_of(*hfref(order("sacubitril/valsartan", 100, 2, since=SPRING)), as_of=TODAY)["courses"]
    assert [(c["drug"], c["drug_class"], c["part_of"]) for c in courses] == [("sacubitril/valsartan", "arni", None)]


@pytest.mark.parametrize("drug", ["spironolactone", "eplerenone"])
def test_spironolactone_or_eplerenone_closes_the_mra_pillar(drug):
    # 2022 AHA/ACC/HFSA guideline, section 7.3.3; common practice
    assert said(on(order(drug, 25, since=SPRING)), MRA) == "met"


def test_finerenone_does_not_stand_in_for_a_steroidal_mra_in_reduced_ejection_fraction():
    # label of finerenone: LVEF of 40 % and above, and not together with another MRA
    answer = on(order("finerenone", 10, since=SPRING))
    assert said(answer, MRA) == "blocked"
    assert "another MRA is running (finerenone)" in finding(answer, MRA)["because"]


@pytest.mark.parametrize("drug", ["dapagliflozin", "empagliflozin"])
def test_dapagliflozin_or_empagliflozin_closes_the_sglt2_pillar(drug):
    assert said(on(order(drug, 10, since=SPRING)), SGLT2) == "met"


def test_an_sglt2_inhibitor_needs_no_diabetes():
    # 2022 AHA/ACC/HFSA guideline, section 7.3.4
    assert said(on(), SGLT2) == "open/start"
    assert said(assessed(*hfref(), problem("type 2 diabetes", "2015-01-01"), as_of=TODAY), SGLT2) == "open/start"


def test_a_dose_below_target_still_closes_the_pillar():
    # common practice: a low dose of each of the four comes before a high dose of one
    low = [
        order("sacubitril/valsartan", 50, 2, since=SPRING),
        order("bisoprolol", 1.25, since=SPRING),
        order("spironolactone", 12.5, since=SPRING),
        order("dapagliflozin", 10, since=SPRING),
    ]
    assert four(on(*low)) == ["met"] * 4


def test_a_potassium_supplement_must_end_before_an_mra_starts():
    # label of spironolactone; common practice
    answer = on(order("potassium chloride", 600, since=SPRING))
    assert said(answer, MRA) == "blocked"
    assert "a potassium supplement is running: it must stop first" in finding(answer, MRA)["because"]


def test_a_cough_under_an_ace_inhibitor_leaves_arni_and_arb_open():
    # common practice: cough is of the class, angioedema of the mechanism (policy)
    answer = assessed(*hfref(), allergy("lisinopril", "cough", kind="intolerance"), as_of=TODAY)
    assert said(answer, RAS) == "open/start"
    assert [text.split(" ")[0] for text in proposed(answer, RAS)] == ["sacubitril/valsartan", "candesartan"]


def test_asthma_leaves_a_selective_beta_blocker_to_be_weighed_and_rules_out_carvedilol():
    # labels of carvedilol and bisoprolol
    answer = assessed(*hfref(), problem("asthma", "2001-01-01"), as_of=TODAY)
    assert said(answer, BETA) == "open/review"
    because = finding(answer, BETA)["because"]
    assert "starting bisoprolol: asthma is on record: a beta-1-selective agent with care" in because
    assert "carvedilol: asthma is on record" in because


@pytest.mark.parametrize(
    ("code", "rule"),
    [
        ("C09AA05", RAS),  # ramipril
        ("C09CA06", RAS),  # candesartan
        ("C09DX04", RAS),  # valsartan and sacubitril
        ("C07AB07", BETA),  # bisoprolol
        ("C03DA01", MRA),  # spironolactone
        ("A10BK01", SGLT2),  # dapagliflozin
    ],
)
def test_a_medicine_known_by_its_atc_code_alone_closes_its_pillar(code, rule):
    # WHO ATC index
    concept = {"coding": [{"system": ATC, "code": code}]}
    assert said(on(order("any", 10, since=SPRING, concept=concept)), rule) == "met"


def test_two_metoprolol_salts_side_by_side_close_the_pillar_by_the_right_one():
    both = [order("metoprolol tartrate", 50, 2, since=SPRING), order("metoprolol succinate", 50, since=SPRING)]
    answer = on(*both)
    assert said(answer, BETA) == "met"
    assert "Metoprolol succinate is on the medication list" in finding(answer, BETA)["because"]


def test_a_start_card_warns_of_what_must_not_be_taken_with_it():
    cautions = " ".join(card(on(), RAS)["cautions"])
    assert "within 36 hours" in cautions  # label of sacubitril/valsartan
