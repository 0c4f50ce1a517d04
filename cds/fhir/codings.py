"""CodeableConcept -> its codings and texts, with the code systems under one short name each.

A code means something only together with its system. The OID of a system is the same system; any other address is not,
however alike its codes look (ICD-10 of the WHO is not ICD-10-CM).
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import Any, NamedTuple

SYSTEMS: Mapping[str, str] = {
    "http://snomed.info/sct": "snomed",
    "urn:oid:2.16.840.1.113883.6.96": "snomed",
    "http://www.nlm.nih.gov/research/umls/rxnorm": "rxnorm",
    "urn:oid:2.16.840.1.113883.6.88": "rxnorm",
    "http://www.whocc.no/atc": "atc",
    "urn:oid:2.16.840.1.113883.6.73": "atc",
    "http://loinc.org": "loinc",
    "urn:oid:2.16.840.1.113883.6.1": "loinc",
    "http://hl7.org/fhir/sid/icd-10-cm": "icd-10-cm",
    "urn:oid:2.16.840.1.113883.6.90": "icd-10-cm",
    "http://www.cms.gov/Medicare/Coding/ICD10": "icd-10-pcs",
    "http://hl7.org/fhir/sid/icd-10-pcs": "icd-10-pcs",
    "urn:oid:2.16.840.1.113883.6.4": "icd-10-pcs",
}
_LONGEST_CODE = 64
_LONGEST_TEXT = 500  # an order's text is short; a hostile one must not cost time
_BRACKETS = re.compile(r"\[[^\]]*\]?")
_WORD = re.compile(r"[a-z0-9]+|%")


class Coding(NamedTuple):
    """One coding: `system` is our short name, or the address as sent where we do not know it ("" if there is none)."""

    system: str
    code: str
    display: str


def codings_of(concept: object) -> list[Coding]:
    """Read the codings of a CodeableConcept in their order; what is no coding is passed over."""
    items = concept.get("coding") if isinstance(concept, Mapping) else None
    if not isinstance(items, list):
        return []
    return [coding_of(item) for item in items if isinstance(item, Mapping)]


def coding_of(item: Mapping[str, Any]) -> Coding:
    """Read one Coding; whatever is not text is taken as absent."""
    system, code, display = item.get("system"), item.get("code"), item.get("display")
    address = system if isinstance(system, str) else ""
    return Coding(
        SYSTEMS.get(address, address),
        code.strip() if isinstance(code, str) and len(code) <= _LONGEST_CODE else "",
        display[:_LONGEST_TEXT] if isinstance(display, str) else "",
    )


def texts_of(concept: object, *more: object) -> list[str]:
    """List the texts of a CodeableConcept, its own first, then the displays, then `more`; each once, none empty."""
    own = concept.get("text") if isinstance(concept, Mapping) else None
    texts = [own, *(coding.display for coding in codings_of(concept)), *more]
    return list(dict.fromkeys(text[:_LONGEST_TEXT] for text in texts if isinstance(text, str) and text.strip()))


def without_brackets(text: str) -> str:
    """The text without what stands in square brackets: a brand (ruling 54)."""
    return " ".join(_BRACKETS.sub(" ", text).split())


def plain_text(text: object) -> str:
    """A sender's text for counting and display, without invisible characters; "" for what is no text."""
    return "".join(c for c in text[:_LONGEST_TEXT] if c.isprintable()).strip() if isinstance(text, str) else ""


def words_of(text: str) -> list[str]:
    """The text as lower-case words and percent signs, without square brackets and punctuation."""
    return _WORD.findall(_BRACKETS.sub(" ", text.lower()).replace("'s", ""))


def shown_text(concept: object) -> str:
    """The text a reader would recognise the concept by: its own, else the first display; "" if there is none."""
    texts = texts_of(concept)
    return without_brackets(texts[0]) if texts else ""
