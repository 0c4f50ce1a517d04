"""What the application is built from, and what it asks of each part. No endpoint here."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from datetime import date, datetime, tzinfo
from typing import Any, Protocol

from cds.cards.replies import Reply
from cds.content.load import Content
from cds.fhir.reading import SERVICE_LIMITS, Limits
from cds.service.requests_in import Fetch
from cds.store.shown import NotedCard, ShownCard


class Replies(Protocol):
    """What the endpoints need of the store."""

    def replies_of(self, patient: str) -> tuple[Reply, ...]: ...
    def add_reply(
        self, patient: str, reply: Reply, *, made_by: str | None = None, reply_id: str | None = None
    ) -> str: ...
    def note_shown(self, patient: str, cards: Iterable[ShownCard], on: date) -> None: ...
    def shown_to(self, patient: str) -> Iterable[NotedCard]: ...
    def is_ready(self) -> bool: ...


class Callers(Protocol):
    """Who is asking, and may they? Raises errors of ours with their HTTP status."""

    def admit(self, authorization: str | None, scope: str) -> str: ...


class Watch(Protocol):
    """Counts and logs one answered request. Gets no value of any patient."""

    def answered(self, endpoint: str, status: int, seconds: float, facts: Mapping[str, Any]) -> None: ...
    def metrics(self) -> tuple[bytes, str]: ...


@dataclass(frozen=True, slots=True, kw_only=True)
class Parts:
    """Everything the application is built from."""

    content: Content
    zone: tzinfo
    now: Callable[[], datetime]
    clock: Callable[[], float]
    callers: Callers
    watch: Watch
    store: Replies | None = None
    fetch: Fetch | None = None
    wait: Callable[[str], float | None] = lambda _caller: None  # seconds a caller must wait; None: go on
    limits: Limits = SERVICE_LIMITS
    body_seconds: float = 10.0
