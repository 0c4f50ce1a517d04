"""What a host EHR displays: the card, its parts and its stable id. How cards come about is in `folding`."""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from datetime import date
from typing import Literal

from cds.clinical.findings import DrugProposal, Due, Evidence, Finding, TestProposal

Family = Literal["therapy-gap", "dose", "safety", "monitoring", "order", "data"]
Tier = Literal["danger", "act", "plan", "note"]
HeldBackReason = Literal["answered", "folded", "not-about-this-order", "rule-off", "burden"]

FAMILIES: tuple[Family, ...] = ("safety", "order", "dose", "therapy-gap", "monitoring", "data")
TIERS: tuple[Tier, ...] = ("danger", "act", "plan", "note")
LONGEST_HEADLINE = 120
_ID_LENGTH = 24


@dataclass(frozen=True, slots=True, kw_only=True)
class CardBasis:
    """One source a card rests on. `recommendation`, `words`, `grade` and `level` are None for a limit or schedule row."""

    source: str
    title: str
    locator: str
    checked: Literal["read", "memory"]
    kind: Literal["source", "policy"]
    recommendation: str | None = None
    words: str | None = None
    grade: str | None = None
    level: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Card:
    """One recommendation for display. `because` holds a sentence or more for each finding folded into it.

    Proposals become FHIR drafts later; the card knows no FHIR.
    """

    card_id: str
    rule: str
    about: str | None
    family: Family
    tier: Tier
    headline: str
    because: tuple[str, ...]
    evidence: tuple[Evidence, ...]
    basis: tuple[CardBasis, ...]
    due: Due | None
    drug_proposals: tuple[DrugProposal, ...]
    test_proposals: tuple[TestProposal, ...]
    cautions: tuple[str, ...]
    expires_on: date


@dataclass(frozen=True, slots=True, kw_only=True)
class HeldBack:
    """A card that is not shown, with the reason; `into` names the card it was folded into."""

    card_id: str
    rule: str
    about: str | None
    reason: HeldBackReason
    until: date | None = None
    into: str | None = None


def card_id(patient: str, finding: Finding) -> str:
    """Name the card of a finding: the same on every day and for every new measurement (ruling 48).

    It stands on the patient reference, rule, subject, action and what opened it, never on a measured value.
    """
    parts = (patient, finding.rule, finding.about or "", finding.action or finding.outcome, *sorted(finding.opened_by))
    return hashlib.sha256("\x1f".join(parts).encode()).hexdigest()[:_ID_LENGTH]
