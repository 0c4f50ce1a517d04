"""From a TOML table to a frozen dataclass, checking every key and type on the way. Knows no table in particular."""

from __future__ import annotations

import types
from collections.abc import Mapping
from dataclasses import MISSING, fields, is_dataclass
from functools import cache
from typing import Any, Literal, TypeVar, Union, get_args, get_origin, get_type_hints

from cds.clinical.tables import Basis
from cds.errors import ContentError

Row = TypeVar("Row")
_BASIS_KEYS = ("source", "locator", "checked", "basis")


@cache
def _hints(row_type: Any) -> dict[str, Any]:
    return get_type_hints(row_type)


def make_row(row_type: type[Row], raw: Mapping[str, Any], *, table: str, name: str, sources: frozenset[str]) -> Row:
    """Build `row_type` from a TOML table. Raises ContentError naming the table, the row and the key at any doubt.

    The keys source, locator, checked and basis become one `Basis`; a missing mapping becomes an empty one.
    """
    kind: Any = row_type  # a class is hashable, whatever its instances are
    hints = _hints(kind)
    values: dict[str, Any] = {}
    left = dict(raw)
    if "basis" in hints:
        values["basis"] = _basis(left, table=table, name=name, sources=sources)
    for field in fields(row_type):  # type: ignore[arg-type]  # row types are dataclasses
        if field.name == "basis":
            continue
        hint = hints[field.name]
        if field.name in left:
            values[field.name] = _value(left.pop(field.name), hint, table=table, name=f"{name}.{field.name}")
        elif get_origin(hint) is not None and _is_mapping(hint):
            values[field.name] = {}
        elif field.default is MISSING and not _is_optional(hint):
            raise ContentError(table, name, f"the key '{field.name}' is missing", "Add it.")
        elif field.default is MISSING:
            values[field.name] = None
    if left:
        unknown = ", ".join(sorted(left))
        raise ContentError(table, name, f"unknown key: {unknown}", "Remove it, or correct its spelling.")
    return row_type(**values)


def _basis(left: dict[str, Any], *, table: str, name: str, sources: frozenset[str]) -> Basis:
    raw = {key: left.pop(key, None) for key in _BASIS_KEYS}
    if raw["source"] not in sources:
        raise ContentError(table, name, "its source is not in sources.toml", "Name a source listed there.")
    if raw["checked"] not in ("read", "memory"):
        raise ContentError(table, name, '\'checked\' must be "read" or "memory"', "Say whether the source was read.")
    if not isinstance(raw["locator"], str) or not raw["locator"]:
        raise ContentError(table, name, "'locator' is missing", "Say where in the source the figure stands.")
    kind = raw["basis"] or "source"
    if kind not in ("source", "policy"):
        raise ContentError(table, name, "'basis' must be \"policy\" or absent", "Correct it.")
    return Basis(
        source=raw["source"],
        locator=raw["locator"],
        checked=raw["checked"],
        kind="policy" if kind == "policy" else "source",
    )


def _is_mapping(hint: Any) -> bool:
    return get_origin(hint) in (dict, Mapping) or hint is Mapping


def _is_optional(hint: Any) -> bool:
    return get_origin(hint) in (Union, types.UnionType) and type(None) in get_args(hint)


def _value(raw: Any, hint: Any, *, table: str, name: str) -> Any:
    """Check `raw` against the annotation and return it in the annotation's own type."""
    origin = get_origin(hint)
    if _is_optional(hint):
        inner = next(arg for arg in get_args(hint) if arg is not type(None))
        return _value(raw, inner, table=table, name=name)
    if origin is Literal:
        if raw not in get_args(hint):
            raise ContentError(table, name, f"must be one of {', '.join(map(str, get_args(hint)))}", "Correct it.")
        return raw
    if origin in (tuple, frozenset):
        if not isinstance(raw, list):
            raise ContentError(table, name, "must be a list", "Put it in square brackets.")
        inner = get_args(hint)[0]
        items = [_value(item, inner, table=table, name=name) for item in raw]
        return tuple(items) if origin is tuple else frozenset(items)
    if _is_mapping(hint):
        if not isinstance(raw, dict):
            raise ContentError(table, name, "must be a table", "Put it in curly brackets.")
        inner = get_args(hint)[1]
        return {key: _value(item, inner, table=table, name=f"{name}.{key}") for key, item in raw.items()}
    if hint is float and isinstance(raw, int) and not isinstance(raw, bool):
        return float(raw)
    if is_dataclass(hint) or not isinstance(hint, type) or type(raw) is not hint:
        raise ContentError(table, name, f"must be {getattr(hint, '__name__', hint)}", "Correct the value.")
    return raw
