"""Patient -> sex, birth and death; and the small readings that every reader of a resource shares.

Shared here: the name of a resource, lists, status words, dates at a place, ages. What a resource means belongs to its
own reader.
"""

from __future__ import annotations

import calendar
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from datetime import date, timedelta
from typing import Any

from cds.clinical.record import Sex
from cds.clinical.timeline import PartialDate
from cds.fhir.codings import codings_of, plain_text, texts_of
from cds.fhir.dates import DateNotUnderstood, parse_date, parse_period
from cds.fhir.intake import Context, NotRecognised

_SEXES: Mapping[object, Sex] = {"male": "male", "female": "female", "other": "other", "unknown": "unknown"}
_YES = frozenset({"true", "1", "yes"})
_NO = frozenset({"false", "0", "no"})
_LONGEST_COUNTED_TEXT = 200
_LONGEST_STATUS = 40
_OLDEST_YEARS = 130
_AGE_UNITS = {
    **dict.fromkeys(("a", "year", "years", "yr", "yrs", "y"), "years"),
    **dict.fromkeys(("mo", "month", "months"), "months"),
    **dict.fromkeys(("wk", "week", "weeks"), "weeks"),
    **dict.fromkeys(("d", "day", "days"), "days"),
}
_HOW_TO_DATE = "Send a date as R4 writes it: YYYY, YYYY-MM, YYYY-MM-DD, or a time with seconds and zone"


@dataclass(frozen=True, slots=True, kw_only=True)
class PatientFacts:
    """What the Patient resource itself says. `born` and `died` are None where not sent or not understood."""

    sex: Sex = "unknown"
    born: PartialDate | None = None
    is_deceased: bool = False
    died: PartialDate | None = None


def read_patient(resource: Mapping[str, Any], context: Context) -> PatientFacts:
    """Read sex, birth and death. What is not understood is a doubt and counts as not sent.

    A death whose date is not understood is still a death. Whether a birth lies in the future is not known here, since
    no clock is. Raises nothing.
    """
    source = source_of(resource)
    born = read_date(resource, "birthDate", source, context)
    is_deceased, died = _death(resource, source, context)
    if born is not None and died is not None and died.latest < born.earliest:
        context.intake.doubt(source, "deceasedDateTime", "lies before birthDate", "Check both dates")
    return PatientFacts(sex=_sex(resource, source, context), born=born, is_deceased=is_deceased, died=died)


def _sex(resource: Mapping[str, Any], source: str, context: Context) -> Sex:
    gender = resource.get("gender")
    if gender is None:
        return "unknown"
    if isinstance(gender, str) and gender in _SEXES:
        return _SEXES[gender]
    context.intake.doubt(
        source, "gender", "is no gender word of FHIR R4, so the sex is unknown", "Send male, female, other or unknown"
    )
    return "unknown"


def _death(resource: Mapping[str, Any], source: str, context: Context) -> tuple[bool, PartialDate | None]:
    if resource.get("deceasedDateTime") is not None:
        return True, read_date(resource, "deceasedDateTime", source, context)
    said = resource.get("deceasedBoolean")
    if said is None or isinstance(said, bool):
        return said is True, None
    word = str(said).strip().lower() if isinstance(said, (str, int)) and not _is_long(said) else ""
    taken = "the patient is taken as deceased" if word in _YES else "the patient is taken as alive"
    context.intake.doubt(
        source, "deceasedBoolean", f"is not true or false; {taken}", "Send the JSON value true or false"
    )
    return word in _YES, None


def _is_long(value: object) -> bool:
    return not (-1 <= value <= 1) if isinstance(value, int) else len(str(value)) > _LONGEST_STATUS


def source_of(resource: Mapping[str, Any]) -> str:
    """ "Condition/c1": how issues and cards name the resource; a question mark stands for what is not text."""
    kind, identity = (resource.get(key) for key in ("resourceType", "id"))
    return f"{kind if isinstance(kind, str) else '?'}/{identity if isinstance(identity, str) else '?'}"


def objects_in(value: object) -> list[Mapping[str, Any]]:
    """The JSON objects of a list, in order; a lone object counts as a list of one, anything else as an empty one."""
    if isinstance(value, Mapping):
        return [value]
    return [item for item in value if isinstance(item, Mapping)] if isinstance(value, list) else []


def says_yes(value: object) -> bool:
    """True for true, and for what a careless sender writes instead of it; an element that must never be missed."""
    return value is True or (isinstance(value, str) and value.strip().lower() in _YES) or value == 1


