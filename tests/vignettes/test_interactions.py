"""Drugs that must not meet, or only with care: for every row a patient in whom they meet and one in whom they do not."""

from __future__ import annotations

import pytest
from asking import assessed, card, finding, said
from builders import allergy, egfr, lvef, named, order, patient, potassium, problem, until, visit

from cds.content.load import load_content

TODAY = "2025-09-15T12:00:00Z"
DAY = "2025-09-12"
ROWS = {row.id: row for row in load_content().tables.safety.interactions}


def with_drugs(*more, percent=32, k=4.4, as_of=TODAY):
    return assessed(
        patient(born="1967-05-04"),
        problem("heart failure", "2024-05-01"),
        lvef(percent, "2025-06-01"),
        *visit(DAY, bp=(124, 76), pulse=72, k=k, crea=1.0, nyha_class=2, kg=80),
        *more,
        as_of=as_of,
    )


def met_rows(answer):
    """The rows of all pairs found."""
    return {row for f in answer["findings"] if f["rule"] == "interaction" for row in f["limits"]}


def drug(name, dose_mg=10.0):
    return named(name, dose_mg)


def drugs(*names):
    return [drug(name) for name in names]


DIABETES = problem("type 2 diabetes", "2014-01-01")

# row: what meets | what does not
PATIENTS = {
    # 2022 AHA/ACC/HFSA guideline, section 7.3.1; label of sacubitril/valsartan
    "x-arni-ace-inhibitor": (drugs("sacubitril/valsartan", "enalapril"), drugs("sacubitril/valsartan", "bisoprolol")),
    "x-arni-arb": (drugs("sacubitril/valsartan", "valsartan"), drugs("sacubitril/valsartan")),
    # 2013 ACCF/AHA guideline, recommendation table
    "x-ace-inhibitor-arb-mra": (
        drugs("ramipril", "candesartan", "spironolactone"),
        drugs("ramipril", "candesartan", "bisoprolol"),
    ),
    "x-ace-inhibitor-arb": (drugs("ramipril", "losartan"), drugs("ramipril", "spironolactone")),
    # label of aliskiren: in diabetes, or at an eGFR below 60
    "x-ras-aliskiren-diabetes": (
        [*drugs("losartan", "aliskiren"), egfr(59.9, DAY)],
        [*drugs("losartan", "aliskiren"), egfr(60.0, DAY)],
    ),
    "x-ras-aliskiren": (drugs("losartan", "aliskiren"), drugs("amlodipine", "aliskiren")),
    # labels of spironolactone, eplerenone, finerenone
    "x-two-mras": (drugs("spironolactone", "finerenone"), drugs("spironolactone", "dapagliflozin")),
    "x-mra-potassium": (drugs("eplerenone", "amiloride"), drugs("losartan", "amiloride")),
    "x-trimethoprim": (drugs("spironolactone", "co-trimoxazole"), drugs("bisoprolol", "co-trimoxazole")),
    "x-mra-heparin-calcineurin": (drugs("spironolactone", "tacrolimus"), drugs("losartan", "tacrolimus")),
    "x-mra-strong-cyp3a4-inhibitor": (drugs("eplerenone", "clarithromycin"), drugs("spironolactone", "clarithromycin")),
    "x-eplerenone-moderate-cyp3a4-inhibitor": (
        drugs("eplerenone", "fluconazole"),
        drugs("spironolactone", "fluconazole"),
    ),
    "x-finerenone-weak-cyp3a4-inhibitor": (drugs("finerenone", "amiodarone"), drugs("spironolactone", "amiodarone")),
    "x-finerenone-inducer": (drugs("finerenone", "rifampicin"), drugs("spironolactone", "rifampicin")),
    # UK practical guidance on ACE inhibitors
    "x-ras-nsaid": (drugs("ramipril", "naproxen"), drugs("bisoprolol", "naproxen")),
    # label of ivabradine
    "x-ivabradine-strong-cyp3a4-inhibitor": (drugs("ivabradine", "ketoconazole"), drugs("ivabradine", "fluconazole")),
    "x-ivabradine-verapamil-diltiazem": (drugs("ivabradine", "diltiazem"), drugs("ivabradine", "amlodipine")),
    "x-ivabradine-three": (drugs("ivabradine", "bisoprolol", "digoxin"), drugs("ivabradine", "bisoprolol")),
    # labels of vericiguat, nitrates and riociguat
    "x-vericiguat-riociguat": (drugs("vericiguat", "riociguat"), drugs("vericiguat", "amlodipine")),
    "x-vericiguat-pde5": (drugs("vericiguat", "sildenafil"), drugs("vericiguat", "amlodipine")),
    "x-nitrate-pde5": (drugs("isosorbide mononitrate", "sildenafil"), drugs("hydralazine", "sildenafil")),
    "x-nitrate-tadalafil": (drugs("glyceryl trinitrate", "tadalafil"), drugs("hydralazine", "tadalafil")),
    "x-nitrate-riociguat": (drugs("isosorbide dinitrate", "riociguat"), drugs("hydralazine", "riociguat")),
    # labels of carvedilol, clonidine, amiodarone
    "x-beta-blocker-verapamil-diltiazem": (drugs("carvedilol", "verapamil"), drugs("carvedilol", "amlodipine")),
    "x-beta-blocker-clonidine": (drugs("bisoprolol", "clonidine"), drugs("bisoprolol", "methyldopa")),
    "x-beta-blocker-cyp2d6": (drugs("metoprolol succinate", "paroxetine"), drugs("bisoprolol", "paroxetine")),
    "x-beta-blocker-amiodarone": (drugs("bisoprolol", "amiodarone"), drugs("bisoprolol", "digoxin")),
    # label of digoxin
    "x-digoxin-amiodarone": (drugs("digoxin", "amiodarone"), drugs("digoxin", "bisoprolol")),
    "x-digoxin-dronedarone": (drugs("digoxin", "dronedarone"), drugs("digoxin", "sotalol")),
    "x-digoxin-others": (drugs("digoxin", "clarithromycin"), drugs("digoxin", "fluconazole")),
    "x-digoxin-sotagliflozin": (drugs("digoxin", "sotagliflozin"), drugs("digoxin", "dapagliflozin")),
    "x-digoxin-spironolactone": (drugs("digoxin", "spironolactone"), drugs("digoxin", "eplerenone")),
    # labels of lithium, SGLT2 inhibitors, warfarin; common practice for loop with thiazide
    "x-lithium": (drugs("lithium carbonate", "furosemide"), drugs("lithium carbonate", "bisoprolol")),
    "x-lithium-sglt2": (drugs("lithium carbonate", "empagliflozin"), drugs("lithium carbonate", "bisoprolol")),
    "x-sglt2-insulin": (drugs("dapagliflozin", "insulin glargine"), drugs("dapagliflozin", "linagliptin")),
    "x-loop-thiazide": (drugs("furosemide", "metolazone"), drugs("furosemide", "torasemide")),
    "x-warfarin-amiodarone": (drugs("warfarin", "amiodarone"), drugs("apixaban", "amiodarone")),
    # common practice: one drug of a class
    "x-two-ace-inhibitors": (drugs("enalapril", "lisinopril"), drugs("enalapril", "bisoprolol")),
    "x-two-arbs": (drugs("losartan", "valsartan"), drugs("losartan", "sacubitril/valsartan")),
    "x-two-beta-blockers": (drugs("bisoprolol", "carvedilol"), drugs("bisoprolol", "digoxin")),
    "x-two-sglt2-inhibitors": (drugs("dapagliflozin", "empagliflozin"), drugs("dapagliflozin", "metformin")),
}


