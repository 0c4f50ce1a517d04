"""Which cards were shown of a patient, from which day and until which: what an answer to a card is held against."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from datetime import date
from typing import Any

from sqlalchemy import ColumnElement, Connection, Row, and_, case, select

from cds.store import models
from cds.store.keys import Keys, Seal

_SHOWN = models.shown_cards.c


@dataclass(frozen=True, slots=True, kw_only=True)
class ShownCard:
    """A card that was shown. `facts` is the digest of its facts at that time."""

    card_id: str
    rule: str
    about: str | None
    tier: str
    facts: str


@dataclass(frozen=True, slots=True, kw_only=True)
class NotedCard(ShownCard):
    """A card as the store knows it: as it was on the last of the days it was shown."""

    first_shown_on: date
    last_shown_on: date


def of_patient(connection: Connection, keys: Keys, patient: str) -> tuple[NotedCard, ...]:
    """The cards shown of a patient, the longest known first, then by rule. Empty if there are none."""
    return tuple(
        sorted(
            _noted_of(connection, keys, patient, _SHOWN.patient_key == keys.patient(patient)),
            key=lambda card: (card.first_shown_on, card.rule, card.about or "", card.card_id),
        )
    )


def not_noted(
    connection: Connection, keys: Keys, patient: str, cards: Iterable[ShownCard], on: date
) -> tuple[ShownCard, ...]:
    """The cards that being shown on this day tells something new about; the last one of each id."""
    asked = {card.card_id: card for card in cards}
    these = and_(
        _SHOWN.patient_key == keys.patient(patient), _SHOWN.card_key.in_([keys.card(card_id) for card_id in asked])
    )
    known = {card.card_id: card for card in _noted_of(connection, keys, patient, these)}
    return tuple(card for card in asked.values() if _is_news(card, known, on))


def note(connection: Connection, keys: Keys, patient: str, cards: Iterable[ShownCard], on: date) -> None:
    """Write that these cards (no id twice) were shown on this day. An earlier day changes only the first day shown."""
    patient_key, seal = keys.patient(patient), keys.seal_of(patient)
    rows = [
        {
            "patient_key": patient_key,
            "card_key": keys.card(card.card_id),
            "card_sealed": seal.close(card.card_id),
            "rule": card.rule,
            "about": card.about,
            "tier": card.tier,
            "facts": seal.close(card.facts),
            "first_shown_on": on,
            "last_shown_on": on,
        }
        for card in cards
    ]
    if not rows:
        return
    rows.sort(key=lambda row: str(row["card_key"]))  # two writers that lock rows in one order never wait for each other
    insert = models.insert_into(connection, models.shown_cards).values(rows)
    new = insert.excluded
    is_newer = new.last_shown_on >= _SHOWN.last_shown_on
    changes: dict[str, ColumnElement[Any]] = {
        name: case((is_newer, new[name]), else_=_SHOWN[name])
        for name in ("rule", "about", "tier", "facts", "last_shown_on")
    }
    changes["first_shown_on"] = case(
        (new.first_shown_on < _SHOWN.first_shown_on, new.first_shown_on), else_=_SHOWN.first_shown_on
    )
    connection.execute(insert.on_conflict_do_update(index_elements=["patient_key", "card_key"], set_=changes))


def _is_news(card: ShownCard, known: dict[str, NotedCard], on: date) -> bool:
    before = known.get(card.card_id)
    if before is None or not before.first_shown_on <= on <= before.last_shown_on:
        return True
    as_before = (before.rule, before.about, before.tier, before.facts) == (card.rule, card.about, card.tier, card.facts)
    return on == before.last_shown_on and not as_before


def _noted_of(connection: Connection, keys: Keys, patient: str, which: ColumnElement[bool]) -> tuple[NotedCard, ...]:
    seal = keys.seal_of(patient)
    return tuple(_noted(row, seal) for row in connection.execute(select(models.shown_cards).where(which)))


def _noted(row: Row[Any], seal: Seal) -> NotedCard:
    return NotedCard(
        card_id=seal.open(row.card_sealed),
        rule=row.rule,
        about=row.about,
        tier=row.tier,
        facts=seal.open(row.facts),
        first_shown_on=row.first_shown_on,
        last_shown_on=row.last_shown_on,
    )
