"""The gate: a resource that has not the shape of FHIR R4 is refused at its place, without a word of what it says."""

from __future__ import annotations

from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st
from small_book import concept, observation, quantity

from cds.errors import Issue
from cds.fhir.bundle import USED_TYPES
from cds.fhir.validate import refusal

SECRET = "Zyxw987"


def order(**more: Any) -> dict[str, Any]:
    return {
        "resourceType": "MedicationRequest",
        "id": "r1",
        "status": "active",
        "intent": "order",
        "subject": {"reference": "Patient/p1"},
        "medicationCodeableConcept": {"text": "spironolactone 25 mg"},
        "authoredOn": "2025-06-01",
        "dosageInstruction": [
            {"text": "one a day", "timing": {"repeat": {"frequency": 1, "period": 1, "periodUnit": "d"}}}
        ],
        **more,
    }


def refused(resource: dict[str, Any]) -> Issue:
    before = repr(resource)
    issue = refusal(resource)
    assert repr(resource) == before
    assert issue is not None
    assert SECRET not in f"{issue} {issue!r}"
    assert issue.severity == "refused"
    assert issue.fix
    return issue


def nested_extension(levels: int) -> dict[str, Any]:
    inner: dict[str, Any] = {"url": "urn:example:x", "valueString": "y"}
    for _ in range(levels):
        inner = {"url": "urn:example:x", "extension": [inner]}
    return inner


@pytest.mark.parametrize(
    "resource",
    [
        {"resourceType": "Patient", "id": "p1", "gender": "female", "birthDate": "1953-04-01"},
        {"resourceType": "Patient", "id": "p1", "birthDate": "1953"},
        observation("2823-3", quantity(4.5, "mmol/L")),
        observation("2823-3", quantity(4.5, "mmol/L"), effectiveDateTime="2025-06-01T10:00:00+02:00"),
        order(),
        order(extension=[{"url": "urn:example:x", "valueString": "anything"}]),
        order(contained=[{"resourceType": "Medication", "id": "m", "code": {"text": "x"}}]),
        {"resourceType": "Condition", "id": "c1", "subject": {"reference": "Patient/p1"}, "code": concept("x")},
        {"resourceType": "AllergyIntolerance", "id": "a1", "patient": {"reference": "Patient/p1"}},
    ],
)
def test_a_resource_of_r4_passes(resource):
    assert refusal(resource) is None


@pytest.mark.parametrize(
    ("resource", "name", "path", "problem"),
    [
        (observation("2823-3", status=None), "Observation/o1", "status", "is required and missing"),
        (
            observation("2823-3", surprise=SECRET),
            "Observation/o1",
            "surprise",
            "is no element of this resource in FHIR R4",
        ),
        (
            observation("2823-3", effectiveDateTime=SECRET),
            "Observation/o1",
            "effectiveDateTime",
            "is no date of FHIR R4",
        ),
        (
            observation("2823-3", effectiveDateTime="2025-06-01T10:00"),
            "Observation/o1",
            "effectiveDateTime",
            "is no date of FHIR R4",
        ),
        (
            observation("2823-3", quantity({"x": SECRET})),
            "Observation/o1",
            "valueQuantity.value",
            "does not keep a rule of R4",
        ),
        (
            observation("2823-3", quantity(4.5, "mmol/L"), valueString=SECRET),
            "Observation/o1",
            "the resource",
            "breaks a rule between elements, as two forms of one element[x]",
        ),
        (order(dosageInstruction=[{"text": 7}]), "MedicationRequest/r1", "dosageInstruction[0].text", "is not a text"),
        (order(intent=None), "MedicationRequest/r1", "intent", "is required and missing"),
        (
            order(medication={"concept": {"text": SECRET}}),
            "MedicationRequest/r1",
            "medication",
            "is the R5 form of the medicine; this service reads R4",
        ),
        (
            {"resourceType": "Patient", "id": "p1", "birthDate": SECRET},
            "Patient/p1",
            "birthDate",
            "is no date of FHIR R4",
        ),
    ],
)
def test_what_is_not_r4_is_refused_at_its_place(resource, name, path, problem):
    issue = refused({key: value for key, value in resource.items() if value is not None})
    assert (issue.resource, issue.path, issue.problem) == (name, path, problem)


@pytest.mark.parametrize(
    "kind",
    [
        None,
        7,
        "",
        "patient",
        "no type",
        "Zyxw-987",
        ["Patient"],
        {"a": 1},
        "Resource",
        "DomainResource",
        "Quantity",
        "Timing",
    ],
)
def test_a_type_that_is_none_is_refused_without_repeating_it(kind):
    issue = refused({"resourceType": kind, "id": "x"})
    assert (issue.path, issue.problem) == ("resourceType", "is no resource type of FHIR R4")


@pytest.mark.parametrize("identity", [None, 7, "", f"{SECRET}/x", "x" * 200, ["x"]])
def test_an_id_that_is_none_is_named_by_a_question_mark(identity):
    assert refused({"resourceType": "Observation", "id": identity}).resource == "Observation/?"


@pytest.mark.parametrize(
    "contained", [[{"resourceType": SECRET}], [SECRET], SECRET, [[]], {"resourceType": "Medication"}]
)
def test_a_contained_thing_that_is_no_resource_costs_its_holder(contained):
    assert refused(order(contained=contained)).path.startswith("contained")


def test_a_name_the_sender_made_up_is_not_repeated():
    assert refused(order(**{f"{SECRET} is ill": 1})).path == ".?".removeprefix(".")


@pytest.mark.parametrize("levels", [90, 400, 3000])
def test_extensions_in_extensions_without_end_do_not_stop_the_next_resource(levels):
    deep = order(extension=[nested_extension(levels)])
    issue = refusal(deep)
    assert issue is None or issue.path.startswith("extension")
    assert refusal(order()) is None


def test_every_type_that_is_read_is_a_type_of_r4():
    for kind in USED_TYPES:
        issue = refusal({"resourceType": kind, "id": "x"})
        assert issue is None or issue.path != "resourceType"


JUNK = st.recursive(
    st.none()
    | st.booleans()
    | st.integers()
    | st.floats(allow_nan=False)
    | st.just(SECRET)
    | st.sampled_from(["2025", "active"]),
    lambda inner: (
        st.lists(inner, max_size=3)
        | st.dictionaries(
            st.sampled_from(
                ["coding", "code", "text", "value", "reference", "start", "resourceType", "extension", "url"]
            ),
            inner,
            max_size=3,
        )
    ),
    max_leaves=10,
)


@given(
    good=st.sampled_from(
        [order(), observation("2823-3", quantity(4.5, "mmol/L")), {"resourceType": "Patient", "id": "p1"}]
    ),
    junk=st.dictionaries(
        st.sampled_from(
            [
                "status",
                "subject",
                "code",
                "contained",
                "extension",
                "meta",
                "dosageInstruction",
                "valueQuantity",
                "name",
                "birthDate",
                "text",
                "_status",
                "medicationReference",
                "link",
                "component",
            ]
        ),
        JUNK,
        max_size=3,
    ),
)
def test_no_shape_whatever_crashes_the_gate_or_comes_back_in_its_words(good, junk):
    issue = refusal({**good, **junk})
    if issue is not None:
        assert SECRET not in f"{issue} {issue!r}"
        assert issue.problem
