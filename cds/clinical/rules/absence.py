"""No member of a pillar is there: may one be started today, which, and at which dose?

The candidates, their order and every limit are rows of the tables.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from datetime import date, timedelta

from cds.clinical.eligibility import Judgement, judge
from cds.clinical.findings import Action, DrugProposal, Evidence, Finding, TestProposal
from cds.clinical.harm import would_meet
from cds.clinical.record import DrugCourse
from cds.clinical.rules.answers import blocked, not_applicable
from cds.clinical.rules.pillars import closes, course_evidence, nyha_or_surrogate
from cds.clinical.situation import Situation
from cds.clinical.starting import follow_up_tests, start_proposal
from cds.clinical.tables import Candidate, Indication


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


def absent(
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
    opened_by = _opened_by(situation)
    if paused:
        reason = f" ({', '.join(paused[0].reasons)})" if paused[0].reasons else " (no reason recorded)"
        because = f"{paused[0].drug.capitalize()} is on hold{reason}: restart, or say why not."
        return Finding(
            rule=rule,
            about=pillar,
            outcome="open",
            action="review",
            because=because,
            evidence=(course_evidence(paused[0], "limits"), *situation.phenotype.evidence),
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
    absence = _Absence(indication, own, [c for c in in_use if not closes(situation, c)], members, opened_by)
    return _decide(situation, rule, pillar, absence, judgements)


def _candidates(situation: Situation, rule: str) -> list[Candidate]:
    nyha = situation.nyha()
    found = []
    for row in situation.tables.candidates:
        if row.rule != rule or situation.phenotype.kind not in row.phenotypes:
            continue
        if row.regions and situation.tables.region not in row.regions:
            continue
        if row.needs_nyha and not nyha_or_surrogate(situation, row.needs_nyha):
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
    intro = _intro(situation, pillar, absence.wrong, absence.members)
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
            severity="caution" if absence.indication.action == "review" else None,
        )
    recommendations = (absence.indication.recommendation,)
    return _all_blocked(situation, rule, pillar, intro, judgements, recommendations)


def blocked_anyway(
    situation: Situation, rule: str, pillar: str, members: list[DrugCourse], question: Finding
) -> Finding:
    """The open question of what is missing, unless every candidate is blocked whatever the answer to it."""
    kind = situation.phenotype.kind
    rows = [
        row
        for row in situation.tables.candidates
        if row.rule == rule and (kind in row.phenotypes or kind == "unclassified")
    ]
    judgements = [judge(situation, row.drug, row.drug_class) for row in rows]
    if not judgements or any(j.answer != "block" for j in judgements):
        return question
    return _all_blocked(situation, rule, pillar, _intro(situation, pillar, [], members), judgements, ())


def _all_blocked(
    situation: Situation,
    rule: str,
    pillar: str,
    intro: str,
    judgements: list[Judgement],
    recommendations: tuple[str, ...],
) -> Finding:
    """No candidate may be started. A value is asked to be repeated only where nobody has to refer the patient anyway."""
    reasons = "; ".join(dict.fromkeys(reason for j in judgements for reason in j.blocks))
    needs_referral = any(j.needs_referral for j in judgements)
    return blocked(
        rule,
        about=pillar,
        because=f"{intro} Against it: {reasons}.",
        evidence=_unique((*situation.phenotype.evidence, *(e for j in judgements for e in j.evidence))),
        limits=tuple(dict.fromkeys(limit for j in judgements for limit in j.limits)),
        look_again_on=_look_again_on(situation, judgements),
        refer=needs_referral,
        recommendations=recommendations,
        test_proposals=() if needs_referral else _repeats(situation, judgements),
        opened_by=_opened_by(situation),
    )


def _opened_by(situation: Situation) -> tuple[str, ...]:
    """The problems and stays that make this heart failure; never a measurement (ruling 48)."""
    cited = (fact.resource for fact in situation.phenotype.evidence)
    return tuple(resource for resource in cited if resource and not resource.startswith("Observation/"))


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
    if absence.wrong:  # the same drug in its other salt comes first
        chosen = sorted(chosen, key=lambda j: not _same_ingredient(j.drug, absence.wrong[0]))
    action = _action(situation, absence, chosen)
    weigh = _nothing_against(chosen[0]) if chosen[0].answer == "start" else _to_weigh(chosen[0])
    if absence.indication.action == "review":
        grade = situation.tables.recommendations[absence.indication.recommendation].grade
        weigh += f" The recommendation is a weak one (class {grade}), so this is a matter for review."
    meets = "".join(f" {said}" for said in would_meet(situation, chosen[0].drug, chosen[0].drug_class))
    because = f"{_intro(situation, pillar, absence.wrong, absence.members)} {weigh}{meets}{_others(judgements, chosen)}"
    refused = [m for m in situation.record.other_medicines if m.is_unread and m.status == "unknown"]
    if refused:
        count = "One medicine" if len(refused) == 1 else f"{len(refused)} medicines"
        because += f" {count} of the list could not be read: make sure that it is not there already."
    wrong = tuple(course_evidence(course, "limits") for course in absence.wrong)
    return Finding(
        rule=rule,
        about=pillar,
        outcome="open",
        action=action,
        because=because,
        evidence=_unique((*wrong, *situation.phenotype.evidence, *_symptoms(situation, absence), *chosen[0].evidence)),
        recommendations=tuple(dict.fromkeys(absence.recommendation_for(j.drug) for j in chosen)),
        limits=tuple(dict.fromkeys(limit for j in judgements for limit in j.limits)),
        drug_proposals=_proposals(situation, chosen, absence.wrong, action),
        test_proposals=follow_up_tests(situation, chosen[0].drug_class, after="start") if action == "start" else (),
        opened_by=(*absence.opened_by, *(course.source for course in absence.wrong)),
        cautions=tuple(dict.fromkeys(f"{'switch' if action == 'switch' else 'start'}-{j.drug_class}" for j in chosen)),
        severity="caution" if absence.indication.action == "review" else None,
    )


def _symptoms(situation: Situation, absence: _Absence) -> tuple[Evidence, ...]:
    """The NYHA class, where the recommendation depends on it."""
    nyha = situation.nyha()
    return (nyha.evidence("supports"),) if nyha is not None and absence.indication.needs_nyha else ()


def _action(situation: Situation, absence: _Absence, chosen: list[Judgement]) -> Action:
    """A wrong agent is switched in HFrEF and HFimpEF and reviewed elsewhere (ruling 26); 2b uses are reviews."""
    if chosen[0].answer != "start":
        return "review"
    if absence.wrong:
        return "switch" if situation.phenotype.kind in ("hfref", "hfimpef") else "review"
    return absence.indication.action


def _intro(situation: Situation, pillar: str, wrong: list[DrugCourse], members: list[DrugCourse]) -> str:
    """The kind of heart failure, and what is or is not on the list instead."""
    name = situation.tables.classes[pillar].name
    kind = situation.phenotype.name
    kind = kind[0].upper() + kind[1:]
    if wrong:
        return f"{kind}; {wrong[0].drug} is not one of the agents shown to help."
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
    """Say so, with the values it rests on."""
    known = f" ({', '.join(dict.fromkeys(judgement.fresh))})" if judgement.fresh else ""
    return f"Nothing recorded stands against starting {judgement.drug}{known}."


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
    drugs = [j.drug for j in chosen]
    return tuple(
        replace(proposal, alternatives=tuple(drug for drug in drugs if drug != proposal.drug))
        for proposal in _doses(situation, chosen, wrong)
    )


def _doses(situation: Situation, chosen: list[Judgement], wrong: list[DrugCourse]) -> tuple[DrugProposal, ...]:
    """Each chosen drug with its dose, the preferred first."""
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
        return DrugProposal(drug=drug, dose_mg=course.daily_dose_mg, times_per_day=1, replaces=course.source, note=note)
    note = f"in place of {course.drug}, which ends; no equivalent dose in the tables: the prescriber chooses"
    return DrugProposal(drug=drug, dose_mg=None, times_per_day=None, replaces=course.source, note=note)


def _unique(evidence: tuple[Evidence, ...]) -> tuple[Evidence, ...]:
    return tuple(dict.fromkeys(evidence))
