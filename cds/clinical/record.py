"""One patient's facts, cleaned and frozen. Built in `cds.fhir`, read by every rule.

Everything doubtful (unknown units, unknown codes, wrong statuses) was settled before it got here. A
`PartialDate` of None means the sender gave no date. Measurements, problems and the rest stand newest
first; `source` is always "ResourceType/id", what a card cites.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from datetime import date, datetime
from typing import Literal

from cds.clinical.timeline import PartialDate

Comparator = Literal["<", "<=", ">=", ">"]
Sex = Literal["male", "female", "other", "unknown"]
EntryKind = Literal["order", "statement", "dispense", "administration"]
EntryStatus = Literal["active", "on-hold", "completed", "stopped", "planned", "unknown"]
CourseState = Literal["active", "paused", "ended", "planned", "unclear"]
Route = Literal["oral", "parenteral", "transdermal", "other"]
MatchedBy = Literal["product-code", "form-code", "ingredient-code", "atc", "snomed", "site", "text"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Measurement:
    """One observed value in its analyte's canonical unit (see `units.CANONICAL_UNIT`).

    A value reported in the canonical unit (or one of factor 1) stands as reported; a converted one is rounded
    once, half up, to its analyte's precision. `value` of a range is its midpoint, with `low` and `high`.
    `rank` orders codes of one analyte: 0 preferred, 1 accepted, 2 only when nothing better was measured that day.
    """

    analyte: str
    value: float
    unit: str
    reported_value: float
    reported_unit: str
    taken: PartialDate
    source: str
    comparator: Comparator | None = None
    low: float | None = None
    high: float | None = None
    note: str | None = None
    rank: int = 1
    method: str | None = None  # eGFR: "mdrd", "ckd-epi-2021", ... where the code says
    is_preliminary: bool = False
    is_haemolysed: bool = False
    encounter: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class DoseLine:
    """One line of a dosage: what it gives a day, and when it holds.

    `daily_mg` is None where it cannot be known, and `note` says why; otherwise `note` says how it was derived.
    `times` are the named times of day ("MORN", "08:00"); lines with different times add up. `starts` and `ends`
    are the line's own bounds, counted from the order's date where the sender gave only a length.
    """

    daily_mg: float | None
    note: str
    max_daily_mg: float | None = None
    other: str | None = None  # an amount a day that is not in mg, as text: "40 meq"
    is_as_needed: bool = False
    is_from_text: bool = False
    times: tuple[str, ...] = ()
    sequence: int | None = None
    starts: PartialDate | None = None
    ends: PartialDate | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class MedicationEntry:
    """One ingredient of one medication resource. A fixed combination gives several, each with `part_of`.

    `starts` is when the therapy begins by this resource (effective period, bounds, else authoredOn);
    `ends` when it ends, where the sender says so. `supply_days` counts one fill, `refills` the repeats.
    """

    source: str
    kind: EntryKind
    drug: str
    drug_class: str | None
    matched_by: MatchedBy
    status: EntryStatus
    possible_classes: tuple[str, ...] = ()
    part_of: str | None = None
    route: Route | None = None
    authored: PartialDate | None = None
    starts: PartialDate | None = None
    ends: PartialDate | None = None
    supply_days: float | None = None
    refills: int = 0
    lines: tuple[DoseLine, ...] = ()
    reasons: tuple[str, ...] = ()  # concept slugs and texts of statusReason / reasonCode for the status
    replaces: str | None = None  # priorPrescription
    based_on: str | None = None  # a dispense's or administration's order
    last_updated: datetime | None = None
    is_patient_reported: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class DoseStep:
    """A total daily dose and the day it began to hold."""

    daily_mg: float | None
    since: PartialDate | None
    source: str
    reasons: tuple[str, ...] = ()  # why its order was ended or held, as concept slugs


@dataclass(frozen=True, slots=True, kw_only=True)
class DrugCourse:
    """One drug over time, built from all its entries (`courses.build_courses`).

    `started` is the first evidence of exposure of the current run; `changed` the start of the run at the
    current total daily dose, None where undated. `changed_by` says whether that was a start, an increase or a decrease.
    `history` holds the dose steps of the current run, oldest first.
    """

    drug: str
    drug_class: str | None
    state: CourseState
    matched_by: MatchedBy
    sources: tuple[str, ...]
    possible_classes: tuple[str, ...] = ()
    part_of: str | None = None
    route: Route | None = None
    daily_dose_mg: float | None = None
    max_daily_dose_mg: float | None = None
    daily_dose_other: str | None = None
    dose_note: str = ""
    ordered: PartialDate | None = None  # the newest order's own date
    started: PartialDate | None = None
    changed: PartialDate | None = None
    changed_by: Literal["start", "increase", "decrease"] | None = None
    ended: PartialDate | None = None
    as_needed: bool = False
    stale: bool = False
    is_episode: bool = False  # given into the vein beside the therapy by mouth: over soon, whatever its status says
    reasons: tuple[str, ...] = ()
    history: tuple[DoseStep, ...] = ()
    notes: tuple[CourseNote, ...] = ()

    @property
    def source(self) -> str:
        """The newest resource of the course."""
        return self.sources[0]


@dataclass(frozen=True, slots=True, kw_only=True)
class CourseNote:
    """Something about a course the reader must know: becomes an issue of the record."""

    source: str
    path: str
    problem: str
    fix: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Problem:
    """A condition. `concepts` are the slugs it counts as; `weak_concepts` those it only hints at."""

    concepts: tuple[str, ...]
    source: str
    clinical_status: str  # FHIR: active, recurrence, relapse, inactive, remission, resolved, unknown
    verification: str  # FHIR: confirmed, provisional, differential, unconfirmed, unknown
    display: str
    matched_by: str
    weak_concepts: tuple[str, ...] = ()
    excluded_concepts: tuple[str, ...] = ()  # matched with a role that says "not this one"
    onset: PartialDate | None = None
    recorded: PartialDate | None = None
    abated: PartialDate | None = None

    @property
    def is_active(self) -> bool:
        """True while the sender calls it active (recurrence and relapse are) or says nothing else."""
        return self.clinical_status in {"active", "recurrence", "relapse", "unknown"} and self.abated is None

    @property
    def dated(self) -> PartialDate | None:
        return self.onset if self.onset is not None else self.recorded


@dataclass(frozen=True, slots=True, kw_only=True)
class Intolerance:
    """An allergy or intolerance to drugs or classes we use, with the reactions recorded (concept slugs)."""

    drugs: tuple[str, ...]
    drug_classes: tuple[str, ...]
    kind: Literal["allergy", "intolerance", "unspecified"]
    reactions: tuple[str, ...]
    status: Literal["active", "inactive", "resolved"]
    source: str
    display: str
    matched_by: str
    criticality: str | None = None
    verification: str = "unknown"
    recorded: PartialDate | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class ProcedureOrDevice:
    """A procedure done or a device present, by concept slug (`icd-implant`, `pacemaker-device` ...)."""

    concepts: tuple[str, ...]
    kind: Literal["procedure", "device"]
    source: str
    display: str
    matched_by: str
    weak_concepts: tuple[str, ...] = ()
    done: PartialDate | None = None
    ended: PartialDate | None = None
    is_active: bool = True


@dataclass(frozen=True, slots=True, kw_only=True)
class EncounterFact:
    """A contact or stay: `encounter_class` is inpatient, emergency, outpatient or other."""

    encounter_class: Literal["inpatient", "emergency", "outpatient", "other"]
    source: str
    status: str
    starts: PartialDate | None = None
    ends: PartialDate | None = None
    reasons: tuple[str, ...] = ()  # concept slugs


@dataclass(frozen=True, slots=True, kw_only=True)
class TestOrder:
    """An active order for a test: the analytes it asks for."""

    analytes: tuple[str, ...]
    source: str
    ordered: PartialDate | None = None
    planned: PartialDate | None = None
    is_draft: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class OtherMedicine:
    """A medicine that is no course: not systemic, of no class we use, or not read. `reason` says which.

    `is_unread` is True where nobody can say what it is: refused, or in no table.
    """

    display: str
    reason: str
    source: str
    status: str
    dated: PartialDate | None = None
    is_unread: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class PatientRecord:
    """All facts of one patient that the rules may use."""

    patient: str
    sex: Sex = "unknown"
    born: PartialDate | None = None
    is_deceased: bool = False
    died: PartialDate | None = None
    medications: tuple[MedicationEntry, ...] = ()
    measurements: tuple[Measurement, ...] = ()
    problems: tuple[Problem, ...] = ()
    intolerances: tuple[Intolerance, ...] = ()
    procedures_devices: tuple[ProcedureOrDevice, ...] = ()
    encounters: tuple[EncounterFact, ...] = ()
    tests_ordered: tuple[TestOrder, ...] = ()
    other_medicines: tuple[OtherMedicine, ...] = ()

    def known_on(self, as_of: datetime) -> PatientRecord:
        """The record without anything dated after `as_of`; later ends and abatements are not known either."""

        def known(when: PartialDate | None) -> bool:
            return when is None or when.is_known_by(as_of)

        def past(when: PartialDate | None) -> PartialDate | None:
            return when if known(when) else None

        problems = tuple(
            problem if known(problem.abated) else replace(problem, abated=None, clinical_status="active")
            for problem in self.problems
            if known(problem.onset) and known(problem.recorded)
        )
        died = self.died
        return replace(
            self,
            is_deceased=self.is_deceased and known(died),
            died=past(died),
            medications=tuple(entry for entry in self.medications if known(_first_dated(entry))),
            measurements=tuple(m for m in self.measurements if m.taken.is_known_by(as_of)),
            problems=problems,
            intolerances=tuple(i for i in self.intolerances if known(i.recorded)),
            procedures_devices=tuple(
                item if known(item.ended) else replace(item, ended=None, is_active=True)
                for item in self.procedures_devices
                if known(item.done)
            ),
            encounters=tuple(
                stay if known(stay.ends) else replace(stay, ends=None) for stay in self.encounters if known(stay.starts)
            ),
            other_medicines=tuple(m for m in self.other_medicines if known(m.dated)),
            tests_ordered=tuple(order for order in self.tests_ordered if known(order.ordered)),
        )

    def age_years_on(self, day: date) -> tuple[int, int] | None:
        """Fewest and most completed years on `day`; None without a birth date."""
        if self.born is None:
            return None
        return _completed_years(self.born.latest, day), _completed_years(self.born.earliest, day)


def _first_dated(entry: MedicationEntry) -> PartialDate | None:
    """When the resource came to exist: authored, else the start it states."""
    return entry.authored if entry.authored is not None else entry.starts


def _completed_years(born: date, day: date) -> int:
    return day.year - born.year - ((day.month, day.day) < (born.month, born.day))
