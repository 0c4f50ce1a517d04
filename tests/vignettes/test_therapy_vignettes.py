"""Worked patients, from bundle to the four pillars: what is started, switched, weighed, blocked, or cannot be told.

All patients are invented. Values without a date of their own were taken on 12 September 2025; a dose has been the same
since spring unless a date is given. Each vignette decides only the kind of heart failure and the four start rules.
"""

from __future__ import annotations

import pytest
from asking import assessed, card, finding, proposed, said
from builders import (
    ATC,
    allergy,
    creatinine,
    heart_rate,
    lvef,
    nyha,
    observation,
    order,
    patient,
    potassium,
    pressure,
    problem,
    sodium,
    until,
    visit,
)

TODAY = "2025-09-15T12:00:00Z"
DAY = "2025-09-12"
SPRING = "2025-03-01"
RULES = ("start-ras-inhibitor", "start-beta-blocker", "start-mra", "start-sglt2-inhibitor")


def on(*resources):
    return assessed(*resources, as_of=TODAY)


def four(answer):
    """RAS inhibitor, beta blocker, MRA, SGLT2 inhibitor, in short."""
    return [said(answer, rule) for rule in RULES]


def started(answer):
    """The start rules that have a card of their own."""
    return {c["rule"] for c in answer["cards"] if c["rule"] in RULES}


def drafted(answer):
    """Every drug the cards of the start rules propose."""
    drafts = [draft for c in answer["cards"] if c["rule"] in RULES for draft in c["drafts"]]
    return {d["medicationCodeableConcept"]["text"] for d in drafts if d["resourceType"] == "MedicationRequest"}


def spoken(answer, rule):
    """The card that speaks for a rule: its own, or the one its finding was folded into."""
    into = {item["into"] for item in answer["held_back"] if item["rule"] == rule}
    (only,) = [c for c in answer["cards"] if c["rule"] == rule or c["card_id"] in into]
    return only


def why(answer, rule):
    return finding(answer, rule)["because"]


def new_heart_failure():
    """V01: a man of 58 in whom nothing was started."""
    return [
        patient(born="1967-05-04"),
        problem("heart failure", "2025-08-25"),
        problem("hypertension", "2015-03-01"),
        lvef(28, "2025-08-28"),
        *visit(DAY, bp=(124, 78), pulse=84, k=4.4, crea=1.0, nyha_class=2, kg=82),
        sodium(139, DAY),
        observation("qrs", "8633-0", 104, "ms", DAY),
        order("furosemide", 40, since="2025-08-25"),
    ]


def test_new_hfref_with_nothing_started_is_offered_all_four_pillars():
    answer = on(*new_heart_failure())
    assert (answer["phenotype"]["kind"], answer["phenotype"]["flags"]) == ("hfref", [])
    assert answer["phenotype"]["lvef_percent"] == 28
    assert four(answer) == ["open/start"] * 4
    assert started(answer) == set(RULES)
    # labels of the drugs; sacubitril/valsartan at 24/26 mg in a patient new to RAS inhibitors
    assert proposed(answer, "start-ras-inhibitor")[0] == "sacubitril/valsartan 24/26 mg twice daily"
    assert proposed(answer, "start-beta-blocker") == [
        "bisoprolol 1.25 mg once daily",
        "carvedilol 3.125 mg twice daily",
        "metoprolol succinate 25 mg once daily",
    ]
    # label of spironolactone: 25 mg daily above an eGFR of 50
    assert proposed(answer, "start-mra")[0] == "spironolactone 25 mg once daily"
    assert proposed(answer, "start-sglt2-inhibitor") == [
        "dapagliflozin 10 mg once daily",
        "empagliflozin 10 mg once daily",
    ]


def test_new_hfref_is_offered_neither_finerenone_nor_ivabradine_nor_hydralazine():
    offered = " ".join(drafted(on(*new_heart_failure())))
    assert not any(drug in offered for drug in ("finerenone", "ivabradine", "hydralazine"))


