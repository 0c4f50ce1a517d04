"""Encounter -> stays and contacts: where, when and for what."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any, Literal

from cds.clinical.record import EncounterFact
from cds.fhir.allergies import NOT_A_FACT
from cds.fhir.bundle import Resolve
from cds.fhir.codings import codings_of
from cds.fhir.intake import Context
from cds.fhir.patient import objects_in, read_period, source_of, status_words

EncounterClass = Literal["inpatient", "emergency", "outpatient", "other"]

_HAPPENED = frozenset({"arrived", "triaged", "in-progress", "onleave", "finished", "unknown"})
_DID_NOT = frozenset({"planned", "cancelled", "entered-in-error"})
# HL7 v3 ActCode, the classes of an encounter. Observation (OBSENC), short stay and pre-admission are "other": a stay
# to be watched is no admission.
_CLASSES: Mapping[str, EncounterClass] = {
    **dict.fromkeys(("IMP", "ACUTE", "NONAC"), "inpatient"),
    "EMER": "emergency",
    **dict.fromkeys(("AMB", "VR", "HH"), "outpatient"),
}
_COMORBIDITY = "cm"  # diagnosis role: beside the reason of the stay, not the reason


def read_encounter(
    resource: Mapping[str, Any], context: Context, *, resolve: Resolve | None = None
) -> EncounterFact | None:
    """Read one Encounter that took place; None for planned, cancelled and wrong ones.

    `reasons` are the concepts of reasonCode and of the Conditions that `resolve` finds behind reasonReference and
    diagnosis, sorted; a diagnosis marked as comorbidity is no reason. A code nobody knows is passed over: the Condition
    itself is where it is counted. Raises nothing.
    """
    source = source_of(resource)
    status = resource.get("status")
    if not isinstance(status, str) or status not in _HAPPENED | _DID_NOT:
        context.intake.refuse(source, "status", "is missing or no status of FHIR R4", "Send the R4 status of the stay")
        return None
    if status in _DID_NOT:
        return None
    starts, ends = read_period(resource, "period", source, context)
    reasons = {slug for concept in _reasons(resource, resolve) for slug in _included(concept, context)}
    return EncounterFact(
        encounter_class=_class(resource),
        source=source,
        status=status,
        starts=starts,
        ends=ends,
        reasons=tuple(sorted(reasons)),
    )


def _class(resource: Mapping[str, Any]) -> EncounterClass:
    coded = resource.get("class")
    if coded is None:
        return "inpatient" if isinstance(resource.get("hospitalization"), Mapping) else "other"
    code = coded.get("code") if isinstance(coded, Mapping) else None
    return _CLASSES.get(code.strip().upper(), "other") if isinstance(code, str) else "other"


def _reasons(resource: Mapping[str, Any], resolve: Resolve | None) -> Iterator[Mapping[str, Any]]:
    """Every concept that says why: stated in the Encounter, or the code of a Condition it names."""
    yield from objects_in(resource.get("reasonCode"))
    if resolve is None:
        return
    references = objects_in(resource.get("reasonReference"))
    for diagnosis in objects_in(resource.get("diagnosis")):
        roles = {coding.code.lower() for coding in codings_of(diagnosis.get("use"))}
        if _COMORBIDITY not in roles:
            references += objects_in(diagnosis.get("condition"))
    for reference in references:
        found = resolve(reference, resource)
        if found is None or found.get("resourceType") != "Condition" or not isinstance(found.get("code"), Mapping):
            continue
        if not status_words(found.get("verificationStatus"), NOT_A_FACT):
            yield found["code"]


def _included(concept: Mapping[str, Any], context: Context) -> tuple[str, ...]:
    match = context.codes.problem(concept)
    return () if match is None else match.include
