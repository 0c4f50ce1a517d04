"""Drugs that do harm in heart failure: for every row a patient in whom it speaks and one in whom it is silent."""

from __future__ import annotations

import pytest
from asking import assessed, card, finding, said
from builders import (
    ATC,
    RXNORM,
    SNOMED,
    admission,
    allergy,
    egfr,
    icd,
    lvef,
    named,
    nyha,
    order,
    patient,
    problem,
    statement,
    subject,
    visit,
)

from cds.content.load import load_content

TODAY = "2025-09-15T12:00:00Z"
DAY = "2025-09-12"
HARMS = {row.id: row for row in load_content().tables.safety.harms}
HEARTS = {
    "reduced": [problem("heart failure", "2024-05-01"), lvef(30, "2025-06-01")],
    "improved to 45": [problem("heart failure", "2022-05-01"), lvef(25, "2022-06-01"), lvef(45, "2025-06-01")],
    "improved to 49.9": [problem("heart failure", "2022-05-01"), lvef(25, "2022-06-01"), lvef(49.9, "2025-06-01")],
    "improved to 50": [problem("heart failure", "2022-05-01"), lvef(25, "2022-06-01"), lvef(50, "2025-06-01")],
    "mildly reduced": [problem("heart failure", "2024-05-01"), lvef(45, "2025-06-01")],
    "preserved": [problem("heart failure", "2024-05-01"), lvef(58, "2025-06-01")],
    "not measured": [problem("heart failure", "2024-05-01")],
    "weak without symptoms": [problem("hypertension", "2015-03-01"), lvef(35, "2025-06-01")],
    "healthy": [problem("hypertension", "2015-03-01")],
}


def with_heart(heart, *more, born="1961-05-04"):
    return assessed(
        patient(born=born),
        *HEARTS[heart],
        *visit(DAY, bp=(124, 76), pulse=72, k=4.4, crea=1.0),
        *more,
        as_of=TODAY,
    )


def rows_of(answer, drug):
    """The rows named against a drug."""
    return {
        row for f in answer["findings"] if (f["rule"], f["about"]) == ("stop-harmful-drug", drug) for row in f["limits"]
    }


CORONARY = problem("coronary disease", "2015-01-01", code=icd("I25.10", "Coronary artery disease"))
DIALYSIS = problem("dialysis", "2024-01-01", code=icd("Z99.2", "Dependence on renal dialysis"))
PULMONARY = problem("pulmonary hypertension", "2020-01-01", code=icd("I27.0", "Primary pulmonary hypertension"))

