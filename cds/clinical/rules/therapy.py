"""The four pillars: is each drug class there, and if not, may it be started today?

One finding per rule, about the pillar. The candidates, their order and every limit are rows of the tables.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import date, timedelta

from cds.clinical.eligibility import Judgement, judge, stopping_barriers
from cds.clinical.findings import Action, DrugProposal, Evidence, Finding, TestProposal
from cds.clinical.phenotype import admission_within
from cds.clinical.record import DrugCourse
from cds.clinical.rules.answers import blocked, met, not_applicable, unknown
from cds.clinical.situation import Situation
from cds.clinical.starting import follow_up_tests, start_proposal
from cds.clinical.tables import Candidate, DrugClass, Indication


def start_ras_inhibitor(situation: Situation) -> tuple[Finding, ...]:
    """ACE inhibitor, ARB or ARNI: any of them closes the pillar. Recommendations c-arni, c-acei, c-arb, b-acei."""
    return (_pillar(situation, "start-ras-inhibitor", "ras-inhibitor"),)


def start_beta_blocker(situation: Situation) -> tuple[Finding, ...]:
    """Only agents with heart-failure evidence close the pillar; another one is to be switched. Recommendation c-bb."""
    return (_pillar(situation, "start-beta-blocker", "beta-blocker"),)


def start_mra(situation: Situation) -> tuple[Finding, ...]:
    """Spironolactone or eplerenone. Recommendation c-mra."""
    return (_pillar(situation, "start-mra", "mra"),)


def start_sglt2_inhibitor(situation: Situation) -> tuple[Finding, ...]:
    """Diabetes or not, whatever the ejection fraction. Recommendations c-sglt2, m-sglt2, p-sglt2."""
    return (_pillar(situation, "start-sglt2-inhibitor", "sglt2-inhibitor"),)


def _pillar(situation: Situation, rule: str, pillar: str) -> Finding:
    gate = situation.gate_for("therapy")
    if gate is not None:
        return not_applicable(rule, about=pillar, because=gate.words, source=gate.source)
    members = _members(situation, pillar)
    in_use = [c for c in members if c.state == "active" and not c.as_needed]
    closing = [c for c in in_use if _closes(situation, c)]
    keeping = [c for c in closing if not stopping_barriers(situation, c.drug, c.drug_class or "")]
    if keeping:
        return _is_met(rule, pillar, keeping)
    indication, why_not = _indication(situation, rule, has_ended=any(c.state == "ended" for c in members))
    if indication is None:
        return (
            why_not
            if why_not is not None
            else not_applicable(rule, about=pillar, because=f"Not asked for in {situation.phenotype.name}.")
        )
    doubtful = [c for c in in_use if c not in closing and _may_close(situation, c)]
    if doubtful:
        return _which_drug(rule, pillar, doubtful[0])
    flags = [f for f in situation.phenotype.flags if f not in ("ud21-improved", "two-values-one-day")]
    if flags:
        words = " and ".join(flag.replace("-", " ") for flag in flags)
        because = f"{words[0].upper()}{words[1:]}: the usual therapy needs a specialist's decision."
        return blocked(rule, about=pillar, because=because, evidence=situation.phenotype.evidence, refer=True)
    return _absent(situation, rule, pillar, indication, members, in_use)


def _members(situation: Situation, pillar: str) -> list[DrugCourse]:
    """Courses of the pillar's classes, and those whose codes leave it open whether they are."""
    classes = {slug for slug, row in situation.tables.classes.items() if row.pillar == pillar}
    return [
        course
        for course in situation.courses
        if course.drug_class in classes
        or (course.drug_class is None and not classes.isdisjoint(course.possible_classes))
    ]


def _class_of(situation: Situation, course: DrugCourse) -> DrugClass | None:
    return situation.tables.classes.get(course.drug_class or "")


def _closes(situation: Situation, course: DrugCourse) -> bool:
    """True if the course is therapy of the pillar: a closing member of a class known for sure."""
    row = _class_of(situation, course)
    if row is None:
        return False
    regional = row.closing_regions.get(situation.tables.region, ())
    return not row.closing_drugs or course.drug in row.closing_drugs or course.drug in regional


def _may_close(situation: Situation, course: DrugCourse) -> bool:
    """True if knowing more (salt, class) could make the course close the pillar."""
    row = _class_of(situation, course)
    if row is None:
        return True
    return any(closing.startswith(f"{course.drug} ") for closing in row.closing_drugs)


