"""Drugs that do harm here, and drugs that must not meet. One finding for each running drug, or each pair."""

from __future__ import annotations

from collections import defaultdict
from dataclasses import dataclass
from datetime import datetime, timedelta

from cds.clinical.findings import Evidence, Finding, Severity, TestProposal
from cds.clinical.harm import SEVERITIES, Reason, check_harm, is_of, is_taken
from cds.clinical.record import DrugCourse
from cds.clinical.rules.answers import not_applicable, unknown
from cds.clinical.rules.pillars import course_evidence
from cds.clinical.safety_tables import Interaction
from cds.clinical.situation import Situation, concepts_present
from cds.clinical.treatment import fresh_readings, verdicts

STOP = "stop-harmful-drug"
TOGETHER = "interaction"


def stop_harmful_drug(situation: Situation) -> tuple[Finding, ...]:
    """Say of each running drug whether it does harm in this kind of heart failure, or must end for a value or problem.

    As-needed and patient-reported drugs count. Sources: harm table (section E.1), barriers that stop, treatment limits.
    """
    gate = situation.gate_for("safety")
    if gate is not None:
        return (not_applicable(STOP, because=gate.words, source=gate.source),)
    taken = [course for course in situation.courses if is_taken(course)]
    if not taken:
        return (not_applicable(STOP, because="No running drug of a class used here."),)
    by_drug = {course.drug: course for course in reversed(taken)}
    return tuple(_harmful(situation, by_drug[drug]) for drug in sorted(by_drug))


def _harmful(situation: Situation, course: DrugCourse) -> Finding:
    check = check_harm(situation, course)
    stops = [v for v in verdicts(situation, course) if v.row.effect == "stop"]
    reasons = [
        *(
            Reason(id=v.row.id, words=v.words, severity="contraindicated", action="stop", evidence=v.evidence)
            for v in stops
        ),
        *check.reasons,
    ]
    if not reasons:
        if check.missing:
            because = f"Whether {course.drug} does harm here depends on what is not recorded."
            missing = tuple(dict.fromkeys(check.missing))
            return unknown(
                STOP,
                about=course.drug,
                because=because,
                missing=missing,
                evidence=(course_evidence(course, "supports"),),
            )
        because = f"Nothing in the tables speaks against {course.drug} in {situation.phenotype.name}."
        return not_applicable(STOP, about=course.drug, because=because)
    action = "stop" if any(reason.action == "stop" for reason in reasons) else "review"
    words = "; ".join(dict.fromkeys(reason.words for reason in reasons))
    because = f"{course.drug.capitalize()}: {words}."
    if course.stale:
        because += " The order is old and nobody ended it: ask first whether it is taken."
    topic = f"value:{_topic_of(stops[0].row.analyte)}" if stops and not check.reasons else f"drug:{course.drug}"
    return Finding(
        rule=STOP,
        about=course.drug,
        outcome="open",
        action="stop" if action == "stop" else "review",
        because=because,
        evidence=(course_evidence(course, "supports"), *(fact for reason in reasons for fact in reason.evidence)),
        recommendations=(),
        limits=tuple(dict.fromkeys(reason.id for reason in reasons)),
        opened_by=course.sources[:1],
        severity=_softened(worst(reason.severity for reason in reasons), course),
        asks_if_taken=course.stale,
        topic=topic,
        why=stops[0].short if stops and not check.reasons else _short(reasons[-len(check.reasons or reasons)].words),
    )


def _topic_of(analyte: str) -> str:
    return "kidney" if analyte in ("creatinine", "egfr") else analyte


def _short(words: str) -> str:
    return words.partition(":")[0].partition(";")[0]


def worst(severities: object) -> Severity:
    """The most severe of them."""
    return min(severities, key=SEVERITIES.index)  # type: ignore[call-overload,no-any-return]  # callers pass severities


def _softened(severity: Severity, *courses: DrugCourse) -> Severity:
    """An old order nobody ended fires at most as major: it may not be taken at all (ruling 38)."""
    is_stale = any(course.stale for course in courses)
    return "major" if severity == "contraindicated" and is_stale else severity


@dataclass(frozen=True, slots=True)
class _Meeting:
    """Two courses that a row says must not meet; `until` is when a washout is over."""

    row: Interaction
    cause: DrugCourse
    partner: DrugCourse
    severity: Severity
    until: datetime | None = None


def interaction(situation: Situation) -> tuple[Finding, ...]:
    """Say which running drugs must not meet: one finding a pair, with all reasons. Source: interaction table (E.2)."""
    gate = situation.gate_for("safety")
    if gate is not None:
        return (not_applicable(TOGETHER, because=gate.words, source=gate.source),)
    meetings: dict[str, list[_Meeting]] = defaultdict(list)
    present = concepts_present(situation)
    for row in situation.tables.safety.interactions:
        for meeting in _meetings(situation, row, present):
            meetings[" + ".join(sorted((meeting.cause.drug, meeting.partner.drug)))].append(meeting)
    if not meetings:
        return (not_applicable(TOGETHER, because="No two running drugs of the interaction table meet."),)
    return tuple(_together(situation, pair, meetings[pair]) for pair in sorted(meetings))


