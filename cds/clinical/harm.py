"""Which running drugs do harm in this patient: rows of the harm table, and facts for which a drug must end.

Safety looks wider than therapy: as-needed, patient-reported and unclear courses count. An old order nobody ended counts
too, but asks first whether the drug is taken.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from datetime import timedelta

from cds.clinical.eligibility import stopping_barriers
from cds.clinical.findings import Evidence, Severity
from cds.clinical.readings import Reading, value_in_words
from cds.clinical.record import DrugCourse
from cds.clinical.renal import EGFR_UNIT, age_in_years
from cds.clinical.safety_tables import Harm
from cds.clinical.situation import Situation, concepts_present

SEVERITIES: tuple[Severity, ...] = ("contraindicated", "major", "caution")


@dataclass(frozen=True, slots=True, kw_only=True)
class Reason:
    """Why a drug should end or be reviewed."""

    id: str
    words: str
    severity: Severity
    action: str
    evidence: tuple[Evidence, ...] = ()


@dataclass(slots=True)
class HarmCheck:
    """What the tables say about one course: reasons, worst first, and what is missing to decide more."""

    reasons: list[Reason] = field(default_factory=list)
    missing: list[str] = field(default_factory=list)

    @property
    def must_stop(self) -> bool:
        return any(reason.action == "stop" for reason in self.reasons)


def is_taken(course: DrugCourse) -> bool:
    """True where the drug may be in the body now."""
    return course.state in ("active", "unclear")


def is_of(
    course: DrugCourse, classes: tuple[str, ...], drugs: tuple[str, ...], not_drugs: tuple[str, ...] = ()
) -> bool:
    """True if the row may mean the course. A class that is only possible counts: safety takes the cautious one."""
    if course.drug in not_drugs:
        return False
    if drugs:
        return course.drug in drugs
    return course.drug_class in classes or not set(classes).isdisjoint(course.possible_classes)


def check_harm(situation: Situation, course: DrugCourse) -> HarmCheck:
    """Hold every harm row against one course."""
    return situation.once(("harm", course.drug, course.sources), lambda: _check_harm(situation, course))


def _check_harm(situation: Situation, course: DrugCourse) -> HarmCheck:
    found = HarmCheck()
    if not is_taken(course):
        return found
    for barrier in stopping_barriers(situation, course.drug, course.drug_class or ""):
        evidence = tuple(
            Evidence(what=p.display, role="limits", resource=p.source, date=str(p.dated) if p.dated else None)
            for p in situation.record.problems
            if not set(barrier.concepts).isdisjoint(p.concepts)
        )
        reacted = tuple(
            Evidence(what=barrier.words, role="limits", resource=i.source, date=str(i.recorded) if i.recorded else None)
            for i in situation.record.intolerances
            if not set(barrier.concepts).isdisjoint(i.reactions)
        )
        found.reasons.append(
            Reason(
                id=barrier.id,
                words=f"{barrier.words}{_dated((*evidence, *reacted))}",
                severity="contraindicated",
                action="stop",
                evidence=evidence + reacted,
            )
        )
    present = concepts_present(situation)
    for row in situation.tables.safety.harms:
        if is_of(course, row.drug_classes, row.drugs, row.not_drugs) and situation.phenotype.kind in row.phenotypes:
            _hold(situation, row, course, present, found)
    found.reasons.sort(key=lambda reason: (SEVERITIES.index(reason.severity), reason.action != "stop"))
    return found


def _dated(facts: tuple[Evidence, ...]) -> str:
    """When it was, of the first fact that says so."""
    return next((f" ({fact.date})" for fact in facts if fact.date is not None), "")


def would_meet(situation: Situation, drug: str, drug_class: str) -> tuple[str, ...]:
    """What a drug not yet taken would meet: a sentence for each running drug it must not, or hardly, be taken with."""
    found: dict[str, None] = {}
    for row in situation.tables.safety.interactions:
        if row.severity == "caution" or row.third_classes or row.third_drugs or row.needs_concepts:
            continue
        is_one = drug in row.one_drugs if row.one_drugs else drug_class in row.one_classes
        is_other = drug in row.other_drugs if row.other_drugs else drug_class in row.other_classes
        if not (is_one or is_other):
            continue
        for course in situation.courses:
            meets_other = is_one and is_of(course, row.other_classes, row.other_drugs)
            meets_one = is_other and is_of(course, row.one_classes, row.one_drugs)
            if is_taken(course) and course.drug != drug and (meets_other or meets_one):
                found[f"With {course.drug}: {row.words}."] = None
    return tuple(found)


def _hold(situation: Situation, row: Harm, course: DrugCourse, present: frozenset[str], found: HarmCheck) -> None:
    """Add the row's reason if all its conditions hold; note what is missing where that cannot be told."""
    if row.needs_concepts and present.isdisjoint(row.needs_concepts):
        return
    if not present.isdisjoint(row.unless):
        return
    evidence: list[Evidence] = []
    if row.lvef_below_percent is not None:
        lvef = situation.phenotype.lvef_percent
        if lvef is None or lvef >= row.lvef_below_percent:
            return
    if row.needs_nyha:
        nyha = situation.nyha()
        if nyha is None:
            found.missing.append("NYHA class")
            return
        if int(nyha.shown_value) not in row.needs_nyha:
            return
        evidence.append(nyha.evidence("limits"))
    if row.daily_mg_above is not None:
        most = course.daily_dose_mg if course.daily_dose_mg is not None else course.max_daily_dose_mg
        if most is None or most <= row.daily_mg_above:
            return
    if row.age_above_years is not None:
        age = age_in_years(situation.record, situation.today)
        if age is None or age <= row.age_above_years:
            return
    if row.admission_within_days is not None and not _was_admitted(situation, row.admission_within_days):
        return
    words = row.words
    if row.egfr_below is not None:
        readings = situation.readings("egfr")
        if not readings:
            found.missing.append("eGFR: none on record")
            return
        low = _below(readings, row.egfr_below)
        if low is None:
            return
        evidence.append(low.evidence("limits"))
        words = f"{words} ({value_in_words(low, situation.tables)})"
    found.reasons.append(
        Reason(id=row.id, words=words, severity=row.severity, action=row.action, evidence=tuple(evidence))
    )


def _below(readings: tuple[Reading, ...], limit: float) -> Reading | None:
    return next((r for r in readings if r.holds("<", limit, EGFR_UNIT)), None)


def _was_admitted(situation: Situation, days: int) -> bool:
    since = situation.today - timedelta(days=days)
    heart_failure = situation.tables.concepts.heart_failure
    return any(
        stay.encounter_class == "inpatient"
        and not heart_failure.isdisjoint(stay.reasons)
        and (last := stay.ends or stay.starts) is not None
        and last.latest >= since
        for stay in situation.record.encounters
    )
