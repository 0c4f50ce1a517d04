"""The server: gunicorn with threads, from our settings alone.

No slow client holds a thread for ever, and a worker that stops drops nothing that reached it.
"""

from __future__ import annotations

import gc
import os
import shutil
import socket
import tempfile
import time
from collections.abc import Callable
from contextlib import suppress
from http import HTTPStatus
from pathlib import Path
from typing import Any

import orjson
from gunicorn.app.base import BaseApplication
from gunicorn.glogging import Logger
from gunicorn.http import errors
from gunicorn.util import close_graceful
from gunicorn.workers.gthread import ThreadWorker

from cds.service import wiring
from cds.service.logs import ForeignRecords, Log, adopt_libraries
from cds.service.metrics import FOLDER_VARIABLE, Shared
from cds.service.settings import Settings, describe

# More would only share out one interpreter's time; fewer, and a handful of slow senders would occupy them all.
THREADS = 8
# Longer than proxies usually keep theirs (60 s, common practice), so that none sends on a connection closed under it.
_KEEPALIVE_SECONDS = 65
_LINGER_SECONDS = 1.0  # for a client to take an answer that came before it had sent all
_LONGEST_LINE, _MOST_FIELDS, _LONGEST_FIELD = 2048, 64, 9216  # a token may have 8 KiB
_SHARED_MEMORY = Path("/dev/shm")  # heartbeats there wait for no disk
# Of what gunicorn cannot read.
_STATUS: tuple[tuple[type[Exception], HTTPStatus], ...] = (
    (errors.InvalidResponseHeader, HTTPStatus.INTERNAL_SERVER_ERROR),
    (errors.InvalidResponseHeaderName, HTTPStatus.INTERNAL_SERVER_ERROR),
    (errors.LimitRequestLine, HTTPStatus.REQUEST_URI_TOO_LONG),
    (errors.LimitRequestHeaders, HTTPStatus.REQUEST_HEADER_FIELDS_TOO_LARGE),
    (errors.UnsupportedTransferCoding, HTTPStatus.NOT_IMPLEMENTED),
    (errors.ExpectationFailed, HTTPStatus.EXPECTATION_FAILED),
    (errors.ParseException, HTTPStatus.BAD_REQUEST),
)

WsgiApp = Callable[..., Any]


def serve(settings: Settings) -> None:
    """Serve until told to stop (SIGTERM, SIGINT); then the process exits. Raises a CdsError before it listens.

    SIGTERM: requests that reached us are answered, within the time the settings give a request.
    """
    log = wiring.open_log(settings)
    adopt_libraries(log)
    wiring.prepare(settings)
    log.info("service_starts", **describe(settings))
    gc.collect()
    gc.freeze()  # what workers share stays shared: collecting would write to it
    folder = Path(tempfile.mkdtemp(prefix="gdmt-cards-"))
    os.environ[FOLDER_VARIABLE] = str(folder)

    def load(place: int) -> WsgiApp:
        return wiring.build(settings, log=log, shared=Shared(folder, place))

    try:
        Server(settings, log, load).run()
    finally:
        shutil.rmtree(folder, ignore_errors=True)


class Server(BaseApplication):  # type: ignore[misc]  # the library ships no types
    """gunicorn as we set it up, for an application that `load` makes in each worker, given the worker's place."""

    def __init__(self, settings: Settings, log: Log, load: Callable[[int], WsgiApp]) -> None:
        self.settings, self.log = settings, log
        self._load, self._place = load, 0
        super().__init__(prog="gdmt-cards")

    def load_config(self) -> None:
        """Set everything that matters; the environment and configuration files of gunicorn are not read."""
        for name, value in self._config().items():
            self.cfg.set(name, value)

    def load(self) -> WsgiApp:
        """Make the application of this worker; what it holds from now on is left out of garbage collection."""
        app = self._load(self._place)
        gc.collect()
        gc.freeze()
        return app

    def _config(self) -> dict[str, Any]:
        settings = self.settings
        host = f"[{settings.host}]" if ":" in settings.host else settings.host
        return {
            "bind": f"{host}:{settings.port}",
            "workers": settings.workers,
            "threads": THREADS,
            "worker_class": Worker,
            "preload_app": False,  # connections and locks are not carried through a fork
            "timeout": settings.request_seconds + 30,  # a worker gives a sign of life each second
            "graceful_timeout": settings.request_seconds + 5,
            "keepalive": _KEEPALIVE_SECONDS,
            "max_requests": 0,
            "max_requests_jitter": 0,
            "limit_request_line": _LONGEST_LINE,
            "limit_request_fields": _MOST_FIELDS,
            "limit_request_field_size": _LONGEST_FIELD,
            "forwarded_allow_ips": "",  # nothing a proxy may claim is read
            "worker_tmp_dir": str(_SHARED_MEMORY) if os.access(_SHARED_MEMORY, os.W_OK) else None,
            "control_socket_disable": True,
            "accesslog": None,  # its lines would hold paths; ours are in logs.py
            "errorlog": "-",
            "loglevel": settings.log_level,
            "logger_class": _logger_of(self.log),
            "proc_name": "gdmt-cards",
            "pre_fork": self._before_fork,
            "post_fork": self._after_fork,
        }

    def _before_fork(self, arbiter: Any, worker: Worker) -> None:
        taken = {other.place for other in arbiter.WORKERS.values()}
        worker.place = min(set(range(len(taken) + 1)) - taken)

    def _after_fork(self, _arbiter: Any, worker: Worker) -> None:
        self._place = worker.place


