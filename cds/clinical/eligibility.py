"""May this drug be started in this patient today? Limits, barriers, reactions and fresh values, row by row.

Here stands the reasoning; every number, concept and word it uses is a row of the tables.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field
from datetime import date, timedelta
from typing import Literal

from cds.clinical.findings import Evidence
from cds.clinical.readings import Reading, days_old, say_value, show_limit, value_in_words
from cds.clinical.record import DrugCourse, Intolerance, Problem
from cds.clinical.situation import Situation, concepts_present
from cds.clinical.tables import Barrier, DrugBarrier, Effect, Limit, Needed
from cds.clinical.timeline import PartialDate

Answer = Literal["start", "review", "unknown", "block"]


@dataclass(slots=True)
class Judgement:
    """What stands for and against one candidate drug. `reasons` are sentences' halves, in the order found."""

    drug: str
    drug_class: str
    blocks: list[str] = field(default_factory=list)
    reviews: list[str] = field(default_factory=list)
    missing: list[str] = field(default_factory=list)
    evidence: list[Evidence] = field(default_factory=list)
    limits: list[str] = field(default_factory=list)
    fresh: list[str] = field(default_factory=list)  # values that are fresh enough, in words
    wanted_tests: list[str] = field(default_factory=list)
    needs_referral: bool = False
    look_again: list[date] = field(default_factory=list)  # when a time-bound block is over
    to_repeat: dict[str, int] = field(default_factory=dict)  # analyte: within how many days

    @property
    def answer(self) -> Answer:
        """A block beats what is missing, what is missing beats a review: more data cannot lift a block."""
        if self.blocks:
            return "block"
        if self.missing:
            return "unknown"
        return "review" if self.reviews else "start"

    def add(self, effect: Effect, words: str, row: str, evidence: Iterable[Evidence] = ()) -> None:
        {"block": self.blocks, "review": self.reviews, "missing": self.missing}[effect].append(words)
        self.limits.append(row)
        self.evidence.extend(evidence)


def judge(situation: Situation, drug: str, drug_class: str) -> Judgement:
    """Hold every row that concerns the drug against the situation."""
    judgement = Judgement(drug, drug_class)
    present = concepts_present(situation)
    for barrier in situation.tables.barriers:
        if _concerns(barrier.drug_classes, barrier.drugs, barrier.not_drugs, drug, drug_class) and present.isdisjoint(
            barrier.unless
        ):
            _hold_barrier(situation, barrier, judgement, present)
    for row in situation.tables.drug_barriers:
        if _concerns(row.drug_classes, row.drugs, (), drug, drug_class):
            _hold_drug_barrier(situation, row, judgement, present)
    _hold_reactions(situation, judgement)
    _hold_measurements(situation, judgement, present)
    return judgement


def stopping_barriers(situation: Situation, drug: str, drug_class: str) -> tuple[Barrier, ...]:
    """The barriers present for which even a running course of the drug must end (pregnancy, angioedema)."""
    present = concepts_present(situation)
    found = []
    for barrier in situation.tables.barriers:
        if not barrier.stops or not _concerns(barrier.drug_classes, barrier.drugs, barrier.not_drugs, drug, drug_class):
            continue
        held = Judgement(drug, drug_class)
        _hold_barrier(situation, barrier, held, present)
        if held.blocks:
            found.append(barrier)
    return tuple(found)


def _concerns(
    classes: tuple[str, ...], drugs: tuple[str, ...], not_drugs: tuple[str, ...], drug: str, drug_class: str
) -> bool:
    return drug_class in classes and (not drugs or drug in drugs) and drug not in not_drugs