def _meetings(situation: Situation, row: Interaction, present: frozenset[str]) -> list[_Meeting]:
    ones = [c for c in situation.courses if is_of(c, row.one_classes, row.one_drugs)]
    if not ones:
        return []
    others = [c for c in situation.courses if is_of(c, row.other_classes, row.other_drugs)]
    if not others or not _third_is_there(situation, row):
        return []
    if (row.needs_concepts or row.or_egfr_below is not None) and not _condition_holds(situation, row, present):
        return []
    severity = row.severity
    if row.milder_when_potassium_below is not None:
        potassium = fresh_readings(situation, "potassium")
        if potassium and all(r.holds("<", row.milder_when_potassium_below, "mmol/L") for r in potassium):
            severity = "caution"
    found = []
    for one in ones:
        for other in others:
            if one.drug == other.drug:
                continue
            meets, until = _meet(situation, row, one, other)
            if meets:
                cause, partner = (one, other) if row.cause == "one" else (other, one)
                if row.either_may_end and _is_not_tolerated(situation, partner):
                    cause, partner = partner, cause
                found.append(_Meeting(row, cause, partner, severity, until))
    return found


def _is_not_tolerated(situation: Situation, course: DrugCourse) -> bool:
    """An allergy or intolerance to the drug itself is on record and stands."""
    return any(course.drug in i.drugs and i.status == "active" for i in situation.record.intolerances)


def _third_is_there(situation: Situation, row: Interaction) -> bool:
    if not row.third_classes and not row.third_drugs:
        return True
    return any(is_taken(c) and is_of(c, row.third_classes, row.third_drugs) for c in situation.courses)


def _condition_holds(situation: Situation, row: Interaction, present: frozenset[str]) -> bool:
    if not present.isdisjoint(row.needs_concepts):
        return True
    limit = row.or_egfr_below
    return limit is not None and any(r.holds("<", limit, "mL/min/{1.73_m2}") for r in situation.readings("egfr"))


def _meet(situation: Situation, row: Interaction, one: DrugCourse, other: DrugCourse) -> tuple[bool, datetime | None]:
    """Whether the two are in the body together; within a washout, until when."""
    if is_taken(one) and is_taken(other):
        return True, None
    if row.ended_within_hours is None or is_taken(one) == is_taken(other):
        return False, None
    running, over = (one, other) if is_taken(one) else (other, one)
    ended = over.ended
    if over.state != "ended" or ended is None:
        return False, None
    until = ended.last_instant(situation.as_of.tzinfo) + timedelta(hours=row.ended_within_hours)
    begun = running.started.at if running.started is not None else None
    now = situation.as_of if begun is None else max(situation.as_of, begun)
    now = situation.first_doses.get(running.drug, now)
    return (True, until) if now < until else (False, None)


def _together(situation: Situation, pair: str, meetings: list[_Meeting]) -> Finding:
    ordered = sorted(meetings, key=lambda m: (SEVERITIES.index(m.severity), m.row.id))
    first = ordered[0]
    reasons = "; ".join(dict.fromkeys(m.row.words for m in ordered))
    because = f"{pair[0].upper()}{pair[1:]}: {reasons}."
    if first.row.action == "stop" and first.until is None:
        because += f" The one to stop is {_to_act_on(situation, first).drug}."
    if first.until is not None:
        because += f" The washout ends at {first.until:%Y-%m-%d %H:%M}."
    stale = [c.drug for c in (first.cause, first.partner) if c.stale]
    if stale:
        because += f" The order of {' and '.join(stale)} is old: ask first whether it is taken."
    action = first.row.action if first.until is None else "stop"
    tests = [m for m in ordered if m.row.test_within_days is not None]
    return Finding(
        rule=TOGETHER,
        about=pair,
        outcome="open",
        action="review" if action == "review" else "stop",
        because=because,
        evidence=(course_evidence(first.cause, "limits"), course_evidence(first.partner, "supports"), *_ended(first)),
        limits=tuple(dict.fromkeys(m.row.id for m in ordered)),
        opened_by=(*first.cause.sources[:1], *first.partner.sources[:1]),
        look_again_on=first.until.date() if first.until is not None else None,
        severity=_softened(first.severity, first.cause, first.partner),
        asks_if_taken=bool(stale),
        topic=_topic(situation, first),
        test_proposals=_tests(situation, tests[0].row) if tests else (),
        why=_short(first.row.words),
    )


def _topic(situation: Situation, meeting: _Meeting) -> str:
    """The drug to act on; the partner where that must end anyway. Cautions share one card."""
    if meeting.severity == "caution":
        return "combinations"
    return f"drug:{_to_act_on(situation, meeting).drug}"


def _to_act_on(situation: Situation, meeting: _Meeting) -> DrugCourse:
    both = (meeting.cause, meeting.partner)
    return next((course for course in both if check_harm(situation, course).must_stop), meeting.cause)


def _ended(meeting: _Meeting) -> tuple[Evidence, ...]:
    return tuple(
        Evidence(what=f"{c.drug} ended", role="limits", resource=c.source, date=str(c.ended))
        for c in (meeting.cause, meeting.partner)
        if c.state == "ended"
    )


def _tests(situation: Situation, row: Interaction) -> tuple[TestProposal, ...]:
    if row.test_from_days is None or row.test_within_days is None:
        return ()
    today = situation.today
    return (
        TestProposal(
            tests=("potassium", "creatinine"),
            not_before=today + timedelta(days=row.test_from_days),
            due_by=today + timedelta(days=row.test_within_days),
            why="while both are taken",
        ),
    )
