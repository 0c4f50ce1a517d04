"""What a clinician answered to a card, and how long that holds the card back. Kept by the store; decided here."""

from __future__ import annotations

import hashlib
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from datetime import date, datetime, timedelta
from typing import Literal

from cds.cards.card import Card, HeldBack

ReplyCode = Literal["accepted", "declined", "done-elsewhere", "later"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Reply:
    """One answer. `facts` is the digest of the card's facts at that time; `until` only with "later"."""

    card_id: str
    rule: str
    about: str | None
    code: ReplyCode
    facts: str
    made_at: datetime
    reason: str | None = None
    text: str | None = None
    until: date | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class ReplyLimits:
    """For how many days an answer holds a card back, by its code; for cards of tier danger much shorter."""

    days: Mapping[str, int]
    danger_days: Mapping[str, int]


def facts_of(card: Card) -> str:
    """A digest of what the card says and rests on: another value, drug or tier gives another digest.

    Dates are not in it: time passing alone changes no fact.
    """
    parts = [card.tier, card.rule, card.about or ""]
    parts += sorted(f"{fact.resource}|{fact.what}|{fact.value}|{fact.unit}|{fact.role}" for fact in card.evidence)
    return hashlib.sha256("\x1f".join(parts).encode()).hexdigest()[:16]


def longest_hold(reply: Reply, tier: str, limits: ReplyLimits) -> date:
    """The last day on which the reply holds a card of the tier back, if its facts stay as they were."""
    days = (limits.danger_days if tier == "danger" else limits.days)[reply.code]
    longest = reply.made_at.date() + timedelta(days=days)
    return min(reply.until, longest) if reply.until is not None else longest


def hold_back(
    cards: Iterable[Card], replies: Iterable[Reply], limits: ReplyLimits, *, today: date
) -> tuple[tuple[Card, ...], tuple[HeldBack, ...]]:
    """Part the cards into those to show and those an answer holds back. The newest answer to a card decides.

    A reply holds while its time lasts and the facts of the card have not changed.
    """
    newest: dict[str, Reply] = {}
    for reply in sorted(replies, key=lambda r: r.made_at):
        if reply.made_at.date() <= today:
            newest[reply.card_id] = reply
    shown: list[Card] = []
    held: list[HeldBack] = []
    for card in cards:
        reply_to = newest.get(card.card_id)
        until = longest_hold(reply_to, card.tier, limits) if reply_to is not None else None
        if reply_to is not None and until is not None and reply_to.facts == facts_of(card) and today <= until:
            held.append(
                HeldBack(card_id=card.card_id, rule=card.rule, about=card.about, reason="answered", until=until)
            )
        else:
            shown.append(card)
    return tuple(shown), tuple(held)
