"""Gaps in the data that the medicine needs: the ejection fraction, and whether an old order is still taken."""

from __future__ import annotations

from cds.clinical.findings import Due, Evidence, Finding, TestProposal
from cds.clinical.readings import days_old, of_newest_day, reading_of, say_value, sentence, usable
from cds.clinical.record import DrugCourse
from cds.clinical.rules.answers import met, not_applicable
from cds.clinical.rules.monitoring import already_ordered
from cds.clinical.situation import Situation

EJECTION_FRACTION = "ejection-fraction-missing"
STILL_TAKEN = "confirm-still-taken"
OLD_ORDERS = "old-orders"  # the topic of all that waits for this answer


def ejection_fraction_missing(situation: Situation) -> tuple[Finding, ...]:
    """Ask for an ejection fraction where heart failure has none, or only one older than the table allows."""
    gate = situation.gate_for("tests")
    if gate is not None:
        return (not_applicable(EJECTION_FRACTION, because=gate.words, source=gate.source),)
    newest = of_newest_day(usable(situation.record, "lvef"))
    fresh_days = situation.tables.phenotype.lvef_fresh_days
    evidence = situation.phenotype.evidence
    if newest:
        reading = min((reading_of(m) for m in newest), key=lambda r: (r.by_unit["%"].low, r.source))  # as the phenotype
        if days_old(reading.taken, situation.today) <= fresh_days:
            because = f"{sentence(say_value(reading, situation.tables))}."
            return (met(EJECTION_FRACTION, because=because, evidence=(reading.evidence("supports"),)),)
        because = (
            f"The last ejection fraction is old: {say_value(reading, situation.tables)}, "
            f"wanted within {fresh_days} days. It is still used until there is a newer one."
        )
        evidence = (reading.evidence("stale"), *(e for e in evidence if e.resource != reading.source))
        missing = ("a recent left ventricular ejection fraction",)
    else:
        because = "Heart failure without a recorded ejection fraction: most of its therapy depends on it."
        evidence = (*evidence, Evidence(what="lvef", role="missing"))
        missing = ("left ventricular ejection fraction",)
    ordered = already_ordered(situation, ("lvef",))
    if ordered is not None:
        because += " An echocardiogram is already ordered."
    today = situation.today
    return (
        Finding(
            rule=EJECTION_FRACTION,
            about=None,
            outcome="open",
            action="test",
            because=because,
            evidence=evidence,
            missing=missing,
            due=Due(tests=("lvef",), window_opens=today, due_by=today, already_ordered=ordered),
            test_proposals=(TestProposal(tests=("lvef",), not_before=None, due_by=today, why="to classify"),),
            opened_by=tuple(e.resource for e in evidence if e.resource and not e.resource.startswith("Observation/")),
        ),
    )


def confirm_still_taken(situation: Situation) -> tuple[Finding, ...]:
    """Ask whether a drug is still taken whose order nobody ended though its supply ran out long ago."""
    gate = situation.gate_for("data")
    if gate is not None:
        return (not_applicable(STILL_TAKEN, because=gate.words, source=gate.source),)
    running = [course for course in situation.courses if course.state == "active" and not course.is_episode]
    if not running:
        return (not_applicable(STILL_TAKEN, because="No running drug order of a class used here."),)
    return tuple(_still_taken(course) for course in running)


def _still_taken(course: DrugCourse) -> Finding:
    evidence = (
        Evidence(
            what=course.drug,
            role="stale" if course.stale else "supports",
            resource=course.source,
            date=str(course.ordered) if course.ordered is not None else None,
        ),
    )
    if not course.stale:
        return met(
            STILL_TAKEN, about=course.drug, because=f"The order of {course.drug} is recent enough.", evidence=evidence
        )
    since = f" of {course.ordered}" if course.ordered is not None else ""
    because = f"The order of {course.drug}{since} is still active, though long past its supply or a year old, and nobody ended it: is it still taken?"
    return Finding(
        rule=STILL_TAKEN,
        about=course.drug,
        outcome="open",
        action="document",
        because=because,
        evidence=evidence,
        missing=(f"{course.source}: whether {course.drug} is still taken",),
        opened_by=course.sources[:1],
        topic=OLD_ORDERS,
    )