class Worker(ThreadWorker):  # type: ignore[misc]  # the library ships no types
    """Serves requests in threads. `place` is the lowest number no other living worker of the server has."""

    place = 0

    def __init__(self, *given: Any) -> None:
        super().__init__(*given)
        self._read_by: dict[Any, float] = {}  # of each connection in a thread; only the main thread touches it

    def enqueue_req(self, conn: Any) -> None:
        """Hand a connection to a thread, and note by when its request must be here."""
        self._read_by[conn] = time.monotonic() + self.app.settings.request_seconds
        super().enqueue_req(conn)

    def handle(self, conn: Any) -> Any:
        """Answer one request, in a thread. Closing is done here too: the main thread would wait for the client to agree."""
        keep: Any = False
        try:
            keep = super().handle(conn)
        finally:
            if keep is False:
                close_graceful(conn.sock, timeout=_LINGER_SECONDS)
        return keep

    def finish_request(self, conn: Any, fs: Any) -> None:
        """Take a connection back from its thread, to wait for its next request if it is still open."""
        self._read_by.pop(conn, None)
        if fs.cancelled() or fs.exception() is not None or fs.result() is False:
            self.nr_conns -= 1
            conn.close()
        else:
            super().finish_request(conn, fs)

    def murder_pending(self) -> None:
        """Close connections on which nothing came; called at least once a second, also while stopping."""
        super().murder_pending()
        now = time.monotonic()
        for conn, read_by in self._read_by.items():
            if now > read_by:
                # What has arrived can still be read, and the answer be written: only waiting for more ends. A client
                # that does not take its answer in as much time again is let go.
                is_stuck = now > read_by + self.app.settings.request_seconds
                with suppress(OSError):
                    conn.sock.shutdown(socket.SHUT_RDWR if is_stuck else socket.SHUT_RD)

    def is_parent_alive(self) -> bool:
        """Whether the server still runs; without it this worker stops as it would when told to."""
        if not super().is_parent_alive():
            self.alive = False
        return bool(self.alive)

    def set_accept_enabled(self, enabled: bool) -> None:
        """When stopping, take the connections that wait at the door, then close it: later ones are refused at once."""
        was_accepting = self._accepting
        super().set_accept_enabled(enabled)
        if enabled or self.alive or not was_accepting:
            return
        for listener in self.sockets:
            before = -1
            while before != self.nr_conns:
                before = self.nr_conns
                self.accept(listener)
            listener.close()

    def handle_error(self, _req: Any, client: Any, _addr: Any, exc: Exception) -> None:
        """Answer a request that is no HTTP, or beyond the limits, with a problem that repeats nothing of it."""
        status = next((status for kind, status in _STATUS if isinstance(exc, kind)), HTTPStatus.INTERNAL_SERVER_ERROR)
        self.app.log.warning("request_not_read", status=int(status), error=type(exc).__name__)
        body = orjson.dumps(
            {
                "type": f"https://gdmt-cards.example/problems/{status.phrase.lower().replace(' ', '-')}",
                "title": status.phrase,
                "status": int(status),
                "detail": "the server cannot read the request.",
                "fix": "Send HTTP/1.1 with fewer, shorter or well-formed header fields, and a shorter path.",
                "instance": "urn:request:none",
                "issues": [],
            }
        )
        head = (
            f"HTTP/1.1 {int(status)} {status.phrase}\r\nConnection: close\r\nContent-Type: application/problem+json\r\n"
            f"Cache-Control: no-store\r\nX-Content-Type-Options: nosniff\r\nContent-Length: {len(body)}\r\n\r\n"
        )
        with suppress(OSError):
            client.sendall(head.encode("ascii") + body)


def _logger_of(log: Log) -> type[Logger]:
    class ServerLogger(Logger):  # type: ignore[misc]  # the library ships no types
        """Hands gunicorn's own words to our log."""

        def setup(self, cfg: Any) -> None:
            super().setup(cfg)
            self.error_log.handlers[:] = [ForeignRecords(log)]
            self.access_log.handlers[:] = []

    return ServerLogger
