"""Condition: what counts as a problem, with whose word, and since when."""

from __future__ import annotations

from datetime import UTC, date

import pytest

from cds.clinical.timeline import PartialDate
from cds.content.codes import load_code_book
from cds.fhir.conditions import read_conditions
from cds.fhir.intake import Context, Intake

BOOK = load_code_book()
ICD = "http://hl7.org/fhir/sid/icd-10-cm"
SNOMED = "http://snomed.info/sct"
CLINICAL = "http://terminology.hl7.org/CodeSystem/condition-clinical"
VERIFIED = "http://terminology.hl7.org/CodeSystem/condition-ver-status"
BORN = PartialDate.of_day(date(1950, 5, 10))


def context():
    return Context(codes=BOOK, zone=UTC, intake=Intake())


def code(*codings, text=None):
    concept = {"coding": [{"system": system, "code": value} for system, value in codings]}
    return concept if text is None else {**concept, "text": text}


HFREF = code((ICD, "I50.22"), text="Chronic systolic heart failure")
ATTR = code((ICD, "E85.82"), text="Wild-type transthyretin amyloidosis")


def condition(concept=HFREF, *, identity="c1", clinical="active", verified="confirmed", **more):
    resource = {"resourceType": "Condition", "id": identity, "code": concept, **more}
    if clinical is not None:
        resource["clinicalStatus"] = {"coding": [{"system": CLINICAL, "code": clinical}]}
    if verified is not None:
        resource["verificationStatus"] = {"coding": [{"system": VERIFIED, "code": verified}]}
    return resource


def read(*resources, born=None):
    here = context()
    problems, intolerances = read_conditions(resources, here, born=born)
    return problems, intolerances, here.intake


def one(resource, born=None):
    problems, _, intake = read(resource, born=born)
    (problem,) = problems
    return problem, intake


def test_a_coded_problem_counts_as_all_its_concepts_and_shows_its_own_text():
    problem, intake = one(condition(onsetDateTime="2023-04", recordedDate="2024-01-05"))
    assert {"heart-failure", "hfref"} <= set(problem.concepts)
    assert (problem.source, problem.display) == ("Condition/c1", "Chronic systolic heart failure")
    assert (problem.clinical_status, problem.verification, problem.is_active) == ("active", "confirmed", True)
    assert (str(problem.onset), str(problem.recorded)) == ("2023-04", "2024-01-05")
    assert intake.issues == []


@pytest.mark.parametrize("word", ["refuted", "entered-in-error"])
def test_a_refuted_or_mistaken_problem_is_no_fact_and_this_is_said(word):
    problems, _, intake = read(condition(verified=word, clinical=None))
    assert problems == ()
    assert [(issue.path, issue.severity) for issue in intake.issues] == [("verificationStatus", "information")]


def test_one_refuting_coding_among_several_is_enough():
    status = {"coding": [{"code": "confirmed"}, {"system": VERIFIED, "code": "refuted"}]}
    assert read({**condition(), "verificationStatus": status})[0] == ()


def test_a_status_in_words_only_is_read_too():
    assert read({**condition(), "verificationStatus": {"text": "Entered in Error"}})[0] == ()


@pytest.mark.parametrize("word", ["unconfirmed", "provisional", "differential"])
def test_an_uncertain_problem_is_kept_with_the_word_of_its_sender(word):
    assert one(condition(verified=word))[0].verification == word


def test_a_verification_in_unknown_words_counts_as_not_said_with_a_doubt():
    problem, intake = one({**condition(), "verificationStatus": {"text": "Working diagnosis"}})
    assert problem.verification == "unknown"
    assert [(issue.path, issue.severity) for issue in intake.issues] == [("verificationStatus", "doubtful")]


def test_a_verification_that_is_no_object_costs_the_problem_since_it_may_say_refuted():
    problems, _, intake = read({**condition(), "verificationStatus": '{"text": "refuted"}'})
    assert problems == ()
    assert [issue.severity for issue in intake.issues] == ["refused"]


@pytest.mark.parametrize(
    ("clinical", "abatement", "status", "is_active"),
    [
        ("active", {}, "active", True),
        ("recurrence", {}, "recurrence", True),
        ("relapse", {}, "relapse", True),
        ("remission", {}, "remission", False),
        ("inactive", {}, "inactive", False),
        ("resolved", {"abatementDateTime": "2024-02-01"}, "resolved", False),
        (None, {}, "unknown", True),
        (None, {"abatementDateTime": "2024-02-01"}, "resolved", False),
        (None, {"abatementPeriod": {"start": "2024-01", "end": "2024-02-01"}}, "resolved", False),
        (None, {"abatementString": "last winter"}, "resolved", False),
        (None, {"abatementAge": {"value": 60, "code": "a"}}, "resolved", False),
    ],
)
def test_the_clinical_status_or_else_the_abatement_says_whether_it_goes_on(clinical, abatement, status, is_active):
    problem, intake = one(condition(clinical=clinical, **abatement))
    assert (problem.clinical_status, problem.is_active) == (status, is_active)
    assert intake.issues == []