def test_every_row_has_a_pair_that_meets_and_one_that_does_not():
    assert set(PATIENTS) == set(ROWS)


@pytest.mark.parametrize("row", PATIENTS)
def test_a_row_speaks_where_its_drugs_meet_and_is_silent_where_they_do_not(row):
    meeting, apart = PATIENTS[row]
    answer = with_drugs(*meeting)
    assert row in met_rows(answer)
    assert row not in met_rows(with_drugs(*apart))
    pair = next(f for f in answer["findings"] if row in f["limits"])
    assert pair["outcome"] == "open"
    assert pair["about"].split(" + ") == sorted(pair["about"].split(" + "))


@pytest.mark.parametrize("row", PATIENTS)
def test_a_pair_is_on_a_card_as_urgent_as_its_row_at_least(row):
    order_of_tiers = ["danger", "act", "plan", "note"]
    answer = with_drugs(*PATIENTS[row][0])
    usual = {"contraindicated": "danger", "major": "act", "caution": "note"}[ROWS[row].severity]
    shown = [c for c in answer["cards"] if any(ROWS[row].words in text for text in c["because"])]
    assert shown
    assert order_of_tiers.index(shown[0]["tier"]) <= order_of_tiers.index(usual)


def test_aliskiren_in_diabetes_is_contraindicated_at_any_kidney_function():
    answer = with_drugs(DIABETES, *drugs("losartan", "aliskiren"))
    assert "x-ras-aliskiren-diabetes" in met_rows(answer)
    assert card(answer, "interaction")["tier"] == "danger"