def _hold_barrier(situation: Situation, barrier: Barrier, judgement: Judgement, present: frozenset[str]) -> None:
    wanted = frozenset(barrier.concepts)
    gate = next((g for g in situation.gates if g.id in wanted), None)
    if gate is not None:
        evidence = [Evidence(what=barrier.words, role="limits", resource=gate.source)] if gate.source else []
        _apply(barrier, barrier.effect, barrier.words, judgement, evidence)
        return
    reacted = _reaction_with(situation.record.intolerances, wanted) if barrier.history else None
    if reacted is not None:
        evidence = [Evidence(what=barrier.words, role="limits", resource=reacted.source, date=_text(reacted.recorded))]
        _apply(
            barrier,
            barrier.effect,
            f"{barrier.words} (recorded as a reaction to {reacted.display})",
            judgement,
            evidence,
        )
        return
    if not barrier.history and wanted.isdisjoint(present):
        if barrier.hints:
            _hold_hint(situation, barrier, wanted, judgement)
        return
    for problem in situation.record.problems:
        if wanted.isdisjoint(problem.concepts) or not (barrier.history or problem.is_active):
            continue
        effect = _effect_in_time(situation, barrier, problem)
        if effect is not None:
            words = f"{barrier.words}{_on(problem.dated)}"
            if effect == "block" and barrier.within_days is not None and problem.dated is not None:
                judgement.look_again.append(problem.dated.plus_days(barrier.within_days).latest)
            _apply(barrier, effect, words, judgement, [_problem(problem)])
            return
    for item in situation.record.procedures_devices:
        if not wanted.isdisjoint(item.concepts) and item.is_active:
            evidence = [Evidence(what=item.display, role="limits", resource=item.source, date=_text(item.done))]
            _apply(barrier, barrier.effect, barrier.words, judgement, evidence)
            return


def _hold_hint(situation: Situation, barrier: Barrier, wanted: frozenset[str], judgement: Judgement) -> None:
    """Ask for a review where a problem may be what the barrier is about, but its code does not say so for certain."""
    for problem in situation.record.problems:
        if problem.is_active and not wanted.isdisjoint(problem.weak_concepts):
            words = f"{barrier.words}, but not for certain ({problem.display or 'by its code'})"
            judgement.add("review", words, barrier.id, [_problem(problem)])
            return


def _apply(barrier: Barrier, effect: Effect, words: str, judgement: Judgement, evidence: list[Evidence]) -> None:
    judgement.add(effect, words, barrier.id, evidence)
    judgement.needs_referral = judgement.needs_referral or barrier.refer


def _effect_in_time(situation: Situation, barrier: Barrier, problem: Problem) -> Effect | None:
    """The effect by how long ago it was; an undated one counts as recent (the cautious reading)."""
    if barrier.within_days is None or problem.dated is None:
        return barrier.effect
    since = situation.today - timedelta(days=barrier.within_days)
    return barrier.effect if problem.dated.latest >= since else barrier.older


def _reaction_with(intolerances: tuple[Intolerance, ...], reactions: frozenset[str]) -> Intolerance | None:
    return next((i for i in intolerances if not reactions.isdisjoint(i.reactions)), None)


def _hold_drug_barrier(situation: Situation, row: DrugBarrier, judgement: Judgement, present: frozenset[str]) -> None:
    if row.needs_concepts and present.isdisjoint(row.needs_concepts):
        return
    for course in situation.courses:
        is_meant = course.drug in row.active_drugs or course.drug_class in row.active_classes
        if not is_meant or course.drug == judgement.drug:
            continue
        if row.route is not None and course.route != row.route:
            continue
        least = row.at_least_daily_mg.get(course.drug)
        if row.at_least_daily_mg and (least is None or (course.daily_dose_mg or 0.0) < least):
            continue
        if course.state == "active" or (
            row.ended_within_hours is not None and _ended_within(situation, course, row.ended_within_hours)
        ):
            evidence = [
                Evidence(
                    what=course.drug, role="limits", resource=course.source, date=_text(course.ended or course.started)
                )
            ]
            judgement.add(row.effect, f"{row.words} ({course.drug})", row.id, evidence)
            return


def _ended_within(situation: Situation, course: DrugCourse, hours: float) -> bool:
    """True if the course may have ended within the hours before now; an end known to the day is the end of that day."""
    ended = course.ended or course.started
    if course.state != "ended" or ended is None:
        return False
    if ended.at is not None:
        return situation.as_of - ended.at < timedelta(hours=hours)
    return situation.today - ended.latest <= timedelta(hours=hours)


