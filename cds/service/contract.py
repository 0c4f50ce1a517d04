"""The published OpenAPI document as one JSON object, its schemas joined in; and checks against it, for tests."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import Any

import orjson
import yaml

from cds.content.published import published

_SCHEMAS = {
    "card.schema.json": "Card",
    "assessment.schema.json": "Assessment",
    "record.schema.json": "Record",
    "order-check.schema.json": "OrderCheck",
}


@dataclass(frozen=True, slots=True)
class Contract:
    """The document with every reference inside itself."""

    document: dict[str, Any]

    @classmethod
    def load(cls) -> Contract:
        """Read openapi.yaml and the schemas it refers to. Raises ContentError if one is missing."""
        return cls(_document())


@cache
def _document() -> dict[str, Any]:
    document: dict[str, Any] = yaml.safe_load(published("openapi.yaml"))
    schemas = document["components"]["schemas"]
    for file, name in _SCHEMAS.items():
        schema = orjson.loads(published(f"schemas/{file}"))
        schema.pop("$schema")
        schema.pop("$id")
        schemas[name] = _joined(schema, name)
    joined = _joined(document, None)
    if not isinstance(joined, dict):
        raise TypeError("the OpenAPI document is no object")
    return joined


def _joined(node: Any, home: str | None) -> Any:
    """Point every reference to a schema file, or inside one, at the place it has in the document."""
    if isinstance(node, dict):
        return {key: _reference(value, home) if key == "$ref" else _joined(value, home) for key, value in node.items()}
    return [_joined(item, home) for item in node] if isinstance(node, list) else node


def _reference(target: Any, home: str | None) -> str:
    text = str(target)
    file, _, inside = text.removeprefix("schemas/").partition("#")
    name = _SCHEMAS.get(file) if file else home
    return f"#/components/schemas/{name}{inside}" if name is not None else text
