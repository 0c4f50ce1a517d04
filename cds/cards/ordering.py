"""Which card comes first: the tier, then safety before therapy before tests before data, then the rule, then the date."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import date

from cds.cards.card import FAMILIES, TIERS, Card, HeldBack, Tier
from cds.clinical.findings import Due, Finding
from cds.clinical.harm import SEVERITIES

_ACTIONS = ("stop", "lower", "switch", "test", "review", "raise", "start", "refer", "document")
_OUTCOMES = ("open", "unknown", "blocked")


def card_order(card: Card, rules: tuple[str, ...]) -> tuple[int, int, int, date, str, str]:
    """Sort key for display; unique by the card's id, so that equal input always gives equal output."""
    due_by = card.due.due_by if card.due is not None else date.max
    return (
        TIERS.index(card.tier),
        FAMILIES.index(card.family),
        rules.index(card.rule),
        due_by,
        card.about or "",
        card.card_id,
    )


def held_back_order(item: HeldBack) -> tuple[str, str, str, str]:
    """Sort key of the cards that are not shown."""
    return item.reason, item.rule, item.about or "", item.card_id


def tier_of(usual: Tier, finding: Finding, by_severity: Mapping[str, Tier]) -> Tier:
    """The tier of a rule's answer: by its severity where it has one, else the rule's usual one.

    A test that is ordered already is only noted until it is overdue (ruling 20).
    """
    due = finding.due
    if due is not None and due.already_ordered is not None and not _is_overdue(due):
        return "note"
    return by_severity[finding.severity] if finding.severity is not None else usual


def _is_overdue(due: Due) -> bool:
    return due.status in ("overdue", "overdue-in-grace")


def lead(finding: Finding) -> tuple[int, int, int, bool, date, int, str, str]:
    """Sort key of the findings that share a card: the one that leads it comes first.

    Open before unknown before blocked; the most severe; stopping before lowering before testing; the earliest date.
    """
    due = finding.due
    severity = SEVERITIES.index(finding.severity) if finding.severity is not None else len(SEVERITIES)
    action = _ACTIONS.index(finding.action) if finding.action is not None else len(_ACTIONS)
    due_by = due.due_by if due is not None else date.max
    overdue = -due.days_overdue_most if due is not None else 0
    pair = finding.rule == "interaction"  # what a drug does by itself is said before what it does with others
    return _OUTCOMES.index(finding.outcome), severity, action, pair, due_by, overdue, finding.rule, finding.about or ""
