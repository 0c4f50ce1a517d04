"""One patient's resources become one record: whole, sorted, and never brought down by one bad resource."""

from __future__ import annotations

import copy
import json
from datetime import UTC

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from cds.content.codes import load_code_book
from cds.fhir.allergies import read_allergy
from cds.fhir.build_record import build_record
from cds.fhir.bundle import split_by_patient
from cds.fhir.conditions import read_conditions
from cds.fhir.encounters import read_encounter
from cds.fhir.intake import Context, Intake
from cds.fhir.ordered_tests import read_service_request
from cds.fhir.patient import read_patient
from cds.fhir.procedures_devices import read_device, read_procedure
from cds.fhir.reading import Limits

BOOK = load_code_book()
LIMITS = Limits(max_bytes=10_000_000, max_entries=10_000, max_depth=100)
RXNORM, SNOMED = "http://www.nlm.nih.gov/research/umls/rxnorm", "http://snomed.info/sct"
ICD, LOINC = "http://hl7.org/fhir/sid/icd-10-cm", "http://loinc.org"
SUBJECT = {"reference": "Patient/p1"}
SENTINEL = "Zyxw987"


def concept(system, code, text="as the sender words it"):
    return {"coding": [{"system": system, "code": code, "display": text}], "text": text}


def status(word):
    return {"coding": [{"system": "http://terminology.hl7.org/CodeSystem/status", "code": word}]}


def potassium(identity, day, value=4.5):
    return {
        "resourceType": "Observation",
        "id": identity,
        "status": "final",
        "subject": SUBJECT,
        "code": concept(LOINC, "2823-3"),
        "effectiveDateTime": day,
        "valueQuantity": {
            "value": value,
            "unit": "mmol/L",
            "system": "http://unitsofmeasure.org",
            "code": "mmol/L",
        },
    }


def condition(identity, code="I50.22", **more):
    return {
        "resourceType": "Condition",
        "id": identity,
        "subject": SUBJECT,
        "clinicalStatus": status("active"),
        "verificationStatus": status("confirmed"),
        "code": concept(ICD, code),
        **more,
    }


PATIENT = {"resourceType": "Patient", "id": "p1", "gender": "female", "birthDate": "1950-05-10"}
RESOURCES = [
    PATIENT,
    potassium("k1", "2025-01-02"),
    potassium("k2", "2025-01-09"),
    condition(
        "c1",
        onsetAge={"value": 60, "unit": "years", "system": "http://unitsofmeasure.org", "code": "a"},
        recordedDate="2024-01-01",
        severity=concept(SNOMED, "24484000"),
        note=[{"text": "seen in clinic"}],
    ),
    condition("c2", "E85.82", onsetPeriod={"start": "2023", "end": "2024"}, abatementString="not yet"),
    condition("c3", "T46.4X5A", onsetDateTime="2022-06-01"),
    {
        "resourceType": "AllergyIntolerance",
        "id": "a1",
        "patient": SUBJECT,
        "clinicalStatus": status("active"),
        "verificationStatus": status("confirmed"),
        "type": "intolerance",
        "criticality": "low",
        "code": concept(RXNORM, "29046", "lisinopril"),
        "recordedDate": "2022-06-02",
        "reaction": [{"substance": concept(RXNORM, "29046"), "manifestation": [{"text": "Dry cough"}]}],
    },
    {
        "resourceType": "Procedure",
        "id": "pr1",
        "subject": SUBJECT,
        "status": "completed",
        "code": concept(SNOMED, "233575001"),
        "performedPeriod": {"start": "2024-05-01", "end": "2024-05-02"},
    },
    {
        "resourceType": "Device",
        "id": "d1",
        "patient": SUBJECT,
        "status": "active",
        "type": concept(SNOMED, "14106009"),
    },
    {
        "resourceType": "Encounter",
        "id": "e1",
        "subject": SUBJECT,
        "status": "finished",
        "class": {"system": "http://terminology.hl7.org/CodeSystem/v3-ActCode", "code": "IMP"},
        "period": {"start": "2024-03-01", "end": "2024-03-05"},
        "reasonCode": [concept(ICD, "I10")],
        "diagnosis": [{"condition": {"reference": "Condition/c1"}, "use": status("DD")}],
    },
    {
        "resourceType": "ServiceRequest",
        "id": "s1",
        "subject": SUBJECT,
        "status": "active",
        "intent": "order",
        "code": concept(LOINC, "24321-2"),
        "authoredOn": "2025-01-10",
        "occurrencePeriod": {"start": "2025-01-17"},
    },
    {
        "resourceType": "MedicationRequest",
        "id": "m1",
        "subject": SUBJECT,
        "status": "active",
        "intent": "order",
        "medicationReference": {"reference": "Medication/med1", "display": "as the sender words it"},
        "authoredOn": "2025-01-01",
        "dosageInstruction": [{"text": "one tablet a day"}],
    },
    {"resourceType": "Medication", "id": "med1", "code": concept(RXNORM, "29046", "lisinopril")},
    {"resourceType": "Coverage", "id": "cov1", "beneficiary": SUBJECT},
]


