"""The published JSON Schemas, as a receiver would use them to check what it gets."""

from __future__ import annotations

import json
from functools import cache
from pathlib import Path
from typing import Any

from jsonschema import Draft202012Validator
from referencing import Registry, Resource

SCHEMAS = Path(__file__).parents[1] / "openapi" / "schemas"


@cache
def schema(name: str) -> dict[str, Any]:
    return dict(json.loads((SCHEMAS / f"{name}.schema.json").read_text(encoding="utf-8")))


@cache
def registry() -> Registry[Any]:
    known = [schema(path.name.removesuffix(".schema.json")) for path in SCHEMAS.glob("*.schema.json")]
    return Registry().with_resources((one["$id"], Resource.from_contents(one)) for one in known)


def faults(name: str, document: object, part: str = "") -> list[str]:
    """What a document breaks of a schema, or of a part of it ("#/properties/..."). With formats, so that a date is a date."""
    errors = _validator(name, part).iter_errors(document)
    return [f"{error.json_path}: {error.message}" for error in errors]


@cache
def _validator(name: str, part: str) -> Draft202012Validator:
    wanted = {"$ref": f"{schema(name)['$id']}{part}"}
    checker = Draft202012Validator.FORMAT_CHECKER
    return Draft202012Validator(wanted, registry=registry(), format_checker=checker)
