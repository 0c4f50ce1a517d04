"""The record as plain data: what was understood of a patient's data, in the form the published schema describes."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import date
from typing import Any

from cds.clinical.record import (
    DrugCourse,
    EncounterFact,
    Intolerance,
    Measurement,
    PatientRecord,
    Problem,
    ProcedureOrDevice,
    TestOrder,
)
from cds.clinical.timeline import PartialDate
from cds.errors import Issue
from cds.fhir.intake import NotRecognised

Shape = dict[str, Any]


def record_shape(
    record: PatientRecord,
    courses: Sequence[DrugCourse],
    issues: Sequence[Issue],
    not_recognised: Sequence[tuple[NotRecognised, int]],
    *,
    on: date,
) -> Shape:
    """Give one patient's record as known on `on`; dates stand at the precision that was sent."""
    ages = record.age_years_on(on)
    return {
        "patient": record.patient,
        "sex": record.sex,
        "age_years": ages[0] if ages is not None and ages[0] == ages[1] else None,
        "deceased": record.is_deceased,
        "deceased_on": _date(record.died),
        "courses": [_course(course) for course in courses],
        "other_medicines": [
            {"display": m.display, "reason": m.reason, "status": m.status, "source": m.source}
            for m in record.other_medicines
        ],
        "measurements": [_measurement(m) for m in record.measurements],
        "problems": [_problem(p) for p in record.problems],
        "intolerances": [_intolerance(i) for i in record.intolerances],
        "procedures_devices": [_procedure_or_device(p) for p in record.procedures_devices],
        "encounters": [_encounter(e) for e in record.encounters],
        "tests_ordered": [_test_order(t) for t in record.tests_ordered],
        "issues": [issue_shape(issue) for issue in issues],
        "not_recognised": [
            {"kind": item.kind, "system": item.system, "code": item.code, "text": item.text, "count": count}
            for item, count in not_recognised
        ],
    }


def issue_shape(issue: Issue) -> Shape:
    """Give one issue; it never holds a patient's value."""
    return {
        "resource": issue.resource,
        "path": issue.path,
        "problem": issue.problem,
        "fix": issue.fix,
        "severity": issue.severity,
    }


def course_issues(courses: Sequence[DrugCourse]) -> list[Issue]:
    """The notes of the courses (orders nobody ended, undated orders) as issues of the record."""
    return [
        Issue(resource=note.source, path=note.path, problem=note.problem, fix=note.fix, severity="doubtful")
        for course in courses
        for note in course.notes
    ]


def _course(course: DrugCourse) -> Shape:
    return {
        "drug": course.drug,
        "drug_class": course.drug_class,
        "possible_classes": list(course.possible_classes),
        "state": course.state,
        "daily_dose_mg": course.daily_dose_mg,
        "max_daily_dose_mg": course.max_daily_dose_mg,
        "daily_dose_other": course.daily_dose_other,
        "dose_note": course.dose_note,
        "started_on": _date(course.started),
        "changed_on": _date(course.changed),
        "changed_by": course.changed_by,
        "ended_on": _date(course.ended),
        "as_needed": course.as_needed,
        "stale": course.stale,
        "part_of": course.part_of,
        "route": course.route,
        "reasons": list(course.reasons),
        "matched_by": course.matched_by,
        "sources": list(course.sources),
    }


def _measurement(measurement: Measurement) -> Shape:
    return {
        "analyte": measurement.analyte,
        "value": measurement.value,
        "unit": measurement.unit,
        "low": measurement.low,
        "high": measurement.high,
        "comparator": measurement.comparator,
        "reported": {"value": measurement.reported_value, "unit": measurement.reported_unit},
        "taken_on": _date(measurement.taken),
        "method": measurement.method,
        "preliminary": measurement.is_preliminary,
        "haemolysed": measurement.is_haemolysed,
        "note": measurement.note,
        "source": measurement.source,
    }


def _problem(problem: Problem) -> Shape:
    return {
        "concepts": list(problem.concepts),
        "hints_at": list(problem.weak_concepts),
        "excludes": list(problem.excluded_concepts),
        "display": problem.display,
        "clinical_status": problem.clinical_status,
        "verification": problem.verification,
        "onset_on": _date(problem.onset),
        "recorded_on": _date(problem.recorded),
        "abated_on": _date(problem.abated),
        "matched_by": problem.matched_by,
        "source": problem.source,
    }


def _intolerance(intolerance: Intolerance) -> Shape:
    return {
        "drugs": list(intolerance.drugs),
        "drug_classes": list(intolerance.drug_classes),
        "kind": intolerance.kind,
        "reactions": list(intolerance.reactions),
        "status": intolerance.status,
        "verification": intolerance.verification,
        "criticality": intolerance.criticality,
        "recorded_on": _date(intolerance.recorded),
        "display": intolerance.display,
        "matched_by": intolerance.matched_by,
        "source": intolerance.source,
    }


def _procedure_or_device(item: ProcedureOrDevice) -> Shape:
    return {
        "concepts": list(item.concepts),
        "hints_at": list(item.weak_concepts),
        "kind": item.kind,
        "display": item.display,
        "done_on": _date(item.done),
        "ended_on": _date(item.ended),
        "active": item.is_active,
        "matched_by": item.matched_by,
        "source": item.source,
    }


def _encounter(encounter: EncounterFact) -> Shape:
    return {
        "class": encounter.encounter_class,
        "status": encounter.status,
        "started_on": _date(encounter.starts),
        "ended_on": _date(encounter.ends),
        "reasons": list(encounter.reasons),
        "source": encounter.source,
    }


def _test_order(order: TestOrder) -> Shape:
    return {
        "analytes": list(order.analytes),
        "ordered_on": _date(order.ordered),
        "planned_on": _date(order.planned),
        "draft": order.is_draft,
        "source": order.source,
    }


def _date(when: PartialDate | None) -> str | None:
    """An instant where the sender gave a time, else the date at its precision."""
    if when is None:
        return None
    return when.at.isoformat() if when.at is not None else str(when)
