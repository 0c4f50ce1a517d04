"""Every limit under treatment and every value out of range: the last value that does nothing beside the first that does.

A row of the tables without a pair here fails.
"""

from __future__ import annotations

import pytest
from asking import assessed, card, finding, order_check_of, said
from builders import (
    creatinine,
    egfr,
    heart_rate,
    icd,
    lvef,
    named,
    order,
    patient,
    potassium,
    pressure,
    problem,
    sodium,
    visit,
)

from cds.content.load import load_content

TODAY = "2025-09-15T12:00:00Z"
DAY = "2025-09-12"
SAFETY = load_content().tables.safety
LIMITS = {row.id: row for row in SAFETY.treatment_limits}
RANGES = {row.id: row for row in SAFETY.out_of_range}

EPLERENONE = order("eplerenone", 25, since="2025-03-01")  # below its target of 50 mg: it may be raised
SPIRONOLACTONE = order("spironolactone", 25, since="2025-03-01")
RAMIPRIL = order("ramipril", 2.5, since="2025-08-20")
LOSARTAN = order("losartan", 25, since="2025-08-20")
ARNI = order("sacubitril/valsartan", 50, 2, since="2025-08-20")
FINERENONE = order("finerenone", 20, since="2025-03-01")
TRIMETHOPRIM = named("trimethoprim", 200, 2, since="2025-09-08")
BISOPROLOL = order("bisoprolol", 2.5, since="2025-03-01")
CARVEDILOL = order("carvedilol", 12.5, 2, since="2025-03-01")


def treated(*more, percent=32, as_of=TODAY):
    """A man of 58 in NYHA class IV (so that no ARNI is proposed) with good values on 1 September; newer ones on top."""
    return assessed(
        patient(born="1967-05-04"),
        problem("heart failure", "2024-05-01"),
        lvef(percent, "2025-07-15"),
        *visit("2025-09-01", bp=(120, 74), pulse=70, k=4.4, crea=0.9, nyha_class=4, kg=80),
        *more,
        as_of=as_of,
    )


def k(value, day=DAY):
    return [potassium(value, day)]


def crea(value, unit="mg/dL"):
    return [creatinine(value, DAY, unit)]


def kidney(value):
    return [egfr(value, DAY)]


def systolic(value):
    return [pressure(value, 60, DAY)]


def rate(value, *earlier):
    return [heart_rate(value, DAY), *(heart_rate(pulse, "2025-09-10") for pulse in earlier)]


def rise(percent):
    """Creatinine above the 100 umol/L of ten days before the start."""
    return [creatinine(100, "2025-08-10", "umol/L"), creatinine(100 + percent, DAY, "umol/L")]


def renal_and_potassium_pairs(prefix, drug):
    """What ACE inhibitor, ARB and ARNI have alike."""
    return [
        (f"{prefix}-potassium-stop", drug, k(5.9), k(6.0)),  # "above 6.0" in print; inclusive by policy
        (
            f"{prefix}-potassium-lower",
            drug,
            k(5.5),
            k(5.6),
        ),  # heart-failure practice tables (Postgrad Med J): above 5.5
        (f"{prefix}-potassium-no-raise", drug, k(5.0), k(5.1)),  # STRONG-HF safety indicator: above 5.0
        # ESC practical guidance: above 3.5 mg/dL (310 umol/L), eGFR below 20, or a rise above 100 %
        (f"{prefix}-creatinine-stop", drug, crea(3.5), crea(3.51)),
        (f"{prefix}-creatinine-stop", drug, crea(310, "umol/L"), crea(311, "umol/L")),
        (f"{prefix}-egfr-stop", drug, kidney(20.0), kidney(19.9)),
        (f"{prefix}-creatinine-rise-stop", drug, rise(100), rise(101)),
        # heart-failure practice tables (Postgrad Med J): above 50 %, or above 3.0 mg/dL (266 umol/L)
        (f"{prefix}-creatinine-rise-lower", drug, rise(50), rise(51)),
        (f"{prefix}-creatinine-lower", drug, crea(3.0), crea(3.01)),
        (f"{prefix}-creatinine-lower", drug, crea(266, "umol/L"), crea(267, "umol/L")),
        # Clark and others, Heart 2019: from 30 % on
        (f"{prefix}-creatinine-rise-review", drug, rise(29), rise(30)),
        # STRONG-HF safety indicators: eGFR below 30, systolic pressure below 95
        (f"{prefix}-egfr-no-raise", drug, kidney(30.0), kidney(29.9)),
        (f"{prefix}-systolic-no-raise", drug, systolic(95), systolic(94)),
    ]


