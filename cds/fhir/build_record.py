"""One patient's resources -> one record. The gate, the readers and the order of the facts; nothing clinical.

Every used resource passes the gate first; one that does not costs itself alone, but a Patient that does not costs the
record. The result does not depend on the order of the resources.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from contextlib import suppress
from dataclasses import dataclass, replace
from datetime import date, tzinfo
from typing import Any, Protocol, TypeVar

from cds.clinical.record import Measurement, MedicationEntry, OtherMedicine, PatientRecord, TestOrder
from cds.clinical.timeline import PartialDate, recency
from cds.errors import Issue
from cds.fhir.allergies import read_allergy
from cds.fhir.bundle import PatientResources, Resolve
from cds.fhir.codes import CodeBook
from cds.fhir.conditions import read_conditions
from cds.fhir.dates import DateNotUnderstood, parse_date
from cds.fhir.encounters import read_encounter
from cds.fhir.intake import Context, Intake, NotRecognised
from cds.fhir.medications import read_medication
from cds.fhir.observations import read_observation
from cds.fhir.ordered_tests import read_service_request
from cds.fhir.patient import read_patient
from cds.fhir.procedures_devices import read_device, read_procedure
from cds.fhir.stay_reasons import with_linked_reasons
from cds.fhir.validate import refusal

_MEDICATION_TYPES = ("MedicationRequest", "MedicationStatement", "MedicationDispense", "MedicationAdministration")
_OVER = ("stopped", "completed", "cancelled", "entered-in-error", "not-taken", "not-done", "draft")


@dataclass(frozen=True, slots=True, kw_only=True)
class BuiltRecord:
    """What became of one patient's resources.

    `record` is None where the Patient resource itself was refused: then there is nothing to assess. `issues` are sorted
    by resource and place, each once; `not_recognised` by kind and code, with how often each was seen. `read` and
    `not_needed` count resources (see `PatientResources`).
    """

    patient: str
    record: PatientRecord | None
    issues: tuple[Issue, ...]
    not_recognised: tuple[tuple[NotRecognised, int], ...]
    read: int
    not_needed: int

    @property
    def is_refused(self) -> bool:
        """True if the patient cannot be assessed."""
        return self.record is None

    @property
    def other_medicines(self) -> tuple[OtherMedicine, ...]:
        """Medicines that are no course, as the record has them."""
        return () if self.record is None else self.record.other_medicines


def build_record(
    patient: PatientResources, codes: CodeBook, zone: tzinfo, *, default_units: Mapping[str, str] | None = None
) -> BuiltRecord:
    """Read all resources of one patient; calendar days are days in `zone`. Raises nothing, whatever they hold."""
    intake = Intake()
    intake.issues.extend(patient.issues)
    issue = refusal(patient.patient)
    if issue is not None:
        intake.issues.append(issue)
        return _built(patient, None, intake)
    context = Context(codes=codes, zone=zone, intake=intake, default_units=default_units or {})
    resources, resolve = _through_the_gate(patient, intake)
    record = _record(patient, resources, resolve, context)
    unread = _unread_medicines(patient, resources, context)
    others = tuple(sorted((*record.other_medicines, *unread), key=lambda other: other.source))
    return _built(patient, replace(record, other_medicines=others), intake)


def _unread_medicines(
    patient: PatientResources, accepted: Mapping[str, tuple[dict[str, Any], ...]], context: Context
) -> list[OtherMedicine]:
    """Medicines whose resource was refused: what they are nobody knows, but that they are there must be said."""
    found = []
    for kind in _MEDICATION_TYPES:
        read = {id(resource) for resource in accepted.get(kind, ())}
        for resource in patient.resources.get(kind, ()):
            if id(resource) in read or resource.get("status") in _OVER:
                continue
            dated = None
            with suppress(DateNotUnderstood):
                dated = parse_date(resource.get("authoredOn"), context.zone)
            source = f"{kind}/{resource['id']}"
            found.append(
                OtherMedicine(
                    display="",
                    reason="the resource was refused",
                    source=source,
                    status="unknown",
                    dated=dated,
                    is_unread=True,
                )
            )
    return found


def _record(
    patient: PatientResources,
    resources: Mapping[str, tuple[dict[str, Any], ...]],
    resolve: Resolve,
    context: Context,
) -> PatientRecord:
    facts = read_patient(patient.patient, context)

    def read(kind: str, reader: Callable[[dict[str, Any]], _T | None]) -> list[_T]:
        return [item for resource in resources.get(kind, ()) if (item := reader(resource)) is not None]

    problems, stated = read_conditions(resources.get("Condition", ()), context, born=facts.born)
    allergies = read("AllergyIntolerance", lambda resource: read_allergy(resource, context, born=facts.born))
    procedures = read("Procedure", lambda resource: read_procedure(resource, context))
    devices = read("Device", lambda resource: read_device(resource, context))
    encounters = read("Encounter", lambda resource: read_encounter(resource, context, resolve=resolve))
    orders = read("ServiceRequest", lambda resource: read_service_request(resource, context))
    measurements: list[Measurement] = []
    for resource in resources.get("Observation", ()):
        measurements.extend(read_observation(resource, context, resolve=resolve))
    entries: list[MedicationEntry] = []
    others: list[OtherMedicine] = []
    for kind in _MEDICATION_TYPES:
        for resource in resources.get(kind, ()):
            found, rest = read_medication(resource, context, resolve=resolve)
            entries.extend(found)
            others.extend(rest)
    orders_for_reasons = (order for kind in _MEDICATION_TYPES for order in resources.get(kind, ()))
    encounters = with_linked_reasons(
        encounters, resources.get("Condition", ()), orders_for_reasons, problems, entries, resolve
    )
    return PatientRecord(
        patient=patient.reference,
        sex=facts.sex,
        born=facts.born,
        is_deceased=facts.is_deceased,
        died=facts.died,
        medications=_newest_first(entries, lambda entry: entry.authored or entry.starts),
        measurements=_newest_first(measurements, lambda measurement: measurement.taken),
        problems=_newest_first(problems, lambda problem: problem.dated),
        intolerances=_newest_first([*stated, *allergies], lambda intolerance: intolerance.recorded),
        procedures_devices=_newest_first([*procedures, *devices], lambda item: item.done),
        encounters=_newest_first(encounters, lambda stay: stay.starts),
        tests_ordered=_newest_first(orders, _order_date),
        other_medicines=tuple(sorted(others, key=lambda other: other.source)),
    )


def _through_the_gate(
    patient: PatientResources, intake: Intake
) -> tuple[Mapping[str, tuple[dict[str, Any], ...]], Resolve]:
    """The resources that are R4, and a way to follow references that never leads to one that is not."""
    refused: set[int] = set()
    accepted: dict[str, tuple[dict[str, Any], ...]] = {}
    for kind, resources in patient.resources.items():
        passed = []
        for resource in () if kind == "Patient" else resources:
            issue = refusal(resource)
            if issue is None:
                passed.append(resource)
            else:
                intake.issues.append(issue)
                refused.add(id(resource))
        accepted[kind] = tuple(passed)

    def resolve(reference: Any, holder: Mapping[str, Any]) -> dict[str, Any] | None:
        found = patient.resolve(reference, holder)
        return None if found is None or id(found) in refused else found

    return accepted, resolve


def _order_date(order: TestOrder) -> PartialDate | None:
    return order.ordered if order.ordered is not None else order.planned


class _Sourced(Protocol):
    @property
    def source(self) -> str: ...


_T = TypeVar("_T")
_S = TypeVar("_S", bound=_Sourced)


def _newest_first(items: Iterable[_S], when: Callable[[_S], PartialDate | None]) -> tuple[_S, ...]:
    """Newest first, what has no date last; of one moment by source, and inside one resource in its own order."""

    def newness(item: _S) -> tuple[date, float, date]:
        dated = when(item)
        return (date.min, float("-inf"), date.min) if dated is None else recency(dated)

    return tuple(sorted(sorted(items, key=lambda item: item.source), key=newness, reverse=True))


def _built(patient: PatientResources, record: PatientRecord | None, intake: Intake) -> BuiltRecord:
    return BuiltRecord(
        patient=patient.reference,
        record=record,
        issues=tuple(sorted(set(intake.issues), key=_place)),
        not_recognised=tuple(sorted(intake.not_recognised.items())),
        read=patient.read,
        not_needed=patient.not_needed,
    )


def _place(issue: Issue) -> tuple[str, str, str, str, str]:
    return issue.resource, issue.path, issue.problem, issue.fix, issue.severity
