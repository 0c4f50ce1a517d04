"""The dose of a running drug against its target and today's limits: raise, lower, or leave it and say why."""

from __future__ import annotations

from datetime import date, timedelta

from cds.clinical.eligibility import standing_against, what_is_missing
from cds.clinical.findings import Action, DrugProposal, Evidence, Finding, TestProposal
from cds.clinical.harm import check_harm, is_taken, would_meet
from cds.clinical.readings import say_value, show
from cds.clinical.record import DrugCourse
from cds.clinical.rules.answers import blocked, met, not_applicable, unknown
from cds.clinical.rules.arni import is_to_be_switched
from cds.clinical.rules.data import OLD_ORDERS
from cds.clinical.rules.pillars import closes, course_evidence
from cds.clinical.situation import Situation
from cds.clinical.starting import dose_row, follow_up_tests
from cds.clinical.tables import DoseRow
from cds.clinical.treatment import Verdict, fresh_readings, recently_stopping, verdicts

RAISE = "raise-dose"
LOWER = "lower-dose"
_RAISED = ("ace-inhibitor", "arb", "arni", "beta-blocker", "mra")
_FOR_REVIEW = ("hfmref",)
_RAISING = ("hfref", "hfimpef", *_FOR_REVIEW)


def raise_dose(situation: Situation) -> tuple[Finding, ...]:
    """Say of each running pillar drug whether its dose may be raised today, and to what.

    Target, ladder and interval are rows of the dose table; limits are rows of the treatment table. In HFmrEF a raise is a
    matter for review (class 2b).
    """
    gate = situation.gate_for("dose")
    if gate is not None:
        return (not_applicable(RAISE, because=gate.words, source=gate.source),)
    running = [
        c
        for c in situation.courses
        if c.state == "active" and not c.as_needed and c.drug_class in _RAISED and closes(situation, c)
    ]
    if not running:
        return (not_applicable(RAISE, because="No running pillar drug has a target dose."),)
    if situation.phenotype.kind not in _RAISING:
        because = f"In {situation.phenotype.name} no target dose is called for."
        return (not_applicable(RAISE, because=because),)
    return tuple(_raise(situation, course) for course in running)


def _raise(situation: Situation, course: DrugCourse) -> Finding:
    about, name = course.drug, course.drug.capitalize()
    evidence = (course_evidence(course, "supports"),)
    row = dose_row(situation, course.drug)
    if row is None:
        return not_applicable(RAISE, about=about, because=f"The tables hold no target dose of {about}.")
    stronger = _stronger(situation, course)
    if stronger is not None:
        return blocked(RAISE, about=about, because=f"{name} is not raised: {stronger}.", evidence=evidence)
    if course.daily_dose_mg is None:
        because = f"The daily dose of {about} is not known ({course.dose_note or 'not given'}), so it cannot be held against its target."
        return unknown(
            RAISE, about=about, because=because, missing=(f"{course.source}: daily dose of {about}",), evidence=evidence
        )
    share = f"{show(course.daily_dose_mg)} mg a day, target {show(row.target_daily_mg)} mg"
    if course.daily_dose_mg >= row.target_daily_mg:
        return met(RAISE, about=about, because=f"{name} is at target: {share}.", evidence=evidence)
    reason = _not_now(situation, course, row)
    if reason is not None:
        words, again, against = reason
        return blocked(
            RAISE,
            about=about,
            because=f"{name}: {share}. {words}",
            evidence=(*evidence, *(fact for v in against for fact in v.evidence)),
            limits=tuple(dict.fromkeys(v.row.id for v in against)),
            look_again_on=again,
        )
    if course.stale:
        because = f"{name}: {share}. The order is old: whether it is still taken must be confirmed before it is raised."
        return unknown(
            RAISE,
            about=about,
            because=because,
            missing=(f"{course.source}: whether {about} is still taken",),
            evidence=evidence,
            topic=OLD_ORDERS,
        )
    if course.changed is None:
        because = f"{name}: {share}. When the dose was last changed is not known, so it may be too early to raise it."
        return unknown(
            RAISE,
            about=about,
            because=because,
            missing=(f"{course.source}: date of the last change",),
            evidence=evidence,
        )
    needs = what_is_missing(situation, course.drug, course.drug_class or "")
    if needs.missing:
        tests = tuple(dict.fromkeys(needs.wanted_tests))
        return Finding(
            rule=RAISE,
            about=about,
            outcome="unknown",
            because=f"{name}: {share}. Before a raise: {'; '.join(needs.missing)}.",
            missing=tuple(needs.missing),
            evidence=(*evidence, *needs.evidence),
            limits=(row.id,),
            test_proposals=(TestProposal(tests=tests, not_before=None, due_by=situation.today, why="to decide"),),
            opened_by=course.sources[:1],
        )
    return _open(situation, course, row, share, evidence=(*evidence, *needs.evidence))