def _hold_reactions(situation: Situation, judgement: Judgement) -> None:
    """Allergies and intolerances: the named drug itself, and how far its reaction reaches (ruling 27)."""
    for intolerance in situation.record.intolerances:
        is_named = judgement.drug in intolerance.drugs or (
            judgement.drug_class in intolerance.drug_classes and not intolerance.drugs
        )
        evidence = [
            Evidence(
                what=f"{intolerance.kind} to {intolerance.display}",
                role="limits",
                resource=intolerance.source,
                date=_text(intolerance.recorded),
            )
        ]
        said = f"{_kind_words(intolerance)} to {intolerance.display} is on record{_reaction_words(intolerance)}"
        if is_named:
            effect: Effect = "block" if intolerance.status == "active" else "review"
            judgement.add(effect, said, "reaction-to-the-drug-itself", evidence)
            continue
        for row in situation.tables.reactions:
            if judgement.drug_class not in row.reaches or judgement.drug_class not in _reached_from(
                intolerance, row.to_classes, row.reaches
            ):
                continue
            if row.reactions and frozenset(row.reactions).isdisjoint(intolerance.reactions):
                continue
            if not row.reactions and intolerance.reactions:
                continue
            effect = row.effect if intolerance.status == "active" else "review"
            judgement.add(effect, f"{said}: {row.words}", "reaction-reaches-the-class", evidence)
            break


def _reached_from(intolerance: Intolerance, to_classes: tuple[str, ...], reaches: tuple[str, ...]) -> tuple[str, ...]:
    """The classes a row reaches, if the drug that caused the reaction is of its classes."""
    caused_by = intolerance.drug_classes
    is_concerned = not to_classes or not frozenset(to_classes).isdisjoint(caused_by)
    return reaches if is_concerned else ()


def _kind_words(intolerance: Intolerance) -> str:
    words = {"allergy": "an allergy", "intolerance": "an intolerance", "unspecified": "an allergy or intolerance"}[
        intolerance.kind
    ]
    return words if intolerance.status == "active" else f"{words} ({intolerance.status})"


def _reaction_words(intolerance: Intolerance) -> str:
    return f" ({', '.join(r.replace('-', ' ') for r in intolerance.reactions)})" if intolerance.reactions else ""


def _hold_measurements(situation: Situation, judgement: Judgement, present: frozenset[str]) -> None:
    """Fresh values first, then every limit on them. A missing or stale value neither satisfies nor fails a limit."""
    tables = situation.tables
    stale: set[str] = set()
    unusable = {"egfr", "creatinine"} if "dialysis" in present else set[str]()
    for need in tables.needed:
        if judgement.drug_class in need.drug_classes and unusable.isdisjoint(need.analytes):
            _need_fresh(situation, need, judgement, stale)
    if "egfr" in stale:  # one specimen gives both
        stale.add("creatinine")
    needed = {a for need in tables.needed if judgement.drug_class in need.drug_classes for a in need.analytes}
    for limit in tables.limits:
        if limit.analyte in stale | unusable or not _limit_concerns(situation, limit, judgement, present):
            continue
        readings = situation.readings(limit.analyte)
        if limit.analyte not in needed and limit.analyte != "creatinine":
            days = tables.optional_within_days
            readings = tuple(r for r in readings if days_old(r.taken, situation.today) <= days)
        _hold_limit(situation, limit, readings, judgement)


