"""ServiceRequest -> tests already ordered, by the analytes they will bring."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from cds.clinical.record import TestOrder
from cds.clinical.timeline import PartialDate
from cds.clinical.units import CANONICAL_UNIT
from cds.fhir.codings import codings_of
from cds.fhir.intake import Context
from cds.fhir.patient import count_unknown, objects_in, read_date, read_period, says_yes, source_of

_COUNTING = frozenset({"active", "draft"})
_OTHER_STATUSES = frozenset({"on-hold", "revoked", "completed", "entered-in-error", "unknown"})
_ORDERS = frozenset({"order", "original-order", "reflex-order", "filler-order", "instance-order"})
_OTHER_INTENTS = frozenset({"proposal", "plan", "directive", "option"})
_RENAL = ("creatinine", "potassium", "sodium")
# LOINC panel definitions, from memory; of each panel only what a rule may ask for.
_PANELS: Mapping[str, tuple[str, ...]] = {
    "24320-4": _RENAL,  # basic metabolic 1998
    "24321-2": _RENAL,  # basic metabolic 2000
    "51990-0": _RENAL,  # basic metabolic, blood
    "24362-6": ("albumin", *_RENAL),  # renal function 2000
    "24323-8": ("albumin", "alt", "ast", "bilirubin-total", *_RENAL),  # comprehensive metabolic 2000
    "24326-1": ("potassium", "sodium"),  # electrolytes 1998
    "34552-0": ("lvef",),  # cardiac 2D echo panel
}
# What a panel of the code tables (use "container") and an examination bring.
_CONTAINERS: Mapping[str, tuple[str, ...]] = {"bp-panel": ("diastolic-bp", "systolic-bp")}
_EXAMINATIONS: Mapping[str, tuple[str, ...]] = {"echocardiogram": ("lvef",)}


def read_service_request(resource: Mapping[str, Any], context: Context) -> TestOrder | None:
    """Read one ServiceRequest that orders a test we use; None for all others.

    Active orders count, drafts only as drafts; proposals, plans and requests not to do something never. `planned` is
    occurrenceDateTime, the start of occurrencePeriod, or the first event or start of occurrenceTiming. A code nobody
    knows is counted as an observation. Raises nothing.
    """
    source = source_of(resource)
    status, intent = resource.get("status"), resource.get("intent")
    if not isinstance(status, str) or status not in _COUNTING | _OTHER_STATUSES:
        context.intake.refuse(source, "status", "is missing or no status of FHIR R4", "Send active for a running order")
        return None
    if status not in _COUNTING:
        return None
    if not isinstance(intent, str) or intent not in _ORDERS | _OTHER_INTENTS:
        context.intake.refuse(source, "intent", "is missing or no intent of FHIR R4", "Send order for an order")
        return None
    if intent not in _ORDERS or says_yes(resource.get("doNotPerform")):
        return None
    code = resource.get("code")
    if not isinstance(code, Mapping) or not code:
        context.intake.refuse(source, "code", "is missing", "Send the code of what is ordered")
        return None
    analytes = _analytes(code, context)
    if not analytes:
        return None
    return TestOrder(
        analytes=analytes,
        source=source,
        ordered=read_date(resource, "authoredOn", source, context),
        planned=_planned(resource, source, context),
        is_draft=status == "draft",
    )


def _analytes(code: Mapping[str, Any], context: Context) -> tuple[str, ...]:
    """Everything that the codings ask for, sorted; a code in no table is counted."""
    matches = context.codes.analytes(code)
    examination = context.codes.procedure_or_device(code)
    panels = [_PANELS[c.code] for c in codings_of(code) if c.system == "loinc" and c.code in _PANELS]
    if not matches and examination is None and not panels:
        count_unknown("observation", code, context)
        return ()
    found = {analyte for panel in panels for analyte in panel}
    for match in matches:
        if match.use == "container":
            found.update(_CONTAINERS.get(match.analyte, ()))
        if match.use != "exclude":
            found.add(match.analyte)
    for concept in examination.include if examination is not None else ():
        found.update(_EXAMINATIONS.get(concept, ()))
    return tuple(sorted(found & CANONICAL_UNIT.keys()))


def _planned(resource: Mapping[str, Any], source: str, context: Context) -> PartialDate | None:
    if resource.get("occurrenceDateTime") is not None:
        return read_date(resource, "occurrenceDateTime", source, context)
    start, end = read_period(resource, "occurrencePeriod", source, context)
    if start is not None or end is not None:
        return start if start is not None else end
    timing = resource.get("occurrenceTiming")
    if not isinstance(timing, Mapping):
        return None
    events = timing.get("event")
    if isinstance(events, list) and events:
        return _first_event(events, source, context)
    for repeat in objects_in(timing.get("repeat")):
        start, end = read_period(repeat, "boundsPeriod", source, context)
        return start if start is not None else end
    return None


def _first_event(events: list[Any], source: str, context: Context) -> PartialDate | None:
    dated = [
        read_date({"occurrenceTiming.event": event}, "occurrenceTiming.event", source, context) for event in events
    ]
    return min(
        (when for when in dated if when is not None), key=lambda when: (when.earliest, when.latest), default=None
    )
