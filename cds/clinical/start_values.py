"""Values before a start or raise: is every needed one fresh, and does any stand against the drug?"""

from __future__ import annotations

from cds.clinical.findings import Evidence
from cds.clinical.judgement import Judgement, concerns
from cds.clinical.readings import Reading, days_old, say_value, show_limit, value_in_words
from cds.clinical.situation import Situation
from cds.clinical.tables import Limit, Needed

_SIGN_WORDS = {"<": "below", "<=": "at or below", ">": "above", ">=": "at or above"}


def hold_measurements(situation: Situation, judgement: Judgement, present: frozenset[str]) -> None:
    """Fresh values first, then every limit on them. A missing or stale value neither satisfies nor fails a limit."""
    tables = situation.tables
    stale, unusable = hold_needs(situation, judgement, present)
    needed = {a for need in tables.needed if judgement.drug_class in need.drug_classes for a in need.analytes}
    for limit in tables.limits:
        if limit.analyte in stale | unusable or not _is_about(situation, limit, judgement, present):
            continue
        readings = situation.readings(limit.analyte)
        if limit.analyte not in needed and limit.analyte != "creatinine":
            days = tables.optional_within_days
            readings = tuple(r for r in readings if days_old(r.taken, situation.today) <= days)
        _hold_limit(situation, limit, readings, judgement)


def hold_needs(situation: Situation, judgement: Judgement, present: frozenset[str]) -> tuple[set[str], set[str]]:
    """Note which needed values are fresh, stale or missing; returns the stale analytes and those that mean nothing here."""
    stale: set[str] = set()
    unusable = {"egfr", "creatinine"} if "dialysis" in present else set[str]()
    for need in situation.tables.needed:
        if judgement.drug_class in need.drug_classes and unusable.isdisjoint(need.analytes):
            _need_fresh(situation, need, judgement, stale)
    if "egfr" in stale:  # one specimen gives both
        stale.add("creatinine")
    return stale, unusable


def _need_fresh(situation: Situation, need: Needed, judgement: Judgement, stale: set[str]) -> None:
    """Note what is missing or stale; a fresh value supports."""
    known = [reading for analyte in need.analytes for reading in situation.readings(analyte)]
    name = " or ".join(situation.tables.analyte_names.get(a, a) for a in need.analytes)
    if not known:
        judgement.missing.append(f"{name}: none on record")
        judgement.evidence.append(Evidence(what=need.analytes[0], role="missing"))
        judgement.wanted_tests.append(need.test)
        stale.update(need.analytes)
        return
    newest = max(known, key=lambda r: (r.taken.latest, r.source))
    within = need.within_days
    if need.unstable_within_days is not None and _unstable_because(situation):
        within = need.unstable_within_days
    if days_old(newest.taken, situation.today) <= within:
        judgement.evidence.append(newest.evidence("supports"))
        judgement.fresh.append(value_in_words(newest, situation.tables))
        return
    why = f" ({_unstable_because(situation)})" if within != need.within_days else ""
    judgement.missing.append(f"{name}: last on {newest.taken}, wanted within {within} days{why}")
    judgement.evidence.append(newest.evidence("stale"))
    judgement.wanted_tests.append(need.test)
    stale.update(need.analytes)


def _unstable_because(situation: Situation) -> str:
    """Why values go stale sooner in this patient; empty if they do not (ruling 17)."""
    for row in situation.tables.unstable:
        if row.analyte is not None and row.sign is not None and row.value is not None and row.unit is not None:
            for reading in situation.readings(row.analyte):
                if row.unit in reading.by_unit and reading.holds(row.sign, row.value, row.unit):
                    return f"unstable: {value_in_words(reading, situation.tables)}"
        for problem in situation.record.problems:
            if problem.dated is None or frozenset(row.concepts).isdisjoint(problem.concepts):
                continue
            if row.within_days is None or days_old(problem.dated, situation.today) <= row.within_days:
                return problem.display
    return ""


def _is_about(situation: Situation, limit: Limit, judgement: Judgement, present: frozenset[str]) -> bool:
    return (
        concerns(limit.drug_classes, limit.drugs, limit.not_drugs, judgement.drug, judgement.drug_class)
        and present.isdisjoint(limit.unless)
        and (not limit.phenotypes or situation.phenotype.kind in limit.phenotypes)
    )


def _hold_limit(situation: Situation, limit: Limit, readings: tuple[Reading, ...], judgement: Judgement) -> None:
    """Apply the limit to each of the newest day's values: the one that blocks decides (rulings 2 and 3)."""
    sex = situation.record.sex
    if limit.sex is not None and sex in ("male", "female") and sex != limit.sex:
        return
    for reading in readings:
        value, unit = _printed_in(limit, reading)
        if unit not in reading.by_unit:
            continue
        holds = reading.holds(limit.sign, value, unit)
        name = situation.tables.unit_names.get(unit, unit)
        said = f"{say_value(reading, situation.tables)} is {_SIGN_WORDS[limit.sign]} {show_limit(limit.analyte, value, unit)} {name}"
        if holds and limit.sex is not None and sex not in ("male", "female"):
            holds = None
        if holds:
            others = [
                r for r in readings if r is not reading and unit in r.by_unit and not r.holds(limit.sign, value, unit)
            ]
            if others:
                said += f" (another value of that day is not: {value_in_words(others[0], situation.tables)})"
            if (limit.analyte, limit.effect) in judgement.held:
                judgement.limits.append(limit.id)  # a stricter row has said it
                return
            judgement.held.add((limit.analyte, limit.effect))
            facts = [reading.evidence("limits"), *(r.evidence("supports") for r in others)]
            judgement.add(limit.effect, said, limit.id, facts)
            if limit.repeat_within_days is not None:
                judgement.to_repeat[limit.analyte] = limit.repeat_within_days
            return
        if holds is None:
            name = situation.tables.analyte_names.get(limit.analyte, limit.analyte)
            judgement.missing.append(
                f"{name}: {say_value(reading, situation.tables)} leaves open whether it is {_SIGN_WORDS[limit.sign]} {show_limit(limit.analyte, value, unit)}"
            )
            judgement.wanted_tests.append(limit.analyte)
            judgement.evidence.append(reading.evidence("limits"))
            return


def _printed_in(limit: Limit, reading: Reading) -> tuple[float, str]:
    """The limit in the unit of the report, where the source prints both."""
    if limit.also_value is not None and limit.also_unit == reading.unit:
        return limit.also_value, limit.also_unit
    return limit.value, limit.unit
