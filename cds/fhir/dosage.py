"""Dosage (R4) -> lines of mg a day for each ingredient. How often belongs to `timing.py`, free text to `dosage_text.py`.

A dose is the strength of the product x how many x how often; structured elements beat text. What cannot be known is None
with the reason in the note: nothing here guesses (rulings 38, 39).
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from cds.clinical.record import DoseLine
from cds.clinical.timeline import PartialDate
from cds.fhir.code_matches import DrugComponent
from cds.fhir.codings import words_of
from cds.fhir.dosage_text import TextDose, TextPart, read_dosage_text
from cds.fhir.dosage_words import Amount, Rhythm
from cds.fhir.dose_amounts import Mg, mg_of, plain_number, read_quantity, read_range
from cds.fhir.timing import Place, TimingReading, days_of, read_timing

_MOST_MG_A_DAY = 100_000
_LONGEST_LIST = 50
_DIGITS = 4  # ruling 36


@dataclass(frozen=True, slots=True, kw_only=True)
class Doses:
    """The dose lines of each component, in the order of the components; `pieces_a_day` only where one line tells it."""

    lines: tuple[tuple[DoseLine, ...], ...]
    pieces_a_day: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class _Read:
    """One Dosage, read but not yet weighed. `amounts` None: none is given; empty: given but not usable."""

    timing: TimingReading
    amounts: tuple[Amount, ...] | None
    problem: str
    is_as_needed: bool
    text: TextDose | None
    has_text: bool
    sequence: int | None
    most_a_day: Amount | None
    text_ends: PartialDate | None
    path: str


def read_doses(
    dosages: object, components: Sequence[DrugComponent], place: Place, *, ordered: PartialDate | None
) -> Doses:
    """Read a list of Dosage (one alone counts as a list of one); no lines where none is given.

    `ordered` is the day from which lengths and counts run. What is refused becomes an issue, once for all components.
    """
    items = dosages if isinstance(dosages, list) else [] if dosages is None else [dosages]
    names = frozenset(word for component in components for word in words_of(component.drug))
    read: list[_Read] = []
    for position, item in enumerate(items[:_LONGEST_LIST]):
        here = Place(place.context, place.source, f"{place.path}[{position}]")
        if isinstance(item, Mapping):
            read.append(_read_one(item, here, ordered, names))
        else:
            here.refuse("is not a Dosage", "Send a JSON object with timing and doseAndRate")
    if len(items) > _LONGEST_LIST:
        place.refuse("has more lines than any order", f"Send at most {_LONGEST_LIST} lines")
        read = []
    lines = tuple(tuple(_line(one, c, components, place) for one in read) for c in components)
    return Doses(lines=lines, pieces_a_day=_pieces_a_day(read[0]) if len(read) == 1 else None)


def read_given(dosage: object, components: Sequence[DrugComponent], place: Place) -> Doses:
    """Read MedicationAdministration.dosage: one dose that was given, so nothing is known of a day."""
    if not isinstance(dosage, Mapping):
        return Doses(lines=tuple(() for _ in components))
    amount = None if dosage.get("dose") is None else read_quantity(dosage["dose"], place.below("dose"))
    lines = []
    for component in components:
        mg = mg_of(amount, component, components) if amount is not None else Mg(problem="the amount is not given")
        said = mg.problem if mg.low is None else f"{plain_number(mg.low)} mg"
        lines.append((DoseLine(daily_mg=None, note=f"a single dose: {said}"),))
    return Doses(lines=tuple(lines))


def _read_one(dosage: Mapping[str, Any], place: Place, ordered: PartialDate | None, names: Iterable[str]) -> _Read:
    amounts, problem = _amounts(dosage.get("doseAndRate"), place.below("doseAndRate"))
    sequence = dosage.get("sequence")
    texts = [dosage.get(key) for key in ("text", "patientInstruction")]
    told = [found for text in texts if (found := read_dosage_text(text, names)) is not None]
    is_needed = dosage.get("asNeededBoolean")
    if is_needed is not None and not isinstance(is_needed, bool):
        place.below("asNeededBoolean").refuse("is neither true nor false", "Send a JSON boolean")
        amounts, problem = (), "it is not clear whether this is as needed"
    by_text = is_needed is None and any(one.is_as_needed for one in told)
    text = told[0] if told and all(one == told[0] for one in told) else None
    text_ends = None
    if text is not None and text.days is not None and ordered is not None:
        text_ends = ordered.plus_days(max(0, math.ceil(text.days) - 1))
    return _Read(
        timing=read_timing(dosage.get("timing"), place.below("timing"), ordered=ordered),
        amounts=amounts,
        problem=problem,
        is_as_needed=is_needed is True or isinstance(dosage.get("asNeededCodeableConcept"), Mapping) or by_text,
        text=text,
        has_text=any(isinstance(text, str) and text.strip() for text in texts),
        sequence=sequence if isinstance(sequence, int) and not isinstance(sequence, bool) else None,
        most_a_day=_most_a_day(dosage.get("maxDosePerPeriod"), place.below("maxDosePerPeriod")),
        text_ends=text_ends,
        path=place.path,
    )


def _amounts(rates: object, place: Place) -> tuple[tuple[Amount, ...] | None, str]:
    """The amounts of doseAndRate: ordered before untyped before calculated; None where there is none."""
    if rates is None:
        return None, ""
    found: dict[int, list[Amount | None]] = {}
    is_rate = False
    for position, item in enumerate(rates[:_LONGEST_LIST] if isinstance(rates, list) else [rates]):
        here = Place(place.context, place.source, f"{place.path}[{position}]")
        if not isinstance(item, Mapping):
            here.refuse("is not an object", "Send doseQuantity")
            found.setdefault(0, []).append(None)
            continue
        rank = {"ordered": 0, "calculated": 2}.get(_rate_type(item), 1)
        if item.get("doseQuantity") is not None:
            found.setdefault(rank, []).append(read_quantity(item["doseQuantity"], here.below("doseQuantity")))
        elif item.get("doseRange") is not None:
            found.setdefault(rank, []).append(read_range(item["doseRange"], here.below("doseRange")))
        is_rate = is_rate or any(name.startswith("rate") for name in item)
    if not found:
        return ((), "it is given as a rate, not as a dose") if is_rate else (None, "")
    best = found[min(found)]
    usable = tuple(amount for amount in best if amount is not None)
    return (usable, "") if len(usable) == len(best) else ((), "the amount cannot be read")


def _rate_type(item: Mapping[str, Any]) -> str:
    concept = item.get("type")
    codings = concept.get("coding") if isinstance(concept, Mapping) else None
    codes = [c.get("code") for c in codings if isinstance(c, Mapping)] if isinstance(codings, list) else []
    text = concept.get("text") if isinstance(concept, Mapping) else None
    named = [word.lower() for word in [*codes, text] if isinstance(word, str)]
    return next((word for word in named if word in ("ordered", "calculated")), "")


def _most_a_day(ratio: object, place: Place) -> Amount | None:
    if not isinstance(ratio, Mapping) or not isinstance(ratio.get("numerator"), Mapping):
        return None
    days = days_of(ratio.get("denominator"))
    if days is None or not math.isclose(days, 1):
        return None
    return read_quantity(ratio["numerator"], place.below("numerator"))


def _line(read: _Read, component: DrugComponent, components: Sequence[DrugComponent], place: Place) -> DoseLine:
    rhythm = read.timing.rhythm
    line: tuple[float | None, float | None, str, str | None]
    is_from_text = False
    mg = _of_all(read.amounts, component, components) if read.amounts else None
    told = _told(read.text, component, components)
    times = rhythm.times if rhythm is not None else ()
    needs_amount = read.amounts is None or (mg is not None and mg.may_help)
    if not needs_amount and mg is not None and rhythm is not None:
        line = _weigh(mg, rhythm, _said(read.amounts))
        is_from_text = rhythm.is_from_text
        if (
            told is not None
            and line[0] is not None
            and told[0] is not None
            and not math.isclose(told[0], line[0], rel_tol=1e-3)
        ):
            line = (*line[:2], f"{line[2]}; the text says otherwise", line[3])
            if component is components[0]:
                Place(place.context, place.source, f"{read.path}.text").doubt(
                    "says another dose than the structured dose, which counts", "Send a text and a dose that agree"
                )
    elif read.amounts == ():
        line = None, None, read.problem or "the amount cannot be read", None
    elif rhythm is not None and rhythm.per_day is None and rhythm.max_per_day is None and not rhythm.is_single:
        line = None, None, rhythm.note, None
    else:
        line, times = _with_text(read, mg, component, components)
        is_from_text = read.text is not None
    daily, most, note, other = line
    if read.is_as_needed:
        daily, most, note = None, most if most is not None else daily, _joined("as needed", note)
    cap = mg_of(read.most_a_day, component, components).high if read.most_a_day is not None else None
    if cap is not None and daily is not None and daily > cap * 1.001:
        daily, most, note = None, cap, _joined(note, "more than the most allowed a day")
    elif cap is not None and daily is None and (read.is_as_needed or most is not None):
        most = min(cap, most) if most is not None else cap
    return DoseLine(
        daily_mg=None if daily is None else round(daily, _DIGITS),
        note=note,
        max_daily_mg=None if most is None else round(most, _DIGITS),
        other=other,
        is_as_needed=read.is_as_needed,
        is_from_text=is_from_text,
        times=times,
        sequence=read.sequence,
        starts=read.timing.starts,
        ends=read.timing.ends if read.timing.ends is not None else read.text_ends,
    )


def _with_text(
    read: _Read, mg: Mg | None, component: DrugComponent, components: Sequence[DrugComponent]
) -> tuple[tuple[float | None, float | None, str, str | None], tuple[str, ...]]:
    """The dose where the text has to say the amount, the rhythm or both."""
    rhythm, text = read.timing.rhythm, read.text
    times = rhythm.times if rhythm is not None else ()
    missing = mg.problem if mg is not None and mg.low is None else "the amount is not given"
    if text is None:
        if mg is not None and mg.low is not None:
            missing = "how often is not given"
        return (
            None,
            None,
            _joined(missing, "the text is not plain enough to read" if read.has_text else ""),
            None,
        ), times
    if mg is not None and mg.low is not None:  # the amount is structured, how often is not
        if len(text.parts) != 1 or text.parts[0].rhythm is None:
            return (None, None, "how often is not given", None), times
        by_text = text.parts[0].rhythm
        said = _part(text.parts[0], by_text, component, components) if text.parts[0].amounts else None
        if said is not None and said[0] is not None and not math.isclose(said[0], mg.low * (by_text.per_day or 0)):
            return (None, None, "the text and the amount disagree", None), times
        return _weigh(mg, by_text, _said(read.amounts)), by_text.times
    if rhythm is not None and not rhythm.is_single:
        if len(text.parts) != 1 or not text.parts[0].amounts:
            return (None, None, missing, None), times
        part = text.parts[0]
        often = part.rhythm.per_day if part.rhythm is not None else None
        if often is not None and rhythm.per_day is not None and not math.isclose(often, rhythm.per_day, rel_tol=1e-3):
            return (None, None, "the text and the timing disagree", None), times
        return _part(part, rhythm, component, components), times
    found = [_part(part, part.rhythm, component, components) for part in text.parts]
    times = tuple(time for part in text.parts if part.rhythm is not None for time in part.rhythm.times)
    if len(found) == 1:
        return found[0], times
    daily = [one[0] for one in found]
    if any(one is None for one in daily):
        return (None, None, next(one[2] for one in found if one[0] is None), None), times
    return (sum(one or 0 for one in daily), None, " and ".join(one[2] for one in found), None), times


def _told(
    text: TextDose | None, component: DrugComponent, components: Sequence[DrugComponent]
) -> tuple[float | None, float | None, str, str | None] | None:
    """What a text that was understood gives a day by itself."""
    if text is None or text.is_as_needed or not all(part.amounts and part.rhythm for part in text.parts):
        return None
    found = [_part(part, part.rhythm, component, components) for part in text.parts]
    daily = [one[0] for one in found]
    return (None if any(one is None for one in daily) else sum(one or 0 for one in daily)), None, "", None


def _part(
    part: TextPart, rhythm: Rhythm | None, component: DrugComponent, components: Sequence[DrugComponent]
) -> tuple[float | None, float | None, str, str | None]:
    if not part.amounts:
        return None, None, "the amount is not given", None
    if rhythm is None:
        return None, None, "how often is not given", None
    first = part.amounts[0]
    if first.times is not None and first.times != 1 and rhythm.per_day is not None and rhythm.per_day != 1:
        return None, None, "'N x' may be how many or how often", None
    mg = _one_dose(part.amounts, component, components)
    return _weigh(mg, rhythm, _said(part.amounts))


def _one_dose(amounts: tuple[Amount, ...], component: DrugComponent, components: Sequence[DrugComponent]) -> Mg:
    """The mg of one amount, or of two that say the same dose: "2 tablets (50 mg)" as the whole or as the strength."""
    if len(amounts) == 1:
        if amounts[0].unit == "strength":
            return Mg(problem="the number of tablets is not given")
        return mg_of(amounts[0], component, components)
    pieces, mass = sorted(amounts, key=lambda amount: amount.kind in ("mass", "pair"))
    by_pieces, by_mass = (mg_of(amount, component, components) for amount in (pieces, mass))
    strength = component.strength_mg
    if by_mass.low is None:
        return by_mass
    if mass.unit == "total":
        fits = by_pieces.low is None or math.isclose(by_pieces.low, by_mass.low)
        return by_mass if fits else Mg(problem="the tablets and the mg do not fit")
    if pieces.low == 1 or (by_pieces.low is not None and math.isclose(by_pieces.low, by_mass.low)):
        agree = strength is None or by_pieces.low is None or math.isclose(by_pieces.low, by_mass.low)
        return by_mass if agree else Mg(problem="the tablets and the mg do not fit")
    if mass.unit == "strength" and (strength is None or math.isclose(strength, by_mass.low)):
        number = by_mass.low * pieces.low
        return Mg(number, number)
    if strength is not None and by_pieces.low is not None and math.isclose(strength, by_mass.low):
        return by_pieces
    return Mg(problem="the tablets and the mg do not fit")


def _of_all(amounts: tuple[Amount, ...] | None, component: DrugComponent, components: Sequence[DrugComponent]) -> Mg:
    """The mg all amounts agree on; those that cannot be told in mg do not count where another can."""
    found = [mg_of(amount, component, components) for amount in amounts or ()]
    known = [mg for mg in found if mg.low is not None]
    if not known:
        return found[0]
    first = known[0]
    if any(
        not math.isclose(mg.low or 0, first.low or 0) or not math.isclose(mg.high or 0, first.high or 0) for mg in known
    ):
        return Mg(problem="several amounts are given that disagree")
    return first


def _weigh(mg: Mg, rhythm: Rhythm, said: str) -> tuple[float | None, float | None, str, str | None]:
    """Amount x how often: (daily mg, most a day, note, other)."""
    if rhythm.is_single:
        return None, None, rhythm.note, None
    most = rhythm.most
    if mg.other is not None and rhythm.per_day is not None:
        number, unit = mg.other
        return None, None, mg.problem, f"{plain_number(number * rhythm.per_day)} {unit}"
    if mg.low is None or mg.high is None:
        return None, None, mg.problem, None
    if rhythm.per_day is None:
        return None, mg.high * most if most is not None else None, rhythm.note, None
    if mg.low != mg.high:
        return None, mg.high * rhythm.per_day, "the amount is given as a range", None
    daily = mg.low * rhythm.per_day
    each = said if said.endswith(" mg") else f"{said} ({plain_number(mg.low)} mg)"
    if not math.isfinite(daily) or daily > _MOST_MG_A_DAY:
        return None, None, "more than anyone takes", None
    return daily, None, f"{each}, {_often(rhythm.per_day)}", None


def _often(per_day: float) -> str:
    if per_day < 1:
        return f"every {plain_number(1 / per_day)} days, as the average of a day"
    return {1.0: "once a day", 2.0: "twice a day"}.get(round(per_day, 6), f"{plain_number(per_day)} times a day")


def _pieces_a_day(read: _Read) -> float | None:
    amounts, rhythm = read.amounts, read.timing.rhythm
    if (
        not amounts
        or len(amounts) != 1
        or amounts[0].kind not in ("count", "bare")
        or rhythm is None
        or read.is_as_needed
    ):
        return None
    amount = amounts[0]
    return amount.low * rhythm.per_day if rhythm.per_day is not None and amount.low == amount.high else None


def _said(amounts: tuple[Amount, ...] | None) -> str:
    return str(amounts[0]) if amounts else ""


def _joined(*parts: str) -> str:
    return "; ".join(part for part in parts if part)