def bundle(resources):
    return {"resourceType": "Bundle", "type": "collection", "entry": [{"resource": resource} for resource in resources]}


def build(*resources):
    (patient,) = split_by_patient(bundle(resources), LIMITS).patients
    return build_record(patient, BOOK, UTC)


def replaced(identity, **elements):
    return [{**resource, **elements} if resource["id"] == identity else resource for resource in RESOURCES]


def test_every_resource_finds_its_place_in_the_record():
    built = build(*RESOURCES)
    record = built.record
    assert (record.patient, record.sex, str(record.born)) == ("Patient/p1", "female", "1950-05-10")
    assert [m.source for m in record.measurements] == ["Observation/k2", "Observation/k1"]
    assert {p.source for p in record.problems} == {"Condition/c1", "Condition/c2"}
    assert [i.source for i in record.intolerances] == ["AllergyIntolerance/a1", "Condition/c3"]
    assert [p.source for p in record.procedures_devices] == ["Procedure/pr1", "Device/d1"]
    assert [e.source for e in record.encounters] == ["Encounter/e1"]
    assert {"heart-failure", "hypertension"} <= set(record.encounters[0].reasons)
    assert [o.source for o in record.tests_ordered] == ["ServiceRequest/s1"]
    assert [m.source for m in record.medications] == ["MedicationRequest/m1"]
    assert (built.read, built.not_needed, built.is_refused) == (len(RESOURCES) - 1, 1, False)
    assert [issue for issue in built.issues if issue.severity == "refused"] == []


def test_amyloidosis_finds_the_heart_failure_beside_it():
    problems = {problem.source: problem for problem in build(*RESOURCES).record.problems}
    assert "amyloid-cardiomyopathy" in problems["Condition/c2"].concepts


def test_an_age_at_onset_is_counted_from_the_birth_date():
    problems = {problem.source: problem for problem in build(*RESOURCES).record.problems}
    assert problems["Condition/c1"].onset.earliest.isoformat() == "2010-05-10"


def test_a_resource_that_is_not_r4_costs_itself_alone():
    built = build(*replaced("k2", valueQuantity="4.5 mmol/L"))
    assert [m.source for m in built.record.measurements] == ["Observation/k1"]
    assert [(i.resource, i.severity) for i in built.issues if i.severity == "refused"] == [
        ("Observation/k2", "refused")
    ]


def test_a_problem_refused_at_the_gate_is_no_reason_of_a_stay():
    built = build(*replaced("c1", subject=SUBJECT, stage="II"))
    assert built.record.encounters[0].reasons == ("hypertension",)


def test_a_medication_refused_at_the_gate_costs_its_code_and_nothing_else():
    built = build(*replaced("med1", ingredient="lisinopril"))
    assert [entry for entry in built.record.medications if entry.matched_by != "text"] == []
    assert [m.source for m in built.record.measurements] == ["Observation/k2", "Observation/k1"]
    assert "Medication/med1" in {issue.resource for issue in built.issues}


def test_a_patient_that_is_not_r4_cannot_be_assessed():
    built = build(*replaced("p1", name="A name in place of a list"))
    assert built.is_refused
    assert built.record is None
    assert [(issue.resource, issue.path) for issue in built.issues] == [("Patient/p1", "name")]


def test_what_has_no_date_stands_last_and_of_one_moment_the_source_decides():
    undated = condition("c0")
    same_day = [condition(identity, recordedDate="2024-02-01") for identity in ("c8", "c7")]
    record = build(PATIENT, undated, *same_day, condition("c9", recordedDate="2024-03")).record
    assert [p.source for p in record.problems] == ["Condition/c9", "Condition/c7", "Condition/c8", "Condition/c0"]