def test_each_start_in_new_hfref_is_class_1_and_cites_what_it_rests_on():
    answer = on(*new_heart_failure())
    for rule in RULES:
        first = card(answer, rule)["basis"][0]
        assert (first["class_of_recommendation"], first["source"]) == ("1", "aha22"), rule
        cited = {fact["resource"] for fact in card(answer, rule)["evidence"]}
        assert {"Condition/heart-failure", "Observation/lvef-2025-08-28"} <= cited, rule


def on_all_but_the_ras_inhibitor():
    """V02: a woman of 66 on three pillars for half a year."""
    return [
        patient(born="1959-02-11", sex="female"),
        problem("heart failure", "2024-11-04"),
        lvef(33, "2025-04-10"),
        *visit(DAY, bp=(118, 70), pulse=64, k=4.6, crea=0.85, nyha_class=2, kg=70),
        order("carvedilol", 25, 2, since=SPRING),
        order("spironolactone", 25, since=SPRING),
        order("empagliflozin", 10, since=SPRING),
    ]


def test_an_ace_inhibitor_at_full_dose_closes_its_pillar_and_nothing_is_started():
    answer = on(*on_all_but_the_ras_inhibitor(), order("enalapril", 10, 2, since=SPRING))
    assert answer["phenotype"]["kind"] == "hfref"
    assert four(answer) == ["met"] * 4
    assert started(answer) == set()


def test_an_arni_taken_25_hours_after_enalapril_leaves_no_pillar_to_start():
    enalapril = until(order("enalapril", 10, 2, since=SPRING), "2025-09-14T08:00:00Z")
    arni = order("sacubitril/valsartan", 100, 2, since="2025-09-15T09:00:00Z")
    answer = on(*on_all_but_the_ras_inhibitor(), enalapril, arni)
    assert four(answer) == ["met"] * 4
    assert started(answer) == set()


def test_a_planned_arni_25_hours_after_enalapril_is_not_proposed_yet():
    enalapril = until(order("enalapril", 10, 2, since=SPRING), "2025-09-14T08:00:00Z")
    plan = order("sacubitril/valsartan", 100, 2, since="2025-09-15T09:00:00Z", status="draft")
    answer = on(*on_all_but_the_ras_inhibitor(), enalapril, plan)
    assert "sacubitril/valsartan" not in drafted(answer)
    assert "less than 36 hours ago (enalapril)" in why(answer, "start-ras-inhibitor")


def test_ace_inhibitor_and_arni_together_leave_no_pillar_to_start():
    together = [order("enalapril", 10, 2, since=SPRING), order("sacubitril/valsartan", 100, 2, since=SPRING)]
    answer = on(*on_all_but_the_ras_inhibitor(), *together)
    assert four(answer) == ["met"] * 4
    assert drafted(answer) == set()


def on_all_but_the_mra(k):
    """V03: a man of 71 whose potassium decides on the MRA."""
    return [
        patient(born="1954-01-20"),
        problem("heart failure", "2024-11-04"),
        lvef(35, "2025-06-02"),
        *visit(DAY, bp=(112, 66), pulse=61, k=k, crea=1.2, nyha_class=2, kg=78),
        order("sacubitril/valsartan", 200, 2, since=SPRING),
        order("bisoprolol", 10, since=SPRING),
        order("dapagliflozin", 10, since=SPRING),
    ]


def test_at_potassium_4_9_spironolactone_is_started_and_checked_within_a_week():
    answer = on(*on_all_but_the_mra(4.9))
    assert answer["phenotype"]["kind"] == "hfref"
    assert four(answer) == ["met", "met", "open/start", "met"]
    assert proposed(answer, "start-mra") == ["spironolactone 25 mg once daily", "eplerenone 25 mg once daily"]
    tests = [d for d in card(answer, "start-mra")["drafts"] if d["resourceType"] == "ServiceRequest"]
    assert [d["code"]["text"] for d in tests] == ["potassium", "creatinine"]
    # 2022 AHA/ACC/HFSA guideline, section 7.3.3: about 1 week after the start
    assert {(d["occurrencePeriod"]["start"], d["occurrencePeriod"]["end"]) for d in tests} == {
        ("2025-09-18", "2025-09-22")
    }


