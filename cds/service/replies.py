"""POST /v1/cards/{card_id}/replies and GET /v1/patients/{id}/cards: what was shown, and what was answered to it."""

from __future__ import annotations

import re
from datetime import UTC, date
from typing import Any, get_args

from flask import Blueprint, Response, request

from cds.cards.replies import Reply, ReplyCode, longest_hold
from cds.errors import RequestError
from cds.service.admission import admit
from cds.service.answers import as_json
from cds.service.parts import Parts, Replies
from cds.service.requests_in import json_object, read_body, refuse_unknown
from cds.store.shown import NotedCard, ShownCard

_CARD_ID = re.compile(r"[0-9a-f]{24}")
_PATIENT_ID = re.compile(r"[A-Za-z0-9\-.]{1,128}")
_REPLY_ID = re.compile(r"[0-9a-fA-F]{8}(-[0-9a-fA-F]{4}){3}-[0-9a-fA-F]{12}")
_FACTS = re.compile(r"[0-9a-f]{16}")
_KEYS = frozenset({"patient", "code", "facts", "reason", "text", "until"})
_LONGEST_TEXT = 500


def blueprint(parts: Parts) -> Blueprint:
    """The two endpoints about answers to cards."""
    pages = Blueprint("replies", __name__)

    @pages.post("/v1/cards/<card_id>/replies")
    def reply(card_id: str) -> Response:
        refuse_unknown(request, frozenset())
        caller = admit(request, parts, "reply")
        store = _store(parts)
        if not _CARD_ID.fullmatch(card_id):
            raise RequestError(404, "no card has such an id", "Send the card_id of a card this service has shown")
        body = json_object(read_body(request, parts.limits, seconds=parts.body_seconds))
        patient = _patient(body.get("patient"))
        card = next((card for card in store.shown_to(patient) if card.card_id == card_id), None)
        if card is None:
            raise RequestError(
                404, "this card was not shown for this patient", "Send the patient and card_id of a card that was shown"
            )
        made = _reply(body, card, parts)
        key = request.headers.get("Idempotency-Key")
        if key is not None and not _REPLY_ID.fullmatch(key):
            raise RequestError(400, "Idempotency-Key is not understood", "Send a UUID")
        reply_id = store.add_reply(patient, made, made_by=caller, reply_id=key)
        held_until = longest_hold(made, card.tier, parts.content.reply_limits)
        return as_json({"reply_id": reply_id, "card_id": card_id, "held_until": held_until.isoformat()}, 201)

    @pages.get("/v1/patients/<patient_id>/cards")
    def cards(patient_id: str) -> Response:
        refuse_unknown(request, frozenset())
        admit(request, parts, "cards")
        store = _store(parts)
        if not _PATIENT_ID.fullmatch(patient_id):
            raise RequestError(404, "no patient has such an id", "Send the id of the Patient resource")
        patient = f"Patient/{patient_id}"
        replies = store.replies_of(patient)
        shown = sorted(store.shown_to(patient), key=lambda card: (card.rule, card.about or "", card.card_id))
        return as_json(
            {
                "format": "gdmt-cards/patient-cards",
                "format_version": "1.0",
                "patient": patient,
                "cards": [_card(card, [r for r in replies if r.card_id == card.card_id], parts) for card in shown],
            }
        )

    return pages


def _store(parts: Parts) -> Replies:
    if parts.store is None:
        raise RequestError(503, "this service keeps no replies", "Set a store in its settings")
    return parts.store


def _patient(value: Any) -> str:
    text = value.removeprefix("Patient/") if isinstance(value, str) else ""
    if not _PATIENT_ID.fullmatch(text):
        raise RequestError(400, "patient is missing or no reference to a Patient", 'Send it as "Patient/<id>"')
    return f"Patient/{text}"


def _reply(body: dict[str, Any], card: ShownCard, parts: Parts) -> Reply:
    """The reply of a body. Raises RequestError 400 naming the key that is wrong."""
    if set(body) - _KEYS:
        raise RequestError(400, "the body has keys that are not known", f"Send only {', '.join(sorted(_KEYS))}")
    code, reason, text, facts = (body.get(key) for key in ("code", "reason", "text", "facts"))
    if code not in get_args(ReplyCode):
        raise RequestError(400, "code is none of the answers", f"Send one of {', '.join(get_args(ReplyCode))}")
    if not isinstance(facts, str) or not _FACTS.fullmatch(facts):
        raise RequestError(400, "facts is missing", "Send the facts of the card that was answered")
    reasons = parts.content.wording.decline_reasons
    if (code == "declined") != (reason is not None) or (reason is not None and reason not in reasons):
        raise RequestError(400, "reason does not fit", f"With declined send one of {', '.join(reasons)}; else none")
    if text is not None and (not isinstance(text, str) or not text.strip() or len(text) > _LONGEST_TEXT):
        raise RequestError(400, "text is no text, or too long", f"Send at most {_LONGEST_TEXT} characters")
    if reason == "other" and text is None:
        raise RequestError(400, "text is missing", "With the reason other say which in text")
    return Reply(
        card_id=card.card_id,
        rule=card.rule,
        about=card.about,
        code=next(known for known in get_args(ReplyCode) if known == code),
        facts=facts,
        made_at=parts.now().astimezone(UTC),
        reason=reason,
        text=text,
        until=_until(body.get("until"), code, parts.now().astimezone(parts.zone).date()),
    )


def _until(value: Any, code: Any, today: date) -> date | None:
    if (code == "later") != (value is not None):
        raise RequestError(400, "until does not fit", "With later send a day, YYYY-MM-DD; else none")
    if value is None:
        return None
    try:
        until = date.fromisoformat(value) if isinstance(value, str) and len(value) == 10 else None
    except ValueError:
        until = None
    if until is None or until < today:
        raise RequestError(400, "until is no day from today on", "Send YYYY-MM-DD")
    return until


def _card(card: NotedCard, replies: list[Reply], parts: Parts) -> dict[str, Any]:
    held_until = longest_hold(replies[-1], card.tier, parts.content.reply_limits) if replies else None
    return {
        "card_id": card.card_id,
        "rule": card.rule,
        "about": card.about,
        "tier": card.tier,
        "facts": card.facts,
        "first_shown_on": card.first_shown_on.isoformat(),
        "last_shown_on": card.last_shown_on.isoformat(),
        "held_until": held_until.isoformat() if held_until is not None else None,
        "replies": [
            {
                "code": reply.code,
                "reason": reply.reason,
                "text": reply.text,
                "until": reply.until.isoformat() if reply.until is not None else None,
                "made_at": reply.made_at.isoformat(),
            }
            for reply in replies
        ],
    }
