"""Replies of clinicians to cards: kept once each, given back oldest first."""

from __future__ import annotations

import uuid
from dataclasses import dataclass
from typing import Any, cast

from sqlalchemy import Connection, Row, select

from cds.cards.replies import Reply, ReplyCode
from cds.store import models
from cds.store.failures import ReplyIdError, ReplyIdTakenError
from cds.store.keys import Keys, Seal

_REPLIES = models.replies.c


@dataclass(frozen=True, slots=True, kw_only=True)
class NewReply:
    """A reply about to be kept. `reply_id` is a UUID in its usual spelling."""

    patient: str
    reply: Reply
    reply_id: str
    made_by: str | None
    keep_reference: bool


def id_of(given: str | None) -> str:
    """The id a reply is kept under: the one given in its usual spelling, else a new one. Raises ReplyIdError."""
    if given is None:
        return str(uuid.uuid4())
    try:
        return str(uuid.UUID(given))
    except ValueError:
        raise ReplyIdError(
            "the id given for the reply is no UUID", "Give a UUID made for this reply, or none."
        ) from None


def add(connection: Connection, keys: Keys, new: NewReply) -> None:
    """Keep the reply, unless it was kept under its id before. Raises ReplyIdTakenError if the id is another reply's."""
    reply, seal = new.reply, keys.seal_of(new.patient)
    row = {
        "id": new.reply_id,
        "patient_key": keys.patient(new.patient),
        "patient_reference": new.patient if new.keep_reference else None,
        "card_key": keys.card(reply.card_id),
        "card_sealed": seal.close(reply.card_id),
        "rule": reply.rule,
        "about": reply.about,
        "code": reply.code,
        "reason": reply.reason,
        "text": None if reply.text is None else seal.close(reply.text),
        "until": reply.until,
        "facts": seal.close(reply.facts),
        "made_at": reply.made_at,
        "made_by_key": None if new.made_by is None else keys.maker(new.made_by),
    }
    insert = models.insert_into(connection, models.replies).values(row)
    kept = connection.execute(insert.on_conflict_do_nothing(index_elements=["id"]).returning(_REPLIES.id)).first()
    if kept is None and not _is_the_same(connection, row, reply, seal):
        raise ReplyIdTakenError(
            "the id given for the reply is the id of another reply", "Give every reply an id of its own."
        )


def of_patient(connection: Connection, keys: Keys, patient: str) -> tuple[Reply, ...]:
    """The patient's replies, oldest first; those of one instant in the order they came. Empty if there are none."""
    seal = keys.seal_of(patient)
    rows = connection.execute(
        select(models.replies)
        .where(_REPLIES.patient_key == keys.patient(patient))
        .order_by(_REPLIES.made_at, _REPLIES.number)
    )
    return tuple(_reply(row, seal) for row in rows)


def _is_the_same(connection: Connection, row: dict[str, Any], reply: Reply, seal: Seal) -> bool:
    """Whether the reply under this id says the same. A client's retry comes later, so its instant and facts may differ."""
    kept = connection.execute(select(models.replies).where(_REPLIES.id == row["id"])).first()
    if kept is None:  # forgotten or purged in between: nothing was lost that should be there
        return True
    if (kept.patient_key, kept.card_key) != (row["patient_key"], row["card_key"]):
        return False
    before = _reply(kept, seal)
    return (before.code, before.reason, before.text, before.until) == (
        reply.code,
        reply.reason,
        reply.text,
        reply.until,
    )


def _reply(row: Row[Any], seal: Seal) -> Reply:
    return Reply(
        card_id=seal.open(row.card_sealed),
        rule=row.rule,
        about=row.about,
        code=cast("ReplyCode", row.code),
        reason=row.reason,
        text=None if row.text is None else seal.open(row.text),
        until=row.until,
        facts=seal.open(row.facts),
        made_at=row.made_at,
    )