def test_at_potassium_5_0_an_mra_is_weighed_and_not_proposed():
    # 2022 AHA/ACC/HFSA guideline, section 7.3.3, wants less than 5.0; the label of spironolactone allows 5.0
    answer = on(*on_all_but_the_mra(5.0))
    assert four(answer) == ["met", "met", "open/review", "met"]
    assert "potassium 5.0 mmol/L on 2025-09-12 is at or above 5.0 mmol/L" in why(answer, "start-mra")
    assert drafted(answer) == set()


@pytest.mark.parametrize(("k", "shown"), [(5.1, "5.1"), (5.04, "5.04")])
def test_above_potassium_5_0_the_mra_is_blocked_and_potassium_repeated(k, shown):
    # label of spironolactone: start at or below 5.0; a value is compared as it is shown, never rounded (policy)
    answer = on(*on_all_but_the_mra(k))
    assert four(answer) == ["met", "met", "blocked", "met"]
    assert f"potassium {shown} mmol/L on 2025-09-12 is above 5.0 mmol/L" in why(answer, "start-mra")
    assert finding(answer, "start-mra")["look_again_on"] == "2025-09-22"
    only = spoken(answer, "start-mra")
    assert only["tier"] == "note"
    assert [(d["resourceType"], d["code"]["text"]) for d in only["drafts"]] == [("ServiceRequest", "potassium")]


def recovered(*studies):
    """V05: a man of 60 whose beta blocker was stopped as the ejection fraction had risen."""
    withdrawn = order("carvedilol", 25, 2, since="2024-05-02", statusReason={"text": "EF recovered"})
    return [
        patient(born="1965-03-08"),
        problem("heart failure", "2023-02-10"),
        *studies,
        *visit(DAY, bp=(116, 70), pulse=78, k=4.5, crea=1.1, nyha_class=1, kg=80),
        order("sacubitril/valsartan", 200, 2, since=SPRING),
        order("spironolactone", 25, since=SPRING),
        order("dapagliflozin", 10, since=SPRING),
        until(withdrawn, "2025-08-20"),
    ]


def test_a_beta_blocker_withdrawn_in_improved_ejection_fraction_is_started_again_low():
    answer = on(*recovered(lvef(25, "2023-02-10"), lvef(52, "2025-06-01")))
    assert (answer["phenotype"]["kind"], answer["phenotype"]["flags"]) == ("hfimpef", ["ud21-improved"])
    assert four(answer) == ["met", "open/start", "met", "met"]
    assert "carvedilol ended on 2025-08-20" in why(answer, "start-beta-blocker")
    assert set(proposed(answer, "start-beta-blocker")) == {
        "bisoprolol 1.25 mg once daily",
        "carvedilol 3.125 mg twice daily",
        "metoprolol succinate 25 mg once daily",
    }
    # 2022 AHA/ACC/HFSA guideline, section 7.6.2: keep the therapy, class 1, level B-R
    basis = card(answer, "start-beta-blocker")["basis"][0]
    assert (basis["class_of_recommendation"], basis["level_of_evidence"]) == ("1", "B-R")
    assert drafted(answer) == {"bisoprolol", "carvedilol", "metoprolol succinate"}


def test_a_rise_from_38_to_45_percent_is_improved_by_the_guideline_though_not_by_the_universal_definition():
    # universal definition 2021: a rise of 10 points or more
    answer = on(*recovered(lvef(38, "2024-03-01"), lvef(45, "2025-08-01")))
    assert (answer["phenotype"]["kind"], answer["phenotype"]["flags"]) == ("hfimpef", [])
    assert four(answer) == ["met", "open/start", "met", "met"]


