"""Values that ask for attention by themselves: potassium, sodium, eGFR, creatinine, blood pressure, heart rate."""

from __future__ import annotations

from datetime import timedelta

from cds.clinical.findings import Evidence, Finding, TestProposal
from cds.clinical.readings import Reading, days_old, reading_of, say_value, sentence, show, show_limit, value_in_words
from cds.clinical.rules.answers import met, not_applicable, unknown
from cds.clinical.safety_tables import OutOfRange
from cds.clinical.situation import Situation, concepts_present
from cds.clinical.treatment import Rise, creatinine_rise

RULE = "lab-out-of-range"
_ANALYTES = ("potassium", "sodium", "egfr", "creatinine", "systolic-bp", "heart-rate")
_TEST_OF = {"egfr": "creatinine"}  # what is ordered for it
_SIGNS = {"<": "below", "<=": "at or below", ">": "above", ">=": "at or above"}


def lab_out_of_range(situation: Situation) -> tuple[Finding, ...]:
    """Say of each watched value whether its last reading is out of range, and which running drugs it bears on.

    The dose change itself is `lower-dose` or `stop-harmful-drug` about the drug (ruling 45).
    """
    gate = situation.gate_for("safety")
    if gate is not None:
        return (not_applicable(RULE, because=gate.words, source=gate.source),)
    return tuple(_watched(situation, analyte) for analyte in _ANALYTES)


def _watched(situation: Situation, analyte: str) -> Finding:
    if analyte == "creatinine":
        return _creatinine(situation)
    repeat = _haemolysed(situation) if analyte == "potassium" else None
    if repeat is not None:
        return repeat
    name = situation.tables.analyte_names.get(analyte, analyte)
    if analyte == "egfr" and situation.has_gate("dialysis"):
        return not_applicable(RULE, about=analyte, because="On dialysis eGFR means nothing.")
    days = situation.tables.optional_within_days
    readings = [r for r in situation.readings(analyte) if days_old(r.taken, situation.today) <= days]
    if not readings:
        because = f"No {name} in the last {days} days."
        return unknown(RULE, about=analyte, because=because, missing=(f"{name}: none within {days} days",))
    present = concepts_present(situation)
    running = {c.drug_class for c in situation.courses if c.state in ("active", "unclear")}
    for row in situation.tables.safety.out_of_range:
        if row.analyte != analyte or not present.isdisjoint(row.unless):
            continue
        if row.under_classes and running.isdisjoint(row.under_classes):
            continue
        for reading in readings:
            if row.unit in reading.by_unit and reading.holds(row.sign, row.value, row.unit):
                return _out(situation, row, reading, [r for r in readings if r is not reading])
    because = f"{sentence(say_value(readings[0], situation.tables))}: within what is watched here."
    return met(RULE, about=analyte, because=because, evidence=(readings[0].evidence("supports"),))


def _out(situation: Situation, row: OutOfRange, reading: Reading, others: list[Reading]) -> Finding:
    unit = situation.tables.unit_names.get(row.unit, row.unit)
    limit = f"{_SIGNS[row.sign]} {show_limit(row.analyte, row.value, row.unit)} {unit}"
    bears_on = _bears_on(situation, row.analyte)
    because = f"{sentence(say_value(reading, situation.tables))} is {limit}: {row.words}{'' if row.words.endswith('?') else '.'}"
    disagreeing = [r for r in others if not (row.unit in r.by_unit and r.holds(row.sign, row.value, row.unit))]
    if disagreeing:
        other = value_in_words(disagreeing[0], situation.tables)
        because += f" Another value of that day is not ({other}): they disagree, so repeat it."
    if bears_on:
        because += f" It bears on {' and '.join(bears_on)}."
    name = situation.tables.analyte_names.get(row.analyte, row.analyte)
    repeats: tuple[TestProposal, ...] = ()
    if row.repeat_within_days is not None or disagreeing:
        due_by = situation.today + timedelta(days=row.repeat_within_days if row.repeat_within_days is not None else 7)
        test = _TEST_OF.get(row.analyte, row.analyte)
        repeats = (TestProposal(tests=(test,), not_before=None, due_by=due_by, why="to repeat"),)
    shown_unit = situation.tables.unit_names.get(reading.unit, reading.unit)
    return Finding(
        rule=RULE,
        about=row.analyte,
        outcome="open",
        action="test" if repeats else "review",
        because=because,
        evidence=(reading.evidence("limits"), *(r.evidence("supports") for r in disagreeing)),
        limits=(row.id,),
        test_proposals=repeats,
        severity=row.severity,
        cautions=(row.id,),
        topic=f"value:{'kidney' if row.analyte == 'egfr' else row.analyte}",
        why=f"two values of {name} on one day disagree"
        if disagreeing
        else f"{name} {reading.shown} {shown_unit}".strip(),
    )


