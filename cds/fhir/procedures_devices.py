"""Procedure and Device -> what was done to the patient and what is in them, by concept. By code only."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Literal

from cds.clinical.record import ProcedureOrDevice
from cds.clinical.timeline import PartialDate
from cds.fhir.intake import Context
from cds.fhir.patient import count_unknown, read_date, read_period, source_of

_DONE = frozenset({"completed", "in-progress"})
_NOT_YET = frozenset({"preparation", "on-hold"})
_NOT_DONE = frozenset({"not-done", "stopped", "entered-in-error", "unknown"})
_NOT_PRESENT = frozenset({"inactive", "entered-in-error"})


def read_procedure(resource: Mapping[str, Any], context: Context) -> ProcedureOrDevice | None:
    """Read one Procedure that was done or is going on; None for all others and for codes that mean nothing here.

    `done` is performedDateTime or the start of performedPeriod, `ended` the end of the period; both None where not
    sent. A code nobody knows is counted. Raises nothing.
    """
    source = source_of(resource)
    status = resource.get("status")
    if not isinstance(status, str) or status not in _DONE | _NOT_YET | _NOT_DONE:
        context.intake.refuse(
            source, "status", "is missing or no status of FHIR R4", "Send completed for what was done"
        )
        return None
    if status in _NOT_DONE:
        context.intake.inform(
            source,
            "status",
            "does not say that the procedure was done, so it does not count",
            "Nothing to do unless the status is wrong",
        )
    if status not in _DONE:
        return None
    done, ended = _performed(resource, source, context)
    return _item("procedure", resource.get("code"), "code", source, context, done=done, ended=ended)


def read_device(resource: Mapping[str, Any], context: Context) -> ProcedureOrDevice | None:
    """Read one Device of the patient by its type; None for an inactive one and for types that mean nothing here.

    R4 has no date of implantation on a Device, so `done` is None. A device whose status is missing or unknown counts as
    present, the latter with a doubt. Raises nothing.
    """
    source = source_of(resource)
    status = resource.get("status")
    if isinstance(status, str) and status in _NOT_PRESENT:
        context.intake.inform(
            source,
            "status",
            "says that the device is not in use, so it does not count",
            "Nothing to do unless the status is wrong",
        )
        return None
    if status is not None and status not in ("active", "unknown"):
        context.intake.refuse(source, "status", "is no status of FHIR R4", "Send active for a device in use")
        return None
    item = _item("device", resource.get("type"), "type", source, context)
    if item is not None and status == "unknown":
        context.intake.doubt(
            source,
            "status",
            "leaves open whether the device is in use; it counts as present",
            "Send active or inactive",
        )
    return item


def _performed(
    resource: Mapping[str, Any], source: str, context: Context
) -> tuple[PartialDate | None, PartialDate | None]:
    if resource.get("performedDateTime") is not None:
        return read_date(resource, "performedDateTime", source, context), None
    start, end = read_period(resource, "performedPeriod", source, context)
    return (start, end) if start is not None else (end, end)


def _item(
    kind: Literal["procedure", "device"],
    concept: object,
    path: str,
    source: str,
    context: Context,
    *,
    done: PartialDate | None = None,
    ended: PartialDate | None = None,
) -> ProcedureOrDevice | None:
    if not isinstance(concept, Mapping) or not concept:
        context.intake.refuse(source, path, "is missing", f"Send the code of the {kind}")
        return None
    match = context.codes.procedure_or_device(concept)
    if match is None:
        count_unknown(kind, concept, context)
        return None
    if not match.include and not match.weak:
        return None
    return ProcedureOrDevice(
        concepts=match.include,
        weak_concepts=match.weak,
        kind=kind,
        source=source,
        display=match.display,
        matched_by=match.matched_by,
        done=done,
        ended=ended,
    )
