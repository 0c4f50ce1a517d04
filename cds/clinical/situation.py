"""What every rule looks at: the record known on a day, its courses, the phenotype and the gates before any rule."""

from __future__ import annotations

from collections.abc import Callable, Hashable, Mapping
from dataclasses import dataclass, field
from datetime import date, datetime
from typing import TypeVar, cast

from cds.clinical.courses import build_courses
from cds.clinical.phenotype import Phenotype, determine_phenotype, fresh_nyha, has_concept
from cds.clinical.readings import Reading
from cds.clinical.record import DrugCourse, PatientRecord
from cds.clinical.renal import readings_of
from cds.clinical.tables import ClinicalTables

T = TypeVar("T")


@dataclass(frozen=True, slots=True, kw_only=True)
class Gate:
    """A patient-level fact that closes rules before they are asked (rulings 47).

    `closes`: "all" every rule; "not-safety" therapy, dose and test rules; "therapy" therapy rules only;
    "renal-tests" the tests of kidney function and potassium.
    """

    id: str
    closes: frozenset[str]
    words: str
    source: str | None = None


@dataclass(frozen=True, slots=True)
class Situation:
    """One patient on one day. Built once by `understand`; rules only read it."""

    record: PatientRecord
    courses: tuple[DrugCourse, ...]
    phenotype: Phenotype
    gates: tuple[Gate, ...]
    tables: ClinicalTables
    as_of: datetime
    first_doses: Mapping[str, datetime] = field(default_factory=dict)  # of orders under check, by drug
    _answers: dict[Hashable, object] = field(default_factory=dict, compare=False, repr=False)  # see `once`

    def once(self, question: Hashable, work: Callable[[], T]) -> T:
        """The answer of `work`, made at the first asking: many rules ask the same of a situation, which never changes."""
        if question not in self._answers:
            self._answers[question] = work()
        return cast("T", self._answers[question])

    @property
    def today(self) -> date:
        return self.as_of.date()

    def gate_for(self, kind: str) -> Gate | None:
        """The first gate that closes rules of this kind ("therapy", "dose", "tests", "renal-tests", "data", "safety")."""
        return next((gate for gate in self.gates if kind in gate.closes), None)

    def courses_of(self, drug_class: str) -> tuple[DrugCourse, ...]:
        return tuple(course for course in self.courses if course.drug_class == drug_class)

    def readings(self, analyte: str) -> tuple[Reading, ...]:
        return self.once(("readings", analyte), lambda: readings_of(self.record, analyte))

    def nyha(self) -> Reading | None:
        return self.once("nyha", lambda: fresh_nyha(self.record, self.tables, today=self.today))

    def has_gate(self, gate_id: str) -> bool:
        return any(gate.id == gate_id for gate in self.gates)


_EVERYTHING = frozenset({"therapy", "dose", "tests", "renal-tests", "data", "safety"})
_ALL_BUT_SAFETY = frozenset({"therapy", "dose", "tests", "renal-tests", "data"})
_RENAL_TESTS = frozenset({"renal-tests"})


def understand(
    record: PatientRecord,
    tables: ClinicalTables,
    *,
    as_of: datetime,
    first_doses: Mapping[str, datetime] | None = None,
) -> Situation:
    """Build the situation from what is known on `as_of`; anything dated later does not exist for any rule."""
    known = record.known_on(as_of)
    courses = build_courses(known, as_of, tables.supply)
    phenotype = determine_phenotype(known, courses, tables, as_of=as_of)
    gates = _gates(known, phenotype, tables, as_of.date())
    return Situation(known, courses, phenotype, gates, tables, as_of, first_doses or {})