def _bears_on(situation: Situation, analyte: str) -> list[str]:
    """The running drugs whose dose this value limits."""
    classes = {
        c for row in situation.tables.safety.treatment_limits if row.analyte == analyte for c in row.drug_classes
    }
    return sorted({c.drug for c in situation.courses if c.state in ("active", "unclear") and c.drug_class in classes})


def _haemolysed(situation: Situation) -> Finding | None:
    """A potassium from a haemolysed sample that is newer than every other: to be repeated, whatever it says."""
    measured = [m for m in situation.record.measurements if m.analyte == "potassium"]
    if not measured:
        return None
    newest = max(m.taken.latest for m in measured)
    of_day = [m for m in measured if m.taken.latest == newest]
    if not all(m.is_haemolysed for m in of_day) or (situation.today - newest).days > 30:
        return None
    reading = reading_of(of_day[0])
    due_by = max(newest, situation.today)
    because = f"{sentence(say_value(reading, situation.tables))} is from a haemolysed sample: change nothing on it, repeat it the same day."
    rows = (
        row for row in situation.tables.safety.out_of_range if row.analyte == "potassium" and row.sign in (">", ">=")
    )
    raised_by = _bears_on(situation, "potassium")
    if raised_by and any(reading.holds(row.sign, row.value, row.unit) for row in rows):
        because += f" The next dose of {' and '.join(raised_by)} can wait until the repeat is seen."
    return Finding(
        rule=RULE,
        about="potassium",
        outcome="open",
        action="test",
        because=because,
        evidence=(reading.evidence("limits"),),
        test_proposals=(TestProposal(tests=("potassium",), not_before=None, due_by=due_by, why="haemolysed sample"),),
        severity="major",
        topic="value:potassium",
        why="potassium from a haemolysed sample",
    )


def _creatinine(situation: Situation) -> Finding:
    """The rise under a RAS inhibitor, where a value before its last start or increase is known."""
    if situation.has_gate("dialysis"):
        return not_applicable(RULE, about="creatinine", because="On dialysis creatinine means nothing here.")
    classes = {c for row in situation.tables.safety.treatment_limits if row.is_rise_percent for c in row.drug_classes}
    running = [c for c in situation.courses if c.state in ("active", "unclear") and c.drug_class in classes]
    rises = [(rise, c) for c in running if (rise := creatinine_rise(situation, c)) is not None]
    if not rises:
        return not_applicable(
            RULE, about="creatinine", because="No recent rise of creatinine under a RAS inhibitor can be told."
        )
    rise, course = max(rises, key=lambda pair: pair[0].percent)
    said = (
        f"{sentence(say_value(rise.now, situation.tables))}, {_change(rise)} {rise.before.shown} on {rise.before.taken}, "
        f"before the last start or increase of {course.drug}"
    )
    evidence = (rise.now.evidence("limits"), rise.before.evidence("supports"))
    least = situation.tables.safety.limits.rise_from_percent
    if rise.percent < least:
        return met(RULE, about="creatinine", because=f"{said}.", evidence=evidence)
    rows = [
        row
        for row in situation.tables.safety.treatment_limits
        if row.is_rise_percent and course.drug_class in row.drug_classes and rise.percent >= row.value
    ]
    recheck = next((row for row in rows if row.recheck_within_days is not None), None)
    day = rise.now.taken.latest
    tests: tuple[TestProposal, ...] = ()
    if recheck is not None and recheck.recheck_from_days is not None and recheck.recheck_within_days is not None:
        tests = (
            TestProposal(
                tests=("creatinine", "potassium"),
                not_before=day + timedelta(days=recheck.recheck_from_days),
                due_by=max(day + timedelta(days=recheck.recheck_within_days), situation.today),
                why="to repeat",
            ),
        )
    because = f"{said}, is a rise of {show(least)} % or more: look for NSAIDs and too much diuretic first." + (
        f" Repeat between {tests[0].not_before} and {tests[0].due_by}." if tests else ""
    )
    return Finding(
        rule=RULE,
        about="creatinine",
        outcome="open",
        action="test" if tests else "review",
        because=because,
        evidence=(*evidence, Evidence(what=course.drug, role="supports", resource=course.source)),
        limits=tuple(row.id for row in rows[-1:]),
        test_proposals=tests,
        severity="major",
        topic="value:kidney",
        why=f"creatinine up by {show(rise.percent)} %",
    )


def _change(rise: Rise) -> str:
    return f"{show(abs(rise.percent))} % {'above' if rise.percent >= 0 else 'below'}"
