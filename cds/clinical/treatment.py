"""What today's values mean for the dose of a running drug: no raise, review, lower or stop; and the rise of creatinine."""

from __future__ import annotations

from dataclasses import dataclass

from cds.clinical import units
from cds.clinical.findings import Evidence
from cds.clinical.readings import Reading, days_old, reading_of, say_value, show, show_limit, usable
from cds.clinical.record import DrugCourse, Measurement
from cds.clinical.safety_tables import DoseEffect, TreatmentLimit
from cds.clinical.situation import Situation, concepts_present
from cds.clinical.units import round_half_up

EFFECTS: tuple[DoseEffect, ...] = ("stop", "lower", "review", "no-raise")
_SIGNS = {"<": "below", "<=": "at or below", ">": "above", ">=": "at or above"}


@dataclass(frozen=True, slots=True, kw_only=True)
class Verdict:
    """One limit that holds for a course today."""

    row: TreatmentLimit
    words: str
    evidence: tuple[Evidence, ...]
    short: str  # for a headline: "potassium 5.8 mmol/L"


@dataclass(frozen=True, slots=True, kw_only=True)
class Rise:
    """The rise of creatinine since before the last start or increase, in percent, rounded to 0.1."""

    percent: float
    now: Reading
    before: Reading


def verdicts(situation: Situation, course: DrugCourse) -> tuple[Verdict, ...]:
    """Every treatment limit that holds for the course, the strongest effect first.

    Only values of the last days of the table count: an old value changes no dose.
    """
    if course.state not in ("active", "unclear"):
        return ()
    return situation.once(("verdicts", course.drug, course.sources), lambda: _verdicts(situation, course))


def _verdicts(situation: Situation, course: DrugCourse) -> tuple[Verdict, ...]:
    present = concepts_present(situation)
    taken = {c.drug_class for c in situation.courses if c.state in ("active", "unclear")}
    rise = creatinine_rise(situation, course)
    found = []
    for row in situation.tables.safety.treatment_limits:
        if course.drug_class not in row.drug_classes or (row.drugs and course.drug not in row.drugs):
            continue
        if not present.isdisjoint(row.unless) or (row.phenotypes and situation.phenotype.kind not in row.phenotypes):
            continue
        if row.beside_classes and taken.isdisjoint(row.beside_classes):
            continue
        verdict = _rise_verdict(row, rise, situation) if row.is_rise_percent else _value_verdict(situation, row)
        if verdict is not None:
            found.append(verdict)
    return tuple(sorted(found, key=lambda v: EFFECTS.index(v.row.effect)))


def creatinine_rise(situation: Situation, course: DrugCourse) -> Rise | None:
    """The rise since the last value before the course's last start or increase; None without both values or a date."""
    begun = course.changed if course.changed_by in ("start", "increase") else course.started
    if begun is None or not begun.is_day:
        return None
    limits = situation.tables.safety.limits
    measured = [m for m in usable(situation.record, "creatinine") if m.comparator is None and m.taken.is_day]
    after = [m for m in measured if m.taken.latest > begun.latest]
    before = [m for m in measured if 0 <= (begun.latest - m.taken.latest).days <= limits.baseline_within_days]
    if not after or not before or days_old(after[0].taken, situation.today) > limits.value_counts_days:
        return None
    now, base = after[0], before[0]
    percent = round_half_up((_umol(now) - _umol(base)) / _umol(base) * 100, 1)
    return Rise(percent=percent, now=reading_of(now), before=reading_of(base))


def recently_stopping(situation: Situation, course: DrugCourse) -> Reading | None:
    """A value of the last days, not the newest, at which the course would have had to stop: a raise is weighed first.

    Of a second value within days (`again_within_days`) and of a rise only today counts.
    """
    limits = situation.tables.safety.limits
    present = concepts_present(situation)
    for row in situation.tables.safety.treatment_limits:
        if row.effect != "stop" or row.is_rise_percent or row.again_within_days is not None:
            continue
        if course.drug_class not in row.drug_classes or not present.isdisjoint(row.unless):
            continue
        for measurement in usable(situation.record, row.analyte):
            reading = reading_of(measurement)
            is_recent = days_old(measurement.taken, situation.today) <= limits.value_counts_days
            if is_recent and row.unit in reading.by_unit and reading.holds(row.sign, row.value, row.unit):
                return reading
    return None


def fresh_readings(situation: Situation, analyte: str) -> tuple[Reading, ...]:
    """The newest day's readings if they are recent enough to change a dose."""
    days = situation.tables.safety.limits.value_counts_days
    return tuple(r for r in situation.readings(analyte) if days_old(r.taken, situation.today) <= days)


def _umol(measurement: Measurement) -> float:
    return units.convert("creatinine", measurement.reported_value, measurement.reported_unit, "umol/L")


def _value_verdict(situation: Situation, row: TreatmentLimit) -> Verdict | None:
    for reading in fresh_readings(situation, row.analyte):
        value, unit = (row.also_value, row.also_unit) if row.also_unit == reading.unit else (row.value, row.unit)
        if value is None or unit is None or unit not in reading.by_unit or not reading.holds(row.sign, value, unit):
            continue
        evidence = [reading.evidence("limits")]
        name = situation.tables.unit_names.get(unit, unit)
        words = f"{say_value(reading, situation.tables)} is {_SIGNS[row.sign]} {show_limit(row.analyte, value, unit)} {name}"
        if row.again_within_days is not None:
            earlier = _held_before(situation, row, reading)
            if earlier is None:
                return None
            evidence.append(earlier.evidence("limits"))
            words += f", as it was on {earlier.taken}"
        shown = situation.tables.analyte_names.get(row.analyte, row.analyte)
        short = f"{shown} {reading.shown} {situation.tables.unit_names.get(reading.unit, reading.unit)}"
        return Verdict(row=row, words=words, evidence=tuple(evidence), short=short.strip())
    return None


def _held_before(situation: Situation, row: TreatmentLimit, newest: Reading) -> Reading | None:
    """An earlier day's reading, recent enough, for which the limit held as well."""
    for measurement in usable(situation.record, row.analyte):
        if 0 < (newest.taken.latest - measurement.taken.latest).days <= (row.again_within_days or 0):
            reading = reading_of(measurement)
            if row.unit in reading.by_unit and reading.holds(row.sign, row.value, row.unit):
                return reading
    return None


def _rise_verdict(row: TreatmentLimit, rise: Rise | None, situation: Situation) -> Verdict | None:
    if rise is None:
        return None
    holds = {">": rise.percent > row.value, ">=": rise.percent >= row.value}[
        row.sign
    ]  # rises are printed with these two
    if not holds:
        return None
    words = (
        f"{say_value(rise.now, situation.tables)}, {show(rise.percent)} % above {rise.before.shown} on {rise.before.taken} "
        f"before the last start or increase, is {_SIGNS[row.sign]} {show(row.value)} %"
    )
    evidence = (rise.now.evidence("limits"), rise.before.evidence("supports"))
    return Verdict(row=row, words=words, evidence=evidence, short=f"creatinine up by {show(rise.percent)} %")
