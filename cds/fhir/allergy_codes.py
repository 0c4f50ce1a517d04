"""Allergy codes and texts -> the drugs and classes they are about, and the reaction they name."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, replace

from cds.fhir.code_matches import AllergyMatch
from cds.fhir.codings import Coding, codings_of, shown_text, texts_of
from cds.fhir.concept_codes import plain_code
from cds.fhir.drug_codes import DrugCodes, DrugRow
from cds.fhir.drug_text import DrugNames
from cds.fhir.words import Phrases

_DENIALS = frozenset({"no", "not", "without", "denies", "denied", "never", "negative"})


@dataclass(frozen=True, slots=True, kw_only=True)
class AllergyCodes:
    """The allergy tables. ICD codes without dots; `icd_prefix` rows hold for every code that begins with theirs."""

    snomed: Mapping[str, AllergyMatch] = field(default_factory=dict)
    icd_exact: Mapping[str, AllergyMatch] = field(default_factory=dict)
    icd_prefix: Mapping[str, AllergyMatch] = field(default_factory=dict)

    def row(self, coding: Coding) -> AllergyMatch | None:
        if coding.system == "snomed":
            return self.snomed.get(coding.code)
        if coding.system != "icd-10-cm":
            return None
        code = plain_code(coding.system, coding.code)
        if (exact := self.icd_exact.get(code)) is not None:
            return exact
        return next((row for length in range(len(code), 2, -1) if (row := self.icd_prefix.get(code[:length]))), None)


def match_allergy(
    concept: object, allergies: AllergyCodes, drugs: DrugCodes, names: DrugNames, classes: Phrases, reactions: Phrases
) -> AllergyMatch | None:
    """What the concept is about, all codings together; text only where no code is known. None if nobody knows it."""
    codings = codings_of(concept)
    found = [row for coding in codings if (row := _by_code(coding, allergies, drugs)) is not None]
    texts = texts_of(concept)
    display = shown_text(concept)
    if found:
        merged = merge(found)
        return replace(merged, display=display or merged.display)
    for text in texts:
        named = names.read(text, negations=_DENIALS)
        meant = classes.held(text)
        if named is None and not meant:
            continue
        match = _of_drugs(named) if named is not None else AllergyMatch()
        return replace(
            match,
            drug_classes=_once(match.drug_classes, meant),
            reactions=reactions.held(text),
            display=display,
            matched_by="text",
        )
    return None


def merge(found: Iterable[AllergyMatch]) -> AllergyMatch:
    """Several codings of one allergy. The first that says so decides the kind; drugs and reactions add up."""
    rows = list(found)
    kinds = [row.kind for row in rows if row.kind != "unspecified"]
    return AllergyMatch(
        drugs=_once(*(row.drugs for row in rows)),
        drug_classes=_once(*(row.drug_classes for row in rows)),
        reactions=_once(*(row.reactions for row in rows)),
        kind=kinds[0] if kinds else "unspecified",
        display=rows[0].display,
        matched_by=rows[0].matched_by,
        is_finding=any(row.is_finding for row in rows),
    )


def _by_code(coding: Coding, allergies: AllergyCodes, drugs: DrugCodes) -> AllergyMatch | None:
    if (known := allergies.row(coding)) is not None:
        return known
    drug = drugs.row(coding)
    return None if drug is None else _of_drugs(drug)


def _of_drugs(row: DrugRow) -> AllergyMatch:
    """An allergy to each drug of a product. A class that is only possible counts too: allergies err on that side."""
    known = [c for c in row.components if c.drug_class or c.possible_classes]
    return AllergyMatch(
        drugs=_once(tuple(c.drug for c in known)),
        drug_classes=_once(*((c.drug_class,) if c.drug_class else c.possible_classes for c in known)),
        matched_by=row.matched_by,
    )


def _once(*parts: tuple[str, ...]) -> tuple[str, ...]:
    return tuple(dict.fromkeys(name for part in parts for name in part))
