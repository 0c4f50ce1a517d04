"""What a Reference points at, as text: no resource is looked up here (see `bundle.py`)."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

FHIR_ID = re.compile(r"[A-Za-z0-9\-.]{1,128}")  # R4 allows 64; some systems send longer ones, which do no harm
_TYPE = r"[A-Z][A-Za-z]{1,63}"
_LITERAL = re.compile(
    rf"(?:(?P<base>https?://.+)/)?(?P<type>{_TYPE})/(?P<id>[^/?#\s]{{1,128}})(?:/_history/[^/?#\s]*)?"
)
_CONDITIONAL = re.compile(rf"(?P<type>{_TYPE})\?identifier=(?P<system>[^|&]*)\|(?P<value>[^&]+)")
_LONGEST = 2048


@dataclass(frozen=True, slots=True)
class Literal:
    """A reference by type and id; `base` is the server's address, None where the reference is relative."""

    base: str | None
    type: str
    id: str

    @property
    def key(self) -> str:
        return f"{self.type}/{self.id}"


@dataclass(frozen=True, slots=True)
class ByIdentifier:
    """A reference by a business identifier; `type` is None where it does not say of what."""

    type: str | None
    system: str
    value: str


@dataclass(frozen=True, slots=True)
class Contained:
    """A reference to a resource inside the one that refers: "#id"."""

    id: str


@dataclass(frozen=True, slots=True)
class ByAddress:
    """A reference to whatever entry has this fullUrl: "urn:uuid:..." or an address that names no type and id."""

    address: str


Target = Literal | ByIdentifier | Contained | ByAddress


def target_of(reference: object) -> Target | None:
    """What a Reference (a JSON object) points at, or None where it points at nothing we can follow.

    The literal `reference` decides; the identifier counts only without one.
    """
    if not isinstance(reference, Mapping):
        return None
    text = reference.get("reference")
    if isinstance(text, str) and text:
        return parse_reference(text)
    return _identifier(reference) if text is None else None


def parse_reference(text: str) -> Target | None:
    """As `target_of`, for the text of a literal reference."""
    if len(text) > _LONGEST:
        return None
    if text.startswith("#"):
        return Contained(text[1:])
    if text.startswith("urn:"):
        return ByAddress(text)
    if match := _LITERAL.fullmatch(text):
        return Literal(match["base"], match["type"], match["id"])
    if match := _CONDITIONAL.fullmatch(text):
        return ByIdentifier(match["type"], match["system"], match["value"])
    return ByAddress(text) if text.startswith(("http://", "https://")) else None


def named_resource(reference: object, resource_type: str) -> str | None:
    """ "Encounter/e1" for a literal reference to that type, relative or absolute; None for all others."""
    target = target_of(reference)
    return target.key if isinstance(target, Literal) and target.type == resource_type else None


def identifiers_of(resource: Mapping[str, Any]) -> tuple[tuple[str, str], ...]:
    """All (system, value) pairs of the resource's identifiers, without those that lack one of the two."""
    entries = resource.get("identifier")
    pairs = [(entry.get("system"), entry.get("value")) for entry in _list(entries) if isinstance(entry, Mapping)]
    return tuple((s, v) for s, v in pairs if isinstance(s, str) and isinstance(v, str) and s and v)


def _identifier(reference: Mapping[str, Any]) -> ByIdentifier | None:
    pairs = identifiers_of({"identifier": [reference.get("identifier")]})
    kind = reference.get("type")
    return ByIdentifier(kind if isinstance(kind, str) else None, *pairs[0]) if pairs else None


def _list(value: object) -> list[Any]:
    return value if isinstance(value, list) else []
