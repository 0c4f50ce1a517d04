"""What rows of every clinical table are made of."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

Sign = Literal["<", "<=", ">", ">="]
Effect = Literal["block", "review", "missing"]
PhenotypeKind = Literal[
    "none",
    "unclassified",
    "pre-hf",
    "hfref",
    "hfimpef",
    "hfmref",
    "hfpef",
    "high-output",
    "right-sided",
]


@dataclass(frozen=True, slots=True, kw_only=True)
class Basis:
    """Where a row comes from. `checked` is "read" (in the source) or "memory"; `kind` is "source" or "policy" (ours)."""

    source: str  # key of sources.toml
    locator: str
    checked: Literal["read", "memory"]
    kind: Literal["source", "policy"] = "source"
