"""Whether a medication resource is a therapy, and in what state: status, intent, doNotPerform. Read before all content."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from cds.clinical.record import EntryKind, EntryStatus
from cds.fhir.timing import Place

# FHIR R4: the value sets bound to status of the four resources. None: not a therapy.
_STATUSES: dict[EntryKind, dict[str, EntryStatus | None]] = {
    "order": {
        "active": "active",
        "on-hold": "on-hold",
        "cancelled": None,
        "completed": "completed",
        "entered-in-error": None,
        "stopped": "stopped",
        "draft": "planned",
        "unknown": "unknown",
    },
    "statement": {
        "active": "active",
        "completed": "completed",
        "entered-in-error": None,
        "intended": "planned",
        "stopped": "stopped",
        "on-hold": "on-hold",
        "unknown": "unknown",
        "not-taken": "stopped",
    },
    "dispense": {
        "preparation": "planned",
        "in-progress": "active",
        "cancelled": None,
        "on-hold": "on-hold",
        "completed": "completed",
        "entered-in-error": None,
        "stopped": "stopped",
        "declined": None,
        "unknown": "unknown",
    },
    "administration": {
        "in-progress": "active",
        "not-done": None,
        "on-hold": "on-hold",
        "completed": "completed",
        "entered-in-error": None,
        "stopped": "stopped",
        "unknown": "unknown",
    },
}
_ORDER_INTENTS = frozenset({"order", "original-order", "reflex-order", "filler-order", "instance-order"})
_PLAN_INTENTS = frozenset({"proposal", "plan", "option"})
_NOTHING_TO_DO = "Nothing to do unless that is wrong"


def read_status(resource: Mapping[str, Any], kind: EntryKind, place: Place) -> EntryStatus | None:
    """Read the state of a medication resource; None, with an issue, where it is no therapy.

    A status that is missing or unknown to R4 counts as "unknown", with a doubt. `place` is that of the resource.
    """
    forbids = resource.get("doNotPerform")
    if forbids is not None and not isinstance(forbids, bool):
        place.below("doNotPerform").refuse(
            "is neither true nor false, so it may be an order not to give it", "Send a JSON boolean"
        )
        return None
    if forbids is True:
        _inform(place, "doNotPerform", "says that the medicine is not to be given")
        return None
    word = resource.get("status")
    status: EntryStatus | None = "unknown"
    if isinstance(word, str) and word in _STATUSES[kind]:
        status = _STATUSES[kind][word]
    else:
        place.below("status").doubt("is missing or no status of FHIR R4; taken as unknown", "Send a status of FHIR R4")
    if status is None:
        _inform(place, "status", "says that this is no therapy")
        return None
    return _with_intent(resource.get("intent"), status, place) if kind == "order" else status


def _with_intent(intent: object, status: EntryStatus, place: Place) -> EntryStatus | None:
    if isinstance(intent, str) and intent in _PLAN_INTENTS:
        if status in ("stopped", "completed"):
            _inform(place, "intent", "says that this was only a plan, which is over")
            return None
        return "planned"
    if not isinstance(intent, str) or intent not in _ORDER_INTENTS:
        place.below("intent").doubt(
            "is missing or no intent of FHIR R4; taken as an order", "Send order, plan or proposal"
        )
    return status


def _inform(place: Place, name: str, problem: str) -> None:
    here = place.below(name)
    here.context.intake.inform(here.source, here.path, problem, _NOTHING_TO_DO)
