"""Frozen types of the clinical tables. `cds.content` fills them; rules read them; nothing here holds a number."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

from cds.clinical.findings import Action
from cds.clinical.safety_tables import SafetyTables
from cds.clinical.table_parts import Basis as Basis
from cds.clinical.table_parts import Effect as Effect
from cds.clinical.table_parts import PhenotypeKind as PhenotypeKind
from cds.clinical.table_parts import Sign as Sign


@dataclass(frozen=True, slots=True, kw_only=True)
class Recommendation:
    """One row of the recommendation table: class and level as the source prints them, None where it grades nothing."""

    id: str
    words: str
    grade: str | None  # class of recommendation: "1", "2a", ...
    level: str | None
    basis: Basis


@dataclass(frozen=True, slots=True, kw_only=True)
class Indication:
    """A drug class in a phenotype: what its absence opens, by which recommendation. Rows stand in order of use."""

    rule: str
    phenotypes: tuple[PhenotypeKind, ...]
    action: Action  # "start" or "review"
    recommendation: str
    lvef_at_most_percent: float | None = None
    needs_nyha: tuple[int, ...] = ()  # empty: any class, recorded or not
    or_withdrawn: bool = False  # a course that ended stands in for the class


@dataclass(frozen=True, slots=True, kw_only=True)
class Candidate:
    """A drug a start rule may propose, in order of preference. Its own recommendation beats the indication's."""

    rule: str
    drug: str
    drug_class: str
    phenotypes: tuple[PhenotypeKind, ...]
    recommendation: str | None = None
    needs_nyha: tuple[int, ...] = ()
    regions: tuple[str, ...] = ()  # empty: everywhere
    basis: Basis


@dataclass(frozen=True, slots=True, kw_only=True)
class Limit:
    """A threshold on a measurement that stands against starting a drug: `analyte sign value` has `effect`.

    `also_value` and `also_unit` give the limit as printed in the other unit; the unit of the report decides.
    `drugs` narrows the row to some members of the classes; `sex` to one sex; `unless` names concepts that lift it.
    A block with `repeat_within_days` asks for the value to be measured again.
    """

    id: str
    drug_classes: tuple[str, ...]
    analyte: str
    sign: Sign
    value: float
    unit: str
    effect: Effect
    basis: Basis
    drugs: tuple[str, ...] = ()
    not_drugs: tuple[str, ...] = ()
    also_value: float | None = None
    also_unit: str | None = None
    sex: Literal["male", "female"] | None = None
    phenotypes: tuple[str, ...] = ()
    unless: tuple[str, ...] = ()
    repeat_within_days: int | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Barrier:
    """A recorded fact (problem, procedure, device, gate) that stands against starting a drug.

    `concepts`: any of them present is enough. `history` counts resolved ones too. `within_days` looks back only so
    far; `older` is then the effect of an older one. `stops` says a running course must end for it as well. The effect
    "missing" says that `words` name what must be known first. With `hints` a problem that may be one of `concepts` asks
    for a review.
    """

    id: str
    drug_classes: tuple[str, ...]
    concepts: tuple[str, ...]
    effect: Effect
    words: str
    basis: Basis
    drugs: tuple[str, ...] = ()
    not_drugs: tuple[str, ...] = ()
    unless: tuple[str, ...] = ()
    history: bool = False
    within_days: int | None = None
    older: Effect | None = None
    stops: bool = False
    refer: bool = False
    hints: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class DrugBarrier:
    """A drug or class already active that stands against starting another."""

    id: str
    drug_classes: tuple[str, ...]
    effect: Effect
    words: str
    basis: Basis
    at_least_daily_mg: Mapping[str, float]  # empty: at any dose
    active_classes: tuple[str, ...] = ()
    drugs: tuple[str, ...] = ()
    active_drugs: tuple[str, ...] = ()
    route: str | None = None
    ended_within_hours: float | None = None
    started_within_days: int | None = None  # only where the other drug was begun or changed so recently
    only_for_raise: bool = False
    needs_concepts: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class Needed:
    """A measurement that must be known and fresh before a class is started; `test` is what to order for it."""

    drug_classes: tuple[str, ...]
    analytes: tuple[str, ...]  # any one of them satisfies
    test: str
    within_days: int
    basis: Basis
    unstable_within_days: int | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Unstable:
    """What makes a measurement go stale sooner: a limit on the last value, or a recent problem."""

    basis: Basis
    analyte: str | None = None
    sign: Sign | None = None
    value: float | None = None
    unit: str | None = None
    concepts: tuple[str, ...] = ()
    within_days: int | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class ReactionReach:
    """How far a recorded reaction to one drug reaches: to whom, with which effect."""

    reaches: tuple[str, ...]  # classes it stands against besides the named drug
    effect: Effect
    words: str
    basis: Basis
    reactions: tuple[str, ...] = ()  # empty: none recorded
    to_classes: tuple[str, ...] = ()  # classes of the drug that caused it; empty: any


