"""Which medicine a medication resource is about: by concept, by reference to a Medication, by text; and its route."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

from cds.clinical.record import MatchedBy, Route
from cds.fhir.code_matches import DrugComponent, DrugMatch
from cds.fhir.codings import codings_of, plain_text, shown_text, texts_of, without_brackets, words_of
from cds.fhir.dosage_words import strengths_in
from cds.fhir.dose_amounts import ARNI, read_quantity
from cds.fhir.intake import NotRecognised
from cds.fhir.timing import Place

Resolve = Callable[[Any, Mapping[str, Any]], dict[str, Any] | None]

_LONGEST_COUNTED_TEXT = 200
_MOST_INGREDIENTS = 20
_PAIR = "sacubitril/valsartan"
# SNOMED CT route of administration (FHIR R4, value set route-codes).
_ROUTE_CODES: dict[str, Route] = {
    "26643006": "oral",
    "47625008": "parenteral",  # intravenous
    "78421000": "parenteral",  # intramuscular
    "34206005": "parenteral",  # subcutaneous
    "45890007": "transdermal",
    "6064005": "other",  # topical
    "54485002": "other",  # ophthalmic
    "10547007": "other",  # otic
    "46713006": "other",  # nasal
}
_ROUTE_WORDS: dict[str, Route] = {
    **dict.fromkeys(("oral", "orally", "po", "mouth"), "oral"),
    **dict.fromkeys(
        ("iv", "intravenous", "intramuscular", "im", "subcutaneous", "sc", "subcut", "ivp", "ivpb"), "parenteral"
    ),
    "transdermal": "transdermal",
    **dict.fromkeys(("ophthalmic", "eye", "topical", "otic", "nasal", "inhalation", "cutaneous"), "other"),
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Medicine:
    """The medicine of a resource. No components: its codes and texts are in no table."""

    display: str
    components: tuple[DrugComponent, ...] = ()
    matched_by: MatchedBy = "text"
    is_systemic: bool | None = None
    route: Route | None = None
    is_strength_from_text: bool = False


def read_medicine(resource: Mapping[str, Any], place: Place, resolve: Resolve) -> Medicine | None:
    """Read the medicine; None, with an issue, where there is none or the Medication was entered in error.

    An unknown one is counted in `context.intake.not_recognised`. A reference that cannot be followed leaves its display.
    """
    concept = resource.get("medicationCodeableConcept")
    reference = resource.get("medicationReference")
    if isinstance(concept, Mapping):
        return _settled(_Candidate([concept], ""), place.below("medicationCodeableConcept"))
    here = place.below("medicationReference")
    display = reference.get("display") if isinstance(reference, Mapping) else None
    display = display if isinstance(display, str) else ""
    medication = resolve(reference, resource) if isinstance(reference, Mapping) else None
    if medication is not None and medication.get("resourceType") == "Medication":
        if medication.get("status") == "entered-in-error":
            here.refuse("names a Medication that was entered in error", "Refer to the Medication that is meant")
            return None
        return _of_medication(medication, display, here, resolve)
    if display.strip():
        here.doubt(
            "cannot be followed, so only its display is read", "Send the Medication, or medicationCodeableConcept"
        )
        return _settled(_Candidate([], display), here)
    if isinstance(reference, Mapping):
        here.refuse("names no Medication that is in the input", "Send the Medication, or medicationCodeableConcept")
    else:
        place.below("medication").refuse("is missing", "Send medicationCodeableConcept or medicationReference")
    return None


def route_of(dosages: Iterable[object]) -> Route | None:
    """The route all dosages name that name one; None where none does or they differ."""
    found: set[Route] = set()
    for dosage in dosages:
        concept = dosage.get("route") if isinstance(dosage, Mapping) else None
        by_code = [_ROUTE_CODES[c.code] for c in codings_of(concept) if c.system == "snomed" and c.code in _ROUTE_CODES]
        words = [word for text in texts_of(concept) for word in words_of(text)]
        by_code += [_ROUTE_WORDS[c.code.lower()] for c in codings_of(concept) if c.code.lower() in _ROUTE_WORDS]
        found.update(by_code[:1] or [_ROUTE_WORDS[word] for word in words if word in _ROUTE_WORDS][:1])
    return found.pop() if len(found) == 1 else None


@dataclass(frozen=True, slots=True)
class _Candidate:
    """Concepts of one medicine: its code, or its ingredients. `text` stands beside them: a display, a form."""

    concepts: list[Mapping[str, Any]]
    text: str
    display: str = ""


def _of_medication(medication: Mapping[str, Any], display: str, place: Place, resolve: Resolve) -> Medicine | None:
    code = medication.get("code")
    form = medication.get("form")
    beside = " ".join(text for text in (display, *texts_of(form)) if text)
    ingredients = _ingredients(medication, resolve)
    if isinstance(code, Mapping):
        match = place.context.codes.drug(code, other_text=beside)
        if match is not None or not ingredients:
            read = _settled(_Candidate([code], beside, display), place)
            strengths = [_strength(item, place) for item, _ in ingredients]
            if len(read.components) == len(strengths) == 1 and read.components[0].strength_mg is None and strengths[0]:
                mg, unit = strengths[0]
                component = replace(read.components[0], strength_mg=mg, strength_unit=unit)
                return replace(read, components=(component,), is_strength_from_text=False)
            return read
    if not ingredients:
        return _settled(_Candidate([], beside, display), place)
    return _of_ingredients(ingredients, shown_text(code) or display, beside, place)


def _ingredients(medication: Mapping[str, Any], resolve: Resolve) -> list[tuple[Mapping[str, Any], Mapping[str, Any]]]:
    """The active ingredients, each with its concept."""
    items = medication.get("ingredient")
    found: list[tuple[Mapping[str, Any], Mapping[str, Any]]] = []
    for item in items[:_MOST_INGREDIENTS] if isinstance(items, list) else ():
        if not isinstance(item, Mapping) or item.get("isActive") is False:
            continue
        concept = item.get("itemCodeableConcept")
        if concept is None and item.get("itemReference") is not None:
            target = resolve(item["itemReference"], medication)
            concept = target.get("code") if target is not None else None
        if isinstance(concept, Mapping):
            found.append((item, concept))
    return found


def _of_ingredients(
    ingredients: Sequence[tuple[Mapping[str, Any], Mapping[str, Any]]], display: str, beside: str, place: Place
) -> Medicine:
    components: list[DrugComponent] = []
    matches: list[DrugMatch] = []
    for item, concept in ingredients:
        match = place.context.codes.drug(concept, other_text=beside if len(ingredients) == 1 else "")
        if match is None:
            _count(concept, "", place)
            components.append(DrugComponent(drug=shown_text(concept).lower() or "unknown", drug_class=None))
            continue
        matches.append(match)
        strength = _strength(item, place)
        own = match.components
        if len(own) == 1 and strength is not None:
            own = (replace(own[0], strength_mg=strength[0], strength=None, strength_unit=strength[1]),)
        components += own
    names = display or " / ".join(shown_text(concept) for _, concept in ingredients)
    if not matches:
        return Medicine(display=names)
    is_text = any(match.matched_by == "text" for match in matches)
    medicine = Medicine(
        display=names,
        components=_with_pair(components, [_strength(item, place) for item, _ in ingredients]),
        matched_by="text" if is_text else "ingredient-code",
        is_systemic=False if all(m.is_systemic is False for m in matches) else matches[0].is_systemic,
        route=matches[0].route,
    )
    _say_how(medicine, matches, place)
    return medicine


def _with_pair(
    components: Sequence[DrugComponent], strengths: Sequence[tuple[float, str] | None]
) -> tuple[DrugComponent, ...]:
    """Sacubitril and valsartan listed apart are one drug, its strength the sum (ruling 36)."""
    first = [c for c in components if c.drug_class == ARNI]
    parts = [c for c in components if c.drug_class == ARNI or c.drug == "valsartan"]
    if not first or len(parts) < 2:
        return tuple(components)
    known = [strength for strength in strengths if strength is not None]
    is_told = len(known) == len(parts) == len(components)
    pair = DrugComponent(
        drug=_PAIR,
        drug_class=ARNI,
        strength_mg=sum(mg for mg, _ in known) if is_told else None,
        strength_unit=known[0][1] if is_told else None,
    )
    return (pair, *(c for c in components if c not in parts))


def _strength(item: Mapping[str, Any], place: Place) -> tuple[float, str] | None:
    """The mg of one piece or of one mL by Medication.ingredient.strength; None where it is neither."""
    ratio = item.get("strength")
    if not isinstance(ratio, Mapping) or not isinstance(ratio.get("numerator"), Mapping):
        return None
    above = read_quantity(ratio["numerator"], place.below("strength"))
    below = ratio.get("denominator")
    under = read_quantity(below, place.below("strength")) if isinstance(below, Mapping) else None
    if above is None or above.kind != "mass" or (isinstance(below, Mapping) and under is None):
        return None
    if under is not None and under.kind == "volume":
        return above.low / under.low, "MG/ML"
    return (
        (above.low / (under.low if under is not None else 1), "MG")
        if under is None or under.kind in ("bare", "count")
        else None
    )


def _settled(candidate: _Candidate, place: Place) -> Medicine:
    concept = candidate.concepts[0] if candidate.concepts else {}
    match = place.context.codes.drug(concept, other_text=candidate.text)
    display = shown_text(concept) or without_brackets((candidate.display or candidate.text)[:_LONGEST_COUNTED_TEXT])
    if match is None:
        _count(concept, candidate.text, place)
        return Medicine(display=display)
    components, is_from_text = _with_strengths(match, texts_of(concept, candidate.text))
    medicine = Medicine(
        display=display,
        components=components,
        matched_by=match.matched_by,
        is_systemic=match.is_systemic,
        route=match.route,
        is_strength_from_text=is_from_text,
    )
    _say_how(medicine, [match], place)
    return medicine


def _with_strengths(match: DrugMatch, texts: Iterable[str]) -> tuple[tuple[DrugComponent, ...], bool]:
    """The components, with strengths that may be multiplied: none of packs and of rows whose strength is suspect."""
    note = (match.note or "").lower()
    components = match.components
    if "pack" in note or "suspect" in note or "|" in (match.dose_form or ""):
        return tuple(replace(c, strength_mg=None, strength=None, strength_unit=None) for c in components), False
    if any(c.strength_mg is not None or c.strength is not None for c in components):
        return components, False
    for text in texts:
        told = strengths_in(text)
        if len(components) == 1 and components[0].drug_class == ARNI and len(told) == 2 and not told[0][1]:
            return (replace(components[0], strength_mg=told[0][0] + told[1][0], strength_unit="MG"),), True
        if len(told) != len(components) or (len(told) > 1 and match.matched_by != "text"):
            continue
        if components[0].drug_class == ARNI:
            continue  # one number may be a part or the sum
        units = ("MG/ML" if is_per_ml else "MG" for _, is_per_ml in told)
        pairs = zip(components, told, units, strict=True)
        return tuple(replace(c, strength_mg=mg, strength_unit=unit) for c, (mg, _), unit in pairs), True
    return components, False


def _say_how(medicine: Medicine, matches: Iterable[DrugMatch], place: Place) -> None:
    if medicine.matched_by == "text":
        place.context.intake.inform(
            place.source,
            place.path,
            "is known by its text only: no code sent is in our tables",
            "Send a code of RxNorm, ATC or SNOMED CT that names the ingredient",
        )
    if any(c.drug_class is None and c.possible_classes for c in medicine.components) or any(
        "disagree" in (match.note or "") for match in matches
    ):
        place.doubt("does not settle which medicine it is", "Send codings that mean one and the same medicine")


def _count(concept: Mapping[str, Any], text: str, place: Place) -> None:
    codings = concept.get("coding")
    first = codings[0] if isinstance(codings, list) and codings and isinstance(codings[0], Mapping) else {}
    system, code = (_short(first.get(key)) for key in ("system", "code"))
    said = _short(concept.get("text")) or _short(first.get("display")) or _short(text)
    place.context.intake.not_recognised[NotRecognised("medicine", system, code, said)] += 1


def _short(text: object) -> str:
    return without_brackets(plain_text(text))[:_LONGEST_COUNTED_TEXT]
