"""Cards, findings and phenotypes as plain data, in the form the published schema describes. Nothing is decided here."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

from cds.cards.card import Card, CardBasis, HeldBack
from cds.cards.replies import facts_of
from cds.cards.wording import Wording
from cds.clinical.findings import Due, Evidence, Finding
from cds.clinical.phenotype import Phenotype
from cds.clinical.situation import Gate

Shape = dict[str, Any]


def card_shape(card: Card, drafts: Sequence[Mapping[str, Any]], wording: Wording) -> Shape:
    """Give the card with its drafts and the answers it offers."""
    return {
        "card_id": card.card_id,
        "rule": card.rule,
        "about": card.about,
        "family": card.family,
        "tier": card.tier,
        "headline": card.headline,
        "because": list(card.because),
        "evidence": [evidence_shape(fact) for fact in card.evidence],
        "basis": [_basis_shape(basis) for basis in card.basis],
        "due": _due_shape(card.due),
        "drafts": list(drafts),
        "cautions": list(card.cautions),
        "replies": _replies(wording),
        "facts": facts_of(card),
        "expires_on": card.expires_on.isoformat(),
    }


def held_back_shape(item: HeldBack) -> Shape:
    """Give a card that is not shown; `until` only where it comes back by itself, `into` only where it was folded."""
    return {
        "card_id": item.card_id,
        "rule": item.rule,
        "about": item.about,
        "reason": item.reason,
        "until": item.until.isoformat() if item.until is not None else None,
        "into": item.into,
    }


def finding_shape(finding: Finding) -> Shape:
    """Give a finding as the trace shows it."""
    return {
        "rule": finding.rule,
        "about": finding.about,
        "outcome": finding.outcome,
        "action": finding.action,
        "because": finding.because,
        "evidence": [evidence_shape(fact) for fact in finding.evidence],
        "missing": list(finding.missing),
        "look_again_on": finding.look_again_on.isoformat() if finding.look_again_on is not None else None,
        "due": _due_shape(finding.due),
        "recommendations": list(finding.recommendations),
        "limits": list(finding.limits),
    }


def phenotype_shape(phenotype: Phenotype) -> Shape:
    """Give the kind of heart failure and what it rests on."""
    return {
        "kind": phenotype.kind,
        "lvef_percent": phenotype.lvef_percent,
        "measured_on": str(phenotype.measured) if phenotype.measured is not None else None,
        "because": phenotype.because,
        "flags": list(phenotype.flags),
        "evidence": [evidence_shape(fact) for fact in phenotype.evidence],
    }


def pillars_shape(findings: Iterable[Finding]) -> Shape:
    """Give for each pillar what its rule answers, so that no card is not taken for all is well."""
    return {
        finding.about: {"outcome": finding.outcome, "because": finding.because}
        for finding in findings
        if finding.rule.startswith("start-") and finding.about is not None
    }


def gate_shape(gate: Gate) -> Shape:
    """Give a fact that closed rules before they were asked."""
    return {"id": gate.id, "because": gate.words, "resource": gate.source}


def evidence_shape(fact: Evidence) -> Shape:
    """Give one fact; `resource` is null only for what is missing."""
    return {
        "resource": fact.resource,
        "what": fact.what,
        "value": fact.value,
        "unit": fact.unit,
        "date": fact.date,
        "role": fact.role,
    }


def _basis_shape(basis: CardBasis) -> Shape:
    return {
        "recommendation": basis.recommendation,
        "words": basis.words,
        "class_of_recommendation": basis.grade,
        "level_of_evidence": basis.level,
        "source": basis.source,
        "title": basis.title,
        "locator": basis.locator,
        "checked": basis.checked,
        "kind": basis.kind,
    }


def _due_shape(due: Due | None) -> Shape | None:
    if due is None:
        return None
    overdue: int | Shape = due.days_overdue
    if due.days_overdue != due.days_overdue_most:
        overdue = {"at_least": due.days_overdue, "at_most": due.days_overdue_most}
    return {
        "tests": list(due.tests),
        "status": due.status,
        "window_opens": due.window_opens.isoformat(),
        "due_by": due.due_by.isoformat(),
        "grace_ends": due.grace_ends.isoformat() if due.grace_ends is not None else None,
        "days_overdue": overdue,
        "already_ordered": due.already_ordered,
    }


def _replies(wording: Wording) -> list[Shape]:
    reasons = [{"code": code, "label": label} for code, label in wording.decline_reasons.items()]
    return [
        {"code": code, "label": label, **({"reasons": reasons} if code == "declined" else {})}
        for code, label in wording.replies.items()
    ]
