"""What the service says about itself: one JSON object a line on stdout, an event name and fields.

Only fields named here are written. No path, body, token, header or value of a patient ever is; of an exception only its
type and place, because its words may quote what was sent.
"""

from __future__ import annotations

import logging
import sys
from collections import Counter
from collections.abc import Callable, Mapping, MutableMapping
from contextlib import suppress
from datetime import datetime
from typing import Any, BinaryIO

import orjson
import structlog

_LEVELS = {"info": logging.INFO, "warning": logging.WARNING, "error": logging.ERROR}
_REFUSALS = frozenset({401, 403, 408, 413, 429})
# Words of the server that hold nothing of a request, by their start: the event, and the names of what they were filled with.
_SERVER_EVENTS: tuple[tuple[str, str, tuple[str, ...]], ...] = (
    ("Starting gunicorn", "server_starts", ("version",)),
    ("Listening at:", "server_listens", ("address", "pid")),
    ("Booting worker", "worker_starts", ("pid",)),
    ("Worker exiting", "worker_stops", ("pid",)),
    ("Worker (pid:%s) was sent", "worker_killed", ("pid", "signal")),
    ("Worker (pid:%s) exited", "worker_failed", ("pid", "exit_code")),
    ("WORKER TIMEOUT", "worker_hangs", ("pid",)),
    ("Handling signal", "signal_received", ("signal",)),
    ("Shutting down", "server_stops", ()),
    ("Autorestarting worker", "worker_is_replaced", ()),
    ("Parent changed", "worker_lost_its_server", ()),
    ("Connection in use", "address_in_use", ()),
    ("Can't connect to", "address_not_bound", ()),
)


class Log:
    """Writes events. One that cannot be written is dropped: a request is not lost because a disk or a pipe is full."""

    def __init__(self, level: str, *, now: Callable[[], datetime], file: BinaryIO | None = None) -> None:
        self._log: Any = structlog.wrap_logger(
            structlog.BytesLogger(file or sys.stdout.buffer),
            processors=[
                structlog.processors.add_log_level,
                _stamped(now),
                structlog.processors.JSONRenderer(serializer=_as_line),
            ],
            wrapper_class=structlog.make_filtering_bound_logger(_LEVELS[level]),
        )

    def info(self, event: str, **fields: Any) -> None:
        """Something went as it should."""
        self._write(logging.INFO, event, fields)

    def warning(self, event: str, **fields: Any) -> None:
        """Something was refused, or needs a look some day."""
        self._write(logging.WARNING, event, fields)

    def error(self, event: str, **fields: Any) -> None:
        """Something needs somebody's look now."""
        self._write(logging.ERROR, event, fields)

    def request_answered(self, endpoint: str, status: int, seconds: float, facts: Mapping[str, Any]) -> None:
        """One request: the route's pattern, never the path itself, and of the facts the numbers only."""
        level = logging.ERROR if status >= 500 else logging.WARNING if status in _REFUSALS else logging.INFO
        fields = {
            "endpoint": endpoint,
            "status": status,
            "milliseconds": round(seconds * 1000, 1),
            "request_id": facts.get("request_id"),
            "patients": facts.get("patients"),
            "cards": by_tier(facts.get("cards", {})) or None,
            "held_back": dict(facts.get("held_back", {})) or None,
            "issues": dict(facts.get("issues", {})) or None,
            "error": facts.get("error"),
            "at": facts.get("at"),
        }
        self._write(level, "request_answered", {name: value for name, value in fields.items() if value is not None})

    def _write(self, level: int, event: str, fields: Mapping[str, Any]) -> None:
        with suppress(OSError, ValueError):
            self._log.log(level, event, **fields)


class ForeignRecords(logging.Handler):
    """Passes on what libraries warn of: who, where in the library's code, and the type of an exception, but none of their words.

    Their words may hold addresses with a patient's id, or what a client sent. Of the server's own words those are told
    that are known to hold neither.
    """

    def __init__(self, log: Log) -> None:
        super().__init__()
        self._log = log

    def emit(self, record: logging.LogRecord) -> None:
        """Write one record as an event."""
        known = _known(record) if record.name.startswith("gunicorn") else None
        is_error, is_warning = record.levelno >= logging.ERROR, record.levelno >= logging.WARNING
        tell = self._log.error if is_error else self._log.warning if is_warning else self._log.info
        if known is not None:
            tell(known[0], **known[1])
            return
        if not is_warning:
            return
        fields = {"by": record.name, "at": f"{record.module}:{record.lineno}"}
        error = record.exc_info[1] if record.exc_info else None
        if error is not None:
            fields["error"], fields["error_at"] = type(error).__name__, place_of(error)
        tell("library_said", **fields)


def adopt_libraries(log: Log) -> None:
    """Let everything that libraries log go through `log`, from warnings on. Replaces the handlers there are."""
    root = logging.getLogger()
    root.handlers[:] = [ForeignRecords(log)]
    root.setLevel(logging.WARNING)


def by_tier(cards: Mapping[tuple[str, str], int]) -> dict[str, int]:
    """Count cards by tier, of counts by rule and tier."""
    tiers: Counter[str] = Counter()
    for (_rule, tier), count in cards.items():
        tiers[tier] += count
    return dict(tiers)


def place_of(error: BaseException) -> str:
    """Module and line of the innermost frame."""
    trace = error.__traceback__
    while trace is not None and trace.tb_next is not None:
        trace = trace.tb_next
    return "?" if trace is None else f"{trace.tb_frame.f_globals.get('__name__', '?')}:{trace.tb_lineno}"


def _known(record: logging.LogRecord) -> tuple[str, dict[str, Any]] | None:
    words = record.msg if isinstance(record.msg, str) else ""
    for start, event, names in _SERVER_EVENTS:
        if words.startswith(start):
            values = record.args if isinstance(record.args, tuple) else ()
            return event, dict(zip(names, values, strict=False))
    return None


def _stamped(now: Callable[[], datetime]) -> Callable[[Any, str, MutableMapping[str, Any]], MutableMapping[str, Any]]:
    def stamp(_logger: Any, _method: str, event: MutableMapping[str, Any]) -> MutableMapping[str, Any]:
        return {
            "time": now().isoformat(timespec="milliseconds"),
            "level": event.pop("level"),
            "event": event.pop("event"),
            **event,
        }

    return stamp


def _as_line(event: Any, **_options: Any) -> bytes:
    return orjson.dumps(event, default=str)