def test_an_improved_ejection_fraction_that_falls_back_to_34_percent_is_reduced_again():
    answer = on(*recovered(lvef(38, "2024-03-01"), lvef(45, "2025-08-01"), lvef(34, "2025-09-01")))
    assert (answer["phenotype"]["kind"], answer["phenotype"]["lvef_percent"]) == ("hfref", 34)
    assert four(answer) == ["met", "open/start", "met", "met"]


def on_metoprolol(metoprolol):
    """V06: a man of 67 on three pillars and metoprolol."""
    return [
        patient(born="1958-06-30"),
        problem("heart failure", "2024-11-04"),
        lvef(31, "2025-03-03"),
        *visit(DAY, bp=(122, 74), pulse=74, k=4.4, crea=1.05, nyha_class=2, kg=92),
        metoprolol,
        order("sacubitril/valsartan", 200, 2, since=SPRING),
        order("spironolactone", 25, since=SPRING),
        order("dapagliflozin", 10, since=SPRING),
    ]


def test_metoprolol_tartrate_is_switched_to_the_succinate_at_the_same_daily_dose():
    answer = on(*on_metoprolol(order("metoprolol tartrate", 50, 2, since=SPRING)))
    assert answer["phenotype"]["kind"] == "hfref"
    assert four(answer) == ["met", "open/switch", "met", "met"]
    assert "metoprolol tartrate is not one of the agents shown to help" in why(answer, "start-beta-blocker")
    offered = proposed(answer, "start-beta-blocker")
    assert offered[0] == "metoprolol succinate 100 mg once daily"
    assert set(offered[1:]) == {f"{d} dose to be chosen by the prescriber" for d in ("bisoprolol", "carvedilol")}
    assert "MedicationRequest/metoprolol-tartrate-2025-03-01" in {
        fact["resource"] for fact in card(answer, "start-beta-blocker")["evidence"]
    }


def test_metoprolol_whose_code_leaves_the_salt_open_neither_closes_nor_opens_the_pillar():
    # WHO ATC index: C07AB02 is metoprolol, whatever the salt
    concept = {"coding": [{"system": ATC, "code": "C07AB02"}]}
    answer = on(*on_metoprolol(order("metoprolol", 50, 2, since=SPRING, concept=concept)))
    assert four(answer) == ["met", "unknown", "met", "met"]
    assert finding(answer, "start-beta-blocker")["missing"] == [
        "MedicationRequest/metoprolol-2025-03-01: the salt of metoprolol"
    ]
    assert drafted(answer) == set()


def test_a_potassium_of_last_november_decides_neither_on_the_mra_nor_on_the_sglt2_inhibitor():
    # V08: a woman of 62 with laboratory values 299 days old
    answer = on(
        patient(born="1963-04-17", sex="female"),
        problem("heart failure", "2024-11-04"),
        lvef(34, "2025-01-15"),
        pressure(118, 70, "2025-09-14"),
        heart_rate(76, "2025-09-14"),
        nyha(2, DAY),
        potassium(4.3, "2024-11-20"),
        creatinine(1.1, "2024-11-20"),
        order("sacubitril/valsartan", 50, 2, since="2025-06-10"),
        order("carvedilol", 12.5, 2, since="2025-08-18"),
    )
    assert answer["phenotype"]["kind"] == "hfref"
    assert four(answer) == ["met", "met", "unknown", "unknown"]
    assert finding(answer, "start-mra")["missing"] == [
        "potassium: last on 2024-11-20, wanted within 30 days",
        "eGFR: last on 2024-11-20, wanted within 30 days",
    ]
    assert finding(answer, "start-sglt2-inhibitor")["missing"] == ["eGFR: last on 2024-11-20, wanted within 90 days"]
    assert drafted(answer) == set()
    # what is missing is asked for once, with the check that is overdue anyway
    asked = [spoken(answer, rule) for rule in ("check-potassium-creatinine", "start-mra", "start-sglt2-inhibitor")]
    assert len({c["card_id"] for c in asked}) == 1
    assert [d["code"]["text"] for d in asked[0]["drafts"]] == ["potassium", "creatinine"]