# row: drug, where it speaks (kind of heart failure, what else), where it is silent
PATIENTS = {
    # 2022 AHA/ACC/HFSA guideline, section 7.3.7, and section 6.1 for a weak heart without symptoms
    "e-non-dhp-ccb": (named("verapamil", 120), ("reduced",), ("preserved",)),
    "e-non-dhp-ccb-weak-heart": (named("diltiazem", 180), ("improved to 49.9",), ("improved to 50",)),
    "e-non-dhp-ccb-hfmref": (named("verapamil", 120), ("mildly reduced",), ("preserved",)),
    "e-dhp-ccb": (named("nifedipine", 30), ("reduced",), ("preserved",)),
    "e-nsaid": (named("naproxen", 500, 2), ("preserved",), ("healthy",)),
    "e-glitazone": (named("pioglitazone", 30), ("preserved",), ("healthy",)),
    "e-glitazone-weak-heart": (named("rosiglitazone", 4), ("weak without symptoms",), ("healthy",)),
    "e-dpp4": (named("saxagliptin", 5), ("reduced",), ("healthy",)),
    "e-class-1-antiarrhythmic": (named("flecainide", 100, 2), ("weak without symptoms",), ("healthy",)),
    "e-class-1-antiarrhythmic-ischaemic": (
        named("propafenone", 150, 3),
        ("preserved", CORONARY),
        ("preserved",),
    ),
    "e-dronedarone": (named("dronedarone", 400, 2), ("reduced",), ("preserved",)),
    # labels: boxed warnings and contraindications
    "e-glitazone-nyha-3-4": (named("pioglitazone", 30), ("reduced", nyha(3, DAY)), ("reduced", nyha(2, DAY))),
    "e-dronedarone-nyha-4": (named("dronedarone", 400, 2), ("preserved", nyha(4, DAY)), ("preserved", nyha(3, DAY))),
    "e-minoxidil": (named("minoxidil", 5), ("preserved",), ("healthy",)),
    "e-cilostazol": (named("cilostazol", 100, 2), ("preserved",), ("healthy",)),
    "e-itraconazole": (named("itraconazole", 200), ("mildly reduced",), ("healthy",)),
    "e-tnf-inhibitor": (named("adalimumab"), ("reduced", nyha(3, DAY)), ("reduced", nyha(2, DAY))),
    "e-citalopram": (named("citalopram", 60), ("reduced",), ("healthy",)),
    "e-citalopram-older": (named("citalopram", 40), ("reduced",), ("healthy",)),
    "e-pregabalin": (named("pregabalin", 75, 2), ("reduced", nyha(3, DAY)), ("reduced", nyha(2, DAY))),
    "e-metformin-egfr": (
        order("metformin", 500, 2, since="2025-03-01"),
        ("reduced", egfr(29.9, DAY)),
        ("reduced", egfr(30.0, DAY)),
    ),
    "e-metformin-admission": (
        order("metformin", 500, 2, since="2025-03-01"),
        ("reduced", admission("2025-09-02", "2025-09-08")),
        ("reduced", admission("2025-09-01", "2025-09-07")),
    ),
    "e-metformin-dialysis": (order("metformin", 500, 2, since="2025-03-01"), ("reduced", DIALYSIS), ("reduced",)),
    "e-myosin-inhibitor": (named("mavacamten", 5), ("improved to 49.9",), ("improved to 50",)),
    # AHA statement of 2016 on drugs that may cause or worsen heart failure
    "e-old-antiarrhythmic": (named("disopyramide", 100, 2), ("reduced",), ("preserved",)),
    "e-sotalol": (named("sotalol", 80, 2), ("reduced",), ("preserved",)),
    "e-alpha-blocker": (named("doxazosin", 4), ("preserved",), ("healthy",)),
    "e-moxonidine": (named("moxonidine", 0.2), ("reduced",), ("preserved",)),
    "e-clonidine": (named("clonidine", 0.1, 2), ("reduced",), ("preserved",)),
    "e-tricyclic": (named("amitriptyline", 25), ("reduced",), ("preserved",)),
    "e-corticosteroid": (named("prednisolone", 10), ("preserved",), ("healthy",)),
    "e-sympathomimetic": (named("pseudoephedrine", 60), ("preserved",), ("healthy",)),
    # 2022 AHA/ACC/HFSA guideline: section 11.2 (cancer therapy), top ten message 3, section 10
    "e-anthracycline": (named("doxorubicin"), ("reduced",), ("healthy",)),
    "e-cancer-therapy": (named("trastuzumab"), ("preserved",), ("healthy",)),
    "e-nitrate-hfpef": (named("isosorbide mononitrate", 30), ("preserved",), ("preserved", CORONARY)),
    "e-pde5-hfpef": (order("tadalafil", 20, since="2025-03-01"), ("preserved",), ("preserved", PULMONARY)),
    "e-erythropoietin": (named("darbepoetin alfa"), ("reduced",), ("healthy",)),
    # trials in recently decompensated patients; 30 days by policy
    "e-glp1-decompensated": (
        named("liraglutide"),
        ("reduced", admission("2025-08-10", "2025-08-16")),
        ("reduced", admission("2025-08-10", "2025-08-15")),
    ),
}


def name_of(medication):
    concept = medication["medicationCodeableConcept"]
    return concept.get("text") or concept["coding"][0]["display"]


def test_every_row_has_a_patient_in_whom_it_speaks_and_one_in_whom_it_is_silent():
    assert set(PATIENTS) == set(HARMS)


@pytest.mark.parametrize("row", PATIENTS)
def test_a_row_speaks_where_it_does_harm_and_is_silent_where_it_does_not(row):
    drug, speaks, silent = PATIENTS[row]
    answer = with_heart(*speaks, drug)
    assert row in rows_of(answer, name_of(drug))
    assert said(answer, "stop-harmful-drug", name_of(drug)) in ("open/stop", "open/review")
    assert row not in rows_of(with_heart(*silent, drug), name_of(drug))


TIERS = {"contraindicated": "danger", "major": "act", "caution": "note"}


@pytest.mark.parametrize("row", PATIENTS)
def test_a_harmful_drug_has_a_card_as_urgent_as_its_row_at_least(row):
    drug, speaks, _ = PATIENTS[row]
    order_of_tiers = ["danger", "act", "plan", "note"]
    (only,) = [c for c in with_heart(*speaks, drug)["cards"] if c["rule"] == "stop-harmful-drug"]
    assert order_of_tiers.index(only["tier"]) <= order_of_tiers.index(TIERS[HARMS[row].severity])
    assert only["about"] == name_of(drug)


