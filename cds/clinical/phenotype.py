"""Heart failure or not, and of which kind: what the phenotype rests on, in words and evidence."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from datetime import date, datetime, timedelta

from cds.clinical.findings import Evidence
from cds.clinical.readings import Reading, of_newest_day, reading_of, say_value, sentence, show, usable
from cds.clinical.record import DrugCourse, PatientRecord, Problem
from cds.clinical.tables import ClinicalTables, PhenotypeKind
from cds.clinical.timeline import PartialDate

NAMES: dict[PhenotypeKind, str] = {
    "none": "no sign of heart failure",
    "unclassified": "heart failure without a known ejection fraction",
    "pre-hf": "pre-heart failure (stage B)",
    "hfref": "heart failure with reduced ejection fraction",
    "hfimpef": "heart failure with improved ejection fraction",
    "hfmref": "heart failure with mildly reduced ejection fraction",
    "hfpef": "heart failure with preserved ejection fraction",
    "high-output": "high-output heart failure",
    "right-sided": "right-sided heart failure alone",
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Phenotype:
    """The kind of heart failure. `lvef_percent` is None where none is known (or only a comparator).

    `flags`: `ud21-improved`, `two-values-one-day`, `amyloidosis`, `obstructive-hypertrophic-cardiomyopathy`, `congenital`.
    """

    kind: PhenotypeKind
    because: str
    lvef_percent: float | None = None
    measured: PartialDate | None = None
    flags: tuple[str, ...] = ()
    evidence: tuple[Evidence, ...] = ()

    @property
    def name(self) -> str:
        return NAMES[self.kind]


def has_concept(problems: Iterable[Problem], concepts: frozenset[str], *, history: bool = False) -> tuple[Problem, ...]:
    """The problems that count as one of `concepts`: active ones, or with `history` any."""
    return tuple(p for p in problems if (history or p.is_active) and not concepts.isdisjoint(p.concepts))


def determine_phenotype(
    record: PatientRecord, courses: tuple[DrugCourse, ...], tables: ClinicalTables, *, as_of: datetime
) -> Phenotype:
    """Classify by the newest ejection fraction and the signs of heart failure known on `as_of`.

    Source: 2022 AHA/ACC/HFSA guideline section 2.2; edges closed as the phenotype table says (policy). Two values of
    one day: the lower. HFimpEF needs any earlier value in the reduced range; it falls back to HFrEF with the newest.
    """
    signs = signs_of_heart_failure(record, courses, tables, as_of=as_of)
    flags = _disease_flags(record, tables)
    lvefs = usable(record, "lvef")
    newest = of_newest_day(lvefs)
    if not newest:
        return _without_lvef(record, signs, flags, tables)
    reading = min((reading_of(m) for m in newest), key=lambda r: (r.by_unit["%"].low, r.source))
    if _lie_across_a_limit([m.value for m in newest], tables):
        flags = (*flags, "two-values-one-day")
    measurement = next(m for m in newest if m.source == reading.source)
    is_exact = measurement.comparator is None
    limits = tables.phenotype
    is_reduced = _classify(measurement.value, is_exact, reading, "<=", limits.reduced_at_most_percent)
    others = tuple(r for r in map(reading_of, newest) if r.source != reading.source and r.shown != reading.shown)
    evidence = (reading.evidence("supports"), *(r.evidence("limits") for r in others), *signs.evidence)
    said = say_value(reading, tables)
    if others and "two-values-one-day" in flags:
        said += f" (another value of that day is {others[0].shown} %: the lower one counts, to be reviewed)"

    def result(
        kind: PhenotypeKind, why: str, extra: tuple[str, ...] = (), more: tuple[Evidence, ...] = ()
    ) -> Phenotype:
        return Phenotype(
            kind=kind,
            because=why,
            lvef_percent=measurement.value if is_exact else None,
            measured=reading.taken,
            flags=tuple(sorted({*flags, *extra})),
            evidence=(*evidence, *more),
        )

    special = _special_failure(record, signs, tables)
    if special is not None:
        return result(special, f"{NAMES[special].capitalize()}: {signs.words}; {said}.")
    if not signs:
        is_stage_b = _classify(measurement.value, is_exact, reading, "<", limits.stage_b_below_percent)
        if is_stage_b or is_reduced:
            return result(
                "pre-hf", f"{said[0].upper()}{said[1:]} without any sign of heart failure: {NAMES['pre-hf']}."
            )
        structural = _stage_b_evidence(record, tables)
        if structural:
            return result("pre-hf", f"No sign of heart failure, but {structural[0].what}.", more=structural)
        return result("none", f"No sign of heart failure is recorded; {said}.")
    if is_reduced is None:
        return result("unclassified", f"{sentence(signs.words)}; {said} leaves the class open.")
    if is_reduced:
        return result("hfref", f"{sentence(signs.words)}; {said}, at most {show(limits.reduced_at_most_percent)} %.")
    earlier = [
        m
        for m in lvefs
        if m.taken.latest < reading.taken.latest
        and m.comparator in (None, "<", "<=")
        and m.value <= limits.reduced_at_most_percent
    ]
    if earlier:
        lowest = min(earlier, key=lambda m: (m.value, m.source))
        before = reading_of(lowest)
        same_day = [m.value for m in lvefs if m.taken.latest == lowest.taken.latest]
        disputed = _lie_across_a_limit(same_day, tables)
        rise = measurement.value - lowest.value
        flag = ("ud21-improved",) if is_exact and rise >= limits.improved_rise_points else ()
        return result(
            "hfimpef",
            f"{sentence(signs.words)}; {said}, up from {say_value(before, tables)}"
            + (f" (another value of that day is {show(max(same_day))} %: to be reviewed)." if disputed else "."),
            (*flag, *(("two-values-one-day",) if disputed else ())),
            (before.evidence("supports"),),
        )
    is_preserved = _classify(measurement.value, is_exact, reading, ">=", limits.preserved_from_percent)
    if is_preserved is None:
        return result("unclassified", f"{sentence(signs.words)}; {said} leaves the class open.")
    kind: PhenotypeKind = "hfpef" if is_preserved else "hfmref"
    never = f"none at or below {show(limits.reduced_at_most_percent)} % before"
    return result(kind, f"{sentence(signs.words)}; {said}, {never}.")


def _lie_across_a_limit(values: list[float], tables: ClinicalTables) -> bool:
    """True if values of one day put the patient into different classes."""
    limits = tables.phenotype
    classes = {(v <= limits.reduced_at_most_percent, v >= limits.preserved_from_percent) for v in values}
    return len(classes) > 1


def _classify(value: float, is_exact: bool, reading: Reading, sign: str, threshold: float) -> bool | None:
    """A range counts by its midpoint (ruling 4); a comparator by its bounds."""
    if is_exact:
        return {"<=": value <= threshold, "<": value < threshold, ">=": value >= threshold}[sign]
    return reading.holds(sign, threshold, "%")  # type: ignore[arg-type]  # the three signs used here are Signs


@dataclass(frozen=True, slots=True)
class Signs:
    """Signs of heart failure: in words, with evidence. Falsy when there are none."""

    words: str
    evidence: tuple[Evidence, ...]
    is_by_problem: bool

    def __bool__(self) -> bool:
        return bool(self.evidence)


def signs_of_heart_failure(
    record: PatientRecord, courses: tuple[DrugCourse, ...], tables: ClinicalTables, *, as_of: datetime
) -> Signs:
    """Find what says that this patient has heart failure: a problem, an admission for it, a drug given for nothing else,
    or symptoms by NYHA class. A stage never falls back: a problem resolved under therapy still counts.
    """
    groups = tables.concepts
    problems = has_concept(record.problems, groups.heart_failure)
    past = [p for p in has_concept(record.problems, groups.heart_failure, history=True) if not p.is_active]
    running = [c for c in courses if c.state == "active"]
    only_for_it = [c for c in running if not groups.heart_failure_only.isdisjoint((c.drug, c.drug_class or ""))]
    evidence: list[Evidence] = []
    words: list[str] = []
    if problems:
        evidence.append(_problem_evidence(problems[0]))
        words.append(f"heart failure on the problem list{_since(problems[0])}")
    elif past and running:
        evidence.append(_problem_evidence(past[0]))
        words.append("heart failure in the past, still treated")
    stays = [
        stay
        for stay in record.encounters
        if stay.encounter_class in ("inpatient", "emergency") and not groups.heart_failure.isdisjoint(stay.reasons)
    ]
    if not evidence and stays:
        evidence.append(
            Evidence(
                what="admission for heart failure",
                role="supports",
                resource=stays[0].source,
                date=_text(stays[0].starts),
            )
        )
        words.append("an admission for heart failure")
    if not evidence and only_for_it:
        course = only_for_it[0]
        evidence.append(Evidence(what=course.drug, role="supports", resource=course.source, date=_text(course.started)))
        words.append(f"{course.drug}, a drug given only for heart failure")
    nyha = fresh_nyha(record, tables, today=as_of.date())
    if not evidence and nyha is not None and nyha.shown_value >= 2:
        evidence.append(nyha.evidence("supports"))
        words.append(f"symptoms of NYHA class {show(nyha.shown_value)}")
    return Signs("; ".join(words), tuple(evidence), bool(problems or past))


def fresh_nyha(record: PatientRecord, tables: ClinicalTables, *, today: date) -> Reading | None:
    """The newest NYHA class (1 to 4) if it is fresh enough to use; None otherwise. Two of one day: the higher."""
    newest = of_newest_day(usable(record, "nyha-class"))
    if not newest or (today - newest[0].taken.earliest).days > tables.phenotype.nyha_fresh_days:
        return None
    return max((reading_of(m) for m in newest), key=lambda r: (r.shown_value, r.source))


def _without_lvef(record: PatientRecord, signs: Signs, flags: tuple[str, ...], tables: ClinicalTables) -> Phenotype:
    special = _special_failure(record, signs, tables)
    if special is not None:
        return Phenotype(kind=special, because=f"{NAMES[special].capitalize()}.", flags=flags, evidence=signs.evidence)
    if signs:
        why = f"{sentence(signs.words)}; no ejection fraction is recorded."
        return Phenotype(kind="unclassified", because=why, flags=flags, evidence=signs.evidence)
    structural = _stage_b_evidence(record, tables)
    if structural:
        why = f"No sign of heart failure, but {structural[0].what}."
        return Phenotype(kind="pre-hf", because=why, flags=flags, evidence=structural)
    return Phenotype(
        kind="none", because="No sign of heart failure is recorded, and no ejection fraction.", flags=flags
    )


def _special_failure(record: PatientRecord, signs: Signs, tables: ClinicalTables) -> PhenotypeKind | None:
    """High-output or isolated right-sided failure, where no other heart failure is on the problem list."""
    if signs.is_by_problem:
        return None
    if has_concept(record.problems, tables.concepts.high_output):
        return "high-output"
    if has_concept(record.problems, tables.concepts.isolated_right):
        return "right-sided"
    return None


def _stage_b_evidence(record: PatientRecord, tables: ClinicalTables) -> tuple[Evidence, ...]:
    """Structural or biochemical evidence without symptoms (2022 AHA/ACC/HFSA section 2.1)."""
    found = has_concept(record.problems, tables.concepts.stage_b)
    if found:
        return (_problem_evidence(found[0], "a structural heart problem on the problem list"),)
    limits = tables.phenotype
    for analyte, raised in (("nt-probnp", limits.nt_probnp_raised_pg_ml), ("bnp", limits.bnp_raised_pg_ml)):
        for measurement in of_newest_day(usable(record, analyte)):
            reading = reading_of(measurement)
            if reading.holds(">=", raised, measurement.unit):
                return (reading.evidence("supports", f"a raised {tables.analyte_names.get(analyte, analyte)}"),)
    return ()


def _disease_flags(record: PatientRecord, tables: ClinicalTables) -> tuple[str, ...]:
    groups = tables.concepts
    named = (
        ("amyloidosis", groups.amyloidosis),
        ("obstructive-hypertrophic-cardiomyopathy", groups.obstructive_hcm),
        ("congenital", groups.congenital),
    )
    return tuple(name for name, concepts in named if has_concept(record.problems, concepts))


def admission_within(record: PatientRecord, tables: ClinicalTables, *, today: date) -> Evidence | None:
    """An admission for heart failure in the last year (table `admission_days`)."""
    since = today - timedelta(days=tables.phenotype.admission_days)
    for stay in record.encounters:
        is_for_it = not tables.concepts.heart_failure.isdisjoint(stay.reasons)
        if (
            stay.encounter_class == "inpatient"
            and is_for_it
            and stay.starts is not None
            and stay.starts.earliest >= since
        ):
            return Evidence(
                what="admission for heart failure", role="supports", resource=stay.source, date=str(stay.starts)
            )
    return None


def _problem_evidence(problem: Problem, what: str | None = None) -> Evidence:
    return Evidence(what=what or problem.display, role="supports", resource=problem.source, date=_text(problem.dated))


def _since(problem: Problem) -> str:
    return f" since {problem.dated}" if problem.dated is not None else ""


def _text(when: PartialDate | None) -> str | None:
    return None if when is None else str(when)
