"""What a Reference points at, as text."""

from __future__ import annotations

import time

import pytest
from hypothesis import given
from hypothesis import strategies as st

from cds.fhir.references import (
    ByAddress,
    ByIdentifier,
    Contained,
    Literal,
    identifiers_of,
    named_resource,
    parse_reference,
    target_of,
)

URN = "urn:uuid:0c3151bd-1cbf-4d64-b04d-cd9187a4c6e0"

# Forms of FHIR R4 (4.0.1), section 2.3.0.1, literal references, and section 3.1.0.11.3, conditional references.
LITERALS = [
    ("Patient/p1", Literal(None, "Patient", "p1")),
    ("Patient/p1/_history/3", Literal(None, "Patient", "p1")),
    ("http://a.example/Patient/p1", Literal("http://a.example", "Patient", "p1")),
    ("https://a.example/fhir/r4/Patient/p1", Literal("https://a.example/fhir/r4", "Patient", "p1")),
    ("https://a.example/Patient/x/Patient/p1", Literal("https://a.example/Patient/x", "Patient", "p1")),
    ("https://a.example/fhir/Patient/p1/_history/3", Literal("https://a.example/fhir", "Patient", "p1")),
    (URN, ByAddress(URN)),
    ("urn:oid:1.2.3.4", ByAddress("urn:oid:1.2.3.4")),
    ("#med", Contained("med")),
    ("#", Contained("")),
    ("Patient?identifier=urn:example:mrn|77", ByIdentifier("Patient", "urn:example:mrn", "77")),
    ("Patient?identifier=|77", ByIdentifier("Patient", "", "77")),
    ("https://a.example/page", ByAddress("https://a.example/page")),
]


@pytest.mark.parametrize(("text", "target"), LITERALS)
def test_a_literal_reference_is_read_in_each_of_its_forms(text, target):
    assert parse_reference(text) == target
    assert target_of({"reference": text, "display": "anything"}) == target


@pytest.mark.parametrize(
    "text",
    [
        "",
        " ",
        "p1",
        "Patient",
        "Patient/",
        "/Patient/p1",
        "patient/p1",
        "Patient/p1/extra",
        "Patient/a b",
        "Patient?name=x",
        "ftp://a/Patient/p1",
        "x" * 3000,
    ],
)
def test_a_text_that_is_no_reference_points_at_nothing(text):
    assert parse_reference(text) is None


@pytest.mark.parametrize(
    "reference",
    [
        None,
        "Patient/p1",
        ["Patient/p1"],
        3,
        {},
        {"reference": 3},
        {"reference": ["Patient/p1"]},
        {"reference": ""},
        {"display": "Mrs X"},
        {"identifier": "77"},
        {"identifier": {"value": "77"}},
        {"identifier": {"system": "urn:example:mrn"}},
    ],
)
def test_what_is_no_reference_object_points_at_nothing(reference):
    assert target_of(reference) is None
    assert named_resource(reference, "Patient") is None


def test_an_identifier_counts_only_where_there_is_no_literal_reference():
    identifier = {"system": "urn:example:mrn", "value": "77"}
    assert target_of({"identifier": identifier}) == ByIdentifier(None, "urn:example:mrn", "77")
    assert target_of({"identifier": identifier, "type": "Patient"}) == ByIdentifier("Patient", "urn:example:mrn", "77")
    assert target_of({"identifier": identifier, "reference": "Patient/p1"}) == Literal(None, "Patient", "p1")
    assert target_of({"identifier": identifier, "reference": "rubbish"}) is None


def test_a_resource_is_named_only_by_its_own_type():
    assert named_resource({"reference": "https://a.example/Encounter/e1"}, "Encounter") == "Encounter/e1"
    assert named_resource({"reference": "Encounter/e1/_history/2"}, "Encounter") == "Encounter/e1"
    assert named_resource({"reference": "Patient/p1"}, "Encounter") is None
    assert named_resource({"reference": URN}, "Encounter") is None


def test_identifiers_without_system_or_value_identify_nobody():
    whole = {"system": "urn:example:mrn", "value": "77"}
    pieces = [
        whole,
        {"value": "78"},
        {"system": "s"},
        {"system": "s", "value": ""},
        {"system": 1, "value": "2"},
        "x",
        None,
    ]
    assert identifiers_of({"identifier": pieces}) == (("urn:example:mrn", "77"),)
    assert identifiers_of({"identifier": whole}) == ()
    assert identifiers_of({}) == ()


@given(st.text(max_size=60) | st.text(alphabet="Patient/?identifier=|#:_historyhttp.1", max_size=80))
def test_no_text_whatever_crashes_the_parser(text):
    target_of({"reference": text})


@given(
    base=st.sampled_from([None, "http://a.example", "https://b.example/fhir"]),
    identity=st.from_regex(r"[A-Za-z0-9\-.]{1,64}", fullmatch=True),
)
def test_every_id_of_fhir_is_read_back_from_a_reference_to_it(base, identity):
    text = f"Patient/{identity}" if base is None else f"{base}/Patient/{identity}"
    assert parse_reference(text) == Literal(base, "Patient", identity)


def test_a_hostile_reference_costs_no_time():
    started = time.perf_counter()
    for text in ("http://" + "a/" * 1000, "https://" + "Patient/" * 250, "Patient?identifier=" + "|" * 1900):
        parse_reference(text)
    assert time.perf_counter() - started < 1
