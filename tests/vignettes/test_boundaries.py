"""The last good value beside the first bad one: kinds of heart failure, and every limit on a start.

Each limit of the therapy table must have its pair here; the numbers are those of the sources named beside them, written
down once more and not read from the table.
"""

from __future__ import annotations

import pytest
from asking import assessed, finding, proposed, said
from builders import (
    administration,
    creatinine,
    egfr,
    heart_rate,
    lvef,
    nyha,
    order,
    patient,
    potassium,
    pr_interval,
    pressure,
    problem,
    sodium,
    until,
    weight,
)

from cds.content.load import load_content

DAY = "2025-09-12"
TODAY = "2025-09-15T12:00:00Z"
RAS, BETA, MRA, SGLT2 = "start-ras-inhibitor", "start-beta-blocker", "start-mra", "start-sglt2-inhibitor"
MEASURED = {
    "potassium": lambda value: potassium(value, DAY),
    "creatinine": lambda value: creatinine(value, DAY),
    "creatinine in umol/L": lambda value: creatinine(value, DAY, "umol/L"),
    "egfr": lambda value: egfr(value, DAY),
    "sodium": lambda value: sodium(value, DAY),
    "systolic-bp": lambda value: pressure(value, 60, DAY),
    "heart-rate": lambda value: heart_rate(value, DAY),
    "pr": lambda value: pr_interval(value, DAY),
}
FINE = {"potassium": 4.4, "egfr": 80, "sodium": 140, "systolic-bp": 124, "heart-rate": 74}


def new_hfref(*more, sex="male", as_of=TODAY, **values):
    """A patient of 58 with LVEF 28 % and NYHA II in whom nothing was started; `values` replace what is fine."""
    measured = {**FINE, **{name.replace("_", "-"): value for name, value in values.items()}}
    return assessed(
        patient(born="1967-05-04", sex=sex),
        problem("heart failure", "2025-08-25"),
        lvef(28, "2025-08-28"),
        nyha(2, DAY),
        weight(82, DAY),
        *(MEASURED[name](value) for name, value in measured.items() if value is not None),
        *more,
        as_of=as_of,
    )


def candidates(answer, rule):
    """The drugs a start card proposes; none where there is nothing to start."""
    return [text.split(" ")[0] for text in proposed(answer, rule)] if said(answer, rule) == "open/start" else []


# 2022 AHA/ACC/HFSA guideline, section 2.2; the gaps at 40-41 and 49-50 are closed by policy.
@pytest.mark.parametrize(
    ("percent", "kind"), [(40.0, "hfref"), (40.1, "hfmref"), (41, "hfmref"), (49.9, "hfmref"), (50.0, "hfpef")]
)
def test_the_ejection_fraction_tells_the_kind_of_heart_failure(percent, kind):
    answer = assessed(patient(), problem("heart failure"), lvef(percent, "2025-08-28"), as_of=TODAY)
    assert answer["phenotype"]["kind"] == kind


@pytest.mark.parametrize(("percent", "kind"), [(40.0, "hfref"), (40.1, "hfimpef"), (50.0, "hfimpef")])
def test_after_a_reduced_ejection_fraction_any_rise_above_40_percent_is_improved(percent, kind):
    studies = [lvef(35, "2024-02-01"), lvef(percent, "2025-08-28")]
    assert assessed(patient(), problem("heart failure"), *studies, as_of=TODAY)["phenotype"]["kind"] == kind


# Universal definition 2021: a rise of 10 points or more from the lowest value.
@pytest.mark.parametrize(("percent", "flags"), [(44.9, []), (45.0, ["ud21-improved"])])
def test_a_rise_of_ten_points_is_improved_by_the_universal_definition_too(percent, flags):
    studies = [lvef(35, "2024-02-01"), lvef(percent, "2025-08-28")]
    assert assessed(patient(), problem("heart failure"), *studies, as_of=TODAY)["phenotype"]["flags"] == flags


