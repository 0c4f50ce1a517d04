"""Timed blood tests: potassium and creatinine under drugs that move them. One finding per drug course."""

from __future__ import annotations

from datetime import date

from cds.clinical.findings import Due, Evidence, Finding, TestProposal
from cds.clinical.readings import reading_of
from cds.clinical.record import DrugCourse, Measurement
from cds.clinical.rules.answers import met, not_applicable, unknown
from cds.clinical.schedule import CheckAnswer, Window, possible_windows
from cds.clinical.situation import Situation
from cds.clinical.tables import ScheduledCheck
from cds.clinical.timeline import PartialDate

RULE = "check-potassium-creatinine"
_ANY_OF = {"creatinine": ("creatinine", "egfr")}  # ruling 52: "creatinine/eGFR" is satisfied by either


def check_potassium_creatinine(situation: Situation) -> tuple[Finding, ...]:
    """Say for each running ACE inhibitor, ARB, ARNI or MRA whether its potassium and creatinine are due.

    Windows are rows of the schedule; clock rules in `schedule`. An undated start or increase is unknown.
    """
    gate = situation.gate_for("renal-tests")
    if gate is not None:
        return (not_applicable(RULE, because=gate.words, source=gate.source),)
    rows = [row for row in situation.tables.checks if row.rule == RULE]
    watched = {drug_class for row in rows for drug_class in row.drug_classes}
    courses = [c for c in situation.courses if c.drug_class in watched and c.state in ("active", "paused", "unclear")]
    if not courses:
        return (not_applicable(RULE, because="No ACE inhibitor, ARB, ARNI or MRA is on the list."),)
    return tuple(
        _check(situation, course, [r for r in rows if course.drug_class in r.drug_classes]) for course in courses
    )


def _check(situation: Situation, course: DrugCourse, rows: list[ScheduledCheck]) -> Finding:
    if course.state == "paused":
        return not_applicable(
            RULE, about=course.drug, because=f"{course.drug.capitalize()} is on hold: nothing falls due."
        )
    day_zero, trigger = _day_zero(course)
    if day_zero is None:
        return unknown(
            RULE,
            about=course.drug,
            because=f"When {course.drug} was started or last raised is not recorded, so no due date can be told.",
            missing=(f"{course.source}: date of the start or last increase",),
            evidence=(_course_evidence(course, None),),
        )
    used = [row for row in rows if row.trigger in (trigger, "steady")]
    tests = tuple(dict.fromkeys(test for row in used for test in row.tests))
    answers = {
        test: possible_windows(used, day_zero=day_zero, results=_valid_days(situation, test), today=situation.today)
        for test in tests
    }
    wanted = {test: answer.is_wanted_on(situation.today) for test, answer in answers.items()}
    if any(wanted.values()):
        outstanding = tuple(test for test in tests if wanted[test])
        return _open(situation, course, day_zero, trigger, outstanding, answers)
    if None in wanted.values():
        imprecise = f"{course.source}: exact date of the start or last increase ({day_zero})"
        if day_zero.is_day:
            imprecise = f"exact dates of the last {' and '.join(tests)}"
        because = (
            f"{course.drug.capitalize()}: the dates are too coarse to tell whether {_names(situation, tests)} are due."
        )
        return unknown(
            RULE,
            about=course.drug,
            because=because,
            missing=(imprecise,),
            evidence=(_course_evidence(course, day_zero),),
        )
    return _not_due(situation, course, day_zero, tests, answers)


def _day_zero(course: DrugCourse) -> tuple[PartialDate | None, str]:
    """The last start or increase. A decrease does not restart the series, so it looks further back."""
    if course.changed_by in ("start", "increase"):
        return course.changed, course.changed_by
    if course.changed_by == "decrease":
        steps = course.history
        for earlier, later in zip(reversed(steps[:-1]), reversed(steps[1:]), strict=True):
            if earlier.daily_mg is None or later.daily_mg is None:
                return None, "start"
            if later.daily_mg > earlier.daily_mg:
                return later.since, "increase"
        return course.started, "start"
    return course.changed, "start"


def _valid_days(situation: Situation, test: str) -> list[PartialDate]:
    """Days of results that satisfy a check: final, not haemolysed, any of the analytes that answer it."""
    return [m.taken for m in _results(situation, test)]


def _results(situation: Situation, test: str) -> list[Measurement]:
    analytes = _ANY_OF.get(test, (test,))
    found = [
        m
        for m in situation.record.measurements
        if m.analyte in analytes and not m.is_preliminary and not (m.is_haemolysed and m.analyte == "potassium")
    ]
    return sorted(found, key=lambda m: (m.taken.latest, m.source), reverse=True)


