"""Questions about an order under the pen: may it be started, is the dose right, is it there already, which tests go with it.

Asked only in an order check, beside the rules that run on every record.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from datetime import datetime

from cds.clinical.eligibility import judge
from cds.clinical.findings import Evidence, Finding, TestProposal
from cds.clinical.readings import show
from cds.clinical.record import DrugCourse, MedicationEntry
from cds.clinical.rules.answers import met, not_applicable
from cds.clinical.rules.monitoring import already_ordered
from cds.clinical.situation import Situation
from cds.clinical.starting import dose_row, follow_up_tests, start_proposal
from cds.clinical.treatment import verdicts

LIMITS, DOSE, TWICE, TESTS = "order-limits", "order-dose", "order-duplicate", "order-tests"
_WASHOUT = frozenset({"arni-after-ace-inhibitor", "ace-inhibitor-after-arni"})  # `interaction` tells these by the hour


@dataclass(frozen=True, slots=True, kw_only=True)
class OrderUnderCheck:
    """One ingredient of a draft order. `first_dose` is when it would be taken first."""

    entry: MedicationEntry
    first_dose: datetime

    @property
    def source(self) -> str:
        return self.entry.source

    @property
    def drug(self) -> str:
        return self.entry.drug


def order_findings(before: Situation, after: Situation, order: OrderUnderCheck) -> tuple[Finding, ...]:
    """Answer the four questions. `before` is the record without the drafts, `after` the one with them."""
    course = next((c for c in after.courses if c.drug == order.drug and order.source in c.sources), None)
    gate = before.gate_for("dose")
    if course is None or gate is not None:
        because = gate.words if gate is not None else "The order is no course of a class used here."
        return tuple(not_applicable(rule, about=order.drug, because=because) for rule in (LIMITS, DOSE, TWICE, TESTS))
    running = next((c for c in before.courses if c.drug == order.drug and c.state == "active"), None)
    return (
        _limits(before, order, course, running),
        _dose(before, order, course, running),
        _twice(order, course, running),
        _tests(after, order, course, running),
    )


def _evidence(order: OrderUnderCheck, course: DrugCourse) -> Evidence:
    dose = course.daily_dose_mg
    return Evidence(
        what=order.drug, role="supports", resource=order.source, value=dose, unit="mg/d" if dose is not None else None
    )


def _limits(before: Situation, order: OrderUnderCheck, course: DrugCourse, running: DrugCourse | None) -> Finding:
    """What stands against starting the drug today, or against raising it where it runs already."""
    name = order.drug.capitalize()
    fact = _evidence(order, course)
    if running is not None:
        if not _is_more(course, running):
            return met(LIMITS, about=order.drug, because=f"{name} is running and is not raised.", evidence=(fact,))
        against = [v for v in verdicts(before, running) if v.row.effect != "review"]
        if not against:
            return met(
                LIMITS,
                about=order.drug,
                because=f"Nothing recorded stands against raising {order.drug}.",
                evidence=(fact,),
            )
        words = "; ".join(dict.fromkeys(v.words for v in against))
        facts = tuple(e for v in against for e in v.evidence)
        return _stand(
            order,
            f"{name} should not be raised now: {words}.",
            against[0].short,
            (fact, *facts),
            [v.row.id for v in against],
            "major",
        )
    special = [flag for flag in before.phenotype.flags if flag not in ("ud21-improved", "two-values-one-day")]
    pillar = before.tables.classes.get(course.drug_class or "")
    if special and pillar is not None and pillar.pillar is not None:
        named = " and ".join(flag.replace("-", " ") for flag in special)
        because = f"{named[0].upper()}{named[1:]}: {order.drug} needs a specialist's decision."
        return _stand(order, because, f"specialist decision ({named})", (fact, *before.phenotype.evidence), [], "major")
    judgement = judge(before, order.drug, course.drug_class or "", leaving_out=_WASHOUT)
    evidence = (fact, *judgement.evidence)
    if judgement.blocks:
        words = "; ".join(dict.fromkeys(judgement.blocks))
        return _stand(
            order,
            f"Against starting {order.drug}: {words}.",
            _first(judgement.blocks),
            evidence,
            judgement.limits,
            "major",
        )
    if judgement.missing:
        words = "; ".join(dict.fromkeys(judgement.missing))
        tests = tuple(dict.fromkeys(judgement.wanted_tests))
        proposals = (
            (TestProposal(tests=tests, not_before=None, due_by=before.today, why="before the start"),) if tests else ()
        )
        because = f"Before {order.drug} is started: {words}."
        return _stand(
            order,
            because,
            f"{judgement.missing[0].partition(':')[0]} needed before the start",
            evidence,
            judgement.limits,
            "major",
            proposals,
        )
    if judgement.reviews:
        words = "; ".join(dict.fromkeys(judgement.reviews))
        return _stand(
            order,
            f"To weigh before {order.drug} is started: {words}.",
            _first(judgement.reviews),
            evidence,
            judgement.limits,
            "caution",
        )
    return met(
        LIMITS, about=order.drug, because=f"Nothing recorded stands against starting {order.drug}.", evidence=evidence
    )


def _first(reasons: list[str]) -> str:
    return reasons[0].partition(" (")[0].partition(" on 2")[0]


def _stand(
    order: OrderUnderCheck,
    because: str,
    why: str,
    evidence: tuple[Evidence, ...],
    limits: list[str],
    severity: str,
    tests: tuple[TestProposal, ...] = (),
) -> Finding:
    return Finding(
        rule=LIMITS,
        about=order.drug,
        outcome="open",
        action="review",
        because=because,
        evidence=evidence,
        limits=tuple(dict.fromkeys(limits)),
        test_proposals=tests,
        opened_by=(order.source,),
        severity="major" if severity == "major" else "caution",
        topic=f"order:{order.drug}",
        why=why,
    )


def _is_more(course: DrugCourse, running: DrugCourse) -> bool:
    if course.daily_dose_mg is None or running.daily_dose_mg is None:
        return False
    return course.daily_dose_mg > running.daily_dose_mg


def _dose(before: Situation, order: OrderUnderCheck, course: DrugCourse, running: DrugCourse | None) -> Finding:
    """The dose against the table: the start dose for a new drug, the next rung and the interval for a running one."""
    row = dose_row(before, order.drug)
    fact = _evidence(order, course)
    if row is None:
        return not_applicable(DOSE, about=order.drug, because=f"The tables hold no dose of {order.drug}.")
    if course.daily_dose_mg is None:
        because = f"The daily dose of the order cannot be known ({course.dose_note or 'not given'})."
        return _wrong_dose(order, because, "the daily dose cannot be known", (fact,), row.id)
    dose = course.daily_dose_mg
    rows = [r for r in before.tables.doses if r.drug == order.drug]
    highest = max(max(r.steps_mg) * r.target_times_per_day for r in rows)
    if dose > highest:
        because = f"{show(dose)} mg a day is above the highest dose of the table, {show(highest)} mg a day."
        return _wrong_dose(order, because, f"above the highest dose, {show(highest)} mg a day", (fact,), row.id)
    if running is None:
        starts = [r for r in rows if r.start_kind is not None] or [row]
        start = max((r.start_up_to_mg or r.start_dose_mg) * r.start_times_per_day for r in starts)
        if dose > start:
            because = f"{show(dose)} mg a day is above the start dose of the table, {show(start)} mg a day."
            finding = _wrong_dose(order, because, f"above the start dose, {show(start)} mg a day", (fact,), row.id)
            return replace(finding, action="lower", drug_proposals=(start_proposal(before, order.drug),))
        return met(DOSE, about=order.drug, because=f"{show(dose)} mg a day is a start dose.", evidence=(fact,))
    if running.daily_dose_mg is not None and dose > running.daily_dose_mg:
        return _raised(before, order, running, dose, fact)
    return met(DOSE, about=order.drug, because=f"{show(dose)} mg a day is within the table.", evidence=(fact,))


def _raised(before: Situation, order: OrderUnderCheck, running: DrugCourse, dose: float, fact: Evidence) -> Finding:
    row = dose_row(before, order.drug)
    if row is None or running.daily_dose_mg is None:
        return not_applicable(DOSE, about=order.drug, because="No ladder is known.")
    rungs = [
        step * row.target_times_per_day
        for step in row.steps_mg
        if step * row.target_times_per_day > running.daily_dose_mg
    ]
    if rungs and dose > min(rungs):
        because = f"From {show(running.daily_dose_mg)} to {show(dose)} mg a day is more than one step; the next is {show(min(rungs))} mg a day."
        return _wrong_dose(
            order, because, f"more than one step, the next is {show(min(rungs))} mg a day", (fact,), row.id
        )
    if running.changed is not None and (before.today - running.changed.latest).days < row.min_interval_days:
        because = f"The dose was last changed on {running.changed}; the table asks for {row.min_interval_days} days between steps."
        return _wrong_dose(order, because, f"last changed on {running.changed}", (fact,), row.id)
    return met(DOSE, about=order.drug, because=f"{show(dose)} mg a day is the next step.", evidence=(fact,))


def _wrong_dose(order: OrderUnderCheck, because: str, why: str, evidence: tuple[Evidence, ...], row: str) -> Finding:
    return Finding(
        rule=DOSE,
        about=order.drug,
        outcome="open",
        action="review",
        because=f"{order.drug.capitalize()}: {because}",
        evidence=evidence,
        limits=(row,),
        opened_by=(order.source,),
        severity="major",
        topic=f"order:{order.drug}",
        why=why,
    )


def _twice(order: OrderUnderCheck, course: DrugCourse, running: DrugCourse | None) -> Finding:
    """The same drug at the same dose is on the list already."""
    if running is None or running.daily_dose_mg is None or running.daily_dose_mg != course.daily_dose_mg:
        return met(TWICE, about=order.drug, because=f"No running order of {order.drug} at this dose.")
    because = f"{order.drug.capitalize()} {show(running.daily_dose_mg)} mg a day is already ordered."
    evidence = (
        _evidence(order, course),
        Evidence(what=order.drug, role="limits", resource=running.source, date=str(running.ordered or "") or None),
    )
    return Finding(
        rule=TWICE,
        about=order.drug,
        outcome="open",
        action="review",
        because=because,
        evidence=evidence,
        opened_by=(order.source, *running.sources[:1]),
        severity="caution",
        topic=f"order:{order.drug}",
        why="already ordered at this dose",
    )


def _tests(after: Situation, order: OrderUnderCheck, course: DrugCourse, running: DrugCourse | None) -> Finding:
    """The first check the schedule wants after this start or increase, unless it is ordered already."""
    if running is not None and not _is_more(course, running):
        return not_applicable(TESTS, about=order.drug, because="Neither a start nor an increase.")
    wanted = follow_up_tests(after, course.drug_class or "", after="start" if running is None else "increase")
    if not wanted:
        return not_applicable(TESTS, about=order.drug, because="The schedule wants no test after this order.")
    tests = wanted[0].tests
    fact = _evidence(order, course)
    if already_ordered(after, tests) is not None:
        return met(TESTS, about=order.drug, because="The tests that go with it are ordered.", evidence=(fact,))
    names = " and ".join(after.tables.analyte_names.get(test, test) for test in tests)
    because = f"With {order.drug} goes a check of {names} between {wanted[0].not_before} and {wanted[0].due_by}."
    return Finding(
        rule=TESTS,
        about=order.drug,
        outcome="open",
        action="test",
        because=because,
        evidence=(fact,),
        test_proposals=wanted,
        opened_by=(order.source,),
        topic=f"order:{order.drug}",
    )
