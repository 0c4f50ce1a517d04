"""The application inside the test, with a store in memory and a clock that stands still; every answer is held against the contract."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from datetime import UTC, date, datetime
from typing import Any

from builders import creatinine, heart_rate, lvef, nyha, patient, potassium, pressure, problem
from flask.testing import FlaskClient
from jsonschema import Draft202012Validator, FormatChecker
from werkzeug.test import TestResponse

from cds.cards.replies import Reply
from cds.content.load import load_content
from cds.service.app import create_app
from cds.service.contract import Contract
from cds.service.parts import Parts
from cds.store.shown import NotedCard, ShownCard

NOW = datetime(2026, 3, 1, 12, 0, tzinfo=UTC)
DAY = "2026-02-26"
CHART = (  # reduced ejection fraction, good values, no drug
    patient(),
    problem("heart failure", "2025-01-15"),
    lvef(30, "2025-11-20"),
    nyha(2, DAY),
    pressure(118, 70, DAY),
    heart_rate(70, DAY),
    creatinine(1.0, DAY),
    potassium(4.4, DAY),
)
DOCUMENT = Contract.load().document


@dataclass
class MemoryStore:
    """Replies and shown cards in dictionaries: what the SQL store must behave like."""

    replies: dict[str, dict[str, Reply]] = field(default_factory=dict)
    shown: dict[str, dict[str, NotedCard]] = field(default_factory=dict)
    ready: bool = True

    def replies_of(self, patient: str) -> tuple[Reply, ...]:
        return tuple(sorted(self.replies.get(patient, {}).values(), key=lambda reply: reply.made_at))

    def add_reply(self, patient: str, reply: Reply, *, made_by: str | None = None, reply_id: str | None = None) -> str:
        kept = self.replies.setdefault(patient, {})
        key = reply_id or f"reply-{len(kept) + 1}"
        kept.setdefault(key, reply)
        return key

    def note_shown(self, patient: str, cards: Iterable[ShownCard], on: date) -> None:
        known = self.shown.setdefault(patient, {})
        for card in cards:
            first = known[card.card_id].first_shown_on if card.card_id in known else on
            noted = {name: getattr(card, name) for name in ("card_id", "rule", "about", "tier", "facts")}
            known[card.card_id] = NotedCard(**noted, first_shown_on=first, last_shown_on=on)

    def shown_to(self, patient: str) -> tuple[NotedCard, ...]:
        return tuple(self.shown.get(patient, {}).values())

    def is_ready(self) -> bool:
        return self.ready


class OpenDoor:
    """Admits everyone, as on loopback."""

    def admit(self, authorization: str | None, scope: str) -> str:
        return "anyone"


@dataclass
class Seen:
    """Remembers what the watch was told."""

    answers: list[tuple[str, int, Mapping[str, Any]]] = field(default_factory=list)

    def answered(self, endpoint: str, status: int, seconds: float, facts: Mapping[str, Any]) -> None:
        self.answers.append((endpoint, status, facts))

    def metrics(self) -> tuple[bytes, str]:
        return b"", "text/plain; version=0.0.4; charset=utf-8"


def parts(**more: Any) -> Parts:
    given: dict[str, Any] = {
        "content": load_content(),
        "zone": UTC,
        "now": lambda: NOW,
        "clock": lambda: 0.0,
        "callers": OpenDoor(),
        "watch": Seen(),
        "store": MemoryStore(),
        **more,
    }
    return Parts(**given)


class Client:
    """A test client that checks every answer against the published document."""

    def __init__(self, built: Parts) -> None:
        self.parts = built
        self._client: FlaskClient = create_app(built).test_client()

    def post(self, path: str, body: bytes | None = None, **more: Any) -> TestResponse:
        more.setdefault("content_type", "application/fhir+json")
        return checked(self._client.post(path, data=body, **more), path, "post")

    def get(self, path: str, **more: Any) -> TestResponse:
        return checked(self._client.get(path, **more), path, "get")

    def open(self, method: str, path: str, **more: Any) -> TestResponse:
        return checked(self._client.open(path, method=method, **more), path, method.lower())


def checked(response: TestResponse, path: str, method: str) -> TestResponse:
    """The response, after it was found in the document: its path, status, media type and body."""
    schema = _schema(path.partition("?")[0], method, response.status_code, response.mimetype)
    if response.mimetype.endswith("json"):
        root = {**schema, "components": DOCUMENT["components"]}
        errors = sorted(Draft202012Validator(root, format_checker=FormatChecker()).iter_errors(response.json), key=str)
        assert not errors, f"{method} {path} {response.status_code}: {errors[0].json_path}: {errors[0].message[:300]}"
    return response


def _schema(path: str, method: str, status: int, media_type: str) -> dict[str, Any]:
    operation = _operation(path, method)
    if operation is None:
        assert status in (404, 405), f"{path} is not in the document and answered {status}"
        assert media_type == "application/problem+json"
        return dict(DOCUMENT["components"]["schemas"]["Problem"])
    response = operation["responses"].get(str(status), operation["responses"]["default"])
    if "$ref" in response:
        response = DOCUMENT["components"]["responses"][response["$ref"].rpartition("/")[2]]
    assert media_type in response["content"], f"{path} answered {status} as {media_type}"
    return dict(response["content"][media_type]["schema"])


def _operation(path: str, method: str) -> dict[str, Any] | None:
    for pattern, methods in DOCUMENT["paths"].items():
        wanted, given = pattern.split("/"), path.split("/")
        if len(wanted) == len(given) and all(
            w == g or (w.startswith("{") and g) for w, g in zip(wanted, given, strict=True)
        ):
            found = methods.get(method)
            return dict(found) if found is not None else None
    return None
