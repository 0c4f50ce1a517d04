"""From ACE inhibitor or ARB to an ARNI: whether, from which dose, and when the first tablet may be taken."""

from __future__ import annotations

from cds.clinical.eligibility import Judgement, judge
from cds.clinical.findings import DrugProposal, Finding, TestProposal
from cds.clinical.readings import show
from cds.clinical.record import DrugCourse
from cds.clinical.renal import EGFR_UNIT, age_in_years
from cds.clinical.rules.answers import blocked, met, not_applicable, unknown
from cds.clinical.rules.data import OLD_ORDERS
from cds.clinical.rules.pillars import course_evidence, nyha_or_surrogate
from cds.clinical.safety_tables import SwitchStart
from cds.clinical.situation import Situation, concepts_present
from cds.clinical.starting import follow_up_tests
from cds.clinical.treatment import verdicts

RULE = "switch-to-arni"
_DRUG, _CLASS = "sacubitril/valsartan", "arni"
_OWN_PREDECESSOR = frozenset(
    {"arni-after-ace-inhibitor"}
)  # the ACE inhibitor it replaces is no barrier to the proposal
_NYHA = (2, 3)
_FOR_REVIEW = "hfmref"


def switch_to_arni(situation: Situation) -> tuple[Finding, ...]:
    """Say whether a running ACE inhibitor or ARB should give way to an ARNI. Recommendation c-switch-arni."""
    gate = situation.gate_for("therapy")
    if gate is not None:
        return (not_applicable(RULE, about=_CLASS, because=gate.words, source=gate.source),)
    return (_switch(situation),)


def is_to_be_switched(situation: Situation, course: DrugCourse) -> bool:
    """True if the rule proposes an ARNI in place of this course."""
    if course.drug_class not in ("ace-inhibitor", "arb") or situation.gate_for("therapy") is not None:
        return False
    finding = _switch(situation)
    return finding.outcome == "open" and finding.action == "switch"


def _switch(situation: Situation) -> Finding:
    return situation.once(RULE, lambda: _decide(situation))


def _decide(situation: Situation) -> Finding:
    arni = [c for c in situation.courses if c.drug_class == _CLASS and c.state in ("active", "paused", "unclear")]
    if arni:
        because = f"{arni[0].drug.capitalize()} is on the list{' (on hold)' if arni[0].state == 'paused' else ''}."
        return met(RULE, about=_CLASS, because=because, evidence=(course_evidence(arni[0], "supports"),))
    replaced = [
        c
        for c in situation.courses
        if c.state == "active" and not c.as_needed and c.drug_class in ("ace-inhibitor", "arb")
    ]
    kind = situation.phenotype.kind
    if replaced and all(c.stale for c in replaced):
        because = (
            f"The order of {replaced[0].drug} is old: whether it is still taken must be confirmed before a switch."
        )
        missing = tuple(f"{c.source}: whether {c.drug} is still taken" for c in replaced)
        facts = tuple(course_evidence(c, "stale") for c in replaced)
        return unknown(RULE, about=_CLASS, because=because, missing=missing, evidence=facts, topic=OLD_ORDERS)
    if not replaced:
        return not_applicable(
            RULE, about=_CLASS, because="No ACE inhibitor or ARB is running that an ARNI could replace."
        )
    if kind not in ("hfref", _FOR_REVIEW):
        return not_applicable(RULE, about=_CLASS, because=f"Not asked for in {situation.phenotype.name}.")
    flags = [f for f in situation.phenotype.flags if f not in ("ud21-improved", "two-values-one-day")]
    evidence = tuple(course_evidence(c, "supports") for c in replaced)
    if flags:
        because = "The kind of heart disease needs a specialist's decision."
        facts = situation.phenotype.evidence
        return blocked(
            RULE, about=_CLASS, because=because, evidence=facts, refer=True, recommendations=("c-switch-arni",)
        )
    recommendation = ("c-switch-arni",) if kind == "hfref" else ("m-gdmt",)
    symptoms = nyha_or_surrogate(situation, _NYHA)
    if symptoms is None:
        because = "The recommendation is for NYHA class II and III, and no recent class is recorded."
        return unknown(RULE, about=_CLASS, because=because, missing=("NYHA class",), evidence=evidence)
    if symptoms is False:
        return not_applicable(RULE, about=_CLASS, because="The recommendation is for NYHA class II and III.")
    unsettled = [v for c in replaced for v in verdicts(situation, c) if v.row.effect in ("stop", "lower", "review")]
    if unsettled:
        because = f"Not now: {unsettled[0].words}. That comes first."
        return blocked(RULE, about=_CLASS, because=because, evidence=(*evidence, *unsettled[0].evidence))
    judgement = judge(situation, _DRUG, _CLASS, leaving_out=_OWN_PREDECESSOR)
    intro = f"{replaced[0].drug.capitalize()} is running in {situation.phenotype.name}; an ARNI does better."
    facts = (*evidence, *situation.phenotype.evidence, *judgement.evidence)
    if judgement.blocks:
        return blocked(
            RULE,
            about=_CLASS,
            because=f"{intro} Against it: {'; '.join(dict.fromkeys(judgement.blocks))}.",
            evidence=facts,
            limits=tuple(dict.fromkeys(judgement.limits)),
            look_again_on=min(judgement.look_again, default=None),
            recommendations=recommendation,
        )
    if judgement.missing:
        tests = tuple(dict.fromkeys(judgement.wanted_tests))
        return Finding(
            rule=RULE,
            about=_CLASS,
            outcome="unknown",
            because=f"{intro} It cannot be decided without: {'; '.join(judgement.missing)}.",
            missing=tuple(judgement.missing),
            evidence=facts,
            recommendations=recommendation,
            test_proposals=(TestProposal(tests=tests, not_before=None, due_by=situation.today, why="to decide"),)
            if tests
            else (),
            opened_by=tuple(c.source for c in replaced),
        )
    return _open(situation, replaced, judgement, intro, recommendation)