@pytest.mark.parametrize(
    ("drug", "heart"),
    [
        ("amlodipine", "reduced"),  # 2022 AHA/ACC/HFSA guideline, section 7.3.7: amlodipine is neutral
        ("felodipine", "reduced"),  # as amlodipine
        ("verapamil", "preserved"),  # the harm is for a reduced ejection fraction
        ("sitagliptin", "reduced"),  # only saxagliptin and alogliptin are named by the guideline
        ("linagliptin", "reduced"),
        ("acetylsalicylic acid", "reduced"),  # low-dose aspirin is no NSAID here: common practice
        ("amiodarone", "reduced"),  # common practice
        ("paracetamol", "reduced"),  # common practice
        ("amitriptyline", "preserved"),
    ],
)
def test_a_drug_that_does_no_harm_in_this_heart_failure_is_left_alone(drug, heart):
    assert rows_of(with_heart(heart, named(drug, 5)), drug) == set()


@pytest.mark.parametrize("percent", [38, 40])
def test_a_weak_heart_without_symptoms_must_not_have_diltiazem(percent):
    # 2022 AHA/ACC/HFSA guideline, section 6.1: harm in stage B
    answer = assessed(
        patient(),
        problem("hypertension", "2015-03-01"),
        lvef(percent, "2025-06-01"),
        named("diltiazem", 180),
        as_of=TODAY,
    )
    assert answer["phenotype"]["kind"] == "pre-hf"
    assert said(answer, "stop-harmful-drug", "diltiazem") == "open/stop"


def test_nsaids_in_a_weak_heart_without_symptoms_are_left_alone():
    assert rows_of(with_heart("weak without symptoms", named("naproxen", 500, 2)), "naproxen") == set()


@pytest.mark.parametrize(
    "taken",
    [
        named("ibuprofen", 400, dosageInstruction=[{"asNeededBoolean": True, "text": "400 mg as needed"}]),
        statement("ibuprofen", 400, since="2025-08-01", informationSource=subject()),
        order("ibuprofen", 400, 3, since="2025-08-01", status="unknown"),
        order(
            "ibuprofen",
            400,
            since="2025-08-01",
            concept={"coding": [{"system": ATC, "code": "M01AE01", "display": "ibuprofen"}]},
        ),
        # a fixed combination counts in every class it holds
        named("ibuprofen / famotidine", 800),
    ],
    ids=["as needed", "patient-reported", "status unknown", "known by its ATC code", "in a combination"],
)
def test_safety_looks_wider_than_therapy(taken):
    assert "e-nsaid" in rows_of(with_heart("reduced", taken), "ibuprofen")


@pytest.mark.parametrize(
    "not_taken",
    [
        order("ibuprofen", 400, 3, since="2025-08-01", status="stopped"),
        order("ibuprofen", 400, 3, since="2025-08-01", status="entered-in-error"),
        order("ibuprofen", 400, 3, since="2025-08-01", status="cancelled"),
        order("ibuprofen", 400, 3, since="2025-08-01", doNotPerform=True),
        order("ibuprofen", 400, 3, since="2025-09-16"),
        order(
            "ibuprofen",
            None,
            since="2025-08-01",
            concept={"text": "ibuprofen 5 % gel"},
        ),
    ],
    ids=["stopped", "entered in error", "cancelled", "not to be given", "from tomorrow", "a gel"],
)
def test_a_drug_that_is_not_in_the_body_does_no_harm(not_taken):
    assert rows_of(with_heart("reduced", not_taken), "ibuprofen") == set()


def test_an_old_order_of_a_harmful_drug_asks_first_whether_it_is_taken():
    # an order of 401 days without a supply is old (policy)
    answer = with_heart("reduced", named("flecainide", 100, 2, since="2024-08-10"))
    only = card(answer, "stop-harmful-drug")
    assert (only["about"], only["tier"]) == ("flecainide", "act")
    assert only["headline"].startswith("Still taken? flecainide")
    fresh = card(with_heart("reduced", named("flecainide", 100, 2)), "stop-harmful-drug")
    assert (fresh["tier"], fresh["headline"][:16]) == ("danger", "Stop flecainide:")


def test_without_a_nyha_class_a_drug_that_depends_on_it_is_not_called_harmless():
    answer = with_heart("reduced", named("pregabalin", 75, 2))
    one = finding(answer, "stop-harmful-drug", "pregabalin")
    assert (one["outcome"], one["missing"]) == ("unknown", ["NYHA class"])


def test_without_any_kidney_value_metformin_is_not_called_harmless():
    answer = assessed(patient(), *HEARTS["reduced"], order("metformin", 500, 2, since="2025-03-01"), as_of=TODAY)
    assert said(answer, "stop-harmful-drug", "metformin") == "unknown"


def test_saxagliptin_in_one_tablet_with_metformin_is_stopped_by_its_harmful_part():
    answer = with_heart("reduced", named("saxagliptin / metformin", 5))
    assert said(answer, "stop-harmful-drug", "saxagliptin") == "open/stop"
    assert said(answer, "stop-harmful-drug", "metformin") == "not-applicable"


