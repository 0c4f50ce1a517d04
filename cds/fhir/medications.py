"""MedicationRequest, -Statement, -Dispense and -Administration -> medication entries, one for each ingredient.

Status first, then the medicine (by code, by reference, by text), its dates, its doses. What is no systemic medicine of a
class we use is an `OtherMedicine`. Courses are built from entries elsewhere (rulings 29 to 40).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from datetime import datetime
from typing import Any

from cds.clinical.record import EntryKind, EntryStatus, MedicationEntry, OtherMedicine, Route
from cds.clinical.timeline import PartialDate, recency
from cds.fhir.code_matches import DrugComponent
from cds.fhir.dates import DateNotUnderstood, parse_date, parse_period
from cds.fhir.dosage import Doses, read_doses, read_given
from cds.fhir.intake import Context
from cds.fhir.medication_status import read_status
from cds.fhir.medicine import Medicine, Resolve, read_medicine, route_of
from cds.fhir.references import Literal, named_resource, target_of
from cds.fhir.supply import refills_of, supply_days
from cds.fhir.timing import Place

_KINDS: dict[str, EntryKind] = {
    "MedicationRequest": "order",
    "MedicationStatement": "statement",
    "MedicationDispense": "dispense",
    "MedicationAdministration": "administration",
}
NOT_RECOGNISED = "not recognised"
NOT_SYSTEMIC = "not systemic: eye drops, gels and the like"
NO_CLASS = "of no class used here"
_MOST_REASONS = 50
_MAXIMAL_DOSE = "maximal-tolerated-dose"
_SEND_DATE = "Send a date as FHIR R4 writes it, a time with seconds and zone; the resource counts without it"


@dataclass(frozen=True, slots=True, kw_only=True)
class _Dates:
    authored: PartialDate | None = None
    starts: PartialDate | None = None
    ends: PartialDate | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class _Reading:
    """A resource, read: what its entries have in common."""

    resource: Mapping[str, Any]
    kind: EntryKind
    status: EntryStatus
    medicine: Medicine
    route: Route | None
    dates: _Dates
    doses: Doses
    supply_days: float | None
    refills: int
    place: Place
    resolve: Resolve


def read_medication(
    resource: dict[str, Any], context: Context, *, resolve: Resolve
) -> tuple[tuple[MedicationEntry, ...], tuple[OtherMedicine, ...]]:
    """Read one medication resource: its entries, and what of it is no course here.

    Both empty where it is no therapy, or names no medicine; every such reason is an issue in `context.intake`, a
    medicine in no table is counted there and listed as other. A date that is not understood leaves the entry undated.
    `resolve` follows medicationReference and the references to orders. Raises nothing, whatever the shape.
    """
    kind = _KINDS.get(str(resource.get("resourceType")))
    if kind is None:
        return (), ()
    identity = resource.get("id")
    source = f"{resource['resourceType']}/{identity if isinstance(identity, str) else '?'}"
    place = Place(context, source, "")
    status = read_status(resource, kind, place)
    if status is None:
        return (), ()
    medicine = read_medicine(resource, place, resolve)
    if medicine is None:
        return (), ()
    route = route_of(_dosages(resource, kind)) if medicine.route is None else medicine.route

    dates = _dates(resource, kind, place)

    def other(reason: str, display: str = "") -> OtherMedicine:
        return OtherMedicine(
            display=display or medicine.display,
            reason=reason,
            source=source,
            status=status,
            dated=dates.authored if dates.authored is not None else dates.starts,
            is_unread=reason == NOT_RECOGNISED,
        )

    if not medicine.components:
        return (), (other(NOT_RECOGNISED),)
    if medicine.is_systemic is False or (medicine.is_systemic is None and route == "other" and medicine.route is None):
        return (), (other(NOT_SYSTEMIC),)
    used = [position for position, component in enumerate(medicine.components) if _is_used(component)]
    others = tuple(
        other(NO_CLASS, "" if len(medicine.components) == 1 else component.drug)
        for component in medicine.components
        if not _is_used(component)
    )
    if not used:
        return (), others
    doses = _doses(resource, kind, medicine, place, dates)
    first = used[0]
    read = _Reading(
        resource=resource,
        kind=kind,
        status=status,
        medicine=medicine,
        route=route,
        dates=dates,
        doses=doses,
        supply_days=supply_days(
            resource,
            kind,
            place,
            components=medicine.components[first:],
            lines=doses.lines[first],
            pieces_a_day=doses.pieces_a_day,
        ),
        refills=refills_of(resource, kind, place),
        place=place,
        resolve=resolve,
    )
    return tuple(_entry(read, position) for position in used), others


def _is_used(component: DrugComponent) -> bool:
    return component.drug_class is not None or bool(component.possible_classes)


def _entry(read: _Reading, position: int) -> MedicationEntry:
    resource, medicine, dates, context = read.resource, read.medicine, read.dates, read.place.context
    component, lines = medicine.components[position], read.doses.lines[position]
    starts, ends = dates.starts, dates.ends
    line_starts = [line.starts for line in lines if line.starts is not None]
    if starts is None and line_starts:
        starts = min(line_starts, key=recency)
    if starts is None and read.kind == "order":
        starts = dates.authored
    line_ends = [line.ends for line in lines if line.ends is not None]
    if ends is None and lines and len(line_ends) == len(lines):
        ends = max(line_ends, key=recency)
    return MedicationEntry(
        source=read.place.source,
        kind=read.kind,
        drug=component.drug,
        drug_class=component.drug_class,
        matched_by=medicine.matched_by,
        status=read.status,
        possible_classes=component.possible_classes if component.drug_class is None else (),
        part_of="/".join(c.drug for c in medicine.components) if len(medicine.components) > 1 else None,
        route=read.route,
        authored=dates.authored,
        starts=starts,
        ends=ends,
        supply_days=read.supply_days,
        refills=read.refills,
        lines=lines,
        reasons=_reasons(resource, read.status, context),
        replaces=_order_of([resource.get("priorPrescription")], resource, read.resolve),
        based_on=_based_on(resource, read.resolve),
        last_updated=_last_updated(resource, context),
        is_patient_reported=_is_patient_reported(resource, read.resolve),
    )


def _dosages(resource: Mapping[str, Any], kind: EntryKind) -> list[Any]:
    found = resource.get("dosageInstruction" if kind in ("order", "dispense") else "dosage")
    return found if isinstance(found, list) else [] if found is None else [found]


def _doses(resource: Mapping[str, Any], kind: EntryKind, medicine: Medicine, place: Place, dates: _Dates) -> Doses:
    if kind == "administration":
        return read_given(resource.get("dosage"), medicine.components, place.below("dosage"))
    name = "dosageInstruction" if kind in ("order", "dispense") else "dosage"
    ordered = dates.authored if kind == "order" or dates.starts is None else dates.starts
    doses = read_doses(resource.get(name), medicine.components, place.below(name), ordered=ordered)
    if not medicine.is_strength_from_text:
        return doses
    marked = (tuple(replace(line, is_from_text=True) for line in lines) for lines in doses.lines)
    return replace(doses, lines=tuple(marked))


def _dates(resource: Mapping[str, Any], kind: EntryKind, place: Place) -> _Dates:
    def day(name: str) -> PartialDate | None:
        if resource.get(name) is None:
            return None
        try:
            return parse_date(resource[name], place.context.zone)
        except DateNotUnderstood as error:
            place.below(name).doubt(error.problem, _SEND_DATE)
            return None

    if kind == "order":
        return _Dates(authored=day("authoredOn"))
    if kind == "dispense":
        handed = day("whenHandedOver")
        return _Dates(authored=handed if handed is not None else day("whenPrepared"), starts=handed)
    try:
        start, end = parse_period(resource.get("effectivePeriod"), place.context.zone)
    except DateNotUnderstood as error:
        place.below("effectivePeriod").doubt(error.problem, _SEND_DATE)
        start = end = None
    start = start if start is not None else day("effectiveDateTime")
    if kind == "statement":
        return _Dates(authored=day("dateAsserted"), starts=start, ends=end)
    return _Dates(authored=start if start is not None else end, starts=start, ends=end)


def _reasons(resource: Mapping[str, Any], status: EntryStatus, context: Context) -> tuple[str, ...]:
    """Concepts of the reason for the status. reasonCode is the indication, unless the therapy rests and nothing else says why."""
    found: dict[str, None] = {}
    names = ["statusReason", "statusReasonCodeableConcept"]
    if status in ("stopped", "on-hold"):
        names.append("reasonCode")
    for name in names:
        value = resource.get(name)
        for concept in value[:_MOST_REASONS] if isinstance(value, list) else [value]:
            if isinstance(concept, Mapping):
                match = context.codes.problem(concept)
                found |= dict.fromkeys(match.include if match is not None else ())
                found |= dict.fromkeys(context.codes.reactions(concept))
        if found:
            break
    stated = resource.get("reasonCode")
    for concept in stated[:_MOST_REASONS] if isinstance(stated, list) else ():
        if isinstance(concept, Mapping) and _MAXIMAL_DOSE in context.codes.reactions(concept):
            found[_MAXIMAL_DOSE] = None  # said of a running order, it is about its dose, not its indication
    return tuple(found)


def _based_on(resource: Mapping[str, Any], resolve: Resolve) -> str | None:
    for name in ("authorizingPrescription", "request", "basedOn", "derivedFrom"):
        value = resource.get(name)
        if (order := _order_of(value if isinstance(value, list) else [value], resource, resolve)) is not None:
            return order
    return None


def _order_of(references: list[Any], holder: Mapping[str, Any], resolve: Resolve) -> str | None:
    """The first order referred to. A reference without type and id is followed."""
    for reference in references[:_MOST_REASONS]:
        if (named := named_resource(reference, "MedicationRequest")) is not None:
            return named
        if not isinstance(reference, Mapping) or isinstance(target_of(reference), Literal):
            continue
        found = resolve(reference, holder)
        if found is not None and found.get("resourceType") == "MedicationRequest" and isinstance(found.get("id"), str):
            return f"MedicationRequest/{found['id']}"
    return None


def _last_updated(resource: Mapping[str, Any], context: Context) -> datetime | None:
    meta = resource.get("meta")
    text = meta.get("lastUpdated") if isinstance(meta, Mapping) else None
    if text is None:
        return None
    try:
        return parse_date(text, context.zone).at
    except DateNotUnderstood:
        return None  # the version settled already in `entries`, where it is an issue


def _is_patient_reported(resource: Mapping[str, Any], resolve: Resolve) -> bool:
    if resource.get("reportedBoolean") is True:
        return True
    for name in ("reportedReference", "informationSource"):
        reference = resource.get(name)
        if named_resource(reference, "Patient") is not None:
            return True
        found = resolve(reference, resource) if isinstance(reference, Mapping) else None
        if found is not None and found.get("resourceType") == "Patient":
            return True
    return False