def _open(
    situation: Situation, course: DrugCourse, row: DoseRow, share: str, evidence: tuple[Evidence, ...]
) -> Finding:
    step = _next_step(course, row)
    weigh = list(standing_against(situation, course.drug, course.drug_class or "", is_raise=True).reviews)
    scare = recently_stopping(situation, course)
    if scare is not None:
        weigh.append(f"{say_value(scare, situation.tables)} would have stopped it")
        evidence = (*evidence, scare.evidence("limits"))
    is_review = situation.phenotype.kind in _FOR_REVIEW or bool(weigh)
    action: Action = "review" if is_review else "raise"
    because = f"{course.drug.capitalize()}: {share}, unchanged since {course.changed}. Nothing recorded stands against the next step"
    because += f", {_words(step)}." if step is not None else "."
    if weigh:
        because += f" To weigh first: {'; '.join(dict.fromkeys(weigh))}."
    if situation.phenotype.kind in _FOR_REVIEW:
        because += " In mildly reduced ejection fraction this is a weak recommendation, a matter for review."
    return Finding(
        rule=RAISE,
        about=course.drug,
        outcome="open",
        action=action,
        because=because,
        evidence=evidence,
        limits=(row.id,),
        drug_proposals=(step,) if step is not None and not is_review else (),
        test_proposals=() if is_review else follow_up_tests(situation, course.drug_class or "", after="increase"),
        opened_by=course.sources[:1],
        severity="caution" if is_review else None,
        topic=f"drug:{course.drug}",
        why=share,
        cautions=(f"raise-{course.drug_class}",),
    )


def _stronger(situation: Situation, course: DrugCourse) -> str | None:
    """Why something else must happen to the drug first: it is to be stopped, lowered, or replaced."""
    if check_harm(situation, course).must_stop:
        return "it is to be stopped"
    for verdict in verdicts(situation, course):
        if verdict.row.effect in ("stop", "lower"):
            return f"it is to be {'stopped' if verdict.row.effect == 'stop' else 'lowered'} ({verdict.short})"
    if is_to_be_switched(situation, course):
        return "an ARNI in its place is proposed"
    against = standing_against(situation, course.drug, course.drug_class or "", is_raise=True)
    return "; ".join(against.blocks) if against.blocks else None


def _not_now(
    situation: Situation, course: DrugCourse, row: DoseRow
) -> tuple[str, date | None, tuple[Verdict, ...]] | None:
    """A recorded reason against a raise today: tolerance, today's values (with their limits), or too early."""
    tolerated = _tolerance(situation, course)
    if tolerated is not None:
        return tolerated, None, ()
    meets = would_meet(situation, course.drug, course.drug_class or "")
    if meets:
        return f"First settle what it meets. {meets[0]}", None, ()
    limiting = [v for v in verdicts(situation, course) if v.row.effect in ("no-raise", "review")]
    if limiting:
        words = "; ".join(dict.fromkeys(v.words for v in limiting))
        return f"Not today: {words}.", None, tuple(limiting)
    if course.changed is not None:
        ready = course.changed.latest + timedelta(days=_interval(situation, course, row))
        if situation.today < ready:
            return f"Too early: changed on {course.changed}, next step from {ready}.", ready, ()
    return None