# row | drug | last values that do nothing by this row | first that do
PAIRS = [
    # label of eplerenone: raise below 5.0, lower from 5.5, withhold from 6.0; every steroidal MRA alike by policy
    ("mra-potassium-stop", EPLERENONE, k(5.9), k(6.0)),
    ("mra-potassium-stop", SPIRONOLACTONE, k(5.9), k(6.0)),
    ("mra-potassium-lower", EPLERENONE, k(5.4), k(5.5)),
    ("mra-potassium-lower", SPIRONOLACTONE, k(5.4), k(5.5)),
    ("mra-potassium-no-raise", EPLERENONE, k(4.9), k(5.0)),
    # 2022 AHA/ACC/HFSA guideline, section 7.3.3: potassium that cannot be held below 5.5; two values in 90 days by policy
    ("mra-potassium-stop-again", SPIRONOLACTONE, k(5.5) + k(5.4, "2025-08-20"), k(5.5) + k(5.5, "2025-08-20")),
    ("mra-potassium-stop-again", SPIRONOLACTONE, k(5.5) + k(5.5, "2025-06-13"), k(5.5) + k(5.5, "2025-06-14")),
    ("mra-potassium-lower-trimethoprim", SPIRONOLACTONE, [*k(5.4), TRIMETHOPRIM], [*k(5.5), TRIMETHOPRIM]),
    ("mra-potassium-lower-trimethoprim", SPIRONOLACTONE, k(5.5), [*k(5.5), TRIMETHOPRIM]),
    # NHS Specialist Pharmacy Service: above 310 umol/L or eGFR below 20 stop; eGFR below 30 halve
    ("mra-creatinine-stop", SPIRONOLACTONE, crea(3.5), crea(3.51)),
    ("mra-creatinine-stop", SPIRONOLACTONE, crea(310, "umol/L"), crea(311, "umol/L")),
    ("mra-egfr-stop", SPIRONOLACTONE, kidney(20.0), kidney(19.9)),
    ("mra-egfr-lower", SPIRONOLACTONE, kidney(30.0), kidney(29.9)),
    # heart-failure practice tables (Postgrad Med J): above 2.5 mg/dL (221 umol/L)
    ("mra-creatinine-lower", SPIRONOLACTONE, crea(2.5), crea(2.51)),
    ("mra-creatinine-lower", SPIRONOLACTONE, crea(221, "umol/L"), crea(222, "umol/L")),
    # label of spironolactone: the full dose above an eGFR of 50
    ("mra-egfr-no-raise", order("eplerenone", 12.5, since="2025-03-01"), kidney(50.1), kidney(50.0)),
    # label of finerenone (kidney disease table): raise up to 4.8, withhold above 5.5; an end from 6.0 by policy
    ("finerenone-potassium-stop", FINERENONE, k(5.9), k(6.0)),
    ("finerenone-potassium-lower", FINERENONE, k(5.5), k(5.6)),
    *renal_and_potassium_pairs("ace-inhibitor-arb", RAMIPRIL),
    *renal_and_potassium_pairs("ace-inhibitor-arb", LOSARTAN),
    *renal_and_potassium_pairs("arni", ARNI),
    ("arni-potassium-treatment-review", ARNI, k(5.4), k(5.41)),  # sacubitril/valsartan label (EU text): above 5.4
    # STRONG-HF safety indicators: heart rate below 55, systolic pressure below 95
    ("beta-blocker-heart-rate-no-raise", BISOPROLOL, rate(55), rate(54)),
    ("beta-blocker-systolic-no-raise", BISOPROLOL, systolic(95), systolic(94)),
    # heart-failure practice tables (Postgrad Med J): below 50; without symptoms a review by policy, twice: lower
    ("beta-blocker-heart-rate-treatment-review", BISOPROLOL, rate(50), rate(49)),
    ("beta-blocker-heart-rate-lower", BISOPROLOL, rate(49, 50), rate(49, 49)),
    ("carvedilol-heart-rate-review", CARVEDILOL, rate(55), rate(54)),  # label of carvedilol: below 55
]
# Clark and others, Heart 2019: without a reduced ejection fraction a rise of 30 % already asks for less
PRESERVED_PAIRS = [
    ("ace-inhibitor-arb-creatinine-rise-lower-hfpef", RAMIPRIL, rise(29), rise(30)),
    ("arni-creatinine-rise-lower-hfpef", ARNI, rise(29), rise(30)),
]
RANGE_PAIRS = [
    # "above 6.5" and "above 6.0" in print; inclusive by policy
    ("potassium-emergency", k(6.4), k(6.5)),
    ("potassium-very-high", k(5.9), k(6.0)),
    ("potassium-high", k(5.5), k(5.6)),  # heart-failure practice tables (Postgrad Med J): above 5.5
    ("potassium-raised", k(5.0), k(5.1)),  # STRONG-HF safety indicator: above 5.0
    ("potassium-very-low", k(3.0), k(2.9)),  # common practice
    ("potassium-low", k(3.5), k(3.4)),  # common practice
    ("sodium-very-low", [sodium(125, DAY)], [sodium(124, DAY)]),  # common practice
    ("sodium-low-specialist", [sodium(130, DAY)], [sodium(129, DAY)]),  # UK practical guidance on ACE inhibitors
    ("sodium-low", [sodium(135, DAY)], [sodium(134, DAY)]),  # common practice
    ("egfr-very-low", kidney(20.0), kidney(19.9)),  # ESC practical guidance: below 20
    ("egfr-low", kidney(30.0), kidney(29.9)),  # the limit of many labels
    ("systolic-low", systolic(90), systolic(89)),  # heart-failure practice tables (Postgrad Med J): below 90
    ("heart-rate-low", rate(50), rate(49)),  # heart-failure practice tables (Postgrad Med J): below 50
]


