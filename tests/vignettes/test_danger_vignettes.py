"""Worked patients, whole: every start, switch, raise, lowering and stop that is open, and no other.

All patients are invented. Values without a date of their own were taken on 12 September 2025; a dose has been the same
since spring unless a date is given.
"""

from __future__ import annotations

import pytest
from asking import assessed, card, finding, proposed, said
from builders import (
    SNOMED,
    admission,
    allergy,
    creatinine,
    egfr,
    heart_rate,
    icd,
    lvef,
    named,
    nt_probnp,
    nyha,
    observation,
    order,
    patient,
    potassium,
    pressure,
    problem,
    subject,
    until,
    visit,
)

TODAY = "2025-09-15T12:00:00Z"
DAY = "2025-09-12"
SPRING = "2025-03-01"
ARNI_FULL = order("sacubitril/valsartan", 200, 2, since=SPRING)
DAPAGLIFLOZIN = order("dapagliflozin", 10, since=SPRING)
SPIRONOLACTONE = order("spironolactone", 25, since=SPRING)
ACTIONS = ("start", "switch", "raise", "lower", "stop")


def on(*resources):
    return assessed(*resources, as_of=TODAY)


def changes(answer):
    return {
        f"{f['action']} {f['about']}" for f in answer["findings"] if f["outcome"] == "open" and f["action"] in ACTIONS
    }


def reviews(answer, *rules):
    return {
        f"{f['rule']} {f['about']}"
        for f in answer["findings"]
        if f["outcome"] == "open" and f["action"] == "review" and f["rule"] in rules
    }


def danger(answer):
    return {c["about"] for c in answer["cards"] if c["tier"] == "danger"}


def on_three_pillars(k):
    """V03: a man of 71 without an MRA."""
    return on(
        patient(born="1954-03-03"),
        problem("heart failure", "2024-11-04"),
        lvef(35, "2025-06-02"),
        *visit(DAY, bp=(112, 66), pulse=61, k=k, crea=1.2, nyha_class=2, kg=78),
        ARNI_FULL,
        order("bisoprolol", 10, since=SPRING),
        DAPAGLIFLOZIN,
    )


@pytest.mark.parametrize(("k", "expected"), [(4.9, {"start mra"}), (5.0, set()), (5.1, set()), (5.04, set())])
def test_potassium_before_an_mra_changes_no_other_drug(k, expected):
    # 2022 AHA/ACC/HFSA guideline, section 7.3.3: below 5.0
    answer = on_three_pillars(k)
    assert changes(answer) == expected
    for drug in ("sacubitril/valsartan", "bisoprolol"):
        assert said(answer, "raise-dose", drug) == "met"
        assert said(answer, "lower-dose", drug) == "met"
    above = k > 5.0  # STRONG-HF safety indicator: looked at and repeated, nothing else
    assert said(answer, "lab-out-of-range", "potassium") == ("open/test" if above else "met")


def test_in_improved_ejection_fraction_only_the_withdrawn_beta_blocker_is_started():
    # V05: a man of 60. 2022 AHA/ACC/HFSA guideline, section 7.6.2: the therapy goes on
    withdrawn = until(order("carvedilol", 25, 2, since=SPRING), "2025-08-20", statusReason={"text": "EF recovered"})
    answer = on(
        patient(born="1965-03-03"),
        problem("heart failure", "2023-02-10"),
        lvef(25, "2023-02-10"),
        lvef(52, "2025-06-01"),
        *visit(DAY, bp=(116, 70), pulse=78, k=4.5, crea=1.1, nyha_class=1, kg=80),
        ARNI_FULL,
        SPIRONOLACTONE,
        DAPAGLIFLOZIN,
        withdrawn,
    )
    assert answer["phenotype"]["kind"] == "hfimpef"
    assert changes(answer) == {"start beta-blocker"}
    assert said(answer, "raise-dose", "sacubitril/valsartan") == "met"


def test_metoprolol_tartrate_is_switched_and_neither_counted_nor_raised():
    # V06: a man of 67. 2022 AHA/ACC/HFSA guideline, section 7.3.2
    answer = on(
        patient(born="1958-03-03"),
        problem("heart failure", "2024-11-04"),
        lvef(31, "2025-03-03"),
        *visit(DAY, bp=(122, 74), pulse=74, k=4.4, crea=1.05, nyha_class=2, kg=92),
        order("metoprolol tartrate", 50, 2, since=SPRING),
        ARNI_FULL,
        SPIRONOLACTONE,
        DAPAGLIFLOZIN,
    )
    assert changes(answer) == {"switch beta-blocker"}
    assert proposed(answer, "start-beta-blocker")[0] == "metoprolol succinate 100 mg once daily"
    assert "metoprolol tartrate" not in {f["about"] for f in answer["findings"] if f["rule"] == "raise-dose"}


