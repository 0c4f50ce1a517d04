"""Does an Observation say its sample was haemolysed? Such a potassium is too high by no fault of the patient."""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from typing import Any

# HL7 table 0493 (specimen condition) HEM; the word itself in local code systems.
_CODES = frozenset({"HEM", "HEMOLYZED", "HAEMOLYSED", "HEMOLYSED"})
_WORD = re.compile(r"ha?emoly[sz]", re.IGNORECASE)
# What stands before the word ("not visibly haemolysed", "no icterus, lipaemia or haemolysis"), or after it ("haemolysis:
# none", "haemolysis index 0"). A comma alone ends a denial: "no clots, haemolysed" is haemolysed.
_NEGATED = re.compile(
    r"\b(?:no|not|non|without|nil|negative for|absence of|free of|free from)\b[\s-]*"
    r"(?:(?:\w+\s+){0,3}|(?:\w+,?\s+){0,5}n?or\s+)$|\bun-?$",
    re.IGNORECASE,
)
_DENIED_AFTER = re.compile(
    r"is\b(?:\s+(?:index|score|grade))?\s*[:=(-]*\s*(?:is\s+|was\s+)?"
    r"(?:none|nil|absent|negative|not\s+(?:seen|detected|present|observed|visible)|0(?![.,]?\d)|no\s*(?:$|[.;,)]))",
    re.IGNORECASE,
)
_LONGEST_TEXT = 10_000


def is_haemolysed(resource: Mapping[str, Any]) -> bool:
    """True if an interpretation or a note says so, and does not deny it ("no haemolysis", "not haemolysed")."""
    return any(code in _CODES for code in _codes(resource)) or any(_says_so(text) for text in _texts(resource))


def _says_so(text: str) -> bool:
    text = text[:_LONGEST_TEXT]
    return any(
        not _NEGATED.search(text[max(0, word.start() - 60) : word.start()])
        and not _DENIED_AFTER.match(text, word.end())
        for word in _WORD.finditer(text)
    )


def _codes(resource: Mapping[str, Any]) -> Iterator[str]:
    for concept in _mappings(resource.get("interpretation")):
        for coding in _mappings(concept.get("coding")):
            code = coding.get("code")
            if isinstance(code, str):
                yield code.upper()


def _texts(resource: Mapping[str, Any]) -> Iterator[str]:
    for concept in _mappings(resource.get("interpretation")):
        texts = [concept.get("text"), *(coding.get("display") for coding in _mappings(concept.get("coding")))]
        yield from (text for text in texts if isinstance(text, str))
    for note in _mappings(resource.get("note")):
        if isinstance(note.get("text"), str):
            yield note["text"]


def _mappings(value: object) -> list[Mapping[str, Any]]:
    return [item for item in value if isinstance(item, Mapping)] if isinstance(value, list) else []