TIERS = {"contraindicated": "danger", "major": "act", "caution": "note"}


def drug_of(medication):
    return medication["medicationCodeableConcept"]["coding"][0]["display"]


def fired(answer, drug):
    """The rows named by whatever is said about the drug."""
    return {limit for f in answer["findings"] if f["about"] == drug for limit in f["limits"]}


def names(pairs):
    return [f"{pair[0]}-{number}" for number, pair in enumerate(pairs)]


def test_every_limit_and_range_has_its_pair_of_values():
    assert {pair[0] for pair in [*PAIRS, *PRESERVED_PAIRS]} | {"finerenone-potassium-no-raise"} == set(LIMITS)
    assert {pair[0] for pair in RANGE_PAIRS} == set(RANGES)


EFFECTS = {
    "stop": ("stop-harmful-drug", "open/stop"),
    "lower": ("lower-dose", "open/lower"),
    "review": ("lower-dose", "open/review"),
    "no-raise": ("raise-dose", "blocked"),
}


def check_pair(name, medication, fine, bad, percent):
    drug = drug_of(medication)
    assert name not in fired(treated(medication, *fine, percent=percent), drug)
    answer = treated(medication, *bad, percent=percent)
    assert name in fired(answer, drug)
    rule, expected = EFFECTS[LIMITS[name].effect]
    # a review and a lowering of the same value are one finding, led by the lowering
    either = {"open/review", "open/lower"} if LIMITS[name].effect == "review" else {expected}
    assert said(answer, rule, drug) in either


@pytest.mark.parametrize(("name", "medication", "fine", "bad"), PAIRS, ids=names(PAIRS))
def test_a_limit_acts_on_the_dose_from_its_first_bad_value_on(name, medication, fine, bad):
    check_pair(name, medication, fine, bad, 32)


@pytest.mark.parametrize("percent", [45, 55])
@pytest.mark.parametrize(("name", "medication", "fine", "bad"), PRESERVED_PAIRS, ids=names(PRESERVED_PAIRS))
def test_above_40_percent_a_rise_of_creatinine_acts_earlier(name, medication, fine, bad, percent):
    check_pair(name, medication, fine, bad, percent)
    assert name not in fired(treated(medication, *bad, percent=32), drug_of(medication))


# label of finerenone (kidney disease table): raise up to 4.8. No rule raises it yet, so an order to raise it is checked
@pytest.mark.parametrize(("value", "speaks"), [(4.8, False), (4.9, True)], ids=["4.8", "4.9"])
def test_an_order_to_raise_finerenone_is_held_against_its_potassium(value, speaks):
    answer = order_check_of(
        patient(),
        problem("heart failure", "2024-05-01"),
        lvef(45, "2025-07-15"),
        *visit(DAY, bp=(120, 74), pulse=70, k=value, crea=0.9, nyha_class=2, kg=80),
        order("finerenone", 10, since="2025-03-01"),
        order("finerenone", 20, since="2025-09-15", status="draft"),
        as_of=TODAY,
    )
    (one,) = answer["orders"]
    reasons = [text for c in one["cards"] if c["rule"] == "order-limits" for text in c["because"]]
    assert any("is above 4.8 mmol/L" in text for text in reasons) == speaks


@pytest.mark.parametrize(
    "medication",
    [EPLERENONE, RAMIPRIL, LOSARTAN, ARNI, BISOPROLOL, CARVEDILOL],
    ids=["eplerenone", "ramipril", "losartan", "arni", "bisoprolol", "carvedilol"],
)
def test_with_good_values_and_enough_time_the_dose_is_raised(medication):
    answer = treated(medication)
    assert said(answer, "raise-dose", drug_of(medication)) == "open/raise"
    assert said(answer, "lower-dose", drug_of(medication)) == "met"


