"""Which courses belong to a pillar, which of them close it, and how they stand as evidence."""

from __future__ import annotations

from cds.clinical.findings import Evidence, Role
from cds.clinical.phenotype import admission_within
from cds.clinical.record import DrugCourse
from cds.clinical.situation import Situation
from cds.clinical.tables import DrugClass


def members_of(situation: Situation, pillar: str) -> list[DrugCourse]:
    """Courses of the pillar's classes, and those whose codes leave it open whether they are."""
    classes = {slug for slug, row in situation.tables.classes.items() if row.pillar == pillar}
    return [
        course
        for course in situation.courses
        if course.drug_class in classes
        or (course.drug_class is None and not classes.isdisjoint(course.possible_classes))
    ]


def _class_of(situation: Situation, course: DrugCourse) -> DrugClass | None:
    return situation.tables.classes.get(course.drug_class or "")


def closes(situation: Situation, course: DrugCourse) -> bool:
    """True if the course is therapy of the pillar: a closing member of a class known for sure."""
    row = _class_of(situation, course)
    if row is None:
        return False
    regional = row.closing_regions.get(situation.tables.region, ())
    return not row.closing_drugs or course.drug in row.closing_drugs or course.drug in regional


def may_close(situation: Situation, course: DrugCourse) -> bool:
    """True if knowing more (salt, class) could make the course close the pillar."""
    row = _class_of(situation, course)
    if row is None:
        return True
    return any(closing.startswith(f"{course.drug} ") for closing in row.closing_drugs)


def nyha_or_surrogate(situation: Situation, wanted: tuple[int, ...]) -> bool | None:
    """Whether the NYHA class is one of `wanted`. Without a fresh class, a loop diuretic or an admission for heart failure
    in the last year stands in for class II or worse (drug rules only); otherwise None.
    """
    nyha = situation.nyha()
    if nyha is not None:
        return int(nyha.shown_value) in wanted
    has_loop = any(c.state == "active" and c.drug_class == "loop-diuretic" for c in situation.courses)
    if has_loop or admission_within(situation.record, situation.tables, today=situation.today) is not None:
        return True
    return None


def course_evidence(course: DrugCourse, role: Role) -> Evidence:
    """The course as a fact, with its dose."""
    dose = course.daily_dose_mg
    return Evidence(
        what=course.drug,
        role=role,
        resource=course.source,
        value=dose,
        unit="mg/d" if dose is not None else None,
        date=str(course.started) if course.started is not None else None,
    )


def since(course: DrugCourse) -> str:
    """Since when, in words; empty where it is not known."""
    return f" since {course.started}" if course.started is not None else ""
