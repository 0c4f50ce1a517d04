"""Condition -> problems, and the intolerances that a Condition states by its code.

Status of verification first, then code, clinical status and dates. A concept that needs a second code counts only beside
an active problem that gives it one; doubt about the rest is said and the problem kept, with the word its sender used.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any

from cds.clinical.record import Intolerance, Problem
from cds.clinical.timeline import PartialDate
from cds.fhir.allergies import Status, kind_of, read_verification
from cds.fhir.code_matches import AllergyMatch, ConceptMatch
from cds.fhir.codings import shown_text
from cds.fhir.intake import Context
from cds.fhir.patient import (
    count_unknown,
    objects_in,
    read_date,
    read_onset,
    read_period,
    source_of,
    status_words,
)

_CLINICAL = frozenset({"active", "recurrence", "relapse", "inactive", "remission", "resolved", "unknown"})
_OVER = frozenset({"inactive", "remission", "resolved"})
_ABATEMENTS = ("abatementDateTime", "abatementPeriod", "abatementAge", "abatementRange", "abatementString")
# The finding whose severity a qualifier states: what "severe" means depends on what is severe.
_QUALIFIED: Mapping[str, str] = {"lvsd-moderate-severe": "lvsd-severity-unspecified"}


def read_conditions(
    resources: Sequence[Mapping[str, Any]], context: Context, *, born: PartialDate | None = None
) -> tuple[tuple[Problem, ...], tuple[Intolerance, ...]]:
    """Read all Conditions of one patient, in their order; those that say nothing we use are left out.

    They come together because some concepts need a second problem of the same patient (`CodeBook.partners`). A code
    nobody knows is counted. `born` turns an age at onset into a date. Raises nothing.
    """
    problems: list[Problem] = []
    intolerances: list[Intolerance] = []
    for resource in resources:
        source = source_of(resource)
        verification = read_verification(resource, source, context)
        if verification is None:
            continue
        code = resource.get("code")
        if not isinstance(code, Mapping) or not code:
            context.intake.refuse(source, "code", "is missing", "Send the code of the problem")
            continue
        match = context.codes.problem(code)
        allergy = context.codes.allergy(_without_texts(code))
        if allergy is not None and not allergy.is_finding:
            allergy = None
        if match is None and allergy is None:
            count_unknown("problem", code, context)
            continue
        problem = _problem(match or ConceptMatch(), resource, source, context, verification=verification, born=born)
        if allergy is not None and (allergy.drugs or allergy.drug_classes):
            intolerances.append(_intolerance(allergy, code, problem, context))
        if problem.concepts or problem.weak_concepts or problem.excluded_concepts:
            problems.append(problem)
    return _paired(problems, context.codes.partners), tuple(intolerances)


def _problem(
    match: ConceptMatch,
    resource: Mapping[str, Any],
    source: str,
    context: Context,
    *,
    verification: str,
    born: PartialDate | None,
) -> Problem:
    abated = _abated(resource, source, context)
    concepts = {*match.include, *_qualified(match, resource, context)}
    return Problem(
        concepts=tuple(sorted(concepts)),
        weak_concepts=tuple(concept for concept in match.weak if concept not in concepts),
        excluded_concepts=match.excluded,
        source=source,
        clinical_status=_clinical_status(resource, source, context, abated),
        verification=verification,
        display=match.display,
        matched_by=match.matched_by,
        onset=read_onset(resource, source, context, born),
        recorded=read_date(resource, "recordedDate", source, context),
        abated=abated,
    )


def _qualified(match: ConceptMatch, resource: Mapping[str, Any], context: Context) -> tuple[str, ...]:
    """Concepts that the severity of the finding adds to its code."""
    severity = resource.get("severity")
    graded = context.codes.problem(severity) if isinstance(severity, Mapping) else None
    if graded is None:
        return ()
    return tuple(qualifier for qualifier in graded.qualifiers if _QUALIFIED.get(qualifier) in match.include)


def _abated(resource: Mapping[str, Any], source: str, context: Context) -> PartialDate | None:
    """When it ended: abatementDateTime, or the end (else the start) of abatementPeriod."""
    if resource.get("abatementDateTime") is not None:
        return read_date(resource, "abatementDateTime", source, context)
    start, end = read_period(resource, "abatementPeriod", source, context)
    return end if end is not None else start


def _clinical_status(resource: Mapping[str, Any], source: str, context: Context, abated: PartialDate | None) -> str:
    """The sender's word; without one, resolved where the problem has abated and unknown otherwise."""
    has_abated = any(resource.get(element) is not None for element in _ABATEMENTS)
    has_abated = has_abated or resource.get("abatementBoolean") is True
    status = resource.get("clinicalStatus")
    words = status_words(status, _CLINICAL)
    if status is not None and len(words) != 1:
        context.intake.doubt(
            source,
            "clinicalStatus",
            "is not one status of FHIR R4; it counts as not said",
            "Send one coding of the R4 value set",
        )
    if len(words) != 1:
        return "resolved" if has_abated else "unknown"
    if abated is not None and words[0] not in _OVER:
        context.intake.doubt(
            source,
            "clinicalStatus",
            "says the problem goes on, but it has an abatement, so it counts as over from then on",
            "Send one of the two",
        )
    return words[0]


def _intolerance(match: AllergyMatch, code: Mapping[str, Any], problem: Problem, context: Context) -> Intolerance:
    reactions = {*match.reactions, *context.codes.reactions(code)}
    return Intolerance(
        drugs=match.drugs,
        drug_classes=match.drug_classes,
        kind=kind_of(match),
        reactions=tuple(sorted(reactions)),
        status=_intolerance_status(problem, bool(reactions) or match.kind == "intolerance"),
        source=problem.source,
        display=shown_text(code) or match.display,
        matched_by=match.matched_by,
        verification=problem.verification,
        recorded=problem.recorded if problem.recorded is not None else problem.onset,
    )


def _intolerance_status(problem: Problem, is_reaction: bool) -> Status:
    """A reaction that is over is still a reaction the drug caused; only an allergy itself can be resolved."""
    if is_reaction or problem.is_active:
        return "active"
    return "inactive" if problem.clinical_status == "inactive" else "resolved"


def _paired(problems: Sequence[Problem], partners: Mapping[str, tuple[str, ...]]) -> tuple[Problem, ...]:
    """The problems, with the concepts that found the second code they need moved from weak to certain."""
    present = {concept for problem in problems if problem.is_active for concept in problem.concepts}
    paired: list[Problem] = []
    for problem in problems:
        found = {name for name in problem.weak_concepts if not present.isdisjoint(partners.get(name, ()))}
        if found:
            concepts = tuple(sorted({*problem.concepts, *found}))
            weak = tuple(name for name in problem.weak_concepts if name not in found)
            problem = replace(problem, concepts=concepts, weak_concepts=weak)
        paired.append(problem)
    return tuple(paired)


def _without_texts(code: Mapping[str, Any]) -> dict[str, Any]:
    """The codings alone: only a code can say that a Condition is an allergy, so no time is spent on words."""
    return {"coding": [{"system": c.get("system"), "code": c.get("code")} for c in objects_in(code.get("coding"))]}