@pytest.mark.parametrize(("name", "fine", "bad"), RANGE_PAIRS, ids=names(RANGE_PAIRS))
def test_a_value_asks_for_attention_from_its_first_bad_value_on(name, fine, bad):
    row = RANGES[name]
    drugs = [RAMIPRIL] if row.under_classes else []
    assert name not in finding(treated(*drugs, *fine), "lab-out-of-range", row.analyte)["limits"]
    answer = treated(*drugs, *bad)
    one = finding(answer, "lab-out-of-range", row.analyte)
    assert (one["outcome"], one["limits"]) == ("open", [name])
    assert card(answer, "lab-out-of-range")["tier"] == TIERS[row.severity]


@pytest.mark.parametrize(
    "medication", [EPLERENONE, RAMIPRIL, LOSARTAN, ARNI], ids=["eplerenone", "ramipril", "losartan", "arni"]
)
def test_a_potassium_of_5_1_asks_for_attention_only_where_a_drug_raises_it(medication):
    assert said(treated(medication, *k(5.1)), "lab-out-of-range", "potassium") == "open/test"
    assert said(treated(BISOPROLOL, *k(5.1)), "lab-out-of-range", "potassium") == "met"


def test_on_dialysis_neither_egfr_nor_creatinine_changes_a_dose():
    dialysis = problem("dialysis", "2024-01-01", code=icd("Z99.2", "Dependence on renal dialysis"))
    for values in (kidney(8.0), crea(6.8), rise(150)):
        answer = treated(dialysis, RAMIPRIL, *values)
        assert said(answer, "stop-harmful-drug", "ramipril") == "not-applicable"
        assert said(answer, "lower-dose", "ramipril") == "met"
        assert said(answer, "lab-out-of-range", "egfr") == "not-applicable"


def test_with_a_pacemaker_a_slow_pulse_changes_no_dose():
    pacemaker = problem("pacemaker", "2024-01-01", code=icd("Z95.0", "Presence of cardiac pacemaker"))
    answer = treated(pacemaker, CARVEDILOL, *rate(48, 48))
    assert said(answer, "lower-dose", "carvedilol") == "met"
    assert said(answer, "raise-dose", "carvedilol") == "open/raise"
    assert said(answer, "lab-out-of-range", "heart-rate") == "met"


# how long a value counts for a change of dose: 30 days (policy)
@pytest.mark.parametrize(("day", "outcome"), [("2025-08-16", "open/lower"), ("2025-08-15", "unknown")])
def test_a_value_changes_a_dose_for_30_days(day, outcome):
    answer = assessed(
        patient(),
        problem("heart failure", "2024-05-01"),
        lvef(32, "2025-07-15"),
        potassium(5.6, day),
        creatinine(0.9, DAY),
        SPIRONOLACTONE,
        as_of=TODAY,
    )
    assert said(answer, "lower-dose", "spironolactone") == outcome


def test_the_same_potassium_in_milliequivalents_acts_alike():
    answer = treated(SPIRONOLACTONE, potassium(5.5, DAY, unit="meq/L"))
    assert said(answer, "lower-dose", "spironolactone") == "open/lower"


def test_an_egfr_of_29_9_is_not_rounded_to_30_and_a_potassium_of_5_04_is_above_5_0():
    assert "mra-egfr-lower" in fired(treated(SPIRONOLACTONE, *kidney(29.9)), "spironolactone")
    assert "arni-potassium-no-raise" in fired(treated(ARNI, *k(5.04)), "sacubitril/valsartan")


def test_one_potassium_of_6_2_makes_one_card_for_all_the_drugs_it_bears_on():
    answer = treated(SPIRONOLACTONE, RAMIPRIL, *k(6.2))
    assert said(answer, "stop-harmful-drug", "spironolactone") == "open/stop"
    assert said(answer, "stop-harmful-drug", "ramipril") == "open/stop"
    (danger,) = [c for c in answer["cards"] if c["tier"] == "danger"]
    assert danger["tier"] == "danger"
    assert card(answer, "stop-harmful-drug") == danger
    assert not [c for c in answer["cards"] if c["rule"] in ("lower-dose", "raise-dose", "lab-out-of-range")]


@pytest.mark.parametrize(
    ("values", "answer"),
    [(k(5.0), "keep"), (k(5.4), "keep"), (k(5.5), "lower"), (k(5.9), "lower"), (k(6.0), "stop")],
)
def test_a_steroidal_mra_is_kept_lowered_or_stopped_by_its_potassium(values, answer):
    # label of eplerenone: 5.0 to 5.4 keep, 5.5 to 5.9 lower, from 6.0 withhold
    found = treated(SPIRONOLACTONE, *values)
    said_of = {said(found, rule, "spironolactone") for rule in ("stop-harmful-drug", "lower-dose")}
    expected = {
        "keep": {"not-applicable", "met"},
        "lower": {"not-applicable", "open/lower"},
        "stop": {"open/stop", "blocked"},
    }
    assert said_of == expected[answer]