@dataclass(frozen=True, slots=True, kw_only=True)
class DoseRow:
    """Start and target of a drug in a stratum. The first row whose conditions hold is used.

    Frequencies are times a day; every other day is 0.5. `names` maps milligrams to the tablet's usual name.
    """

    id: str
    drug: str
    drug_class: str
    start_dose_mg: float
    start_times_per_day: float
    target_dose_mg: float
    target_times_per_day: float
    target_daily_mg: float
    steps_mg: tuple[float, ...]
    min_interval_days: int
    basis: Basis
    egfr_above: float | None = None
    egfr_from: float | None = None
    weight_above_kg: float | None = None
    nyha: tuple[int, ...] = ()
    regions: tuple[str, ...] = ()
    start_kind: Literal["low", "standard"] | None = None  # ARNI: by what was taken before
    start_up_to_mg: float | None = None  # the top of the printed range of start doses
    names: Mapping[str, str]


@dataclass(frozen=True, slots=True, kw_only=True)
class ScheduledCheck:
    """A test wanted after a start, an increase, or again and again. Days count from the trigger.

    For "steady" they count from the last valid result (or the trigger, where no early check precedes it).
    """

    id: str
    rule: str
    drug_classes: tuple[str, ...]
    trigger: Literal["start", "increase", "steady"]
    tests: tuple[str, ...]
    opens_after_days: int
    due_after_days: int
    grace_days: int
    basis: Basis


@dataclass(frozen=True, slots=True, kw_only=True)
class DrugClass:
    """A class as the rules see it: the pillar it closes, and which members close it (empty: all)."""

    slug: str
    name: str  # "ACE inhibitor"
    plural: str
    pillar: str | None
    closing_drugs: tuple[str, ...] = ()
    closing_regions: Mapping[str, tuple[str, ...]]  # members that close it in one region only


@dataclass(frozen=True, slots=True, kw_only=True)
class PhenotypeLimits:
    """The ejection-fraction classes and the windows around them (therapy of heart failure)."""

    reduced_at_most_percent: float
    preserved_from_percent: float
    stage_b_below_percent: float
    improved_rise_points: float
    lvef_fresh_days: int
    nyha_fresh_days: int
    admission_days: int
    adult_from_years: int
    dialysis_procedure_days: int
    ended_reason_days: int
    nt_probnp_raised_pg_ml: float
    bnp_raised_pg_ml: float
    basis: Basis


@dataclass(frozen=True, slots=True, kw_only=True)
class ConceptGroups:
    """Which concepts make a gate. Each value is a set of concept slugs."""

    heart_failure: frozenset[str]
    high_output: frozenset[str]
    isolated_right: frozenset[str]
    stage_b: frozenset[str]
    transplant: frozenset[str]
    lvad: frozenset[str]
    lvad_removal: frozenset[str]
    hospice: frozenset[str]
    dialysis: frozenset[str]
    dialysis_procedure: frozenset[str]
    kidney_transplant: frozenset[str]
    amyloidosis: frozenset[str]
    obstructive_hcm: frozenset[str]
    congenital: frozenset[str]
    pacemaker: frozenset[str]
    adverse_reasons: frozenset[str]
    heart_failure_only: frozenset[str]


@dataclass(frozen=True, slots=True, kw_only=True)
class SupplyLimits:
    """When an active order nobody ended is called stale."""

    past_supply_days: int
    without_supply_days: int
    correction_days: int
    hold_restart_days: int
    parenteral_episode_days: int
    parenteral_episode_classes: tuple[str, ...]  # given into the vein these are episodes, not home therapy
    basis: Basis


@dataclass(frozen=True, slots=True, kw_only=True)
class ClinicalTables:
    """Everything the rules read. `region` picks region-bound rows."""

    region: str
    classes: Mapping[str, DrugClass]
    recommendations: Mapping[str, Recommendation]
    indications: tuple[Indication, ...]
    candidates: tuple[Candidate, ...]
    limits: tuple[Limit, ...]
    barriers: tuple[Barrier, ...]
    drug_barriers: tuple[DrugBarrier, ...]
    needed: tuple[Needed, ...]
    unstable: tuple[Unstable, ...]
    optional_within_days: int
    reactions: tuple[ReactionReach, ...]
    doses: tuple[DoseRow, ...]
    checks: tuple[ScheduledCheck, ...]
    phenotype: PhenotypeLimits
    concepts: ConceptGroups
    supply: SupplyLimits
    safety: SafetyTables
    analyte_names: Mapping[str, str]
    unit_names: Mapping[str, str]