def test_with_a_potassium_of_last_november_only_the_beta_blocker_is_raised():
    # V08: a woman of 62. Carvedilol for 28 days; a beta blocker needs no potassium
    old = "2024-11-20"
    answer = on(
        patient(born="1963-03-03", sex="female"),
        problem("heart failure", "2024-11-04"),
        lvef(34, "2025-01-15"),
        pressure(118, 70, "2025-09-14"),
        heart_rate(76, "2025-09-14"),
        nyha(2, DAY),
        observation("weight", "29463-7", 68, "kg", DAY),
        potassium(4.3, old),
        creatinine(1.1, old),
        order("sacubitril/valsartan", 50, 2, since="2025-06-10"),
        order("carvedilol", 12.5, 2, since="2025-08-18"),
    )
    assert changes(answer) == {"raise carvedilol"}
    assert proposed(answer, "raise-dose") == ["carvedilol 25 mg twice daily"]
    assert said(answer, "raise-dose", "sacubitril/valsartan") == "unknown"
    assert [said(answer, rule) for rule in ("start-mra", "start-sglt2-inhibitor")] == ["unknown", "unknown"]


def test_after_angioedema_the_arni_is_stopped_and_only_bisoprolol_raised():
    # V10: a woman of 59. 2022 AHA/ACC/HFSA guideline, section 7.3.1; label of sacubitril/valsartan
    answer = on(
        patient(born="1966-03-03", sex="female"),
        problem("heart failure", "2024-11-04"),
        lvef(29, "2025-07-11"),
        *visit(DAY, bp=(120, 76), pulse=72, k=4.3, crea=1.0, nyha_class=3, kg=73),
        allergy("lisinopril", "angioedema", criticality="high"),
        order("sacubitril/valsartan", 50, 2, since="2025-09-10"),
        order("bisoprolol", 5, since="2025-08-20"),
        order("eplerenone", 50, since=SPRING),
        order("empagliflozin", 10, since=SPRING),
    )
    assert changes(answer) == {"stop sacubitril/valsartan", "raise bisoprolol"}
    assert proposed(answer, "raise-dose") == ["bisoprolol 7.5 mg once daily"]
    assert danger(answer) == {"sacubitril/valsartan"}
    # an ARB is for the specialist, an ACE inhibitor is none
    assert said(answer, "start-ras-inhibitor") == "open/review"
    assert said(answer, "switch-to-arni", "arni") != "open/switch"
    assert said(answer, "raise-dose", "eplerenone") == "met"


def limited(beta_blocker):
    """V11: a woman of 80 on what she bears."""
    return on(
        patient(born="1945-03-03", sex="female"),
        problem("heart failure", "2020-11-04"),
        lvef(34, "2025-02-02"),
        *visit(DAY, bp=(92, 58), pulse=52, k=4.8, crea=1.15, nyha_class=2, kg=58),
        beta_blocker,
        order("sacubitril/valsartan", 50, 2, since=SPRING),
        SPIRONOLACTONE,
        order("empagliflozin", 10, since=SPRING),
    )


MAXIMAL = {"statusReason": {"text": "maximal tolerated dose"}}


@pytest.mark.parametrize(
    "beta_blocker",
    [
        order("bisoprolol", 2.5, since=SPRING, **MAXIMAL),
        order("bisoprolol", 2.5, since=SPRING),
        order("carvedilol", 6.25, 2, since=SPRING, **MAXIMAL),
    ],
    ids=["documented", "by today's values", "carvedilol"],
)
def test_maximal_tolerated_doses_are_neither_raised_nor_lowered(beta_blocker):
    # STRONG-HF safety indicators: systolic pressure below 95, heart rate below 55
    answer = limited(beta_blocker)
    assert changes(answer) == set()
    drug = beta_blocker["medicationCodeableConcept"]["coding"][0]["display"]
    assert said(answer, "raise-dose", drug) == "blocked"
    is_documented = "statusReason" in beta_blocker
    assert ("maximal tolerated dose" in finding(answer, "raise-dose", drug)["because"]) == is_documented
    assert said(answer, "raise-dose", "sacubitril/valsartan") == "blocked"
    assert said(answer, "lower-dose", "sacubitril/valsartan") == "met"
    assert said(answer, "raise-dose", "spironolactone") == "met"
    # label of carvedilol: lower the dose below a pulse of 55; without symptoms a review (policy)
    assert said(answer, "lower-dose", drug) == ("open/review" if drug == "carvedilol" else "met")