def _open(
    situation: Situation,
    course: DrugCourse,
    day_zero: PartialDate,
    trigger: str,
    outstanding: tuple[str, ...],
    answers: dict[str, CheckAnswer],
) -> Finding:
    today = situation.today
    windows = [w for test in outstanding for w in answers[test].windows if w is not None]
    overdue = [w.days_overdue_on(today) for w in windows]
    first = min(windows, key=lambda w: (w.due_by, w.opens))
    worst = max((w.status_on(today) for w in windows), key=_STATUS_ORDER.index)
    due = Due(
        tests=outstanding,
        window_opens=first.opens,
        due_by=first.due_by,
        days_overdue=min(overdue),
        days_overdue_most=max(overdue),
        grace_ends=first.grace_ends,
        already_ordered=already_ordered(situation, outstanding),
        status=worst,
    )
    row = next(r for r in situation.tables.checks if r.id == first.row)
    evidence = [_course_evidence(course, day_zero)]
    evidence += [e for test in outstanding if (e := _last_result(situation, test)) is not None]
    because = f"{_after_what(course, trigger, day_zero, row)}; {_wanted(situation, outstanding, due)}."
    if first.missed_before:
        because += " An earlier check of the series was missed."
    if due.already_ordered:
        because += " It is already ordered."
    if course.stale:
        because += f" The order of {course.drug} is old: ask first whether it is still taken."
    return Finding(
        rule=RULE,
        about=course.drug,
        outcome="open",
        action="test",
        because=because,
        evidence=tuple(evidence),
        due=due,
        limits=(row.id,),
        test_proposals=(
            TestProposal(
                tests=outstanding, not_before=due.window_opens, due_by=max(due.due_by, today), why=row.trigger
            ),
        ),
        opened_by=course.sources[:1],
    )


_STATUS_ORDER = ["not-due", "due", "overdue-in-grace", "overdue"]


def _after_what(course: DrugCourse, trigger: str, day_zero: PartialDate, row: ScheduledCheck) -> str:
    if row.trigger == "steady":
        return f"{course.drug.capitalize()} since {course.started or day_zero}"
    verb = "started" if trigger == "start" else "raised"
    return f"{course.drug.capitalize()} was {verb} on {day_zero}"


def _wanted(situation: Situation, tests: tuple[str, ...], due: Due) -> str:
    names = _names(situation, tests)
    verb = "was" if len(tests) == 1 else "were"
    if due.days_overdue_most == 0:
        return f"{names} {'is' if len(tests) == 1 else 'are'} due by {due.due_by}"
    if due.days_overdue == due.days_overdue_most:
        return f"{names} {verb} due by {due.due_by}, {_days(due.days_overdue)} ago"
    return f"{names} {verb} due {due.days_overdue} to {due.days_overdue_most} days ago, depending on the exact date of the order"


def _days(count: int) -> str:
    return "1 day" if count == 1 else f"{count} days"


def _names(situation: Situation, tests: tuple[str, ...]) -> str:
    return " and ".join(situation.tables.analyte_names.get(test, test) for test in tests)


def _not_due(
    situation: Situation,
    course: DrugCourse,
    day_zero: PartialDate,
    tests: tuple[str, ...],
    answers: dict[str, CheckAnswer],
) -> Finding:
    windows: list[tuple[Window, str]] = [(w, test) for test in tests for w in answers[test].windows if w is not None]
    evidence = [_course_evidence(course, day_zero)]
    evidence += [e for test in tests if (e := _last_result(situation, test)) is not None]
    if not windows:
        because = f"{course.drug.capitalize()}: the checks after the start are done."
        return met(RULE, about=course.drug, because=because, evidence=tuple(evidence))
    first = min((w for w, _ in windows), key=lambda w: (w.due_by, w.opens))
    due = Due(
        tests=tuple(test for test in tests if any(w == first for w in answers[test].windows)),
        window_opens=first.opens,
        due_by=first.due_by,
        grace_ends=first.grace_ends,
        status="not-due",
    )
    because = f"{course.drug.capitalize()}: nothing is due; {_names(situation, due.tests)} next between {due.window_opens} and {due.due_by}."
    return met(RULE, about=course.drug, because=because, evidence=tuple(evidence), due=due)


def _last_result(situation: Situation, test: str) -> Evidence | None:
    found = _results(situation, test)
    return reading_of(found[0]).evidence("supports") if found else None


def already_ordered(situation: Situation, tests: tuple[str, ...]) -> str | None:
    """The active order of the first of `tests`, if each of them has one (eGFR covers creatinine) newer than its last result."""
    found = [_order_of(situation, test) for test in tests]
    return found[0] if found and None not in found else None


def _order_of(situation: Situation, test: str) -> str | None:
    last = max((r.taken.latest for r in _results(situation, test)), default=date.min)
    for order in situation.record.tests_ordered:
        is_asked = not order.is_draft and not set(order.analytes).isdisjoint(_ANY_OF.get(test, (test,)))
        if is_asked and (order.ordered is None or order.ordered.latest >= last):
            return order.source
    return None


def _course_evidence(course: DrugCourse, day_zero: PartialDate | None) -> Evidence:
    dose = course.daily_dose_mg
    return Evidence(
        what=course.drug,
        role="supports" if day_zero is not None else "missing",
        resource=course.source,
        value=dose,
        unit="mg/d" if dose is not None else None,
        date=str(day_zero) if day_zero is not None else None,
    )
