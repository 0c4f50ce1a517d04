"""ServiceRequest: a test already ordered is not asked for again."""

from __future__ import annotations

from datetime import UTC

import pytest

from cds.content.codes import load_code_book
from cds.fhir.intake import Context, Intake
from cds.fhir.ordered_tests import read_service_request

BOOK = load_code_book()
LOINC = "http://loinc.org"


def loinc(*codes):
    return {"coding": [{"system": LOINC, "code": code} for code in codes]}


def order(code=None, *, status="active", intent="order", **more):
    code = loinc("2823-3") if code is None else code  # potassium in serum or plasma
    return {"resourceType": "ServiceRequest", "id": "s1", "status": status, "intent": intent, "code": code, **more}


def read(resource):
    context = Context(codes=BOOK, zone=UTC, intake=Intake())
    return read_service_request(resource, context), context.intake


def test_an_active_order_asks_for_its_analyte():
    found, intake = read(order(authoredOn="2025-01-02", occurrenceDateTime="2025-01-09"))
    assert (found.analytes, found.source, found.is_draft) == (("potassium",), "ServiceRequest/s1", False)
    assert (str(found.ordered), str(found.planned)) == ("2025-01-02", "2025-01-09")
    assert intake.issues == []


@pytest.mark.parametrize(
    ("status", "intent", "outcome"),
    [
        ("active", "order", "order"),
        ("active", "original-order", "order"),
        ("active", "reflex-order", "order"),
        ("active", "filler-order", "order"),
        ("active", "instance-order", "order"),
        ("active", "proposal", None),
        ("active", "plan", None),
        ("active", "directive", None),
        ("active", "option", None),
        ("draft", "order", "draft"),
        ("draft", "proposal", None),
        ("on-hold", "order", None),
        ("revoked", "order", None),
        ("completed", "order", None),
        ("entered-in-error", "order", None),
        ("unknown", "order", None),
    ],
)
def test_only_orders_count_and_drafts_only_as_drafts(status, intent, outcome):
    found, intake = read(order(status=status, intent=intent))
    assert (None if found is None else "draft" if found.is_draft else "order") == outcome
    assert intake.issues == []


@pytest.mark.parametrize(
    ("element", "value"), [("status", "open"), ("status", None), ("intent", "wish"), ("intent", 7)]
)
def test_words_that_r4_does_not_know_cost_the_order(element, value):
    found, intake = read({**order(), element: value})
    assert found is None
    assert [(issue.path, issue.severity) for issue in intake.issues] == [(element, "refused")]


@pytest.mark.parametrize("value", [True, "true"])
def test_a_request_not_to_do_a_test_is_no_order(value):
    assert read(order(doNotPerform=value))[0] is None
    assert read(order(doNotPerform=False))[0] is not None


@pytest.mark.parametrize(
    ("code", "includes", "excludes"),
    [
        # LOINC panel definitions, from memory
        ("24320-4", {"potassium", "sodium", "creatinine"}, {"alt"}),
        ("24321-2", {"potassium", "sodium", "creatinine"}, {"alt"}),
        ("51990-0", {"potassium", "sodium", "creatinine"}, {"alt"}),
        ("24362-6", {"potassium", "sodium", "creatinine"}, {"alt"}),
        ("24323-8", {"potassium", "sodium", "creatinine", "alt"}, set()),
        ("24326-1", {"potassium", "sodium"}, {"creatinine"}),
        ("34552-0", {"lvef"}, {"potassium"}),
    ],
)
def test_a_panel_asks_for_everything_it_brings(code, includes, excludes):
    analytes = set(read(order(loinc(code)))[0].analytes)
    assert includes <= analytes
    assert analytes.isdisjoint(excludes)


def test_a_blood_pressure_panel_brings_both_pressures():
    # LOINC 85354-9: blood pressure panel.
    assert read(order(loinc("85354-9")))[0].analytes == ("diastolic-bp", "systolic-bp")


def test_an_echocardiogram_brings_the_ejection_fraction():
    # SNOMED CT 40701008: echocardiography.
    code = {"coding": [{"system": "http://snomed.info/sct", "code": "40701008"}]}
    assert read(order(code))[0].analytes == ("lvef",)


def test_several_codings_ask_for_all_they_name():
    # LOINC 2160-0: creatinine in serum or plasma.
    assert read(order(loinc("2823-3", "2160-0")))[0].analytes == ("creatinine", "potassium")


def test_a_code_nobody_knows_is_counted():
    found, intake = read(order({"text": "Physiotherapy"}))
    assert found is None
    assert [(seen.kind, seen.text) for seen in intake.not_recognised] == [("observation", "Physiotherapy")]


@pytest.mark.parametrize(
    ("occurrence", "planned"),
    [
        ({"occurrencePeriod": {"start": "2025-02-01", "end": "2025-02-08"}}, "2025-02-01"),
        ({"occurrencePeriod": {"end": "2025-02-08"}}, "2025-02-08"),
        ({"occurrenceTiming": {"event": ["2025-03-01", "2025-02-01"]}}, "2025-02-01"),
        ({"occurrenceTiming": {"repeat": {"boundsPeriod": {"start": "2025-02-03"}}}}, "2025-02-03"),
        ({"occurrenceTiming": {"repeat": {"frequency": 1, "period": 1, "periodUnit": "wk"}}}, "None"),
        ({}, "None"),
    ],
)
def test_the_day_planned_is_the_first_on_which_it_may_be_done(occurrence, planned):
    assert str(read(order(**occurrence))[0].planned) == planned
