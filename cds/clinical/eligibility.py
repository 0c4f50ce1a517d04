"""May this drug be started in this patient today? Limits, barriers, reactions and fresh values, row by row.

Here stands the reasoning; every number, concept and word it uses is a row of the tables.
"""

from __future__ import annotations

from datetime import timedelta

from cds.clinical.findings import Evidence
from cds.clinical.judgement import Answer as Answer
from cds.clinical.judgement import Judgement as Judgement
from cds.clinical.judgement import concerns
from cds.clinical.readings import show
from cds.clinical.record import DrugCourse, Intolerance, Problem
from cds.clinical.situation import Situation, concepts_present
from cds.clinical.start_values import hold_measurements, hold_needs
from cds.clinical.tables import Barrier, DrugBarrier, Effect
from cds.clinical.timeline import PartialDate
from cds.clinical.treatment import creatinine_rise


def judge(situation: Situation, drug: str, drug_class: str, *, leaving_out: frozenset[str] = frozenset()) -> Judgement:
    """Hold every row that concerns the drug against the situation, but those whose id is in `leaving_out`."""
    judgement = standing_against(situation, drug, drug_class, leaving_out=leaving_out)
    _hold_reactions(situation, judgement)
    _hold_rise(situation, judgement)
    hold_measurements(situation, judgement, concepts_present(situation))
    return judgement


def _hold_rise(situation: Situation, judgement: Judgement) -> None:
    """A rise of creatinine under a RAS inhibitor that is not settled: nothing that moves the kidney is started unweighed."""
    limits = situation.tables.safety
    ras = {c for row in limits.treatment_limits if row.is_rise_percent for c in row.drug_classes}
    if judgement.drug_class not in ras | {"mra"}:
        return
    for course in situation.courses:
        if course.drug_class not in ras or course.state not in ("active", "unclear"):
            continue
        rise = creatinine_rise(situation, course)
        if rise is not None and rise.percent >= limits.limits.rise_from_percent:
            words = f"creatinine rose by {show(rise.percent)} % under {course.drug} and is not settled"
            facts = [rise.now.evidence("limits"), rise.before.evidence("supports")]
            rows = [r for r in limits.treatment_limits if r.is_rise_percent and course.drug_class in r.drug_classes]
            judgement.add("review", words, min(rows, key=lambda r: (r.value, r.id)).id, facts)
            return


def standing_against(
    situation: Situation,
    drug: str,
    drug_class: str,
    *,
    leaving_out: frozenset[str] = frozenset(),
    is_raise: bool = False,
) -> Judgement:
    """Only the recorded facts (problems, devices, other drugs) that stand against the drug, without its limits.

    `is_raise` asks about a higher dose of a running drug: some rows speak only of that.
    """
    judgement = Judgement(drug, drug_class)
    present = concepts_present(situation)
    for barrier in _barriers_of(situation, drug_class):
        is_meant = concerns(barrier.drug_classes, barrier.drugs, barrier.not_drugs, drug, drug_class)
        if is_meant and barrier.id not in leaving_out and present.isdisjoint(barrier.unless):
            _hold_barrier(situation, barrier, judgement, present)
    for row in situation.tables.drug_barriers:
        if row.id in leaving_out or (row.only_for_raise and not is_raise):
            continue
        if concerns(row.drug_classes, row.drugs, (), drug, drug_class):
            _hold_drug_barrier(situation, row, judgement, present)
    return judgement


def _barriers_of(situation: Situation, drug_class: str) -> tuple[Barrier, ...]:
    rows = situation.tables.barriers
    return situation.once(
        ("barriers", drug_class), lambda: tuple(row for row in rows if drug_class in row.drug_classes)
    )


def what_is_missing(situation: Situation, drug: str, drug_class: str) -> Judgement:
    """Only which needed values of the class are missing or stale, for a change of dose."""
    judgement = Judgement(drug, drug_class)
    hold_needs(situation, judgement, concepts_present(situation))
    return judgement


def stopping_barriers(situation: Situation, drug: str, drug_class: str) -> tuple[Barrier, ...]:
    """The barriers present for which even a running course of the drug must end (pregnancy, angioedema)."""
    present = concepts_present(situation)
    found = []
    for barrier in _barriers_of(situation, drug_class):
        if not barrier.stops or not concerns(barrier.drug_classes, barrier.drugs, barrier.not_drugs, drug, drug_class):
            continue
        held = Judgement(drug, drug_class)
        _hold_barrier(situation, barrier, held, present)
        if held.blocks:
            found.append(barrier)
    return tuple(found)


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
        if row.started_within_days is not None and not _begun_within(situation, course, row.started_within_days):
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
            last = course.ended or course.started
            if row.ended_within_hours is not None and last is not None:
                free = last.last_instant(situation.as_of.tzinfo) + timedelta(hours=row.ended_within_hours)
                judgement.look_again.append(free.date())
            return


def _begun_within(situation: Situation, course: DrugCourse, days: int) -> bool:
    """True if the course was begun or changed within the days before today, or may have been."""
    begun = course.changed if course.changed is not None else course.started
    return begun is not None and (situation.today - begun.latest).days <= days


def _ended_within(situation: Situation, course: DrugCourse, hours: float) -> bool:
    """True if the course may have ended within the hours before now; an end known to the day is 23:59 of that day."""
    ended = course.ended or course.started
    if course.state != "ended" or ended is None:
        return False
    return situation.as_of - ended.last_instant(situation.as_of.tzinfo) < timedelta(hours=hours)


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


def _problem(problem: Problem) -> Evidence:
    return Evidence(what=problem.display, role="limits", resource=problem.source, date=_text(problem.dated))


def _on(when: PartialDate | None) -> str:
    return f" ({when})" if when is not None else ""


def _text(when: PartialDate | None) -> str | None:
    return None if when is None else str(when)
