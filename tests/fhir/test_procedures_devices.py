"""Procedure and Device: what was done, and what is still in the patient."""

from __future__ import annotations

from datetime import UTC

import pytest

from cds.content.codes import load_code_book
from cds.fhir.intake import Context, Intake
from cds.fhir.procedures_devices import read_device, read_procedure

BOOK = load_code_book()
SNOMED = "http://snomed.info/sct"
HAEMODIALYSIS = {"coding": [{"system": SNOMED, "code": "233575001"}]}  # intermittent haemodialysis

PACEMAKER = {"coding": [{"system": SNOMED, "code": "14106009"}]}  # cardiac pacemaker, the device


def procedure(status="completed", **more):
    return {"resourceType": "Procedure", "id": "p1", "status": status, "code": HAEMODIALYSIS, **more}


def device(**more):
    return {"resourceType": "Device", "id": "d1", "type": PACEMAKER, **more}


def read(reader, resource):
    context = Context(codes=BOOK, zone=UTC, intake=Intake())
    return reader(resource, context), context.intake


@pytest.mark.parametrize("status", ["completed", "in-progress"])
def test_a_procedure_done_or_going_on_counts(status):
    found, intake = read(read_procedure, procedure(status, performedDateTime="2024-05-06"))
    assert "dialysis" in found.concepts
    assert (found.kind, found.source, str(found.done)) == ("procedure", "Procedure/p1", "2024-05-06")
    assert intake.issues == []


@pytest.mark.parametrize("status", ["preparation", "on-hold"])
def test_a_procedure_still_to_come_is_passed_over(status):
    assert read(read_procedure, procedure(status)) == (None, Intake())


@pytest.mark.parametrize("status", ["not-done", "stopped", "entered-in-error", "unknown"])
def test_a_procedure_that_was_not_done_does_not_count_and_this_is_said(status):
    found, intake = read(read_procedure, procedure(status))
    assert found is None
    assert [(issue.path, issue.severity) for issue in intake.issues] == [("status", "information")]


@pytest.mark.parametrize("status", [None, "done", 1, ["completed"]])
def test_a_procedure_without_a_status_of_r4_is_refused(status):
    found, intake = read(read_procedure, procedure(status))
    assert found is None
    assert [(issue.path, issue.severity) for issue in intake.issues] == [("status", "refused")]


def test_a_procedure_over_a_period_has_a_beginning_and_an_end():
    found, _ = read(read_procedure, procedure(performedPeriod={"start": "2024-05-01", "end": "2024-05-03"}))
    assert (str(found.done), str(found.ended)) == ("2024-05-01", "2024-05-03")


def test_a_period_the_wrong_way_round_costs_the_dates_only():
    found, intake = read(read_procedure, procedure(performedPeriod={"start": "2024-05-03", "end": "2024-05-01"}))
    assert (found.done, found.ended) == (None, None)
    assert [(issue.path, issue.severity) for issue in intake.issues] == [("performedPeriod", "doubtful")]


@pytest.mark.parametrize(("reader", "kind"), [(read_procedure, "procedure"), (read_device, "device")])
def test_a_code_nobody_knows_is_counted(reader, kind):
    unknown = {"text": "Something local"}
    resource = procedure(code=unknown) if kind == "procedure" else device(type=unknown)
    found, intake = read(reader, resource)
    assert found is None
    assert [(seen.kind, seen.text) for seen in intake.not_recognised] == [(kind, "Something local")]


@pytest.mark.parametrize("status", ["active", None])
def test_a_device_in_use_is_present_without_a_date(status):
    found, intake = read(read_device, device(status=status))
    assert "pacemaker-device" in found.concepts
    assert (found.kind, found.done, found.is_active) == ("device", None, True)
    assert intake.issues == []


def test_a_device_of_unknown_status_is_present_with_a_doubt():
    found, intake = read(read_device, device(status="unknown"))
    assert found is not None
    assert [(issue.path, issue.severity) for issue in intake.issues] == [("status", "doubtful")]


@pytest.mark.parametrize("status", ["inactive", "entered-in-error"])
def test_a_device_taken_out_or_recorded_by_mistake_is_not_present(status):
    found, intake = read(read_device, device(status=status))
    assert found is None
    assert [(issue.path, issue.severity) for issue in intake.issues] == [("status", "information")]


def test_a_device_without_a_type_is_refused():
    found, intake = read(read_device, device(type=None))
    assert found is None
    assert [(issue.path, issue.severity) for issue in intake.issues] == [("type", "refused")]