# 2022 AHA/ACC/HFSA guideline, section 7.3.3 (below 5.0); label of spironolactone (up to 5.0).
@pytest.mark.parametrize(
    ("k", "answer"),
    [(4.99, "open/start"), (5.0, "open/review"), (5.01, "blocked"), (5.04, "blocked"), (5.5, "blocked")],
)
def test_potassium_decides_on_an_mra(k, answer):
    assert said(new_hfref(potassium=k), MRA) == answer


# 2022 AHA/ACC/HFSA guideline, section 7.3.3: eGFR above 30.
@pytest.mark.parametrize(("kidney", "answer"), [(30.0, "blocked"), (29.9, "blocked"), (30.1, "open/start")])
def test_egfr_decides_on_an_mra(kidney, answer):
    assert said(new_hfref(egfr=kidney), MRA) == answer


# Label of spironolactone: 25 mg daily above an eGFR of 50, every other day from 30 to 50. US label of eplerenone: from 50.
@pytest.mark.parametrize(
    ("kidney", "spironolactone", "eplerenone"),
    [
        (50.1, "once daily", "once daily"),
        (50.0, "every other day", "once daily"),
        (49.9, "every other day", "every other day"),
    ],
)
def test_egfr_decides_on_how_often_an_mra_is_taken(kidney, spironolactone, eplerenone):
    offered = proposed(new_hfref(egfr=kidney), MRA)
    assert offered == [f"spironolactone 25 mg {spironolactone}", f"eplerenone 25 mg {eplerenone}"]


# Label of sacubitril/valsartan (EU-type): no start above 5.4; above 5.0 it is weighed (policy).
@pytest.mark.parametrize(
    ("k", "answer", "is_blocked"),
    [(5.0, "open/start", False), (5.2, "open/review", False), (5.4, "open/review", False), (5.41, "open/review", True)],
)
def test_potassium_decides_on_an_arni(k, answer, is_blocked):
    found = new_hfref(potassium=k)
    assert said(found, RAS) == answer
    assert ("arni-potassium-block" in finding(found, RAS)["limits"]) is is_blocked
    assert ("sacubitril/valsartan" in candidates(found, RAS)) is (k <= 5.0)
    # above 5.4 an ACE inhibitor or ARB is what is left to weigh
    weighed = "enalapril" if is_blocked else "sacubitril/valsartan"
    assert k <= 5.0 or f"To weigh before starting {weighed}" in finding(found, RAS)["because"]


# Label of sacubitril/valsartan (EU-type): no start below 100 mmHg. 24/26 mg in a patient new to RAS inhibitors.
@pytest.mark.parametrize(("systolic", "is_offered"), [(99, False), (100, True), (110, True), (111, True)])
def test_systolic_pressure_decides_on_an_arni(systolic, is_offered):
    found = new_hfref(systolic_bp=systolic)
    if is_offered:
        assert proposed(found, RAS)[0] == "sacubitril/valsartan 24/26 mg twice daily"
    else:
        assert said(found, RAS) == "open/review"
        assert f"systolic pressure {systolic} mmHg on {DAY} is below 100 mmHg" in finding(found, RAS)["because"]


# Label of sacubitril/valsartan: 36 hours after the last dose of an ACE inhibitor. An end known to the day is 23:59 (policy).
WASHOUT = [
    ("2025-09-14T00:01:00Z", TODAY, False, "35 h 59 min"),
    ("2025-09-14T00:00:00Z", TODAY, True, "36 h"),
    ("2025-09-14T08:00:00Z", "2025-09-15T19:59:00Z", False, "a minute before"),
    ("2025-09-14T08:00:00Z", "2025-09-15T20:00:00Z", True, "to the minute"),
    ("2025-09-14T10:00:00+02:00", "2025-09-15T20:00:00Z", True, "in another zone"),
    ("2025-09-14", "2025-09-15T20:00:00Z", False, "on a day, the next evening"),
    ("2025-09-14", "2025-09-16T11:58:00Z", False, "on a day, a minute before"),
    ("2025-09-14", "2025-09-16T11:59:00Z", True, "on a day, to the minute"),
]


