"""Frozen types of the safety tables: drugs to avoid, combinations, limits under treatment, values out of range."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from cds.clinical.findings import Severity
from cds.clinical.table_parts import Basis, PhenotypeKind, Sign

DoseEffect = Literal["no-raise", "review", "lower", "stop"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Harm:
    """A drug or class that does harm in some kinds of heart failure. All conditions given must hold.

    `grade` and `level` as the source prints them. Without `drugs` the whole of `drug_classes` is meant, but `not_drugs`.
    """

    id: str
    words: str
    severity: Severity
    action: Literal["stop", "review"]
    phenotypes: tuple[PhenotypeKind, ...]
    basis: Basis
    grade: str | None = None
    level: str | None = None
    drug_classes: tuple[str, ...] = ()
    drugs: tuple[str, ...] = ()
    not_drugs: tuple[str, ...] = ()
    lvef_below_percent: float | None = None
    needs_nyha: tuple[int, ...] = ()
    needs_concepts: tuple[str, ...] = ()  # any of them, gates included
    unless: tuple[str, ...] = ()
    egfr_below: float | None = None
    daily_mg_above: float | None = None
    admission_within_days: int | None = None
    age_above_years: int | None = None
    as_needed_too: bool = True


@dataclass(frozen=True, slots=True, kw_only=True)
class Interaction:
    """Two drugs (or a third as well) that must not meet, or only with care. `cause` is the side to act on.

    `ended_within_hours`: an ended course of either side counts for so long. `milder_when_potassium_below` lowers the
    severity to caution. `test_from_days` and `test_within_days` ask for potassium and creatinine after the meeting.
    `either_may_end`: where the other side is recorded as not tolerated, that is the one to act on.
    """

    id: str
    words: str
    severity: Severity
    action: Literal["stop", "review"]
    cause: Literal["one", "other"]
    basis: Basis
    grade: str | None = None
    level: str | None = None
    one_classes: tuple[str, ...] = ()
    one_drugs: tuple[str, ...] = ()
    other_classes: tuple[str, ...] = ()
    other_drugs: tuple[str, ...] = ()
    third_classes: tuple[str, ...] = ()
    third_drugs: tuple[str, ...] = ()
    needs_concepts: tuple[str, ...] = ()
    or_egfr_below: float | None = None
    ended_within_hours: float | None = None
    milder_when_potassium_below: float | None = None
    test_from_days: int | None = None
    test_within_days: int | None = None
    either_may_end: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class TreatmentLimit:
    """A limit on a value under a running drug: `analyte sign value` has `effect` on the drug's dose.

    `is_rise_percent`: the value is the rise in percent since before the last start or increase. `again_within_days`: a
    second value on another day, so recent, must hold as well. `beside_classes`: only while one of these is taken too.
    """

    id: str
    drug_classes: tuple[str, ...]
    analyte: str
    sign: Sign
    value: float
    unit: str
    effect: DoseEffect
    basis: Basis
    drugs: tuple[str, ...] = ()
    also_value: float | None = None
    also_unit: str | None = None
    is_rise_percent: bool = False
    again_within_days: int | None = None
    phenotypes: tuple[PhenotypeKind, ...] = ()
    beside_classes: tuple[str, ...] = ()
    unless: tuple[str, ...] = ()
    recheck_from_days: int | None = None
    recheck_within_days: int | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class OutOfRange:
    """A value that asks for attention by itself. Rows of an analyte stand from the worst to the mildest."""

    id: str
    analyte: str
    sign: Sign
    value: float
    unit: str
    severity: Severity
    words: str
    basis: Basis
    under_classes: tuple[str, ...] = ()  # only under one of these classes; empty: always
    unless: tuple[str, ...] = ()
    repeat_within_days: int | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class SafetyLimits:
    """How long values count for dose changes, and where a creatinine baseline is looked for."""

    value_counts_days: int
    baseline_within_days: int
    tolerance_within_days: int
    rise_from_percent: float
    basis: Basis


@dataclass(frozen=True, slots=True, kw_only=True)
class SwitchStart:
    """Which dose of ACE inhibitor or ARB counts as enough for the higher start of an ARNI (total daily mg)."""

    drug: str
    at_least_daily_mg: float | None
    above_daily_mg: float | None
    basis: Basis


@dataclass(frozen=True, slots=True, kw_only=True)
class SwitchLimits:
    """When the higher start dose of an ARNI may be used at all."""

    systolic_above_mmhg: float
    egfr_from: float
    age_below_years: int
    washout_hours: float
    basis: Basis


@dataclass(frozen=True, slots=True, kw_only=True)
class SafetyTables:
    """Everything the safety and dose rules read."""

    harms: tuple[Harm, ...]
    interactions: tuple[Interaction, ...]
    treatment_limits: tuple[TreatmentLimit, ...]
    out_of_range: tuple[OutOfRange, ...]
    limits: SafetyLimits
    switch_starts: tuple[SwitchStart, ...]
    switch: SwitchLimits