def _interval(situation: Situation, course: DrugCourse, row: DoseRow) -> int:
    """Days between steps. Where the start dose depends on what was taken before, the row of the dose begun with counts."""
    starts = [r for r in situation.tables.doses if r.drug == course.drug and r.start_kind is not None]
    if not starts:
        return row.min_interval_days
    begun_with = course.history[0].daily_mg if course.history else None
    fitting = [r for r in starts if begun_with == r.start_dose_mg * r.start_times_per_day]
    return max(r.min_interval_days for r in fitting or starts)


def _tolerance(situation: Situation, course: DrugCourse) -> str | None:
    """A documented maximal tolerated dose: stated, or a step down for an adverse event in the last year."""
    if "maximal-tolerated-dose" in course.reasons:
        return "Recorded as the maximal tolerated dose."
    adverse = situation.tables.concepts.adverse_reasons
    since = situation.today - timedelta(days=situation.tables.safety.limits.tolerance_within_days)
    for before, after in zip(course.history, course.history[1:], strict=False):
        if (
            before.daily_mg is None
            or after.daily_mg is None
            or after.since is None
            or after.daily_mg >= before.daily_mg
        ):
            continue
        reasons = adverse.intersection(before.reasons)
        if reasons and after.since.latest >= since:
            said = " and ".join(sorted(reason.replace("-", " ") for reason in reasons))
            return (
                f"The higher dose of {show(before.daily_mg)} mg a day was not tolerated ({said}, until {after.since})."
            )
    return None


def _next_step(course: DrugCourse, row: DoseRow) -> DrugProposal | None:
    """The next rung of the ladder above the present dose, at the target's frequency; never above the target."""
    if course.daily_dose_mg is None:
        return None
    each = course.daily_dose_mg / row.target_times_per_day
    higher = [step for step in row.steps_mg if each < step <= row.target_dose_mg]
    if not higher:
        return None
    return _proposal(
        course, row, min(higher), row.target_times_per_day, f"in place of {show(course.daily_dose_mg)} mg a day"
    )


def _proposal(course: DrugCourse, row: DoseRow, dose_mg: float, times: float, note: str) -> DrugProposal:
    return DrugProposal(
        drug=course.drug,
        dose_mg=dose_mg,
        times_per_day=times,
        dose_name=row.names.get(f"{dose_mg:g}"),
        dose_row=row.id,
        replaces=course.source,
        note=note,
    )


def _words(step: DrugProposal) -> str:
    amount = step.dose_name or f"{show(step.dose_mg or 0)} mg"
    times = {1.0: "once a day", 2.0: "twice a day", 3.0: "three times a day", 0.5: "every other day"}
    return f"{amount} {times.get(step.times_per_day or 1.0, '')}".strip()


def lower_dose(situation: Situation) -> tuple[Finding, ...]:
    """Say of each running RAS inhibitor, MRA and beta blocker whether today's values ask for a lower dose or a review.

    A drug that is to be stopped is not also lowered. Above the highest dose of the table it is to be reviewed.
    """
    gate = situation.gate_for("dose")
    if gate is not None:
        return (not_applicable(LOWER, because=gate.words, source=gate.source),)
    watched = {c for row in situation.tables.safety.treatment_limits for c in row.drug_classes}
    running = [c for c in situation.courses if is_taken(c) and c.drug_class in watched]
    if not running:
        return (not_applicable(LOWER, because="No running drug whose dose depends on these values."),)
    return tuple(_lower(situation, course) for course in running)


def _lower(situation: Situation, course: DrugCourse) -> Finding:
    evidence = (course_evidence(course, "supports"),)
    found = verdicts(situation, course)
    if check_harm(situation, course).must_stop or any(v.row.effect == "stop" for v in found):
        return blocked(
            LOWER,
            about=course.drug,
            because=f"{course.drug.capitalize()} is to be stopped, not lowered.",
            evidence=evidence,
        )
    asking = [v for v in found if v.row.effect in ("lower", "review")]
    if asking:
        return _ask(situation, course, asking)
    above = _above_highest(situation, course)
    if above is not None:
        because = f"{course.drug.capitalize()}: {show(course.daily_dose_mg or 0)} mg a day is above the highest dose of the table, {show(above)} mg."
        return Finding(
            rule=LOWER,
            about=course.drug,
            outcome="open",
            action="review",
            because=because,
            evidence=evidence,
            opened_by=course.sources[:1],
            severity="major",
            topic=f"drug:{course.drug}",
            why=f"above {show(above)} mg a day",
        )
    missing = _without_recent(situation, course)
    if missing:
        because = f"Whether {course.drug} should be lowered cannot be told without a recent {' and '.join(missing)}."
        wanted = tuple(f"a recent {name}" for name in missing)
        return unknown(LOWER, about=course.drug, because=because, missing=wanted, evidence=evidence)
    return met(LOWER, about=course.drug, because=f"No recent value asks for less {course.drug}.", evidence=evidence)