@pytest.mark.parametrize(("ended", "as_of", "is_offered", "_why"), WASHOUT, ids=[row[-1] for row in WASHOUT])
def test_an_arni_waits_36_hours_for_the_ace_inhibitor_to_leave(ended, as_of, is_offered, _why):
    found = new_hfref(until(order("enalapril", 10, 2, since="2025-03-01"), ended), as_of=as_of)
    assert said(found, RAS) == "open/start"
    assert ("sacubitril/valsartan" in candidates(found, RAS)) is is_offered
    said_why = "an ACE inhibitor is running or ended less than 36 hours ago" in finding(found, RAS)["because"]
    assert said_why is not is_offered


@pytest.mark.parametrize(("given", "is_offered"), [("2025-09-14T00:01:00Z", False), ("2025-09-14T00:00:00Z", True)])
def test_the_last_administration_starts_the_36_hours(given, is_offered):
    stopped = until(order("enalapril", 10, 2, since="2025-03-01"), "2025-09-12")
    found = new_hfref(stopped, administration("enalapril", given, 10))
    assert ("sacubitril/valsartan" in candidates(found, RAS)) is is_offered


@pytest.mark.parametrize(("ended", "is_offered"), [("2025-09-14T00:01:00Z", False), ("2025-09-14T00:00:00Z", True)])
def test_an_ace_inhibitor_waits_36_hours_after_an_arni(ended, is_offered):
    found = new_hfref(until(order("sacubitril/valsartan", 50, 2, since="2025-03-01"), ended))
    assert ("enalapril" in candidates(found, RAS)) is is_offered


def test_an_arb_needs_no_washout_before_an_arni():
    found = new_hfref(until(order("valsartan", 80, 2, since="2025-03-01"), "2025-09-15T09:00:00Z"))
    assert candidates(found, RAS)[0] == "sacubitril/valsartan"


# Labels of dapagliflozin (25) and empagliflozin (20); from 20 to below 25 empagliflozin is offered (policy).
@pytest.mark.parametrize(
    ("kidney", "offered"),
    [
        (25.0, ["dapagliflozin", "empagliflozin"]),
        (24.9, ["empagliflozin"]),
        (20.0, ["empagliflozin"]),
        (19.9, []),
    ],
)
def test_egfr_decides_on_the_sglt2_inhibitor(kidney, offered):
    found = new_hfref(egfr=kidney)
    assert said(found, SGLT2) == ("open/start" if offered else "blocked")
    assert candidates(found, SGLT2) == offered


# Below 50 a block (policy, from the caution of Postgrad Med J table 3); STRONG-HF holds below 55.
@pytest.mark.parametrize(
    ("rate", "answer"), [(49, "blocked"), (50, "open/review"), (54, "open/review"), (55, "open/start")]
)
def test_heart_rate_decides_on_a_beta_blocker(rate, answer):
    assert said(new_hfref(heart_rate=rate), BETA) == answer