def test_codes_nobody_knows_are_counted_in_a_fixed_order():
    local = {"code": {"text": "Local words"}}
    built = build(
        PATIENT, {**condition("c1"), **local}, {**condition("c2"), **local}, {**potassium("k1", "2025"), **local}
    )
    assert [(seen.kind, seen.text, count) for seen, count in built.not_recognised] == [
        ("observation", "Local words", 1),
        ("problem", "Local words", 2),
    ]


@settings(max_examples=25, deadline=None, derandomize=True)
@given(st.permutations([*RESOURCES, potassium("k3", "2025-01-09"), condition("c4", "not-a-code")]))
def test_the_order_of_the_resources_never_matters(resources):
    expected = build(*RESOURCES, potassium("k3", "2025-01-09"), condition("c4", "not-a-code"))
    assert build(*resources) == expected


def places(value, path=()):
    """Every place in a JSON value, the value itself left out."""
    items = value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ()
    for key, item in items:
        yield (*path, key)
        yield from places(item, (*path, key))


def at(value, path):
    for key in path:
        value = value[key]
    return value


def put(resource, path, junk):
    changed = copy.deepcopy(resource)
    at(changed, path[:-1])[path[-1]] = junk
    return changed


# Ids and types name a resource; the name of a resource is the one thing an issue does repeat.
PLACES = [
    (position, path)
    for position, resource in enumerate(RESOURCES)
    for path in places(resource)
    if path not in {("id",), ("resourceType",)} and resource["resourceType"] != "Coverage"
]
JUNK = [
    None, True, 0, -1, 10**400, 1e308, float("nan"), float("inf"), "", SENTINEL, "\ud800", [], {}, [None], [[]], [{}],
    [SENTINEL], {"coding": SENTINEL}, {"coding": [None, SENTINEL, {"code": 7, "system": {}}]}, {"reference": 5},
    {"start": 1, "end": {}}, {"value": "5", "code": ["a"], "unit": None}, {"text": 3},
]  # fmt: skip


def read_directly(resource):
    """As the readers would see it if the gate let it through."""
    context = Context(codes=BOOK, zone=UTC, intake=Intake())
    born = read_patient(PATIENT, context).born
    match resource["resourceType"]:
        case "Patient":
            read_patient(resource, context)
        case "Condition":
            read_conditions([resource, condition("other")], context, born=born)
        case "AllergyIntolerance":
            read_allergy(resource, context, born=born)
        case "Procedure":
            read_procedure(resource, context)
        case "Device":
            read_device(resource, context)
        case "Encounter":
            read_encounter(resource, context, resolve=lambda _reference, _holder: condition("c1"))
        case "ServiceRequest":
            read_service_request(resource, context)
    return context.intake.issues


def shown(issues):
    return json.dumps([[i.resource, i.path, i.problem, i.fix, i.severity] for i in issues])


@pytest.mark.parametrize("junk", JUNK, ids=range(len(JUNK)))
def test_junk_in_any_one_place_never_brings_a_reader_down_and_never_shows(junk):
    for position, path in PLACES:
        assert SENTINEL not in shown(read_directly(put(RESOURCES[position], path, junk)))


def test_no_text_of_a_patient_ever_shows_in_an_issue():
    for position, path in PLACES:
        if isinstance(at(RESOURCES[position], path), str):
            resources = list(RESOURCES)
            resources[position] = put(RESOURCES[position], path, SENTINEL)
            split = split_by_patient(bundle(resources), LIMITS)
            issues = [*split.issues, *(i for p in split.patients for i in build_record(p, BOOK, UTC).issues)]
            assert SENTINEL not in shown(issues), path


@settings(max_examples=150, deadline=None, derandomize=True, suppress_health_check=[HealthCheck.too_slow])
@given(st.lists(st.tuples(st.sampled_from(PLACES), st.sampled_from(JUNK)), min_size=1, max_size=4))
def test_junk_in_many_places_costs_what_holds_it_and_never_the_build(changes):
    resources = list(RESOURCES)
    touched = set()
    for (position, path), junk in changes:
        if position not in touched:
            resources[position] = put(resources[position], path, junk)
            touched.add(position)
    split = split_by_patient(bundle(resources), LIMITS)
    for patient in split.patients:
        built = build_record(patient, BOOK, UTC)
        assert SENTINEL not in shown(built.issues)
        if built.record is None:
            assert 0 in touched