# label of spironolactone: no potassium supplement; the exception below 4.0 mmol/L is policy
@pytest.mark.parametrize(("k", "tier"), [(3.9, "note"), (4.0, "danger"), (4.8, "danger")])
def test_a_potassium_supplement_under_an_mra_is_milder_below_4_0(k, tier):
    answer = with_drugs(*drugs("spironolactone", "potassium chloride"), k=k)
    (only,) = [c for c in answer["cards"] if c["rule"] == "interaction"]
    assert only["tier"] == tier


def test_without_a_recent_potassium_a_supplement_under_an_mra_is_dangerous():
    answer = assessed(
        patient(),
        problem("heart failure", "2024-05-01"),
        lvef(32, "2025-06-01"),
        potassium(3.8, "2025-08-15"),
        *drugs("spironolactone", "potassium chloride"),
        as_of=TODAY,
    )
    assert card(answer, "interaction")["tier"] == "danger"


ARNI = order("sacubitril/valsartan", 100, 2, since="2025-09-15T09:00:00+00:00")
ENALAPRIL = order("enalapril", 10, 2, since="2025-03-01")


# label of sacubitril/valsartan: 36 hours; an end known to the day is 23:59 of that day (policy)
@pytest.mark.parametrize(
    ("ended", "as_of", "outcome"),
    [
        ("2025-09-14T00:01:00Z", TODAY, "open/stop"),  # 35 h 59 min
        ("2025-09-14T00:00:00Z", TODAY, "not-applicable"),  # 36 h
        ("2025-09-13T20:00:00-04:00", TODAY, "not-applicable"),  # the same instant in another zone
        ("2025-09-13T20:01:00-04:00", TODAY, "open/stop"),
        ("2025-09-14", "2025-09-16T11:58:00Z", "open/stop"),
        ("2025-09-14", "2025-09-16T12:00:00Z", "not-applicable"),
        ("2025-09-13", TODAY, "not-applicable"),  # 36 h and a minute at least
    ],
)
def test_an_ace_inhibitor_is_in_the_body_for_36_hours(ended, as_of, outcome):
    answer = with_drugs(until(ENALAPRIL, ended), order("sacubitril/valsartan", 100, 2, since="2025-09-12"), as_of=as_of)
    found = [f for f in answer["findings"] if f["rule"] == "interaction"]
    assert {f["outcome"] if f["action"] is None else f"{f['outcome']}/{f['action']}" for f in found} == {outcome}


def test_an_arni_begun_36_hours_after_the_ace_inhibitor_was_right_and_stays_so():
    # begun at 37 hours; looked at later the same day
    arni = order("sacubitril/valsartan", 100, 2, since="2025-09-15T09:00:00Z")
    answer = with_drugs(until(ENALAPRIL, "2025-09-13T20:00:00Z"), arni)
    assert met_rows(answer) == set()


def test_an_ace_inhibitor_begun_too_early_after_an_arni_is_told_when_it_may_be_taken():
    arni = until(order("sacubitril/valsartan", 100, 2, since="2025-03-01"), "2025-09-15T02:00:00Z")
    answer = with_drugs(arni, order("lisinopril", 5, since="2025-09-15T10:00:00Z"))
    one = finding(answer, "interaction")
    assert one["about"] == "lisinopril + sacubitril/valsartan"
    assert "2025-09-16 14:00" in one["because"]
    assert card(answer, "interaction")["tier"] == "danger"


def test_arni_and_ace_inhibitor_together_are_one_danger_and_nothing_else_about_the_arni():
    answer = with_drugs(ENALAPRIL, order("sacubitril/valsartan", 100, 2, since="2025-03-01"))
    (danger,) = [c for c in answer["cards"] if c["tier"] == "danger"]
    assert danger == card(answer, "interaction")
    assert said(answer, "switch-to-arni", "arni") == "met"
    assert said(answer, "raise-dose", "sacubitril/valsartan") == "blocked"
    assert said(answer, "raise-dose", "enalapril") != "open/raise"