def test_in_pregnancy_three_drugs_are_stopped_and_the_beta_blocker_stays():
    # V13: a woman of 31. 2022 AHA/ACC/HFSA guideline, section 11.3
    answer = on(
        patient(born="1994-03-03", sex="female"),
        problem("heart failure", "2023-11-04"),
        problem("pregnancy", "2025-08-10"),
        lvef(38, "2025-05-01"),
        *visit(DAY, bp=(108, 64), pulse=82, k=4.1, crea=0.6),
        order("sacubitril/valsartan", 100, 2, since=SPRING),
        SPIRONOLACTONE,
        DAPAGLIFLOZIN,
        order("metoprolol succinate", 100, since=SPRING),
    )
    stopped = {"sacubitril/valsartan", "spironolactone", "dapagliflozin"}
    assert changes(answer) == {f"stop {drug}" for drug in stopped}
    assert danger(answer) == stopped
    assert said(answer, "stop-harmful-drug", "metoprolol succinate") == "not-applicable"
    assert [c["tier"] for c in answer["cards"]][:3] == ["danger"] * 3


def test_on_haemodialysis_metformin_is_stopped_and_only_the_beta_blocker_started():
    # V14: a man of 68. Label of metformin
    answer = on(
        patient(born="1957-02-14"),
        problem("heart failure", "2024-11-04"),
        problem("haemodialysis", "2021-01-10", code=icd("Z99.2", "Dependence on renal dialysis")),
        lvef(30, "2025-03-10"),
        *visit(DAY, bp=(128, 76), pulse=78, k=5.3, crea=6.8, nyha_class=3, kg=80),
        order("metformin", 500, 2, since=SPRING),
    )
    assert changes(answer) == {"stop metformin", "start beta-blocker"}
    assert danger(answer) == {"metformin"}
    assert said(answer, "start-ras-inhibitor") == "open/review"
    assert said(answer, "lab-out-of-range", "egfr") == "not-applicable"
    assert "eGFR" not in finding(answer, "stop-harmful-drug", "metformin")["because"]


def on_losartan_and_eplerenone(percent):
    """V18: a man of 64."""
    return on(
        patient(born="1961-01-25"),
        problem("heart failure", "2023-05-01"),
        problem("hypertension", "2012-05-01"),
        lvef(47, "2023-06-01"),
        lvef(percent, "2025-07-20"),
        *visit(DAY, bp=(132, 80), pulse=72, k=4.7, crea=1.1, nyha_class=2, kg=81),
        order("eplerenone", 25, since=SPRING),
        order("losartan", 100, since=SPRING),
    )


def test_in_mildly_reduced_ejection_fraction_only_the_sglt2_inhibitor_is_started():
    # 2022 AHA/ACC/HFSA guideline, section 7.6.1: SGLT2 inhibitor 2a, the others 2b
    answer = on_losartan_and_eplerenone(45)
    assert changes(answer) == {"start sglt2-inhibitor"}
    assert reviews(answer, "start-beta-blocker", "switch-to-arni") == {
        "start-beta-blocker beta-blocker",
        "switch-to-arni arni",
    }


def test_at_exactly_40_percent_losartan_gives_way_to_the_higher_arni_dose_and_eplerenone_is_raised():
    # losartan 100 is two thirds of its target: above valsartan 160 mg a day (2017 ACC pathway, table 3)
    answer = on_losartan_and_eplerenone(40)
    assert changes(answer) == {"start sglt2-inhibitor", "start beta-blocker", "switch arni", "raise eplerenone"}
    assert proposed(answer, "switch-to-arni") == ["sacubitril/valsartan 49/51 mg twice daily"]
    assert proposed(answer, "raise-dose") == ["eplerenone 50 mg once daily"]


