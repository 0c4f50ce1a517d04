"""The four pillars: is each drug class there, and if not, may it be started today?

One finding per rule, about the pillar. The candidates, their order and every limit are rows of the tables.
"""

from __future__ import annotations

from cds.clinical.eligibility import stopping_barriers
from cds.clinical.findings import Evidence, Finding
from cds.clinical.record import DrugCourse
from cds.clinical.rules.absence import absent, blocked_anyway
from cds.clinical.rules.answers import blocked, met, not_applicable, unknown
from cds.clinical.rules.pillars import closes, course_evidence, may_close, members_of, nyha_or_surrogate, since
from cds.clinical.situation import Situation
from cds.clinical.tables import Indication


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
    members = members_of(situation, pillar)
    in_use = [c for c in members if c.state == "active" and not c.as_needed]
    closing = [c for c in in_use if closes(situation, c)]
    keeping = [c for c in closing if not stopping_barriers(situation, c.drug, c.drug_class or "")]
    if keeping:
        return _is_met(rule, pillar, keeping)
    indication, why_not = _indication(situation, rule, has_ended=any(c.state == "ended" for c in members))
    if indication is None:
        if why_not is None:
            return not_applicable(rule, about=pillar, because=f"Not asked for in {situation.phenotype.name}.")
        return blocked_anyway(situation, rule, pillar, members, why_not) if why_not.outcome == "unknown" else why_not
    doubtful = [c for c in in_use if c not in closing and may_close(situation, c)]
    if doubtful:
        return _which_drug(rule, pillar, doubtful[0])
    flags = [f for f in situation.phenotype.flags if f not in ("ud21-improved", "two-values-one-day")]
    if flags:
        words = " and ".join(flag.replace("-", " ") for flag in flags)
        because = f"{words[0].upper()}{words[1:]}: the usual therapy needs a specialist's decision."
        wanted = (indication.recommendation,)
        facts = situation.phenotype.evidence
        return blocked(rule, about=pillar, because=because, evidence=facts, refer=True, recommendations=wanted)
    return absent(situation, rule, pillar, indication, members, in_use)


def _is_met(rule: str, pillar: str, courses: list[DrugCourse]) -> Finding:
    names = " and ".join(course.drug for course in courses)
    verb = "is" if len(courses) == 1 else "are"
    because = f"{names[0].upper()}{names[1:]} {verb} on the medication list{since(courses[0])}."
    if courses[0].stale:
        because += " The order is old: whether it is still taken must be confirmed."
    evidence = tuple(course_evidence(course, "supports") for course in courses)
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
    return unknown(rule, about=pillar, because=because, missing=missing, evidence=(course_evidence(course, "missing"),))


def _indication(situation: Situation, rule: str, *, has_ended: bool) -> tuple[Indication | None, Finding | None]:
    """The row that asks for the class in this patient, or the finding that says why none does."""
    phenotype = situation.phenotype
    rows = [row for row in situation.tables.indications if row.rule == rule and phenotype.kind in row.phenotypes]
    about = _about(rule)
    if not rows and phenotype.kind == "unclassified":
        missing = ("left ventricular ejection fraction",)
        evidence = (*phenotype.evidence, Evidence(what="lvef", role="missing"))
        name = situation.tables.classes[about].name
        because = f"Without an ejection fraction it is open whether the {name} is called for."
        return None, unknown(rule, about=about, because=because, missing=missing, evidence=evidence)
    for row in rows:
        if row.lvef_at_most_percent is not None and not (
            phenotype.lvef_percent is not None and phenotype.lvef_percent <= row.lvef_at_most_percent
        ):
            continue
        if not row.needs_nyha or (row.or_withdrawn and has_ended):
            return row, None
        nyha = nyha_or_surrogate(situation, row.needs_nyha)
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