# label of tadalafil: 48 hours, of sildenafil and vardenafil: 24 hours before a nitrate
@pytest.mark.parametrize(
    ("name", "ended", "meets"),
    [
        ("sildenafil", "2025-09-14T12:01:00Z", True),
        ("sildenafil", "2025-09-14T12:00:00Z", False),
        ("vardenafil", "2025-09-14T12:01:00Z", True),
        ("vardenafil", "2025-09-14T12:00:00Z", False),
        ("tadalafil", "2025-09-13T12:01:00Z", True),
        ("tadalafil", "2025-09-13T12:00:00Z", False),
    ],
)
def test_a_pde5_inhibitor_is_in_the_body_for_a_day_tadalafil_for_two(name, ended, meets):
    ended_order = until(named(name, 20, since="2025-09-01"), ended)
    answer = with_drugs(ended_order, named("glyceryl trinitrate", 0.4, since="2025-09-15T12:00:00Z"))
    assert bool(met_rows(answer)) == meets


def test_ace_inhibitor_with_arb_says_that_the_arb_ends_and_that_an_arni_would_replace_both():
    # 2013 ACCF/AHA guideline; which of the two ends is policy
    answer = with_drugs(*drugs("ramipril", "losartan"))
    only = card(answer, "interaction")
    text = " ".join(only["because"])
    assert "an ARNI would replace both" in text
    assert "The one to stop is losartan" in text


def test_after_a_cough_the_ace_inhibitor_ends_and_the_arb_stays():
    cough = allergy("ramipril", "cough", kind="intolerance")
    answer = with_drugs(cough, *drugs("ramipril", "losartan"))
    assert "The one to stop is ramipril" in finding(answer, "interaction")["because"]
    assert finding(answer, "interaction", "losartan + ramipril")["action"] == "stop"


def test_the_triple_of_ace_inhibitor_arb_and_mra_is_one_card():
    answer = with_drugs(*drugs("ramipril", "losartan", "spironolactone"))
    assert card(answer, "interaction")["tier"] == "danger"
    assert met_rows(answer) == {"x-ace-inhibitor-arb", "x-ace-inhibitor-arb-mra"}


def test_an_nsaid_under_ras_inhibitor_and_mra_is_one_card_that_gives_every_reason():
    answer = with_drugs(*drugs("ramipril", "spironolactone", "naproxen"))
    (only,) = [c for c in answer["cards"] if c["rule"] in ("stop-harmful-drug", "interaction")]
    assert only["about"] == "naproxen"
    assert {item["about"] for item in answer["held_back"] if item["rule"] == "interaction"} == {
        "naproxen + ramipril",
        "naproxen + spironolactone",
    }


def test_trimethoprim_under_an_mra_asks_for_potassium_on_day_2_to_5():
    # label of spironolactone; the days are policy
    answer = with_drugs(*drugs("spironolactone", "co-trimoxazole"))
    only = card(answer, "interaction")
    assert only["tier"] == "act"
    drafts = [d for d in only["drafts"] if d["resourceType"] == "ServiceRequest"]
    assert {d["occurrencePeriod"]["start"] for d in drafts} == {"2025-09-17"}
    assert {d["occurrencePeriod"]["end"] for d in drafts} == {"2025-09-20"}


def test_potassium_5_5_under_an_mra_with_trimethoprim_is_repeated_within_2_days():
    # policy: the MRA is lowered and potassium repeated in 24 to 48 hours
    answer = with_drugs(*drugs("spironolactone", "co-trimoxazole"), k=5.5)
    assert said(answer, "lower-dose", "spironolactone") == "open/lower"
    ends = [
        d["occurrencePeriod"]["end"]
        for c in answer["cards"]
        for d in c["drafts"]
        if d["resourceType"] == "ServiceRequest" and "potassium" in d["code"]["text"]
    ]
    assert min(ends) <= "2025-09-17"


def test_an_old_order_of_one_side_asks_first_whether_it_is_taken():
    answer = with_drugs(drug("sacubitril/valsartan"), named("enalapril", 5, 2, since="2024-06-01"))
    only = card(answer, "interaction")
    assert only["tier"] == "act"
    assert only["headline"].startswith("Still taken?")


def test_in_preserved_ejection_fraction_two_drugs_meet_as_well():
    answer = with_drugs(*drugs("carvedilol", "verapamil"), percent=58)
    assert met_rows(answer) == {"x-beta-blocker-verapamil-diltiazem"}


def test_valsartan_inside_sacubitril_valsartan_is_no_second_arb():
    assert met_rows(with_drugs(drug("sacubitril/valsartan"))) == set()
