"""More worked patients: type 1 diabetes, dialysis, mildly reduced and preserved ejection fraction, after discharge, assist device."""

from __future__ import annotations

from asking import assessed, card, finding, proposed, said
from builders import (
    SNOMED,
    admission,
    creatinine,
    egfr,
    icd,
    lvef,
    nt_probnp,
    order,
    patient,
    problem,
    subject,
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


def drafted(answer):
    """Every drug the cards of the start rules propose."""
    drafts = [draft for c in answer["cards"] if c["rule"] in RULES for draft in c["drafts"]]
    return {d["medicationCodeableConcept"]["text"] for d in drafts if d["resourceType"] == "MedicationRequest"}


def why(answer, rule):
    return finding(answer, rule)["because"]


def grade(answer, rule):
    return card(answer, rule)["basis"][0]["class_of_recommendation"]


def test_type_1_diabetes_blocks_the_sglt2_inhibitor_and_nothing_else():
    # V15: a woman of 45. Labels of dapagliflozin and empagliflozin
    answer = on(
        patient(born="1980-01-30", sex="female"),
        problem("heart failure", "2024-11-04"),
        problem("type 1 diabetes", "1995-06-01", code=icd("E10.9", "Type 1 diabetes mellitus")),
        lvef(37, "2025-06-15"),
        *visit(DAY, bp=(126, 78), pulse=70, k=4.4, crea=0.9, nyha_class=2, kg=64),
        order("sacubitril/valsartan", 200, 2, since=SPRING),
        order("carvedilol", 25, 2, since=SPRING),
        order("spironolactone", 25, since=SPRING),
    )
    assert answer["phenotype"]["kind"] == "hfref"
    assert four(answer) == ["met", "met", "met", "blocked"]
    assert "type 1 diabetes is on record" in why(answer, "start-sglt2-inhibitor")
    assert not [c for c in answer["cards"] if c["rule"] in RULES]


def on_haemodialysis():
    """V14: a man of 68 on haemodialysis without any heart-failure drug."""
    return [
        patient(born="1957-02-14"),
        problem("heart failure", "2024-11-04"),
        problem("haemodialysis", "2021-01-10", code=icd("Z99.2", "Dependence on renal dialysis")),
        lvef(30, "2025-03-10"),
        *visit(DAY, bp=(128, 76), pulse=78, k=5.3, crea=6.8, nyha_class=3, kg=80),
        order("metformin", 500, 2, since=SPRING),
    ]


def test_on_haemodialysis_a_beta_blocker_is_started_and_an_ace_inhibitor_or_arb_weighed():
    answer = on(*on_haemodialysis())
    assert answer["phenotype"]["kind"] == "hfref"
    assert [gate["id"] for gate in answer["gates"]] == ["dialysis"]
    assert four(answer) == ["open/review", "open/start", "blocked/refer", "blocked/refer"]
    # label of metoprolol succinate: 12.5 mg in NYHA class III
    assert proposed(answer, "start-beta-blocker") == [
        "bisoprolol 1.25 mg once daily",
        "carvedilol 3.125 mg twice daily",
        "metoprolol succinate 12.5 mg once daily",
    ]
    because = why(answer, "start-ras-inhibitor")
    assert "starting enalapril: the patient is on dialysis" in because
    assert "potassium 5.3 mmol/L on 2025-09-12 is above 5.0 mmol/L" in because
    assert "sacubitril/valsartan: the patient is on dialysis" in because
    assert drafted(answer) == {"bisoprolol", "carvedilol", "metoprolol succinate"}


def test_on_haemodialysis_no_egfr_is_held_against_anything():
    answer = on(*on_haemodialysis())
    for rule in RULES:
        one = finding(answer, rule)
        assert "eGFR" not in one["because"], rule
        assert not [fact for fact in one["evidence"] if fact["what"].startswith("egfr")], rule
        assert not [limit for limit in one["limits"] if "egfr" in limit or "creatinine" in limit], rule


def preserved(crea):
    """V17: an obese woman of 72 with preserved ejection fraction."""
    return [
        patient(born="1953-03-03", sex="female"),
        problem("heart failure", "2023-05-01"),
        problem("type 2 diabetes", "2014-01-01"),
        lvef(60, "2023-05-10"),
        lvef(58, "2025-08-10"),
        *visit(DAY, bp=(146, 82), pulse=68, k=4.6, crea=crea, nyha_class=2, kg=98),
        nt_probnp(620, DAY),
        order("metformin", 1000, 2, since=SPRING),
        order("amlodipine", 5, since=SPRING),
        order("metoprolol tartrate", 25, 2, since=SPRING),
        order("furosemide", 40, since=SPRING),
    ]


def test_in_preserved_ejection_fraction_only_the_sglt2_inhibitor_is_started():
    answer = on(*preserved(0.95))
    assert (answer["phenotype"]["kind"], answer["phenotype"]["flags"]) == ("hfpef", [])
    assert said(answer, "start-sglt2-inhibitor") == "open/start"
    assert proposed(answer, "start-sglt2-inhibitor") == [
        "dapagliflozin 10 mg once daily",
        "empagliflozin 10 mg once daily",
    ]
    # 2022 AHA/ACC/HFSA guideline, section 7.7.1: 2a; RAS inhibitor and MRA 2b, so no more than a matter for review
    assert grade(answer, "start-sglt2-inhibitor") == "2a"
    assert [said(answer, rule) for rule in ("start-ras-inhibitor", "start-mra")] == ["open/review"] * 2
    assert drafted(answer) == {"dapagliflozin", "empagliflozin"}


def test_in_preserved_ejection_fraction_metoprolol_tartrate_is_not_to_be_switched():
    assert said(on(*preserved(0.95)), "start-beta-blocker") == "not-applicable"


def test_creatinine_1_0_in_a_woman_of_72_is_an_egfr_of_59_9():
    # CKD-EPI 2021 from the reported creatinine, unrounded (policy)
    answer = on(*preserved(1.0))
    assert said(answer, "start-sglt2-inhibitor") == "open/start"
    (shown,) = [
        f["value"] for f in finding(answer, "start-sglt2-inhibitor")["evidence"] if f["what"] == "egfr (computed)"
    ]
    assert shown == 59.9


def on_losartan_and_eplerenone(ejection_fraction):
    """V18: a man of 64 who takes losartan and eplerenone for his blood pressure."""
    return [
        patient(born="1961-01-25"),
        problem("heart failure", "2023-05-01"),
        problem("hypertension", "2012-05-01"),
        lvef(47, "2023-06-01"),
        lvef(ejection_fraction, "2025-07-20"),
        *visit(DAY, bp=(132, 80), pulse=72, k=4.7, crea=1.1, nyha_class=2, kg=81),
        order("eplerenone", 25, since=SPRING),
        order("losartan", 100, since=SPRING),
    ]


def test_in_mildly_reduced_ejection_fraction_the_beta_blocker_is_a_matter_for_review():
    answer = on(*on_losartan_and_eplerenone(45))
    assert (answer["phenotype"]["kind"], answer["phenotype"]["flags"]) == ("hfmref", [])
    assert four(answer) == ["met", "open/review", "met", "open/start"]
    # 2022 AHA/ACC/HFSA guideline, section 7.6.1: SGLT2 inhibitor 2a, beta blocker 2b
    assert [grade(answer, rule) for rule in ("start-sglt2-inhibitor", "start-beta-blocker")] == ["2a", "2b"]
    assert drafted(answer) == {"dapagliflozin", "empagliflozin"}


def test_at_exactly_40_percent_the_same_patient_is_started_on_beta_blocker_and_sglt2_inhibitor():
    answer = on(*on_losartan_and_eplerenone(40))
    assert answer["phenotype"]["kind"] == "hfref"
    assert four(answer) == ["met", "open/start", "met", "open/start"]
    assert [grade(answer, rule) for rule in ("start-sglt2-inhibitor", "start-beta-blocker")] == ["1", "1"]
    assert "finerenone" not in drafted(answer)


def test_two_weeks_after_discharge_on_four_half_doses_nothing_is_missing():
    # V22: a man of 61
    answer = on(
        patient(born="1964-06-06"),
        problem("heart failure", "2025-08-20"),
        admission("2025-08-20", "2025-09-01"),
        lvef(31, "2025-08-22"),
        nt_probnp(2500, "2025-08-31"),
        *visit(DAY, bp=(108, 66), pulse=72, k=4.7, crea=1.4, nyha_class=2, kg=79),
        nt_probnp(2100, DAY),
        order("sacubitril/valsartan", 100, 2, since="2025-08-31"),
        order("bisoprolol", 5, since="2025-08-31"),
        order("spironolactone", 25, since="2025-08-31"),
        order("dapagliflozin", 10, since="2025-08-31"),
    )
    assert answer["phenotype"]["kind"] == "hfref"
    assert four(answer) == ["met"] * 4
    assert drafted(answer) == set()


def mildly_reduced_with_failing_kidneys(*kidney):
    """V24: a man of 74 with mildly reduced ejection fraction."""
    return [
        patient(born="1951-04-09"),
        problem("heart failure", "2023-05-01"),
        admission("2025-06-20", "2025-06-27"),
        lvef(44, "2023-05-10"),
        lvef(42, "2025-08-01"),
        *visit(DAY, bp=(104, 62), pulse=66, k=4.4, nyha_class=3, kg=77),
        *kidney,
        nt_probnp(3100, DAY),
        order("sacubitril/valsartan", 100, 2, since=SPRING),
        order("bisoprolol", 5, since=SPRING),
        order("empagliflozin", 10, since=SPRING),
        order("tadalafil", 5, since=SPRING),
    ]


def test_at_creatinine_2_7_the_mra_is_blocked_and_the_running_sglt2_inhibitor_stays():
    # 2022 AHA/ACC/HFSA guideline, section 7.3.3: eGFR above 30; label of empagliflozin: the limit is for a start
    answer = on(*mildly_reduced_with_failing_kidneys(creatinine(2.7, DAY)))
    assert answer["phenotype"]["kind"] == "hfmref"
    assert four(answer) == ["met", "met", "blocked", "met"]
    assert "eGFR 24 mL/min/1.73 m² (computed) on 2025-09-12 is at or below 30" in why(answer, "start-mra")
    assert drafted(answer) == set()


def test_an_egfr_of_25_still_blocks_the_steroidal_mra():
    answer = on(*mildly_reduced_with_failing_kidneys(egfr(25.0, DAY)))
    assert said(answer, "start-mra") == "blocked"


def test_with_an_assist_device_no_therapy_is_asked_for():
    # V25: a man of 50. 2020 ACC/AHA performance measures leave these patients out
    device = {"system": SNOMED, "code": "360066001", "display": "Left ventricular assist device"}
    answer = on(
        patient(born="1975-03-03"),
        problem("heart failure", "2020-05-01"),
        {
            "resourceType": "Device",
            "id": "lvad",
            "status": "active",
            "type": {"coding": [device]},
            "patient": subject(),
        },
        lvef(18, "2025-05-01"),
        order("carvedilol", 6.25, 2, since=SPRING),
    )
    assert answer["phenotype"]["kind"] == "hfref"
    assert [gate["id"] for gate in answer["gates"]] == ["lvad"]
    assert four(answer) == ["not-applicable"] * 4
    assert why(answer, "start-mra") == "A left ventricular assist device is on record."
    assert answer["cards"] == []
