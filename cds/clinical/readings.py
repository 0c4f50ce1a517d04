"""Values as limits see them: bounds, three-valued comparison, and the newest day's values of an analyte."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from datetime import date
from decimal import Decimal
from math import inf

from cds.clinical import units
from cds.clinical.findings import Evidence, Role
from cds.clinical.record import Measurement, PatientRecord
from cds.clinical.tables import ClinicalTables, Sign
from cds.clinical.timeline import PartialDate


@dataclass(frozen=True, slots=True)
class Bounds:
    """Where a true value lies. A plain value has `low == high`; a comparator leaves one side open."""

    low: float
    high: float
    is_low_open: bool = False
    is_high_open: bool = False

    def holds(self, sign: Sign, threshold: float) -> bool | None:
        """Say whether `value sign threshold` is true; None where the bounds leave it open."""
        if sign == ">":
            return self._above(threshold)
        if sign == ">=":
            return self._at_least(threshold)
        below = self._at_least(threshold) if sign == "<" else self._above(threshold)
        return None if below is None else not below

    def _above(self, threshold: float) -> bool | None:
        if self.low > threshold or (self.low == threshold and self.is_low_open):
            return True
        return False if self.high <= threshold else None

    def _at_least(self, threshold: float) -> bool | None:
        if self.low >= threshold:
            return True
        if self.high < threshold or (self.high == threshold and self.is_high_open):
            return False
        return None


@dataclass(frozen=True, slots=True, kw_only=True)
class Reading:
    """One value a limit may be held against: measured, or computed from one that was.

    `by_unit` holds the bounds in every unit the analyte's limits may be printed in; `shown` and `unit` are what a
    card shows (the reported value, or the computed one).
    """

    analyte: str
    taken: PartialDate
    by_unit: dict[str, Bounds]
    shown: str
    shown_value: float
    unit: str
    source: str
    note: str | None = None
    is_computed: bool = False
    is_plain: bool = True  # one number, without comparator or range

    def holds(self, sign: Sign, value: float, unit: str) -> bool | None:
        """Compare in `unit`, which must be one the analyte is known in."""
        return self.by_unit[unit].holds(sign, value)

    def evidence(self, role: Role, name: str | None = None) -> Evidence:
        return Evidence(
            what=name or (f"{self.analyte} (computed)" if self.is_computed else self.analyte),
            role=role,
            resource=self.source,
            value=self.shown_value if self.is_plain else self.shown,
            unit=self.unit,
            date=str(self.taken),
        )


def show(value: float) -> str:
    """A number without a needless tail: 4.0 is "4", 87.3 is "87.3"; never in powers of ten."""
    text = format(Decimal(repr(value)), "f")
    return text.rstrip("0").rstrip(".") if "." in text else text


def reading_of(measurement: Measurement) -> Reading:
    """The measurement as bounds in its canonical and its reported unit."""
    by_unit = {measurement.unit: _bounds(measurement, measurement.value, measurement.low, measurement.high)}
    reported = measurement.reported_unit
    is_range = measurement.low is not None and measurement.high is not None
    if is_range and not units.is_same_scale(measurement.analyte, measurement.unit, reported):
        reported = measurement.unit  # the ends of a range are kept in the canonical unit only
    elif reported != measurement.unit and units.is_known(measurement.analyte, reported):
        by_unit[reported] = _bounds(
            measurement,
            units.as_reported(measurement.analyte, measurement.reported_value, reported),
            measurement.low,
            measurement.high,
        )
    sent = measurement.reported_value if reported == measurement.reported_unit else measurement.value
    shown_value = units.as_reported(measurement.analyte, sent, reported)
    shown = units.shown(measurement.analyte, sent, reported)
    if measurement.low is not None and measurement.high is not None:
        shown = f"{show(measurement.low)}-{show(measurement.high)}"
    return Reading(
        analyte=measurement.analyte,
        taken=measurement.taken,
        by_unit=by_unit,
        shown=f"{measurement.comparator or ''}{shown}",
        shown_value=shown_value,
        unit=reported,
        source=measurement.source,
        note=measurement.note,
        is_plain=measurement.comparator is None and measurement.low is None,
    )


def _bounds(measurement: Measurement, value: float, low: float | None, high: float | None) -> Bounds:
    if low is not None and high is not None:
        return Bounds(low, high)
    match measurement.comparator:
        case "<":
            return Bounds(-inf, value, is_high_open=True)
        case "<=":
            return Bounds(-inf, value)
        case ">":
            return Bounds(value, inf, is_low_open=True)
        case ">=":
            return Bounds(value, inf)
        case None:
            return Bounds(value, value)


def usable(record: PatientRecord, analyte: str) -> tuple[Measurement, ...]:
    """Values of `analyte` that may be acted on, newest first; a haemolysed sample is none (ruling 41)."""
    return tuple(m for m in record.measurements if m.analyte == analyte and not m.is_haemolysed)


def of_newest_day(measurements: Iterable[Measurement]) -> tuple[Measurement, ...]:
    """The values of the newest day, only those of the best rank that day; empty if there are none."""
    found = list(measurements)
    if not found:
        return ()
    newest = max(m.taken.latest for m in found)
    same_day = [m for m in found if m.taken.latest == newest]
    best = min(m.rank for m in same_day)
    return tuple(m for m in same_day if m.rank == best)


def days_old(taken: PartialDate, today: date) -> int:
    """Age in days at the most: a date known only to the month is as old as its first day."""
    return (today - taken.earliest).days


def sentence(words: str) -> str:
    """The words with a capital at their beginning, but for names that are written small ("eGFR")."""
    return words if words.startswith("eGFR") else words[:1].upper() + words[1:]


def show_limit(analyte: str, value: float, unit: str) -> str:
    """A limit as its analyte is shown: "5.0" for a potassium of 5."""
    return units.shown(analyte, value, unit)


def value_in_words(reading: Reading, tables: ClinicalTables) -> str:
    """The reading without its date: "potassium 5.1 mmol/L"."""
    name = tables.analyte_names.get(reading.analyte, reading.analyte)
    unit = tables.unit_names.get(reading.unit, reading.unit)
    computed = " (computed)" if reading.is_computed else ""
    return f"{name} {f'{reading.shown} {unit}'.rstrip()}{computed}"


def say_value(reading: Reading, tables: ClinicalTables) -> str:
    """The reading in words: "potassium 5.1 mmol/L on 2025-09-12"."""
    return f"{value_in_words(reading, tables)} on {reading.taken}"
