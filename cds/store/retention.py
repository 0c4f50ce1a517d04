"""How rows leave the store: by their age, or because a patient is to be forgotten."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, date, datetime, time

from sqlalchemy import Connection, delete

from cds.store import models

_REPLIES, _SHOWN = models.replies.c, models.shown_cards.c


@dataclass(frozen=True, slots=True, kw_only=True)
class PurgeCount:
    """How many rows were removed."""

    replies: int
    shown_cards: int


def purge(connection: Connection, before: date) -> PurgeCount:
    """Remove replies made and cards last shown before that day (UTC), whatever an answer's `until` says."""
    start = datetime.combine(before, time.min, UTC)
    return PurgeCount(
        replies=connection.execute(delete(models.replies).where(_REPLIES.made_at < start)).rowcount,
        shown_cards=connection.execute(delete(models.shown_cards).where(_SHOWN.last_shown_on < before)).rowcount,
    )


def forget(connection: Connection, patient_key: str) -> PurgeCount:
    """Remove everything kept of one patient."""
    return PurgeCount(
        replies=connection.execute(delete(models.replies).where(_REPLIES.patient_key == patient_key)).rowcount,
        shown_cards=connection.execute(delete(models.shown_cards).where(_SHOWN.patient_key == patient_key)).rowcount,
    )
