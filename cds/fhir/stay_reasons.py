"""What a stay was for, where the Encounter itself does not say: problems and orders that point at it.

Many systems leave reasonCode empty and link the diagnosis, or the order given for it, to the stay instead.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import replace
from typing import Any

from cds.clinical.record import EncounterFact, MedicationEntry, Problem
from cds.clinical.timeline import PartialDate
from cds.fhir.bundle import Resolve
from cds.fhir.patient import objects_in
from cds.fhir.references import named_resource

_STAYS = ("inpatient", "emergency")


def with_linked_reasons(
    encounters: Sequence[EncounterFact],
    conditions: Iterable[Mapping[str, Any]],
    orders: Iterable[Mapping[str, Any]],
    problems: Iterable[Problem],
    entries: Iterable[MedicationEntry],
    resolve: Resolve,
) -> list[EncounterFact]:
    """Give stays the concepts of the problems linked to them; what is dated after the stay is no reason for it."""
    by_source = {problem.source: problem for problem in problems}
    dated = {entry.source: entry.authored or entry.starts for entry in entries}
    linked: dict[str, list[tuple[Problem, PartialDate | None]]] = defaultdict(list)
    for condition in conditions:
        stay = named_resource(condition.get("encounter"), "Encounter")
        problem = by_source.get(f"Condition/{condition.get('id')}")
        if stay is not None and problem is not None:
            linked[stay].append((problem, problem.dated))
    for order in orders:
        stay = named_resource(order.get("encounter"), "Encounter")
        if stay is None:
            continue
        for reference in objects_in(order.get("reasonReference")):
            found = resolve(reference, order)
            problem = by_source.get(f"Condition/{found.get('id')}") if found is not None else None
            if problem is not None:
                linked[stay].append((problem, dated.get(f"{order.get('resourceType')}/{order.get('id')}")))
    return [_with(stay, linked.get(stay.source, ())) for stay in encounters]


def _with(stay: EncounterFact, linked: Iterable[tuple[Problem, PartialDate | None]]) -> EncounterFact:
    if stay.encounter_class not in _STAYS:
        return stay
    last = stay.ends if stay.ends is not None else stay.starts
    reasons = {
        concept
        for problem, when in linked
        if when is None or last is None or when.earliest <= last.latest
        for concept in problem.concepts
    }
    return replace(stay, reasons=tuple(sorted({*stay.reasons, *reasons}))) if reasons else stay