def _is_met(rule: str, pillar: str, courses: list[DrugCourse]) -> Finding:
    names = " and ".join(course.drug for course in courses)
    verb = "is" if len(courses) == 1 else "are"
    because = f"{names[0].upper()}{names[1:]} {verb} on the medication list{_since(courses[0])}."
    if courses[0].stale:
        because += " The order is old: whether it is still taken must be confirmed."
    evidence = tuple(_course_evidence(course, "supports") for course in courses)
    return met(rule, about=pillar, because=because, evidence=evidence)


def _which_drug(rule: str, pillar: str, course: DrugCourse) -> Finding:
    if course.possible_classes:
        because = f"The codes of one medicine disagree on its class ({' or '.join(course.possible_classes)})."
        missing = (f"{course.source}: which medicine it is",)
    else:
        because = (
            f"{course.drug.capitalize()} is on the list, but not which salt: only one of them treats heart failure."
        )
        missing = (f"{course.source}: the salt of {course.drug}",)
    return unknown(
        rule, about=pillar, because=because, missing=missing, evidence=(_course_evidence(course, "missing"),)
    )


def _indication(situation: Situation, rule: str, *, has_ended: bool) -> tuple[Indication | None, Finding | None]:
    """The row that asks for the class in this patient, or the finding that says why none does."""
    phenotype = situation.phenotype
    rows = [row for row in situation.tables.indications if row.rule == rule and phenotype.kind in row.phenotypes]
    about = _about(rule)
    if not rows and phenotype.kind == "unclassified":
        missing = ("left ventricular ejection fraction",)
        evidence = (*phenotype.evidence, Evidence(what="lvef", role="missing"))
        because = f"{phenotype.because} Whether this class is called for depends on it."
        return None, unknown(rule, about=about, because=because, missing=missing, evidence=evidence)
    for row in rows:
        if row.lvef_at_most_percent is not None and not (
            phenotype.lvef_percent is not None and phenotype.lvef_percent <= row.lvef_at_most_percent
        ):
            continue
        if not row.needs_nyha or (row.or_withdrawn and has_ended):
            return row, None
        nyha = _nyha_or_surrogate(situation, row.needs_nyha)
        if nyha is True:
            return row, None
        if nyha is None:
            missing = ("NYHA class",)
            because = "The recommendation is for NYHA class II to IV, and neither a recent class nor a loop diuretic or admission is recorded."
            return None, unknown(
                rule,
                about=about,
                because=because,
                missing=missing,
                evidence=(Evidence(what="nyha-class", role="missing"),),
            )
    if rows and any(row.needs_nyha for row in rows):
        nyha_reading = situation.nyha()
        because = "The recommendation is for symptoms of NYHA class II to IV; the last class recorded is I."
        source = nyha_reading.source if nyha_reading else None
        return None, not_applicable(rule, about=about, because=because, source=source)
    return None, None


def _about(rule: str) -> str:
    return rule.removeprefix("start-")


def _nyha_or_surrogate(situation: Situation, wanted: tuple[int, ...]) -> bool | None:
    """Whether the NYHA class is one of `wanted`. Without a fresh class, a loop diuretic or an admission for heart failure
    in the last year stands in for class II or worse (drug rules only); otherwise None.
    """
    nyha = situation.nyha()
    if nyha is not None:
        return int(nyha.shown_value) in wanted
    has_loop = any(c.state == "active" and c.drug_class == "loop-diuretic" for c in situation.courses)
    if has_loop or admission_within(situation.record, situation.tables, today=situation.today) is not None:
        return True
    return None


def _absent(
    situation: Situation,
    rule: str,
    pillar: str,
    indication: Indication,
    members: list[DrugCourse],
    in_use: list[DrugCourse],
) -> Finding:
    """No member closes the pillar: paused, another agent, or nothing. Say what may be done."""
    recommendations = (indication.recommendation,)
    paused = [course for course in members if course.state == "paused"]
    opened_by = tuple(
        e.resource for e in situation.phenotype.evidence if e.resource and not e.resource.startswith("Observation/")
    )
    if paused:
        reason = f" ({', '.join(paused[0].reasons)})" if paused[0].reasons else " (no reason recorded)"
        because = f"{paused[0].drug.capitalize()} is on hold{reason}: restart, or say why not."
        return Finding(
            rule=rule,
            about=pillar,
            outcome="open",
            action="review",
            because=because,
            evidence=(_course_evidence(paused[0], "limits"), *situation.phenotype.evidence),
            recommendations=recommendations,
            opened_by=(*opened_by, *paused[0].sources[:1]),
        )
    candidates = _candidates(situation, rule)
    judgements = [judge(situation, candidate.drug, candidate.drug_class) for candidate in candidates]
    if not judgements:
        return not_applicable(
            rule, about=pillar, because="No drug of the class is listed for this region and kind of heart failure."
        )
    own = {candidate.drug: candidate.recommendation for candidate in candidates if candidate.recommendation}
    absence = _Absence(indication, own, [c for c in in_use if not _closes(situation, c)], members, opened_by)
    return _decide(situation, rule, pillar, absence, judgements)