def _without_recent(situation: Situation, course: DrugCourse) -> list[str]:
    """The values that limit the drug and are not known recently enough; eGFR stands for creatinine too."""
    rows = situation.tables.safety.treatment_limits
    asked = {row.analyte for row in rows if course.drug_class in row.drug_classes and row.effect != "no-raise"}
    if situation.has_gate("dialysis"):
        asked -= {"creatinine", "egfr"}
    if "egfr" in asked:
        asked.discard("creatinine")
    names = situation.tables.analyte_names
    return [names.get(analyte, analyte) for analyte in sorted(asked) if not fresh_readings(situation, analyte)]


def _ask(situation: Situation, course: DrugCourse, asking: list[Verdict]) -> Finding:
    first = asking[0]
    lowers = first.row.effect == "lower"
    step = _lower_step(situation, course) if lowers else None
    because = f"{course.drug.capitalize()}: {'; '.join(dict.fromkeys(v.words for v in asking))}."
    if lowers:
        because += (
            f" Next lower dose: {_words(step)}." if step is not None else " It is at the lowest dose: withhold it."
        )
        because += " First look for what else causes it: NSAIDs, supplements, too much diuretic, other drugs."
    recheck = first.row
    tests: tuple[TestProposal, ...] = ()
    if recheck.recheck_within_days is not None:
        today = situation.today
        tests = (
            TestProposal(
                tests=("potassium", "creatinine"),
                not_before=today + timedelta(days=recheck.recheck_from_days or 0),
                due_by=today + timedelta(days=recheck.recheck_within_days),
                why="after the change",
            ),
        )
    analyte = first.row.analyte
    return Finding(
        rule=LOWER,
        about=course.drug,
        outcome="open",
        action="lower" if lowers else "review",
        because=because,
        evidence=(course_evidence(course, "supports"), *(fact for v in asking for fact in v.evidence)),
        limits=tuple(dict.fromkeys(v.row.id for v in asking)),
        drug_proposals=(step,) if step is not None else (),
        test_proposals=tests,
        opened_by=course.sources[:1],
        severity="major" if lowers else "caution",
        topic=f"value:{'kidney' if analyte in ('creatinine', 'egfr') else analyte}",
        why=first.short,
    )


def _lower_step(situation: Situation, course: DrugCourse) -> DrugProposal | None:
    """The highest rung at or below half the dose; for an MRA at its lowest rung the same dose every other day; else none.

    The practice tables of 2005 (Postgrad Med J) and the NHS pages on MRAs halve.
    """
    row = dose_row(situation, course.drug)
    if row is None or course.daily_dose_mg is None:
        return None
    note = f"in place of {show(course.daily_dose_mg)} mg a day"
    each = course.daily_dose_mg / row.target_times_per_day
    lower = [step for step in row.steps_mg if step < each]
    if lower:
        halved = max((step for step in lower if step <= each / 2), default=max(lower))
        return _proposal(course, row, halved, row.target_times_per_day, note)
    if course.drug_class == "mra" and each in row.steps_mg:
        return _proposal(course, row, each, 0.5, note)
    return None


def _above_highest(situation: Situation, course: DrugCourse) -> float | None:
    """The highest daily dose any row of the drug knows, where the course is above it."""
    rows = [row for row in situation.tables.doses if row.drug == course.drug]
    if not rows or course.daily_dose_mg is None:
        return None
    highest = max(max(row.steps_mg) * row.target_times_per_day for row in rows)
    return highest if course.daily_dose_mg > highest else None