def status_words(concept: object, known: Iterable[str]) -> tuple[str, ...]:
    """The words of `known` that the codes of a status name, or its text where they name none; each once.

    Spaces stand for hyphens and capitals for small letters: "Entered in Error" is the status entered-in-error.
    """
    wanted = frozenset(known)

    def told(texts: Iterable[str]) -> tuple[str, ...]:
        plain = ("-".join(text[:_LONGEST_STATUS].lower().split()) for text in texts)
        return tuple(dict.fromkeys(word for word in plain if word in wanted))

    return told(coding.code for coding in codings_of(concept)) or told(texts_of(concept))


def read_date(resource: Mapping[str, Any], element: str, source: str, context: Context) -> PartialDate | None:
    """Read one date element; None where it is absent or, with a doubt, not understood."""
    if resource.get(element) is None:
        return None
    try:
        return parse_date(resource[element], context.zone)
    except DateNotUnderstood as error:
        context.intake.doubt(source, element, error.problem, _HOW_TO_DATE)
        return None


def read_period(
    resource: Mapping[str, Any], element: str, source: str, context: Context
) -> tuple[PartialDate | None, PartialDate | None]:
    """Read start and end of a Period element; both None where it is absent or, with a doubt, not understood."""
    try:
        return parse_period(resource.get(element), context.zone)
    except DateNotUnderstood as error:
        context.intake.doubt(source, element, error.problem, _HOW_TO_DATE)
        return None, None


def read_onset(
    resource: Mapping[str, Any], source: str, context: Context, born: PartialDate | None
) -> PartialDate | None:
    """When a problem began: onsetDateTime, the start of onsetPeriod, or onsetAge or onsetRange counted from the birth.

    None where none of them tells; onsetString never does.
    """
    if resource.get("onsetDateTime") is not None:
        return read_date(resource, "onsetDateTime", source, context)
    start, _ = read_period(resource, "onsetPeriod", source, context)
    if start is not None:
        return start
    return _at_age(resource.get("onsetAge"), born) or _between_ages(resource.get("onsetRange"), born)


def _between_ages(ages: object, born: PartialDate | None) -> PartialDate | None:
    if not isinstance(ages, Mapping):
        return None
    low, high = _at_age(ages.get("low"), born), _at_age(ages.get("high"), born)
    return PartialDate(low.earliest, high.latest) if low and high and low.earliest <= high.latest else None


def _at_age(age: object, born: PartialDate | None) -> PartialDate | None:
    """The days on which a person has an age in completed years, months, weeks or days; None where it is not clear."""
    if born is None or not isinstance(age, Mapping) or age.get("comparator") is not None:
        return None
    written = age.get("code") if age.get("code") is not None else age.get("unit")
    unit = _AGE_UNITS.get(written) if isinstance(written, str) else None
    number = age.get("value")
    if unit is None or isinstance(number, bool) or not isinstance(number, (int, float)):
        return None
    whole = {"years": _OLDEST_YEARS, "months": _OLDEST_YEARS * 12, "weeks": 7_000, "days": 49_000}[unit]
    if not 0 <= number <= whole:
        return None
    count = int(number)
    try:
        if unit in ("years", "months"):
            months = 12 if unit == "years" else 1
            first = _months_later(born.earliest, count * months)
            return PartialDate(first, _months_later(born.latest, (count + 1) * months) - timedelta(days=1))
        length = timedelta(days=7 if unit == "weeks" else 1)
        return PartialDate(born.earliest + count * length, born.latest + (count + 1) * length - timedelta(days=1))
    except (ValueError, OverflowError):  # beyond the year 9999
        return None


def _months_later(day: date, months: int) -> date:
    years, month = divmod(day.month - 1 + months, 12)
    year, month = day.year + years, month + 1
    return date(year, month, min(day.day, calendar.monthrange(year, month)[1]))


def count_unknown(kind: str, concept: object, context: Context) -> None:
    """Count a concept in no table, by its first coding and its text."""
    codings = objects_in(concept.get("coding")) if isinstance(concept, Mapping) else []
    first = codings[0] if codings else {}
    system, code, display = (_short(first.get(key)) for key in ("system", "code", "display"))
    text = _short(concept.get("text")) if isinstance(concept, Mapping) else ""
    context.intake.not_recognised[NotRecognised(kind, system, code, text or display)] += 1


def _short(text: object) -> str:
    return plain_text(text)[:_LONGEST_COUNTED_TEXT]
