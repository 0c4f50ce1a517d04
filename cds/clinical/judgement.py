"""What stands for and against one drug in one patient, collected row by row."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field
from datetime import date
from typing import Literal

from cds.clinical.findings import Evidence
from cds.clinical.tables import Effect

Answer = Literal["start", "review", "unknown", "block"]


@dataclass(slots=True)
class Judgement:
    """What stands for and against one candidate drug. `reasons` are sentences' halves, in the order found."""

    drug: str
    drug_class: str
    blocks: list[str] = field(default_factory=list)
    reviews: list[str] = field(default_factory=list)
    missing: list[str] = field(default_factory=list)
    evidence: list[Evidence] = field(default_factory=list)
    limits: list[str] = field(default_factory=list)
    fresh: list[str] = field(default_factory=list)  # values that are fresh enough, in words
    wanted_tests: list[str] = field(default_factory=list)
    needs_referral: bool = False
    look_again: list[date] = field(default_factory=list)  # when a time-bound block is over
    held: set[tuple[str, Effect]] = field(default_factory=set)  # analytes a limit has spoken about
    to_repeat: dict[str, int] = field(default_factory=dict)  # analyte: within how many days

    @property
    def answer(self) -> Answer:
        """A block beats what is missing, what is missing beats a review: more data cannot lift a block."""
        if self.blocks:
            return "block"
        if self.missing:
            return "unknown"
        return "review" if self.reviews else "start"

    def add(self, effect: Effect, words: str, row: str, evidence: Iterable[Evidence] = ()) -> None:
        {"block": self.blocks, "review": self.reviews, "missing": self.missing}[effect].append(words)
        self.limits.append(row)
        self.evidence.extend(evidence)


def concerns(
    classes: tuple[str, ...], drugs: tuple[str, ...], not_drugs: tuple[str, ...], drug: str, drug_class: str
) -> bool:
    """True if a row of these classes and drugs is about the drug."""
    return drug_class in classes and (not drugs or drug in drugs) and drug not in not_drugs