def _need_fresh(situation: Situation, need: Needed, judgement: Judgement, stale: set[str]) -> None:
    """Note what is missing or stale; a fresh value supports."""
    known = [reading for analyte in need.analytes for reading in situation.readings(analyte)]
    name = " or ".join(situation.tables.analyte_names.get(a, a) for a in need.analytes)
    if not known:
        judgement.missing.append(f"{name}: none on record")
        judgement.evidence.append(Evidence(what=need.analytes[0], role="missing"))
        judgement.wanted_tests.append(need.test)
        stale.update(need.analytes)
        return
    newest = max(known, key=lambda r: (r.taken.latest, r.source))
    within = need.within_days
    if need.unstable_within_days is not None and _unstable_because(situation):
        within = need.unstable_within_days
    if days_old(newest.taken, situation.today) <= within:
        judgement.evidence.append(newest.evidence("supports"))
        judgement.fresh.append(value_in_words(newest, situation.tables))
        return
    why = f" ({_unstable_because(situation)})" if within != need.within_days else ""
    judgement.missing.append(f"{name}: last on {newest.taken}, wanted within {within} days{why}")
    judgement.evidence.append(newest.evidence("stale"))
    judgement.wanted_tests.append(need.test)
    stale.update(need.analytes)


def _unstable_because(situation: Situation) -> str:
    """Why values go stale sooner in this patient; empty if they do not (ruling 17)."""
    for row in situation.tables.unstable:
        if row.analyte is not None and row.sign is not None and row.value is not None and row.unit is not None:
            for reading in situation.readings(row.analyte):
                if row.unit in reading.by_unit and reading.holds(row.sign, row.value, row.unit):
                    return f"{situation.tables.analyte_names.get(row.analyte, row.analyte)} was {reading.shown}"
        for problem in situation.record.problems:
            if problem.dated is None or frozenset(row.concepts).isdisjoint(problem.concepts):
                continue
            if row.within_days is None or days_old(problem.dated, situation.today) <= row.within_days:
                return problem.display
    return ""


def _limit_concerns(situation: Situation, limit: Limit, judgement: Judgement, present: frozenset[str]) -> bool:
    return (
        _concerns(limit.drug_classes, limit.drugs, limit.not_drugs, judgement.drug, judgement.drug_class)
        and present.isdisjoint(limit.unless)
        and (not limit.phenotypes or situation.phenotype.kind in limit.phenotypes)
    )


def _hold_limit(situation: Situation, limit: Limit, readings: tuple[Reading, ...], judgement: Judgement) -> None:
    """Apply the limit to each of the newest day's values: the one that blocks decides (rulings 2 and 3)."""
    sex = situation.record.sex
    if limit.sex is not None and sex in ("male", "female") and sex != limit.sex:
        return
    for reading in readings:
        value, unit = _printed_in(limit, reading)
        if unit not in reading.by_unit:
            continue
        holds = reading.holds(limit.sign, value, unit)
        name = situation.tables.unit_names.get(unit, unit)
        said = f"{say_value(reading, situation.tables)} is {_SIGN_WORDS[limit.sign]} {show_limit(limit.analyte, value, unit)} {name}"
        if holds and limit.sex is not None and sex not in ("male", "female"):
            holds = None
        if holds:
            judgement.add(limit.effect, said, limit.id, [reading.evidence("limits")])
            if limit.repeat_within_days is not None:
                judgement.to_repeat[limit.analyte] = limit.repeat_within_days
            return
        if holds is None:
            name = situation.tables.analyte_names.get(limit.analyte, limit.analyte)
            judgement.missing.append(
                f"{name}: {say_value(reading, situation.tables)} leaves open whether it is {_SIGN_WORDS[limit.sign]} {show_limit(limit.analyte, value, unit)}"
            )
            judgement.wanted_tests.append(limit.analyte)
            judgement.evidence.append(reading.evidence("limits"))
            return


_SIGN_WORDS = {"<": "below", "<=": "at or below", ">": "above", ">=": "at or above"}


def _printed_in(limit: Limit, reading: Reading) -> tuple[float, str]:
    """The limit in the unit of the report, where the source prints both."""
    if limit.also_value is not None and limit.also_unit == reading.unit:
        return limit.also_value, limit.also_unit
    return limit.value, limit.unit


def _problem(problem: Problem) -> Evidence:
    return Evidence(what=problem.display, role="limits", resource=problem.source, date=_text(problem.dated))


def _on(when: PartialDate | None) -> str:
    return f" ({when})" if when is not None else ""


def _text(when: PartialDate | None) -> str | None:
    return None if when is None else str(when)
