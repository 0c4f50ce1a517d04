"""Encounter: an admission for heart failure is evidence; a visit is a visit."""

from __future__ import annotations

from datetime import UTC

import pytest

from cds.content.codes import load_code_book
from cds.fhir.encounters import read_encounter
from cds.fhir.intake import Context, Intake

BOOK = load_code_book()
HF = {"coding": [{"system": "http://hl7.org/fhir/sid/icd-10-cm", "code": "I50.22"}]}
HYPERTENSION = {"coding": [{"system": "http://hl7.org/fhir/sid/icd-10-cm", "code": "I10"}]}


def encounter(code="IMP", status="finished", **more):
    return {"resourceType": "Encounter", "id": "e1", "status": status, "class": {"code": code}, **more}


def read(resource, **conditions):
    context = Context(codes=BOOK, zone=UTC, intake=Intake())

    def resolve(reference, holder):
        assert holder is resource
        return conditions.get(reference["reference"].partition("/")[2])

    return read_encounter(resource, context, resolve=resolve), context.intake


@pytest.mark.parametrize(
    ("code", "meant"),
    [
        # HL7 v3 ActCode
        ("IMP", "inpatient"),
        ("ACUTE", "inpatient"),
        ("NONAC", "inpatient"),
        ("EMER", "emergency"),
        ("AMB", "outpatient"),
        ("VR", "outpatient"),
        ("HH", "outpatient"),
        ("OBSENC", "other"),
        ("SS", "other"),
        ("PRENC", "other"),
        ("FLD", "other"),
        ("local", "other"),
    ],
)
def test_the_class_says_what_kind_of_stay_it_is(code, meant):
    assert read(encounter(code))[0].encounter_class == meant


def test_only_a_stay_without_class_is_an_admission_by_its_hospitalization():
    hospitalization = {"hospitalization": {"admitSource": {"text": "home"}}}
    assert read(encounter("AMB", **hospitalization))[0].encounter_class == "outpatient"
    without = {**encounter(), **hospitalization}
    del without["class"]
    assert read(without)[0].encounter_class == "inpatient"


@pytest.mark.parametrize("status", ["planned", "cancelled", "entered-in-error"])
def test_a_stay_that_did_not_take_place_is_passed_over(status):
    assert read(encounter(status=status)) == (None, Intake())


@pytest.mark.parametrize("status", [None, "done", {"code": "finished"}])
def test_a_stay_without_a_status_of_r4_is_refused(status):
    found, intake = read(encounter(status=status))
    assert found is None
    assert [(issue.path, issue.severity) for issue in intake.issues] == [("status", "refused")]


def test_a_stay_goes_on_until_its_period_ends():
    found, _ = read(encounter(status="in-progress", period={"start": "2024-05-01T22:00:00+02:00"}))
    assert (str(found.starts), found.ends) == ("2024-05-01", None)


def test_reasons_come_from_codes_and_from_the_problems_it_names():
    found, _ = read(
        encounter(
            reasonCode=[HYPERTENSION],
            reasonReference=[{"reference": "Condition/c1"}, {"reference": "Condition/gone"}],
        ),
        c1={"resourceType": "Condition", "code": HF},
    )
    assert {"heart-failure", "hfref", "hypertension"} <= set(found.reasons)
    assert found.reasons == tuple(sorted(found.reasons))


def test_a_diagnosis_of_the_stay_is_a_reason_and_a_comorbidity_is_none():
    named = {"condition": {"reference": "Condition/c1"}}
    # HL7 diagnosis-role: CM is a comorbidity, DD a discharge diagnosis.
    found = {
        role: read(
            encounter(diagnosis=[{**named, "use": {"coding": [{"code": role}]}}]),
            c1={"resourceType": "Condition", "code": HF},
        )[0].reasons
        for role in ("DD", "CM")
    }
    assert "heart-failure" in found["DD"]
    assert found["CM"] == ()


def test_a_refuted_problem_is_no_reason():
    refuted = {"resourceType": "Condition", "code": HF, "verificationStatus": {"coding": [{"code": "refuted"}]}}
    found, _ = read(encounter(reasonReference=[{"reference": "Condition/c1"}]), c1=refuted)
    assert found.reasons == ()


def test_a_reference_to_something_else_is_no_reason():
    found, _ = read(
        encounter(reasonReference=[{"reference": "Procedure/p1"}]), p1={"resourceType": "Procedure", "code": HF}
    )
    assert found.reasons == ()


def test_without_the_other_resources_the_stated_reasons_still_count():
    context = Context(codes=BOOK, zone=UTC, intake=Intake())
    stay = encounter(reasonCode=[HF], reasonReference=[{"reference": "Condition/c1"}])
    assert "heart-failure" in read_encounter(stay, context).reasons