def test_an_active_problem_with_an_abatement_is_over_and_the_contradiction_is_said():
    problem, intake = one(condition(abatementDateTime="2024-02-01"))
    assert not problem.is_active
    assert [(issue.path, issue.severity) for issue in intake.issues] == [("clinicalStatus", "doubtful")]


def test_two_clinical_statuses_at_once_count_as_none():
    status = {"coding": [{"code": "active"}, {"code": "resolved"}]}
    problem, intake = one({**condition(), "clinicalStatus": status})
    assert problem.clinical_status == "unknown"
    assert [issue.severity for issue in intake.issues] == ["doubtful"]


@pytest.mark.parametrize(
    ("onset", "earliest", "latest"),
    [
        ({"onsetDateTime": "2020"}, "2020-01-01", "2020-12-31"),
        ({"onsetPeriod": {"start": "2020-02", "end": "2021"}}, "2020-02-01", "2020-02-29"),
        # Born 1950-05-10: sixty from the birthday in 2010 to the eve of the next.
        ({"onsetAge": {"value": 60, "unit": "years", "code": "a"}}, "2010-05-10", "2011-05-09"),
        ({"onsetAge": {"value": 6, "unit": "mo"}}, "1950-11-10", "1950-12-09"),
        ({"onsetAge": {"value": 2, "code": "wk"}}, "1950-05-24", "1950-05-30"),
        (
            {"onsetRange": {"low": {"value": 50, "code": "a"}, "high": {"value": 59, "code": "a"}}},
            "2000-05-10",
            "2010-05-09",
        ),
    ],
)
def test_onset_is_read_from_every_form_that_tells_a_day(onset, earliest, latest):
    problem, _ = one(condition(**onset), born=BORN)
    assert (problem.onset.earliest.isoformat(), problem.onset.latest.isoformat()) == (earliest, latest)


@pytest.mark.parametrize(
    "onset",
    [
        {"onsetString": "childhood"},
        {"onsetAge": {"value": 60}},
        {"onsetAge": {"value": 60, "code": "a", "comparator": "<"}},
        {"onsetAge": {"value": 1e300, "code": "a"}},
        {"onsetAge": {"value": float("nan"), "code": "a"}},
    ],
)
def test_an_onset_that_tells_no_day_leaves_the_problem_undated(onset):
    problem, intake = one(condition(**onset), born=BORN)
    assert problem.onset is None
    assert intake.issues == []


def test_an_age_at_onset_tells_nothing_without_a_birth_date():
    assert one(condition(onsetAge={"value": 60, "code": "a"}))[0].onset is None


def test_a_person_born_on_a_leap_day_has_birthdays_in_other_years_too():
    problem, _ = one(condition(onsetAge={"value": 1, "code": "a"}), born=PartialDate.of_day(date(2004, 2, 29)))
    assert problem.onset.earliest == date(2005, 2, 28)


def test_a_date_that_is_none_costs_the_date_and_not_the_problem():
    problem, intake = one(condition(onsetDateTime="2024-02-30", recordedDate="2024-03-01"))
    assert (problem.onset, str(problem.dated)) == (None, "2024-03-01")
    assert [(issue.path, issue.severity) for issue in intake.issues] == [("onsetDateTime", "doubtful")]


def test_an_encounter_diagnosis_counts_like_any_other_problem():
    category = code(("http://terminology.hl7.org/CodeSystem/condition-category", "encounter-diagnosis"))
    assert "hfref" in one(condition(category=[category]))[0].concepts


def test_a_code_that_only_hints_is_kept_apart():
    # R18.8, other ascites: in heart failure often cardiac (common practice).
    problem, _ = one(condition(code((ICD, "R18.8"))))
    assert (problem.concepts, problem.weak_concepts) == ((), ("severe-hepatic-impairment",))