@dataclass(frozen=True, slots=True)
class _Absence:
    """Why no member closes the pillar, and by which recommendation one should."""

    indication: Indication
    own_recommendations: dict[str, str]
    wrong: list[DrugCourse]
    members: list[DrugCourse]
    opened_by: tuple[str, ...]

    def recommendation_for(self, drug: str) -> str:
        return self.own_recommendations.get(drug, self.indication.recommendation)


def _candidates(situation: Situation, rule: str) -> list[Candidate]:
    nyha = situation.nyha()
    found = []
    for row in situation.tables.candidates:
        if row.rule != rule or situation.phenotype.kind not in row.phenotypes:
            continue
        if row.regions and situation.tables.region not in row.regions:
            continue
        if row.needs_nyha and not _nyha_or_surrogate(situation, row.needs_nyha):
            continue
        if row.needs_nyha and nyha is not None and int(nyha.shown_value) not in row.needs_nyha:
            continue
        found.append(row)
    return found


def _decide(situation: Situation, rule: str, pillar: str, absence: _Absence, judgements: list[Judgement]) -> Finding:
    """The best answer any candidate has: start, else review, else unknown, else blocked."""
    startable = [j for j in judgements if j.answer == "start"]
    reviewable = [j for j in judgements if j.answer == "review"]
    undecided = [j for j in judgements if j.answer == "unknown"]
    if startable:
        return _open(situation, rule, pillar, absence, judgements, startable)
    if reviewable:
        return _open(situation, rule, pillar, absence, judgements, reviewable)
    intro = _intro(situation, pillar, absence)
    evidence = (*situation.phenotype.evidence, *(e for j in undecided or judgements for e in j.evidence))
    limits = tuple(dict.fromkeys(limit for j in undecided or judgements for limit in j.limits))
    if undecided:
        missing = tuple(dict.fromkeys(text for j in undecided for text in j.missing))
        tests = tuple(dict.fromkeys(test for j in undecided for test in j.wanted_tests))
        wanted = TestProposal(tests=tests, not_before=None, due_by=situation.today, why="to decide")
        return Finding(
            rule=rule,
            about=pillar,
            outcome="unknown",
            because=f"{intro} It cannot be decided without: {'; '.join(missing)}.",
            missing=missing,
            evidence=_unique(evidence),
            recommendations=(absence.recommendation_for(undecided[0].drug),),
            limits=limits,
            test_proposals=(wanted,) if tests else (),
            opened_by=absence.opened_by,
        )
    reasons = "; ".join(dict.fromkeys(reason for j in judgements for reason in j.blocks))
    return blocked(
        rule,
        about=pillar,
        because=f"{intro} Against it: {reasons}.",
        evidence=_unique(evidence),
        limits=limits,
        look_again_on=_look_again_on(situation, judgements),
        refer=any(j.needs_referral for j in judgements),
        recommendations=(absence.indication.recommendation,),
        test_proposals=_repeats(situation, judgements),
        opened_by=absence.opened_by,
    )


def _repeats(situation: Situation, judgements: list[Judgement]) -> tuple[TestProposal, ...]:
    """The values that stand against the class and should be measured again."""
    wanted = {analyte: days for j in judgements for analyte, days in j.to_repeat.items()}
    today = situation.today
    return tuple(
        TestProposal(tests=(analyte,), not_before=None, due_by=today + timedelta(days=days), why="to look again")
        for analyte, days in sorted(wanted.items())
    )


def _look_again_on(situation: Situation, judgements: list[Judgement]) -> date | None:
    """The first day on which a block may be gone: a waiting time is over, or a value has been repeated."""
    days = [day for j in judgements for day in j.look_again]
    days += [proposal.due_by for proposal in _repeats(situation, judgements)]
    return min(days, default=None)


def _open(
    situation: Situation,
    rule: str,
    pillar: str,
    absence: _Absence,
    judgements: list[Judgement],
    chosen: list[Judgement],
) -> Finding:
    action = _action(situation, absence, chosen)
    weigh = _nothing_against(chosen[0]) if chosen[0].answer == "start" else _to_weigh(chosen[0])
    because = f"{_intro(situation, pillar, absence)} {weigh}{_others(judgements, chosen)}"
    wrong = tuple(_course_evidence(course, "limits") for course in absence.wrong)
    return Finding(
        rule=rule,
        about=pillar,
        outcome="open",
        action=action,
        because=because,
        evidence=_unique((*wrong, *situation.phenotype.evidence, *chosen[0].evidence)),
        recommendations=tuple(dict.fromkeys(absence.recommendation_for(j.drug) for j in chosen)),
        limits=tuple(dict.fromkeys(limit for j in judgements for limit in j.limits)),
        drug_proposals=_proposals(situation, chosen, absence.wrong, action),
        test_proposals=follow_up_tests(situation, chosen[0].drug_class, after="start") if action == "start" else (),
        opened_by=(*absence.opened_by, *(course.source for course in absence.wrong)),
        cautions=tuple(dict.fromkeys(f"start-{j.drug_class}" for j in chosen)),
    )