# rule, analyte, last good value, first bad value, effect; the source of each number beside it
PAIRS = {
    # caution above 5.0 (UK practical guidance; Postgrad Med J table 2); no start above 5.5 (policy)
    "ace-inhibitor-arb-potassium-review": (RAS, "potassium", 5.0, 5.01, "review"),
    "ace-inhibitor-arb-potassium-block": (RAS, "potassium", 5.5, 5.51, "block"),
    # ESC practical guidance stops below 20; no start there either (policy)
    "ras-inhibitor-egfr-block": (RAS, "egfr", 20.0, 19.9, "block"),
    # UK practical guidance: specialist advice below 30, above 221 umol/L (2.5 mg/dL), below 90 mmHg
    "ras-inhibitor-egfr-review": (RAS, "egfr", 30.0, 29.9, "review"),
    "ace-inhibitor-arb-creatinine-review": (RAS, "creatinine", 2.5, 2.501, "review"),
    "ace-inhibitor-arb-creatinine-review in umol/L": (RAS, "creatinine in umol/L", 221, 222, "review"),
    "ace-inhibitor-arb-systolic-block": (RAS, "systolic-bp", 90, 89, "block"),
    "ace-inhibitor-arb-systolic-review": (RAS, "systolic-bp", 100, 99, "review"),  # policy
    "ras-inhibitor-sodium-review": (RAS, "sodium", 130, 129, "review"),  # NHS Specialist Pharmacy Service
    "arni-potassium-block": (RAS, "potassium", 5.4, 5.41, "block"),  # label of sacubitril/valsartan
    "arni-potassium-review": (RAS, "potassium", 5.0, 5.01, "review"),  # policy
    "arni-systolic-block": (RAS, "systolic-bp", 100, 99, "block"),  # label of sacubitril/valsartan
    # Postgrad Med J table 3 (below 50, below 90); STRONG-HF holds (below 55, below 95); PR interval from memory
    "beta-blocker-heart-rate-block": (BETA, "heart-rate", 50, 49, "block"),
    "beta-blocker-heart-rate-review": (BETA, "heart-rate", 55, 54, "review"),
    "beta-blocker-systolic-block": (BETA, "systolic-bp", 90, 89, "block"),
    "beta-blocker-systolic-review": (BETA, "systolic-bp", 95, 94, "review"),
    "beta-blocker-pr-review": (BETA, "pr", 240, 241, "review"),
    # 2022 AHA/ACC/HFSA guideline, section 7.3.3, and label of spironolactone; creatinine: 2013 ACCF/AHA guideline
    "mra-potassium-block": (MRA, "potassium", 5.0, 5.01, "block"),
    "mra-potassium-review": (MRA, "potassium", 4.99, 5.0, "review"),
    "mra-egfr-block": (MRA, "egfr", 30.1, 30.0, "block"),
    "mra-creatinine-block-men": (MRA, "creatinine", 2.5, 2.501, "block"),
    "mra-creatinine-block-men in umol/L": (MRA, "creatinine in umol/L", 221, 222, "block"),
    "mra-creatinine-block-women": (MRA, "creatinine", 2.0, 2.001, "block"),
    "mra-creatinine-block-women in umol/L": (MRA, "creatinine in umol/L", 177, 178, "block"),
    "sglt2-inhibitor-egfr-block": (SGLT2, "egfr", 20.0, 19.9, "block"),  # label of empagliflozin
    "dapagliflozin-egfr-block": (SGLT2, "egfr", 25.0, 24.9, "block"),  # label of dapagliflozin
    "sglt2-inhibitor-systolic-review": (SGLT2, "systolic-bp", 95, 94, "review"),  # trial entry, from memory
}
LIMITS = {limit.id: limit for limit in load_content().tables.limits}


def test_every_limit_has_its_pair_of_values_in_each_unit_its_source_prints():
    wanted = set(LIMITS) | {f"{limit.id} in {limit.unit}" for limit in LIMITS.values() if limit.also_unit is not None}
    assert set(PAIRS) == wanted


@pytest.mark.parametrize("name", PAIRS)
def test_a_limit_holds_from_its_first_bad_value_on(name):
    rule, analyte, good, bad, effect = PAIRS[name]
    limit = LIMITS[name.partition(" in ")[0]]
    assert limit.effect == effect
    values = {"egfr": None} if analyte.startswith("creatinine") else {}
    sex = limit.sex or "male"
    before = new_hfref(**values, **{analyte: good}, sex=sex)
    after = new_hfref(**values, **{analyte: bad}, sex=sex)
    assert limit.id not in finding(before, rule)["limits"]
    assert limit.id in finding(after, rule)["limits"]
    # what blocks is said with its value, also where another drug of the class is offered instead
    assert effect != "block" or f" {bad:g} " in finding(after, rule)["because"]
