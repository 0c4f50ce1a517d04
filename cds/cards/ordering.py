"""Which card comes first: the tier, then safety before therapy before tests before data, then the earliest date."""

from __future__ import annotations

from datetime import date

from cds.cards.card import FAMILIES, TIERS, Card, HeldBack, Tier
from cds.clinical.findings import Due, Finding


def card_order(card: Card) -> tuple[int, int, date, str, str, str]:
    """Sort key for display; unique by the card's id, so that equal input always gives equal output."""
    due_by = card.due.due_by if card.due is not None else date.max
    return TIERS.index(card.tier), FAMILIES.index(card.family), due_by, card.rule, card.about or "", card.card_id


def held_back_order(item: HeldBack) -> tuple[str, str, str, str]:
    """Sort key of the cards that are not shown."""
    return item.reason, item.rule, item.about or "", item.card_id


def tier_of(usual: Tier, finding: Finding) -> Tier:
    """The tier of a rule's answer. A test that is ordered already is only noted until it is overdue (ruling 20)."""
    due = finding.due
    if due is not None and due.already_ordered is not None and not _is_overdue(due):
        return "note"
    return usual


def _is_overdue(due: Due) -> bool:
    return due.status in ("overdue", "overdue-in-grace")


def urgency(finding: Finding) -> tuple[date, int, str, str]:
    """Sort key of the findings that share a card: the earliest date first, then the longest overdue."""
    due = finding.due
    if due is None:
        return date.max, 0, finding.rule, finding.about or ""
    return due.due_by, -due.days_overdue_most, finding.rule, finding.about or ""
