"""The published files: JSON Schemas and the OpenAPI document, from the installed package or from the checkout."""

from __future__ import annotations

from functools import cache
from importlib.resources import files
from importlib.resources.abc import Traversable
from pathlib import Path

from cds.errors import ContentError


@cache
def published(name: str) -> bytes:
    """Read a published file, as "openapi.yaml" or "schemas/card.schema.json". Raises ContentError if it is not there."""
    for root in _roots():
        file = root
        for part in name.split("/"):
            file = file.joinpath(part)
        if file.is_file():
            return file.read_bytes()
    raise ContentError("openapi", name, "is not installed with the program", "Install the package anew.")


def _roots() -> list[Traversable]:
    """The folder inside the installed package, and the one of a checkout beside the package."""
    roots: list[Traversable] = [Path(__file__).parent.parent.parent / "openapi"]
    try:
        roots.insert(0, files("cds.published"))
    except ModuleNotFoundError:
        return roots
    return roots
