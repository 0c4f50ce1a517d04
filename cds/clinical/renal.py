"""Kidney function: the CKD-EPI 2021 creatinine equation, and which eGFR counts where several are known."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Sequence
from datetime import date

from cds.clinical import units
from cds.clinical.readings import Bounds, Reading, of_newest_day, reading_of, show, usable
from cds.clinical.record import Measurement, PatientRecord
from cds.clinical.units import round_half_up

EGFR_UNIT = "mL/min/{1.73_m2}"

# CKD-EPI 2021 creatinine, without race. Inker LA et al. N Engl J Med 2021;385:1737; coefficients as the National
# Kidney Foundation prints them.
_KAPPA_MG_DL = {"female": 0.7, "male": 0.9}
_ALPHA = {"female": -0.241, "male": -0.302}
_FEMALE_FACTOR = 1.012


def egfr_ckd_epi_2021(*, creatinine_mg_dl: float, age_years: int, sex: str) -> float:
    """Return eGFR in mL/min/1.73 m2, unrounded, from serum creatinine, completed years of age and sex.

    `sex` is "female" or "male"; another word raises KeyError. Valid from 18 years, in steady state.
    """
    ratio = creatinine_mg_dl / _KAPPA_MG_DL[sex]
    egfr: float = 142 * min(ratio, 1.0) ** _ALPHA[sex] * max(ratio, 1.0) ** -1.200 * 0.9938**age_years
    return egfr * _FEMALE_FACTOR if sex == "female" else egfr


def computed_egfr(record: PatientRecord, creatinine: Measurement) -> Reading | None:
    """Compute eGFR from one creatinine; None without a birth date or with a comparator on the value.

    With sex unknown, or an imprecise date of birth or of the specimen, the reading is the range of all it may be, and
    limits inside the range stay undecided. The reported creatinine goes in unrounded; each end is rounded once, to 0.1
    (ruling 1).
    """
    first, last = record.age_years_on(creatinine.taken.earliest), record.age_years_on(creatinine.taken.latest)
    if first is None or last is None or creatinine.comparator is not None or first[0] < 18:
        return None
    ages = {first[0], last[1]}  # fewest and most completed years
    mg_dl = units.convert("creatinine", creatinine.reported_value, creatinine.reported_unit, "mg/dL")
    sexes = (record.sex,) if record.sex in _ALPHA else ("female", "male")
    values = [
        round_half_up(egfr_ckd_epi_2021(creatinine_mg_dl=mg_dl, age_years=age, sex=sex), 1)
        for age in ages
        for sex in sexes
    ]
    low, high = min(values), max(values)
    shown = show(low) if low == high else f"{show(low)}-{show(high)}"
    return Reading(
        analyte="egfr",
        taken=creatinine.taken,
        by_unit={EGFR_UNIT: Bounds(low, high)},
        shown=shown,
        shown_value=low,
        unit=EGFR_UNIT,
        source=creatinine.source,
        note="computed by CKD-EPI 2021 from creatinine",
        is_computed=True,
        is_plain=low == high,
    )


def egfr_readings(record: PatientRecord) -> tuple[Reading, ...]:
    """The eGFR of the newest day: reported and computed ones, for the caller to take the one that blocks (ruling 2).

    An older equation's value (MDRD) stands beside the computed one too: where they lie on two sides of a limit, the one
    that blocks counts and both are shown. A day whose creatinine gives no eGFR (no birth
    date, a comparator) and that has no reported one is passed over.
    """
    by_day: dict[date, list[Measurement]] = defaultdict(list)
    for measurement in (*usable(record, "egfr"), *usable(record, "creatinine")):
        by_day[measurement.taken.latest].append(measurement)
    for day in sorted(by_day, reverse=True):
        if readings := _egfr_of_one_day(record, by_day[day]):
            return readings
    return ()


def _egfr_of_one_day(record: PatientRecord, measurements: Sequence[Measurement]) -> tuple[Reading, ...]:
    reported = of_newest_day(m for m in measurements if m.analyte == "egfr")
    creatinines = of_newest_day(m for m in measurements if m.analyte == "creatinine")
    computed = [egfr for m in creatinines if (egfr := computed_egfr(record, m)) is not None]
    current = [reading_of(m) for m in reported if m.method != "mdrd"]
    older = [reading_of(m) for m in reported if m.method == "mdrd"]
    return (*current, *computed, *older)


def readings_of(record: PatientRecord, analyte: str) -> tuple[Reading, ...]:
    """The newest day's readings of `analyte`; eGFR by `egfr_readings`."""
    if analyte == "egfr":
        return egfr_readings(record)
    return tuple(reading_of(m) for m in of_newest_day(usable(record, analyte)))


def age_in_years(record: PatientRecord, today: date) -> int | None:
    """Completed years; None without a birth date or where the year of birth leaves two answers."""
    ages = record.age_years_on(today)
    return ages[0] if ages is not None and ages[0] == ages[1] else None