def after_angioedema(*ras_inhibitors):
    """V10: a woman of 59 with angioedema under lisinopril."""
    return [
        patient(born="1966-08-02", sex="female"),
        problem("heart failure", "2024-11-04"),
        lvef(29, "2025-07-11"),
        *visit(DAY, bp=(120, 76), pulse=72, k=4.3, crea=1.0, nyha_class=3, kg=73),
        allergy("lisinopril", "angioedema", recorded="2023", criticality="high"),
        *ras_inhibitors,
        order("bisoprolol", 5, since="2025-08-20"),
        order("eplerenone", 50, since=SPRING),
        order("empagliflozin", 10, since=SPRING),
    ]


@pytest.mark.parametrize("taken", [[], [order("sacubitril/valsartan", 50, 2, since="2025-09-10")]])
def test_after_angioedema_an_arni_closes_no_pillar_and_an_arb_is_left_to_the_specialist(taken):
    answer = on(*after_angioedema(*taken))
    assert answer["phenotype"]["kind"] == "hfref"
    assert four(answer) == ["open/review", "met", "met", "met"]
    because = why(answer, "start-ras-inhibitor")
    assert "starting candesartan: angioedema is on record: only with a specialist" in because
    for drug in ("sacubitril/valsartan", "enalapril"):
        assert f"{drug}: angioedema is on record (recorded as a reaction to lisinopril)" in because
    assert drafted(answer) == set()


def test_an_arni_that_angioedema_forbids_is_named_as_one_that_must_not_be_taken():
    answer = on(*after_angioedema(order("sacubitril/valsartan", 50, 2, since="2025-09-10")))
    assert "sacubitril/valsartan is on the list but must not be taken here" in why(answer, "start-ras-inhibitor")


def test_maximal_tolerated_doses_close_their_pillars_however_low_they_are():
    # V11: a woman of 80 with low pressure and pulse
    answer = on(
        patient(born="1945-05-21", sex="female"),
        problem("heart failure", "2024-11-04"),
        lvef(34, "2025-02-02"),
        *visit(DAY, bp=(92, 58), pulse=52, k=4.8, crea=1.15, nyha_class=2, kg=58),
        order("bisoprolol", 2.5, since=SPRING),
        order("sacubitril/valsartan", 50, 2, since=SPRING),
        order("spironolactone", 25, since=SPRING),
        order("empagliflozin", 10, since=SPRING),
    )
    assert answer["phenotype"]["kind"] == "hfref"
    assert four(answer) == ["met"] * 4
    assert drafted(answer) == set()


def test_in_pregnancy_three_classes_are_blocked_for_the_specialist_and_the_beta_blocker_stays():
    # V13: a woman of 31, nine weeks pregnant. 2022 AHA/ACC/HFSA guideline, section 11.3
    answer = on(
        patient(born="1994-07-19", sex="female"),
        problem("heart failure", "2022-10-01"),
        problem("pregnancy", "2025-07-14"),
        lvef(38, "2025-05-01"),
        *visit(DAY, bp=(108, 64), pulse=82, k=4.1, crea=0.6, nyha_class=2),
        order("sacubitril/valsartan", 100, 2, since=SPRING),
        order("spironolactone", 25, since=SPRING),
        order("dapagliflozin", 10, since=SPRING),
        order("metoprolol succinate", 100, since=SPRING),
    )
    assert answer["phenotype"]["kind"] == "hfref"
    assert four(answer) == ["blocked/refer", "met", "blocked/refer", "blocked/refer"]
    for rule in ("start-ras-inhibitor", "start-mra", "start-sglt2-inhibitor"):
        assert "pregnancy is on record" in why(answer, rule)
    assert drafted(answer) == set()
    referral = [c for c in answer["cards"] if c["rule"] in RULES]
    assert [c["headline"].partition(":")[0] for c in referral] == ["Specialist decision"]