def test_two_reasons_against_one_drug_are_one_card_that_gives_both():
    # a boxed warning in NYHA class III, and the harm of every glitazone
    answer = with_heart("reduced", nyha(3, DAY), named("pioglitazone", 30))
    only = card(answer, "stop-harmful-drug")
    assert only["tier"] == "danger"
    assert rows_of(answer, "pioglitazone") == {"e-glitazone", "e-glitazone-nyha-3-4"}
    assert "NYHA class III and IV" in only["because"][0]
    assert "retain fluid" in only["because"][0]


@pytest.mark.parametrize(
    ("drug", "class_rule"),
    [("lisinopril", "start-ras-inhibitor"), ("sacubitril/valsartan", "start-ras-inhibitor")],
)
def test_after_angioedema_an_ace_inhibitor_and_an_arni_are_stopped(drug, class_rule):
    # label of sacubitril/valsartan; 2022 AHA/ACC/HFSA guideline, section 7.3.1
    answer = with_heart("reduced", order(drug, 10, since="2025-03-01"), allergy("enalapril", "angioedema"))
    assert said(answer, "stop-harmful-drug", drug) == "open/stop"
    assert said(answer, "lower-dose", drug) == "blocked"
    assert said(answer, class_rule) != "open/start"


def test_after_angioedema_an_arb_goes_on():
    answer = with_heart("reduced", order("losartan", 50, since="2025-03-01"), allergy("enalapril", "angioedema"))
    assert said(answer, "stop-harmful-drug", "losartan") == "not-applicable"


@pytest.mark.parametrize("gate", ["heart-transplant", "hospice care", "dialysis"])
def test_safety_speaks_where_therapy_is_silent(gate):
    fact = {
        "heart-transplant": problem("transplant", "2020-01-01", code=icd("Z94.1", "Heart transplant status")),
        "hospice care": problem("hospice care", "2025-06-01"),
        "dialysis": DIALYSIS,
    }[gate]
    assert said(with_heart("reduced", fact, named("naproxen", 500, 2)), "stop-harmful-drug", "naproxen") == "open/stop"


@pytest.mark.parametrize("silent", ["child", "dead", "healthy"])
def test_under_18_after_death_and_without_heart_failure_safety_is_silent_too(silent):
    heart = "healthy" if silent == "healthy" else "reduced"
    who = patient(
        born="2010-05-04" if silent == "child" else "1967-05-04",
        **({"deceasedBoolean": True} if silent == "dead" else {}),
    )
    answer = assessed(who, *HEARTS[heart], named("naproxen", 500, 2), as_of=TODAY)
    assert {f["outcome"] for f in answer["findings"] if f["rule"] == "stop-harmful-drug"} == {"not-applicable"}


def test_a_drug_known_only_to_be_an_nsaid_counts_as_one():
    # safety takes the cautious class where codings disagree (policy)
    both = {
        "coding": [
            {"system": RXNORM, "code": "5640", "display": "ibuprofen"},
            {"system": SNOMED, "code": "387207008", "display": "ibuprofen"},
        ]
    }
    answer = with_heart("reduced", order("ibuprofen", 400, 3, since="2025-08-01", concept=both))
    assert "e-nsaid" in rows_of(answer, "ibuprofen")


def test_flecainide_after_an_infarction_is_stopped_whatever_the_ejection_fraction():
    # 2022 AHA/ACC/HFSA guideline, section 7.3.7; harm in ischaemic heart disease as well
    answer = with_heart("preserved", CORONARY, named("flecainide", 100, 2))
    assert said(answer, "stop-harmful-drug", "flecainide") == "open/stop"


def test_metformin_in_a_patient_just_admitted_is_reviewed():
    # label of metformin: unstable or acute heart failure
    answer = with_heart(
        "reduced", admission("2025-09-08", "2025-09-12"), order("metformin", 500, 2, since="2025-03-01")
    )
    assert said(answer, "stop-harmful-drug", "metformin") == "open/review"


# label of citalopram: at most 20 mg a day above 60 years
@pytest.mark.parametrize(
    ("born", "dose_mg", "answer"),
    [
        ("1964-09-15", 20, "not-applicable"),
        ("1964-09-15", 30, "open/review"),
        ("1964-09-16", 30, "not-applicable"),
    ],
)
def test_citalopram_above_20_mg_is_reviewed_from_61_years_on(born, dose_mg, answer):
    found = with_heart("reduced", named("citalopram", dose_mg), born=born)
    assert said(found, "stop-harmful-drug", "citalopram") == answer