def _action(situation: Situation, absence: _Absence, chosen: list[Judgement]) -> Action:
    """A wrong agent is switched in HFrEF and HFimpEF and reviewed elsewhere (ruling 26); 2b uses are reviews."""
    if chosen[0].answer != "start":
        return "review"
    if absence.wrong:
        return "switch" if situation.phenotype.kind in ("hfref", "hfimpef") else "review"
    return absence.indication.action


def _intro(situation: Situation, pillar: str, absence: _Absence) -> str:
    """The kind of heart failure, and what is or is not on the list instead."""
    members = absence.members
    name = situation.tables.classes[pillar].name
    kind = situation.phenotype.name
    kind = kind[0].upper() + kind[1:]
    if absence.wrong:
        return f"{kind}; {absence.wrong[0].drug} is not one of the agents shown to help."
    must_stop = [c for c in members if c.state == "active" and not c.as_needed]
    if must_stop:
        return f"{kind}; {must_stop[0].drug} is on the list but must not be taken here."
    as_needed = [c for c in members if c.state == "active" and c.as_needed]
    if as_needed:
        return f"{kind}; {as_needed[0].drug} is ordered as needed only, which is no therapy of this kind."
    ended = [c for c in members if c.state == "ended"]
    if ended:
        return f"{kind}; {ended[0].drug} ended{_when(ended[0])}, and no {name} is on the list now."
    return f"{kind} and no {name} on the medication list."


def _when(course: DrugCourse) -> str:
    return f" on {course.ended}" if course.ended is not None else ""


def _nothing_against(judgement: Judgement) -> str:
    return f"Nothing recorded stands against starting {judgement.drug}."


def _to_weigh(judgement: Judgement) -> str:
    return f"To weigh before starting {judgement.drug}: {'; '.join(dict.fromkeys(judgement.reviews))}."


def _others(judgements: list[Judgement], startable: list[Judgement]) -> str:
    """Why the candidates before or beside the chosen ones are not offered."""
    rest = [j for j in judgements if j not in startable]
    said = [f"{j.drug}: {'; '.join(dict.fromkeys([*j.blocks, *j.reviews, *j.missing]))}" for j in rest]
    return f" Not proposed first: {'. '.join(dict.fromkeys(said))}." if said else ""


def _proposals(
    situation: Situation, chosen: list[Judgement], wrong: list[DrugCourse], action: Action
) -> tuple[DrugProposal, ...]:
    if action not in ("start", "switch"):
        return ()
    if not wrong:
        return tuple(start_proposal(situation, j.drug) for j in chosen)
    return tuple(
        _in_place_of(j.drug, wrong[0]) for j in sorted(chosen, key=lambda j: not _same_ingredient(j.drug, wrong[0]))
    )


def _same_ingredient(drug: str, course: DrugCourse) -> bool:
    return drug.split(" ", maxsplit=1)[0] == course.drug.split(" ", maxsplit=1)[0]


def _in_place_of(drug: str, course: DrugCourse) -> DrugProposal:
    """The same total daily dose for another salt of the same drug, once a day; for another drug the prescriber chooses."""
    if _same_ingredient(drug, course) and course.daily_dose_mg is not None:
        note = f"same total daily dose as {course.drug}, which ends"
        return DrugProposal(drug=drug, dose_mg=course.daily_dose_mg, times_per_day=1, note=note)
    note = f"in place of {course.drug}, which ends; no equivalent dose in the tables: the prescriber chooses"
    return DrugProposal(drug=drug, dose_mg=None, times_per_day=None, note=note)


def _course_evidence(course: DrugCourse, role: str) -> Evidence:
    dose = course.daily_dose_mg
    return Evidence(
        what=course.drug,
        role=role,  # type: ignore[arg-type]  # callers pass the roles of Evidence
        resource=course.source,
        value=dose,
        unit="mg/d" if dose is not None else None,
        date=str(course.started) if course.started is not None else None,
    )


def _since(course: DrugCourse) -> str:
    return f" since {course.started}" if course.started is not None else ""


def _unique(evidence: tuple[Evidence, ...]) -> tuple[Evidence, ...]:
    return tuple(dict.fromkeys(evidence))
