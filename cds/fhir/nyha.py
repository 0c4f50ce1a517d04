"""Answers that name a NYHA class -> 1 to 4. Codes first; words only where no code is known."""

from __future__ import annotations

import re
from collections.abc import Mapping
from types import MappingProxyType
from typing import Any

_LOINC = ("http://loinc.org", "urn:oid:2.16.840.1.113883.6.1")
_SNOMED = ("http://snomed.info/sct", "urn:oid:2.16.840.1.113883.6.96")

# LOINC answer list of 88020-3 (from memory, marked so in our code table; the last digit is a check digit, modulus 10, and
# does not count up); SNOMED CT findings of NYHA class. Each from class I to IV.
_LOINC_ANSWERS = ("LA28404-4", "LA28405-1", "LA28406-9", "LA28407-7")
_SNOMED_FINDINGS = ("420300004", "421704003", "420913000", "422293003")
_ANSWERS: Mapping[tuple[str, str], int] = MappingProxyType(
    {(system, code): grade for system in _LOINC for grade, code in enumerate(_LOINC_ANSWERS, start=1)}
    | {(system, code): grade for system in _SNOMED for grade, code in enumerate(_SNOMED_FINDINGS, start=1)}
)
_ROMAN = MappingProxyType({"i": 1, "ii": 2, "iii": 3, "iv": 4})
_WORDS = re.compile(
    r"(?:new york heart association|nyha)?[\s:-]*(?:functional\s+)?(?:class(?:ification)?)?[\s:-]*(?P<grade>i{1,3}|iv|[1-4])",
    re.IGNORECASE,
)
_LONGEST_TEXT = 100


def class_of_concept(concept: Mapping[str, Any]) -> int | None:
    """The class the codings agree on, else what text or displays say; None for none or several."""
    codings = concept.get("coding")
    pairs = [c for c in codings if isinstance(c, Mapping)] if isinstance(codings, list) else []
    found = {_answer(coding) for coding in pairs} - {None}
    if not found:
        words = [concept.get("text"), *(coding.get("display") for coding in pairs)]
        found = {class_of_text(text) for text in words} - {None}
    return found.pop() if len(found) == 1 else None


def class_of_text(text: object) -> int | None:
    """The class a short text names ("NYHA class III", "III", "3"); None for anything more or less."""
    if not isinstance(text, str) or len(text) > _LONGEST_TEXT:
        return None
    match = _WORDS.fullmatch(text.strip())
    if match is None:
        return None
    grade = match["grade"].lower()
    return _ROMAN.get(grade) or int(grade)


def _answer(coding: Mapping[str, Any]) -> int | None:
    system, code = coding.get("system"), coding.get("code")
    return _ANSWERS.get((system, code)) if isinstance(system, str) and isinstance(code, str) else None
