"""Which start dose a drug has in this patient, and which test follows a start."""

from __future__ import annotations

from datetime import timedelta

from cds.clinical.findings import DrugProposal, TestProposal
from cds.clinical.renal import EGFR_UNIT
from cds.clinical.situation import Situation
from cds.clinical.tables import DoseRow


def dose_row(situation: Situation, drug: str) -> DoseRow | None:
    """The first row of the drug whose stratum fits; None where the tables have no dose for it.

    An unknown stratum value (no eGFR, no weight, no NYHA class) fits only rows that do not ask for it.
    """
    for row in situation.tables.doses:
        if row.drug == drug and _fits(situation, row):
            return row
    return None


def _fits(situation: Situation, row: DoseRow) -> bool:
    if row.regions and situation.tables.region not in row.regions:
        return False
    if not _egfr_fits(situation, row):
        return False
    if row.weight_above_kg is not None:
        weights = situation.readings("body-weight")
        if not weights or not all(r.holds(">", row.weight_above_kg, "kg") for r in weights):
            return False
    if row.nyha:
        nyha = situation.nyha()
        if nyha is None or int(nyha.shown_value) not in row.nyha:
            return False
    return True


def _egfr_fits(situation: Situation, row: DoseRow) -> bool:
    """Of two values of one day the lower decides: the smaller dose."""
    readings = situation.readings("egfr")
    if row.egfr_above is not None and not (readings and all(r.holds(">", row.egfr_above, EGFR_UNIT) for r in readings)):
        return False
    return row.egfr_from is None or bool(readings and all(r.holds(">=", row.egfr_from, EGFR_UNIT) for r in readings))


def start_proposal(situation: Situation, drug: str) -> DrugProposal:
    """The drug at its start dose; without a row the dose is left to the prescriber."""
    row = dose_row(situation, drug)
    if row is None:
        note = "no start dose in the tables: the prescriber chooses"
        return DrugProposal(drug=drug, dose_mg=None, times_per_day=None, note=note)
    return DrugProposal(
        drug=drug,
        dose_mg=row.start_dose_mg,
        times_per_day=row.start_times_per_day,
        dose_name=row.names.get(f"{row.start_dose_mg:g}"),
        dose_row=row.id,
    )


def follow_up_tests(situation: Situation, drug_class: str, *, after: str) -> tuple[TestProposal, ...]:
    """The first check the schedule wants after a start or increase of the class, counted from today."""
    rows = [row for row in situation.tables.checks if drug_class in row.drug_classes and row.trigger == after]
    if not rows:
        return ()
    first = min(rows, key=lambda row: (row.due_after_days, row.id))
    return (
        TestProposal(
            tests=first.tests,
            not_before=situation.today + timedelta(days=first.opens_after_days),
            due_by=situation.today + timedelta(days=first.due_after_days),
            why=f"after the {after}",
        ),
    )
