"""Observation -> measurements: status, code, time and value, in that order of trust.

A resource gives one measurement for each code it holds that we use, its own and those of its components. Doubt about a
value makes it an issue, never a fact (rulings 1 to 5, 36, 41, 44). Codes nobody knows are only counted.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from typing import Any

from cds.clinical import units
from cds.clinical.record import Measurement
from cds.clinical.timeline import PartialDate
from cds.errors import ResourceError
from cds.fhir.codes import AnalyteMatch
from cds.fhir.codings import plain_text
from cds.fhir.dates import DateNotUnderstood, parse_date, parse_period
from cds.fhir.haemolysis import is_haemolysed
from cds.fhir.intake import Context, NotRecognised
from cds.fhir.observation_values import Amount, read_amount, values_in
from cds.fhir.references import named_resource

_COUNTING = frozenset({"final", "amended", "corrected", "preliminary"})
_NOT_COUNTING = frozenset({"registered", "cancelled", "entered-in-error", "unknown"})
_RANKS = {"prefer": 0, "accept": 1, "convert": 1, "container": 1}
_LAST_RANK = 2  # caution, legacy codes and the like: only when nothing better was measured that day
_LONGEST_COUNTED_TEXT = 200

Resolve = Callable[[Any, Mapping[str, Any]], dict[str, Any] | None]


def read_observation(
    resource: dict[str, Any], context: Context, *, resolve: Resolve | None = None
) -> tuple[Measurement, ...]:
    """Read one Observation; empty where it holds nothing we use or nothing that may be used.

    Its own value comes first, then the components in their order. Everything left out for a reason is an issue in
    `context.intake`; a code in no table is counted there instead. `resolve` follows a reference to the encounter that
    names no type and id. Raises nothing, whatever the shape of `resource`.
    """
    identity = resource.get("id")
    source = f"Observation/{identity}" if isinstance(identity, str) else "Observation/?"
    coded = list(_coded_elements(resource, source, context))
    if not coded:
        return ()
    try:
        is_preliminary = _is_preliminary(resource, source)
        taken, date_note = _taken(resource, source, context)
    except ResourceError as error:
        context.intake.issues.append(error.issue)
        return ()
    if is_preliminary is None:
        context.intake.inform(
            source, "status", "says that this result does not count", "Nothing to do unless the status is wrong"
        )
        return ()
    haemolysed = is_haemolysed(resource)
    if haemolysed:
        context.intake.doubt(
            source, "interpretation", "says the sample was haemolysed, so no action rests on it", "Repeat the sample"
        )
    encounter = _encounter(resource, resolve)
    measurements: list[Measurement] = []
    for element, match, prefix in coded:
        try:
            amount = _amount(element, match, source, prefix, context)
            if amount is None:
                continue
            value, low, high = _comparable(amount, match.analyte, source)
        except ResourceError as error:
            context.intake.issues.append(error.issue)
            continue
        _doubt_property(amount, match, source, context)
        measurements.append(
            Measurement(
                analyte=match.analyte,
                value=value,
                unit=units.CANONICAL_UNIT[match.analyte],
                reported_value=amount.value,
                reported_unit=amount.unit,
                taken=taken,
                source=source,
                comparator=amount.comparator,
                low=low,
                high=high,
                note=_note(amount, match, date_note, is_preliminary, haemolysed),
                rank=_RANKS.get(match.use, _LAST_RANK),
                method=match.method,
                is_preliminary=is_preliminary,
                is_haemolysed=haemolysed,
                encounter=encounter,
            )
        )
    return _without_impossible_pressures(measurements, source, context)


def _coded_elements(
    resource: Mapping[str, Any], source: str, context: Context
) -> Iterator[tuple[Mapping[str, Any], AnalyteMatch, str]]:
    """The resource and its components, each with the analyte its code means and the path prefix of its elements."""
    components = resource.get("component")
    elements = [(resource, "")]
    for position, component in enumerate(components if isinstance(components, list) else ()):
        if isinstance(component, Mapping):
            elements.append((component, f"component[{position}]."))
    found = []
    unknown: list[Mapping[str, Any]] = []
    for element, prefix in elements:
        concept = element.get("code")
        if not isinstance(concept, Mapping):
            continue
        matches = context.codes.analytes(concept)
        if not matches:
            unknown.append(concept)
        elif (match := _one_analyte(matches, source, prefix, context)) is not None:
            found.append((element, match, prefix))
    for concept in unknown:
        if not found or concept is not resource.get("code"):  # a panel whose components are read is known well enough
            context.intake.not_recognised[_unknown(concept)] += 1
    yield from found


def _one_analyte(matches: tuple[AnalyteMatch, ...], source: str, prefix: str, context: Context) -> AnalyteMatch | None:
    """The best of the matches if they agree on the analyte; a code that must never be used gives none."""
    path = f"{prefix}code"
    usable = [match for match in matches if match.use != "exclude"]
    if not usable:
        context.intake.inform(
            source,
            path,
            "is a code that does not give the value its name suggests",
            "Send the code of the result itself",
        )
        return None
    if len({match.analyte for match in usable}) > 1:
        context.intake.refuse(
            source, path, "has codings that mean different measurements", "Send codings of one and the same measurement"
        )
        return None
    best = min(usable, key=lambda match: (_RANKS.get(match.use, _LAST_RANK), match.use == "container"))
    return best if best.analyte in units.CANONICAL_UNIT or best.use == "container" else None


def _is_preliminary(resource: Mapping[str, Any], source: str) -> bool | None:
    """True for preliminary, False for the statuses that count fully, None for those that do not count."""
    status = resource.get("status")
    if not isinstance(status, str) or status not in _COUNTING | _NOT_COUNTING:
        raise ResourceError(source, "status", "is missing or no status of FHIR R4", "Send final, amended or corrected")
    return None if status in _NOT_COUNTING else status == "preliminary"


def _taken(resource: Mapping[str, Any], source: str, context: Context) -> tuple[PartialDate, str | None]:
    """When it was measured, and a note where only the time of the report is known."""
    path = ""
    try:
        for path in ("effectiveDateTime", "effectiveInstant"):
            if resource.get(path) is not None:
                return parse_date(resource[path], context.zone), None
        path = "effectivePeriod"
        start, end = parse_period(resource.get(path), context.zone)
        if (when := end if end is not None else start) is not None:
            return when, None
        path = "issued"
        if resource.get(path) is not None:
            return parse_date(resource[path], context.zone), "dated by the report (issued)"
    except DateNotUnderstood as error:
        raise ResourceError(
            source, path, error.problem, "Send effectiveDateTime as R4 writes it, a time with seconds and zone"
        ) from None
    raise ResourceError(source, "effective", "no date", "Send effectiveDateTime: when the sample or reading was taken")


def _amount(
    element: Mapping[str, Any], match: AnalyteMatch, source: str, prefix: str, context: Context
) -> Amount | None:
    """The value of one coded element; None where there is rightly none (a panel, a value said to be absent)."""
    has_value = bool(values_in(element))
    if match.use == "container" and (not has_value or match.analyte not in units.CANONICAL_UNIT):
        if has_value:
            raise ResourceError(
                source,
                f"{prefix}value",
                "stands under the code of a panel",
                "Send each value as a component of its own",
            )
        return None
    if element.get("dataAbsentReason") is not None:
        path = f"{prefix}dataAbsentReason"
        if has_value:
            raise ResourceError(source, path, "stands beside a value", "Send one of the two")
        context.intake.inform(source, path, "says there is no value", "Nothing to do unless there is one")
        return None
    if not has_value and not prefix and isinstance(element.get("component"), list):
        return None
    default_unit = context.default_units.get(match.analyte)
    return read_amount(element, match.analyte, source, prefix, default_unit=default_unit)


def _comparable(amount: Amount, analyte: str, source: str) -> tuple[float, float | None, float | None]:
    """Value, low and high in the canonical unit, or ResourceError for what no patient has."""
    value, low, high = (
        None if number is None else units.comparable(analyte, number, amount.unit)
        for number in (amount.value, amount.low, amount.high)
    )
    assert value is not None
    exact = units.convert(analyte, amount.value, amount.unit, units.CANONICAL_UNIT[analyte])
    least, most = units.PLAUSIBLE[analyte]
    if amount.comparator in ("<", "<="):
        least = 0  # "below what we can measure" may lie below what we believe
    is_believed = any(least <= number <= most for number in (value, exact))
    if not is_believed or any(side is not None and not least <= side <= most for side in (low, high)):
        raise ResourceError(
            source,
            amount.path,
            f"is no value of {analyte} that a patient can have in this unit",
            "Check the value and its unit, and send them as measured",
        )
    return value, low, high


def _doubt_property(amount: Amount, match: AnalyteMatch, source: str, context: Context) -> None:
    """A molar unit under a code for mass, or the other way round: the unit is trusted, and said."""
    if match.unit is not None and _is_molar(match.unit) != _is_molar(amount.unit):
        context.intake.doubt(
            source,
            "code",
            f"means {match.unit}, but the value has the unit {amount.unit}; the unit is trusted",
            "Send the code that fits the unit",
        )


def _is_molar(unit: str) -> bool:
    return "mol/L" in unit or "eq/L" in unit


def _note(
    amount: Amount, match: AnalyteMatch, date_note: str | None, is_preliminary: bool, haemolysed: bool
) -> str | None:
    parts = [
        *amount.notes,
        date_note,
        match.note if match.use not in _RANKS else None,  # remarks on a code that counts fully would be noise
        "matched by its text" if match.matched_by == "text" else None,
        "preliminary" if is_preliminary else None,
        "haemolysed" if haemolysed else None,
        "counts only when nothing better was measured that day" if match.use not in _RANKS else None,
    ]
    return "; ".join(part for part in parts if part) or None


def _without_impossible_pressures(
    measurements: list[Measurement], source: str, context: Context
) -> tuple[Measurement, ...]:
    """Drop both pressures where the systolic lies below the diastolic: at least one is wrong, and not known which."""
    systolic = [m.value for m in measurements if m.analyte == "systolic-bp"]
    diastolic = [m.value for m in measurements if m.analyte == "diastolic-bp"]
    if not systolic or not diastolic or min(systolic) >= max(diastolic):
        return tuple(measurements)
    context.intake.refuse(
        source, "component", "gives a systolic pressure below the diastolic", "Check whether the two were exchanged"
    )
    return tuple(m for m in measurements if m.analyte not in ("systolic-bp", "diastolic-bp"))


def _encounter(resource: Mapping[str, Any], resolve: Resolve | None) -> str | None:
    reference = resource.get("encounter")
    named = named_resource(reference, "Encounter")
    if named is not None or resolve is None or reference is None:
        return named
    found = resolve(reference, resource)
    is_one = found is not None and found.get("resourceType") == "Encounter" and isinstance(found.get("id"), str)
    return f"Encounter/{found['id']}" if found is not None and is_one else None


def _unknown(concept: Mapping[str, Any]) -> NotRecognised:
    codings = concept.get("coding")
    first = codings[0] if isinstance(codings, list) and codings and isinstance(codings[0], Mapping) else {}
    system, code = (_short(first.get(key)) for key in ("system", "code"))
    return NotRecognised("observation", system, code, _short(concept.get("text")) or _short(first.get("display")))


def _short(text: object) -> str:
    return plain_text(text)[:_LONGEST_COUNTED_TEXT]