def test_amyloidosis_is_of_the_heart_beside_heart_failure_only():
    # E85.82 names the organ-less disease; with heart failure or a cardiomyopathy it is taken as cardiac (our table).
    alone, _ = one(condition(ATTR))
    assert (alone.weak_concepts, "amyloid-cardiomyopathy" in alone.concepts) == (("amyloid-cardiomyopathy",), False)
    problems, _, _ = read(condition(ATTR), condition(identity="c2"))
    assert "amyloid-cardiomyopathy" in problems[0].concepts
    assert problems[0].weak_concepts == ()


@pytest.mark.parametrize("other", [{"clinical": "resolved"}, {"verified": "refuted"}])
def test_a_second_code_that_no_longer_holds_pairs_with_nothing(other):
    problems, _, _ = read(condition(ATTR), condition(identity="c2", **other))
    assert problems[0].weak_concepts == ("amyloid-cardiomyopathy",)


def test_a_severity_makes_systolic_dysfunction_moderate_or_severe():
    # SNOMED CT 134401001 left ventricular systolic dysfunction, 24484000 severe.
    severe = code((SNOMED, "24484000"))
    dysfunction = code((SNOMED, "134401001"))
    assert "lvsd-moderate-severe" in one(condition(dysfunction, severity=severe))[0].concepts
    assert "lvsd-moderate-severe" not in one(condition(dysfunction))[0].concepts
    assert "lvsd-moderate-severe" not in one(condition(severity=severe))[0].concepts


def test_a_bare_severity_as_the_code_of_a_problem_is_no_problem():
    problems, _, intake = read(condition(code((SNOMED, "24484000"))))
    assert problems == ()
    assert intake.issues == []


def test_a_code_nobody_knows_is_counted_once_for_each_problem_that_has_it():
    local = code(("urn:example:local", "X1"), text="Broken toe")
    problems, _, intake = read(condition(local), condition(local, identity="c2"))
    assert problems == ()
    assert [(seen.kind, seen.code, seen.text, count) for seen, count in intake.not_recognised.items()] == [
        ("problem", "X1", "Broken toe", 2)
    ]


def test_a_problem_without_a_code_is_refused():
    resource = condition()
    del resource["code"]
    problems, _, intake = read(resource)
    assert problems == ()
    assert [(issue.path, issue.severity) for issue in intake.issues] == [("code", "refused")]


def test_an_adverse_effect_on_the_problem_list_is_an_intolerance_with_its_reaction():
    # ICD-10-CM T46.4X5: adverse effect of ACE inhibitors.
    _, intolerances, intake = read(
        condition(code((ICD, "T46.4X5A"), (ICD, "T78.3XXA"), text="Angioedema"), recordedDate="2022-06-01")
    )
    (intolerance,) = intolerances
    assert (intolerance.drug_classes, intolerance.kind, intolerance.status) == (
        ("ace-inhibitor",),
        "intolerance",
        "active",
    )
    assert "angioedema" in intolerance.reactions
    assert (intolerance.verification, str(intolerance.recorded)) == ("confirmed", "2022-06-01")
    assert not intake.not_recognised


def test_a_reaction_that_is_over_leaves_the_intolerance_and_a_resolved_allergy_does_not():
    # SNOMED CT 241961007 ACE inhibitor-aggravated angio-oedema; 293962009 allergy to beta blockers.
    over = {"clinical": "resolved", "abatementDateTime": "2022-06-03"}
    _, (angioedema,), _ = read(condition(code((SNOMED, "241961007")), **over))
    _, (allergy,), _ = read(condition(code((SNOMED, "293962009")), **over))
    assert (angioedema.status, allergy.status) == ("active", "resolved")


def test_a_drug_as_the_code_of_a_problem_says_nothing_about_an_allergy_to_it():
    # RxNorm 29046: lisinopril.
    lisinopril = code(("http://www.nlm.nih.gov/research/umls/rxnorm", "29046"))
    problems, intolerances, intake = read(condition(lisinopril))
    assert (problems, intolerances) == ((), ())
    assert [seen.kind for seen in intake.not_recognised] == ["problem"]


def test_a_code_that_rules_a_concept_out_is_kept_as_that():
    # ICD-10-CM I50.83: high output heart failure, a disease the usual therapies do not treat (our table).
    problem, _ = one(condition(code((ICD, "I50.83"))))
    assert "heart-failure" in problem.excluded_concepts
    assert "heart-failure" not in problem.concepts


def test_a_refuted_allergy_on_the_problem_list_is_no_intolerance():
    assert read(condition(code((SNOMED, "293962009")), verified="refuted"))[1] == ()


def test_the_input_is_never_changed():
    resource = condition(onsetDateTime="2024-01-01")
    before = repr(resource)
    read(resource)
    assert repr(resource) == before