def test_months_after_discharge_arni_and_bisoprolol_go_up_one_step_and_spironolactone_stays():
    # V22 (d): a man of 61, the same doses since 31 May
    since = "2025-05-31"
    answer = on(
        patient(born="1964-06-06"),
        problem("heart failure", "2025-05-20"),
        admission("2025-05-20", "2025-06-01"),
        lvef(31, "2025-05-22"),
        nt_probnp(2500, "2025-05-31"),
        *visit(DAY, bp=(108, 66), pulse=72, k=4.7, crea=1.4, nyha_class=2, kg=79),
        order("sacubitril/valsartan", 100, 2, since=since),
        order("bisoprolol", 5, since=since),
        order("spironolactone", 25, since=since),
        order("dapagliflozin", 10, since=since),
    )
    assert changes(answer) == {"raise sacubitril/valsartan", "raise bisoprolol"}
    steps = [proposal for c in answer["cards"] for proposal in c["drafts"] if c["rule"] == "raise-dose"]
    drafted = {
        f"{d['medicationCodeableConcept']['text']} {d['dosageInstruction'][0]['text']}"
        for d in steps
        if d["resourceType"] == "MedicationRequest"
    }
    assert drafted == {"sacubitril/valsartan 97/103 mg twice daily", "bisoprolol 7.5 mg once daily"}
    assert said(answer, "raise-dose", "spironolactone") == "met"


def test_in_mildly_reduced_ejection_fraction_with_failing_kidneys_nothing_is_raised():
    # V24: a man of 74. Label of empagliflozin: the limit is for a start
    answer = on(
        patient(born="1951-04-09"),
        problem("heart failure", "2023-05-01"),
        admission("2025-06-20", "2025-06-27"),
        lvef(44, "2023-05-10"),
        lvef(42, "2025-08-01"),
        *visit(DAY, bp=(104, 62), pulse=66, k=4.4, crea=2.7, nyha_class=3, kg=77),
        nt_probnp(3100, DAY),
        order("sacubitril/valsartan", 100, 2, since=SPRING),
        order("bisoprolol", 5, since=SPRING),
        order("empagliflozin", 10, since=SPRING),
        order("tadalafil", 5, since=SPRING),
    )
    assert changes(answer) == set()
    assert said(answer, "raise-dose", "bisoprolol") == "open/review"  # class 2b
    assert said(answer, "raise-dose", "sacubitril/valsartan") == "blocked"  # eGFR below 30 besides
    assert said(answer, "start-sglt2-inhibitor") == "met"
    assert said(answer, "start-mra") == "blocked"


def test_vericiguat_beside_tadalafil_is_answered_with_the_end_of_tadalafil():
    # label of vericiguat
    answer = on(
        patient(),
        problem("heart failure", "2023-05-01"),
        lvef(42, "2025-08-01"),
        order("tadalafil", 5, since=SPRING),
        named("vericiguat", 2.5),
    )
    assert "The one to stop is tadalafil" in finding(answer, "interaction")["because"]


def test_with_an_assist_device_ibuprofen_is_stopped_and_nothing_else_asked_for():
    # V25: a man of 50. 2020 ACC/AHA performance measures leave these patients out of the therapy rules
    device = {"system": SNOMED, "code": "360066001", "display": "Left ventricular assist device"}
    as_needed = [{"asNeededBoolean": True, "text": "400 mg as needed"}]
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
        order("ibuprofen", 400, since=SPRING, dosageInstruction=as_needed),
    )
    assert changes(answer) == {"stop ibuprofen"}
    assert [c["rule"] for c in answer["cards"]] == ["stop-harmful-drug"]
    assert card(answer, "stop-harmful-drug")["tier"] == "act"


def test_an_egfr_below_30_under_an_mra_halves_it_and_starts_no_other_drug_that_needs_kidneys():
    # NHS pages on MRAs: below 30 halve; label of spironolactone
    answer = on(
        patient(),
        problem("heart failure", "2023-05-01"),
        lvef(30, "2025-08-01"),
        *visit("2025-09-01", bp=(118, 70), pulse=66, k=4.4, nyha_class=2, kg=77),
        egfr(27, DAY),
        potassium(4.6, DAY),
        ARNI_FULL,
        order("bisoprolol", 10, since=SPRING),
        SPIRONOLACTONE,
        DAPAGLIFLOZIN,
    )
    assert changes(answer) == {"lower spironolactone"}
    assert proposed(answer, "lower-dose") == ["spironolactone 12.5 mg once daily"]
