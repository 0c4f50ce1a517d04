"""AllergyIntolerance: to what, how sure, with which reactions."""

from __future__ import annotations

from datetime import UTC

import pytest

from cds.content.codes import load_code_book
from cds.fhir.allergies import read_allergy
from cds.fhir.intake import Context, Intake

BOOK = load_code_book()
RXNORM = "http://www.nlm.nih.gov/research/umls/rxnorm"
SNOMED = "http://snomed.info/sct"
LISINOPRIL = {"coding": [{"system": RXNORM, "code": "29046", "display": "lisinopril"}]}  # RxNorm ingredient
COUGH = {"manifestation": [{"text": "Dry cough"}]}


def word(value):
    return {"coding": [{"code": value}]}


def allergy(**more):
    return {
        "resourceType": "AllergyIntolerance",
        "id": "a1",
        "clinicalStatus": word("active"),
        "verificationStatus": word("confirmed"),
        "code": LISINOPRIL,
        **more,
    }


def read(resource):
    context = Context(codes=BOOK, zone=UTC, intake=Intake())
    return read_allergy(resource, context), context.intake


def test_cough_on_an_ace_inhibitor_is_an_intolerance_with_its_reaction():
    found, intake = read(allergy(type="intolerance", criticality="low", recordedDate="2024-02-03", reaction=[COUGH]))
    assert (found.drugs, found.drug_classes) == (("lisinopril",), ("ace-inhibitor",))
    assert (found.kind, found.reactions, found.criticality) == ("intolerance", ("cough",), "low")
    assert (found.status, found.verification, str(found.recorded)) == ("active", "confirmed", "2024-02-03")
    assert (found.source, found.display) == ("AllergyIntolerance/a1", "lisinopril")
    assert intake.issues == []


def test_a_reaction_that_its_words_deny_is_no_reaction():
    found, _ = read(allergy(reaction=[{"manifestation": [{"text": "No cough"}]}]))
    assert found.reactions == ()


@pytest.mark.parametrize("status", ["refuted", "entered-in-error"])
def test_a_refuted_allergy_is_none_and_this_is_said(status):
    found, intake = read(allergy(verificationStatus=word(status)))
    assert found is None
    assert [(issue.path, issue.severity) for issue in intake.issues] == [("verificationStatus", "information")]


@pytest.mark.parametrize(
    ("sent", "status"),
    [(None, "active"), (word("active"), "active"), (word("inactive"), "inactive"), (word("resolved"), "resolved")],
)
def test_an_allergy_is_active_unless_its_status_says_otherwise(sent, status):
    found, intake = read(allergy(clinicalStatus=sent))
    assert found.status == status
    assert intake.issues == []


def test_a_status_in_unknown_words_counts_as_active_with_a_doubt():
    found, intake = read(allergy(clinicalStatus={"text": "probably gone"}))
    assert found.status == "active"
    assert [(issue.path, issue.severity) for issue in intake.issues] == [("clinicalStatus", "doubtful")]


def test_without_a_code_the_substance_of_a_reaction_decides():
    resource = allergy(reaction=[{"substance": LISINOPRIL, **COUGH}])
    del resource["code"]
    found, _ = read(resource)
    assert (found.drugs, found.reactions) == (("lisinopril",), ("cough",))


def test_a_code_that_names_no_drug_leaves_it_to_the_substance_of_the_reaction():
    found, intake = read(allergy(code={"text": "Drug allergy"}, reaction=[{"substance": LISINOPRIL, **COUGH}]))
    assert found.drugs == ("lisinopril",)
    assert not intake.not_recognised


def test_a_finding_code_brings_its_own_kind_and_reaction():
    # SNOMED CT 371627004: ACE inhibitor-aggravated angioedema.
    found, _ = read(allergy(code={"coding": [{"system": SNOMED, "code": "371627004"}]}))
    assert (found.drug_classes, found.kind) == (("ace-inhibitor",), "unspecified")
    assert "angioedema" in found.reactions


def test_the_sender_s_type_comes_before_the_kind_of_the_code():
    # SNOMED CT 293502001: lisinopril adverse reaction.
    code = {"coding": [{"system": SNOMED, "code": "293502001"}]}
    assert read(allergy(code=code))[0].kind == "intolerance"
    assert read(allergy(code=code, type="allergy"))[0].kind == "allergy"


@pytest.mark.parametrize(
    "code",
    [
        {"coding": [{"system": SNOMED, "code": "716186003"}]},
        {"coding": [{"system": SNOMED, "code": "409137002", "display": "No known drug allergy"}]},
        {"text": "No known drug allergies"},
        {"text": "NKDA"},
        {"text": "no known allergy to ACE inhibitors"},
    ],
)
def test_no_known_allergies_is_neither_an_allergy_nor_a_code_we_do_not_know(code):
    found, intake = read(allergy(code=code))
    assert found is None
    assert (intake.issues, dict(intake.not_recognised)) == ([], {})


def test_an_allergy_to_nothing_we_use_is_passed_over():
    # ICD-10-CM Z88.6, allergy to analgesics: known, but names no drug or class of ours.
    code = {"coding": [{"system": "http://hl7.org/fhir/sid/icd-10-cm", "code": "Z88.6"}]}
    found, intake = read(allergy(code=code))
    assert found is None
    assert (intake.issues, dict(intake.not_recognised)) == ([], {})


def test_a_code_nobody_knows_is_counted():
    found, intake = read(allergy(code={"text": "Blue dye"}))
    assert found is None
    assert [(seen.kind, seen.text) for seen in intake.not_recognised] == [("allergy", "Blue dye")]


def test_an_allergy_without_code_and_substance_is_refused():
    resource = allergy()
    del resource["code"]
    found, intake = read(resource)
    assert found is None
    assert [(issue.path, issue.severity) for issue in intake.issues] == [("code", "refused")]


def test_an_unrecorded_allergy_is_known_since_its_onset():
    assert str(read(allergy(onsetDateTime="2021-07"))[0].recorded) == "2021-07"
