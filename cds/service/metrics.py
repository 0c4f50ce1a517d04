"""What the service counts, in the Prometheus text format, over all workers of one server. Labels come from our own words."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from prometheus_client import CollectorRegistry, Counter, Histogram, generate_latest, values
from prometheus_client.exposition import CONTENT_TYPE_PLAIN_0_0_4
from prometheus_client.multiprocess import MultiProcessCollector

from cds.service.logs import Log

# An order check has tens of milliseconds; a fetched patient may take seconds.
_SECONDS = (0.005, 0.01, 0.02, 0.03, 0.05, 0.075, 0.1, 0.2, 0.5, 1.0, 2.0, 5.0, 10.0, 30.0)
FOLDER_VARIABLE = "PROMETHEUS_MULTIPROC_DIR"  # the library looks there, and nowhere else, when it opens a file


@dataclass(frozen=True, slots=True)
class Shared:
    """Where the workers of one server keep their counts together, and which place there is this worker's.

    No two living workers have the same place. A worker that follows another in its place counts on from there, so the
    folder does not grow however often workers are replaced, and no count ever goes back.
    """

    folder: Path
    place: int


def share(shared: Shared) -> None:
    """Keep the counts of this process from now on in a file of the shared folder. Call it before the first `Metrics`."""
    values.ValueClass = values.MultiProcessValue(lambda: shared.place)  # type: ignore[no-untyped-call]


class Metrics:
    """Counts and logs every answered request: a `Watch`."""

    def __init__(self, log: Log, *, folder: Path | None = None) -> None:
        """Count alone, or with the other workers that keep their counts in `folder`."""
        self._log, self._folder = log, folder
        self._own = CollectorRegistry()
        self._requests = Counter(
            "gdmt_cards_requests", "Requests answered.", ["endpoint", "status"], registry=self._own
        )
        self._seconds = Histogram(
            "gdmt_cards_request_seconds",
            "Time from a request's first line to its answer.",
            ["endpoint"],
            buckets=_SECONDS,
            registry=self._own,
        )
        self._cards = Counter("gdmt_cards_cards", "Cards shown.", ["rule", "tier"], registry=self._own)
        self._held_back = Counter("gdmt_cards_held_back", "Cards held back.", ["reason"], registry=self._own)
        self._issues = Counter(
            "gdmt_cards_issues", "Doubts about what was sent, in answers given.", ["severity"], registry=self._own
        )
        self._refused = Counter(
            "gdmt_cards_tokens_refused", "Requests without a token that is taken.", ["reason"], registry=self._own
        )

    def answered(self, endpoint: str, status: int, seconds: float, facts: Mapping[str, Any]) -> None:
        """Count one answered request and log it. `endpoint` is the route's pattern."""
        self._requests.labels(endpoint, str(status)).inc()
        self._seconds.labels(endpoint).observe(seconds)
        for (rule, tier), count in facts.get("cards", {}).items():
            self._cards.labels(rule, tier).inc(count)
        for reason, count in facts.get("held_back", {}).items():
            self._held_back.labels(reason).inc(count)
        for severity, count in facts.get("issues", {}).items():
            self._issues.labels(severity).inc(count)
        self._log.request_answered(endpoint, status, seconds, facts)

    def refused(self, reason: str) -> None:
        """Count a caller who was not let in, or keys that could not be had, by the gatekeeper's code for it."""
        self._refused.labels(reason).inc()
        self._log.warning("token_refused", reason=reason)

    def metrics(self) -> tuple[bytes, str]:
        """The counts of all workers as text, and its media type."""
        registry = self._own
        if self._folder is not None:
            registry = CollectorRegistry()
            MultiProcessCollector(registry, path=str(self._folder))  # type: ignore[no-untyped-call]
        return generate_latest(registry), CONTENT_TYPE_PLAIN_0_0_4
