"""How long one fill lasts, and how often it may be repeated: dispenseRequest, daysSupply, quantity."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any

from cds.clinical.record import DoseLine, EntryKind
from cds.fhir.code_matches import DrugComponent
from cds.fhir.dose_amounts import mg_of, read_quantity
from cds.fhir.timing import Place, days_of, positive

_MOST_REFILLS = 99
_LONGEST_DAYS = 3660.0  # ten years in one fill: nobody hands that out
_MOST_PIECES = 100_000


def refills_of(resource: Mapping[str, Any], kind: EntryKind, place: Place) -> int:
    """How many repeats are allowed after the first fill; 0 where none are named or the number cannot be."""
    request = resource.get("dispenseRequest")
    number = request.get("numberOfRepeatsAllowed") if kind == "order" and isinstance(request, Mapping) else None
    if number is None:
        return 0
    if isinstance(number, bool) or not isinstance(number, int) or not 0 <= number <= _MOST_REFILLS:
        place.below("dispenseRequest.numberOfRepeatsAllowed").doubt(
            "is no number of repeats; none is counted", "Send a whole number from 0"
        )
        return 0
    return number


def supply_days(
    resource: Mapping[str, Any],
    kind: EntryKind,
    place: Place,
    *,
    components: Sequence[DrugComponent],
    lines: Sequence[DoseLine],
    pieces_a_day: float | None,
) -> float | None:
    """How many days one fill lasts, None where it cannot be told.

    The length the sender states counts before the quantity. `lines` are those of the first of `components`: the
    quantity is divided by their daily dose only where there is one line. validityPeriod is no supply (ruling 38).
    """
    if kind == "order":
        request = resource.get("dispenseRequest")
        holder: Mapping[str, Any] = request if isinstance(request, Mapping) else {}
        prefix, name = "dispenseRequest.", "expectedSupplyDuration"
    elif kind == "dispense":
        holder, prefix, name = resource, "", "daysSupply"
    else:
        return None
    stated = holder.get(name)
    if stated is not None:
        days = _days(stated)
        if days is None:
            place.below(f"{prefix}{name}").doubt("is not a length of time", "Send a number and a UCUM unit such as d")
        else:
            return days
    return _by_quantity(holder.get("quantity"), place.below(f"{prefix}quantity"), components, lines, pieces_a_day)


def _days(stated: object) -> float | None:
    days = days_of(stated)
    if days is None and isinstance(stated, Mapping) and not stated.get("unit") and not stated.get("code"):
        days = positive(stated.get("value"))  # both elements count days by their name
    return round(days, 2) if days is not None and days <= _LONGEST_DAYS else None


def _by_quantity(
    quantity: object,
    place: Place,
    components: Sequence[DrugComponent],
    lines: Sequence[DoseLine],
    pieces_a_day: float | None,
) -> float | None:
    if not isinstance(quantity, Mapping):
        return None
    amount = read_quantity(quantity, place, most=_MOST_PIECES)
    if amount is None:
        return None
    if amount.kind == "bare":
        amount = replace(amount, kind="count")  # what is handed out without a unit is counted
    days: float | None = None
    if amount.kind == "count" and pieces_a_day:
        days = amount.low / pieces_a_day
    elif len(lines) == 1 and lines[0].daily_mg and components:
        in_mg = mg_of(amount, components[0], components)
        days = in_mg.low / lines[0].daily_mg if in_mg.low is not None else None
    return round(days, 2) if days is not None and days <= _LONGEST_DAYS else None