def _gates(record: PatientRecord, phenotype: Phenotype, tables: ClinicalTables, today: date) -> tuple[Gate, ...]:
    gates: list[Gate] = []
    groups = tables.concepts
    if record.is_deceased:
        when = f" on {record.died}" if record.died is not None else ""
        return (Gate(id="deceased", closes=_EVERYTHING, words=f"The patient died{when}.", source=record.patient),)
    ages = record.age_years_on(today)
    adult = tables.phenotype.adult_from_years
    if ages is not None and ages[0] < adult:
        words = f"The patient is under {adult}: adult guidance does not apply."
        gates.append(Gate(id="under-age", closes=_EVERYTHING, words=words, source=record.patient))
    transplant = _present(record, groups.transplant)
    if transplant is not None:
        gates.append(
            Gate(id="heart-transplant", closes=_ALL_BUT_SAFETY, words="Heart transplant on record.", source=transplant)
        )
    lvad = _lvad(record, tables)
    if lvad is not None:
        words = "A left ventricular assist device is on record."
        gates.append(Gate(id="lvad", closes=_ALL_BUT_SAFETY, words=words, source=lvad))
    hospice = _present(record, groups.hospice)
    if hospice is not None:
        gates.append(
            Gate(id="hospice", closes=_ALL_BUT_SAFETY, words="Hospice or comfort care is on record.", source=hospice)
        )
    dialysis = _dialysis(record, tables, today)
    if dialysis is not None:
        words = "The patient is on dialysis: eGFR and the timed kidney tests mean nothing here."
        gates.append(Gate(id="dialysis", closes=_RENAL_TESTS, words=words, source=dialysis))
    closed_by_kind = {
        "none": (_EVERYTHING, "No sign of heart failure, and the ejection fraction is not low."),
        "high-output": (frozenset({"therapy", "dose"}), "High-output heart failure: the usual therapies do not apply."),
        "right-sided": (
            frozenset({"therapy", "dose"}),
            "Right-sided heart failure alone: the usual therapies do not apply.",
        ),
    }
    closed = closed_by_kind.get(phenotype.kind)
    if closed is not None:
        gates.append(Gate(id=phenotype.kind, closes=closed[0], words=closed[1]))
    return tuple(gates)


def _present(record: PatientRecord, concepts: frozenset[str]) -> str | None:
    """The resource that says one of `concepts`: an active problem, or a procedure or device whenever done."""
    problems = has_concept(record.problems, concepts)
    if problems:
        return problems[0].source
    return next(
        (
            item.source
            for item in record.procedures_devices
            if item.is_active and not concepts.isdisjoint(item.concepts)
        ),
        None,
    )


def _lvad(record: PatientRecord, tables: ClinicalTables) -> str | None:
    """An assist device that was not taken out after it was put in."""
    groups = tables.concepts
    removals = [
        i.done.latest for i in record.procedures_devices if i.done and not groups.lvad_removal.isdisjoint(i.concepts)
    ]
    last_removal = max(removals, default=None)
    for item in record.procedures_devices:
        if item.is_active and not groups.lvad.isdisjoint(item.concepts):
            is_gone = last_removal is not None and item.done is not None and item.done.latest <= last_removal
            if not is_gone:
                return item.source
    problems = has_concept(record.problems, groups.lvad)
    return problems[0].source if problems else None


def _dialysis(record: PatientRecord, tables: ClinicalTables, today: date) -> str | None:
    """Dependence or end-stage disease on the problem list, or a recent session; none after a kidney transplant."""
    groups = tables.concepts
    transplants = [
        i.done.latest
        for i in record.procedures_devices
        if i.done and not groups.kidney_transplant.isdisjoint(i.concepts)
    ]
    last_transplant = max(transplants, default=None)

    def is_before_transplant(day: date | None) -> bool:
        return last_transplant is not None and (day is None or day <= last_transplant)

    for problem in has_concept(record.problems, groups.dialysis):
        if not is_before_transplant(problem.dated.latest if problem.dated else None):
            return problem.source
    for item in record.procedures_devices:
        if groups.dialysis_procedure.isdisjoint(item.concepts) or item.done is None:
            continue
        is_recent = (today - item.done.latest).days <= tables.phenotype.dialysis_procedure_days
        if is_recent and not is_before_transplant(item.done.latest):
            return item.source
    return None


def concepts_present(situation: Situation) -> frozenset[str]:
    """All concept slugs active now: problems, procedures and devices, and the gates by their ids."""
    return situation.once("concepts", lambda: _concepts(situation))


def _concepts(situation: Situation) -> frozenset[str]:
    record = situation.record
    return frozenset(
        {concept for problem in record.problems if problem.is_active for concept in problem.concepts}
        | {concept for item in record.procedures_devices if item.is_active for concept in item.concepts}
        | {gate.id for gate in situation.gates}
    )