def _open(
    situation: Situation,
    replaced: list[DrugCourse],
    judgement: Judgement,
    intro: str,
    recommendation: tuple[str, ...],
) -> Finding:
    is_review = bool(judgement.reviews) or situation.phenotype.kind == _FOR_REVIEW
    because = f"{intro} {_how(situation, replaced)}"
    if judgement.reviews:
        because += f" To weigh: {'; '.join(dict.fromkeys(judgement.reviews))}."
    if situation.phenotype.kind == _FOR_REVIEW:
        because += " In mildly reduced ejection fraction this is a weak recommendation, a matter for review."
    evidence = (*(course_evidence(c, "supports") for c in replaced), *situation.phenotype.evidence, *judgement.evidence)
    return Finding(
        rule=RULE,
        about=_CLASS,
        outcome="open",
        action="review" if is_review else "switch",
        because=because,
        evidence=evidence,
        recommendations=recommendation,
        limits=tuple(dict.fromkeys(judgement.limits)),
        drug_proposals=() if is_review else (start_dose(situation, replaced),),
        test_proposals=() if is_review else follow_up_tests(situation, _CLASS, after="start"),
        opened_by=tuple(c.source for c in replaced),
        severity="caution" if situation.phenotype.kind == _FOR_REVIEW else None,
        cautions=("start-arni",),
    )


def _how(situation: Situation, replaced: list[DrugCourse]) -> str:
    """What happens to the drug it replaces: 36 hours after an ACE inhibitor, at once after an ARB."""
    hours = show(situation.tables.safety.switch.washout_hours)
    parts = []
    for course in replaced:
        if course.drug_class == "ace-inhibitor":
            parts.append(f"Stop {course.drug}; the first dose not before {hours} hours after its last dose.")
        else:
            parts.append(f"Stop {course.drug} at the switch; no waiting time.")
    return " ".join(parts)


def start_dose(situation: Situation, replaced: list[DrugCourse]) -> DrugProposal:
    """The lower or the higher start dose: the higher only where every condition of the table holds for sure."""
    why_low = _why_low(situation, replaced)
    kind = "low" if why_low else "standard"
    row = next(row for row in situation.tables.doses if row.drug == _DRUG and row.start_kind == kind)
    note = (
        f"lower start dose: {why_low}" if why_low else f"higher start dose: {replaced[0].drug} was at a sufficient dose"
    )
    return DrugProposal(
        drug=_DRUG,
        dose_mg=row.start_dose_mg,
        times_per_day=row.start_times_per_day,
        dose_name=row.names.get(f"{row.start_dose_mg:g}"),
        dose_row=row.id,
        replaces=replaced[0].source,
        note=note,
    )


def _why_low(situation: Situation, replaced: list[DrugCourse]) -> str:
    """Why the lower start dose is due; empty where the higher one may be used."""
    limits = situation.tables.safety.switch
    if not any(_is_enough(c, situation.tables.safety.switch_starts) for c in replaced):
        return "no ACE inhibitor or ARB at a sufficient dose before"
    pressures = situation.readings("systolic-bp")
    if not pressures or not all(r.holds(">", limits.systolic_above_mmhg, "mm[Hg]") for r in pressures):
        return f"systolic pressure not above {show(limits.systolic_above_mmhg)} mmHg"
    kidneys = situation.readings("egfr")
    if not kidneys or not all(r.holds(">=", limits.egfr_from, EGFR_UNIT) for r in kidneys):
        return f"eGFR not at {show(limits.egfr_from)} or above"
    age = age_in_years(situation.record, situation.today)
    if age is None or age >= limits.age_below_years:
        return f"age not below {limits.age_below_years}"
    return "cirrhosis on record" if "cirrhosis" in concepts_present(situation) else ""


def _is_enough(course: DrugCourse, starts: tuple[SwitchStart, ...]) -> bool:
    for row in starts:
        if row.drug == course.drug and course.daily_dose_mg is not None:
            if row.at_least_daily_mg is not None:
                return course.daily_dose_mg >= row.at_least_daily_mg
            return row.above_daily_mg is not None and course.daily_dose_mg > row.above_daily_mg
    return False
