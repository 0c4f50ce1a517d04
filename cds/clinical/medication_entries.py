"""What one medication entry says by itself: when it was written and began, how long its supply lasts, how it sorts."""

from __future__ import annotations

from datetime import date, timedelta

from cds.clinical.record import MedicationEntry
from cds.clinical.tables import SupplyLimits
from cds.clinical.timeline import PartialDate, recency

EXPOSURES = ("administration", "dispense")


def tells_start(entry: MedicationEntry) -> bool:
    """A statement asserted on the day it is about says that the drug is taken, not since when."""
    if entry.kind != "statement":
        return entry.kind in EXPOSURES and began_on(entry) is not None
    asserted = entry.authored.latest if entry.authored is not None else None
    return entry.starts is not None and entry.starts.latest != asserted


def is_episode(entry: MedicationEntry, supply: SupplyLimits) -> bool:
    """True for what is given into the vein of a class that is taken by mouth at home."""
    return entry.route == "parenteral" and entry.drug_class in supply.parenteral_episode_classes


def written_on(entry: MedicationEntry) -> PartialDate | None:
    """When the resource was written, else the start it states."""
    return entry.authored if entry.authored is not None else entry.starts


def began_on(entry: MedicationEntry) -> PartialDate | None:
    """When the drug was begun by this resource, else when it was written."""
    return entry.starts if entry.starts is not None else entry.authored


def newest_first(entry: MedicationEntry) -> tuple[bool, date, float, date, bool, str]:
    """Sort key, greatest first: dated before undated, newer before older, of one moment orders before statements."""
    written = written_on(entry)
    when = recency(written) if written is not None else (date.min, float("-inf"), date.min)
    return (written is not None, *when, entry.kind == "order", entry.source)


def oldest_first(entry: MedicationEntry) -> tuple[date, float, date, str]:
    """Sort key: the earliest beginning first, what has none last."""
    began = began_on(entry)
    return (*recency(began), entry.source) if began is not None else (date.max, 0.0, date.max, entry.source)


def regimen_key(entry: MedicationEntry) -> tuple[object, ...]:
    """Two orders of one day with the same key are the same order written twice."""
    return tuple((line.daily_mg, line.max_daily_mg, line.other, line.times, line.is_as_needed) for line in entry.lines)


def runs_out_on(entry: MedicationEntry, begins: PartialDate | None) -> PartialDate | None:
    """The last day the supply of an entry covers, refills counted; None where no supply is known."""
    if begins is None or entry.supply_days is None or entry.supply_days <= 0:
        return None
    days = min(entry.supply_days * (1 + entry.refills), timedelta.max.days)
    return begins.plus_days(days)
