"""The connection to a FHIR server: its transport with a watch on the time, the body piece by piece, gzip, Retry-After.

What is asked, and what happens when a limit is reached, belongs to `fetch_pages.py`.
"""

from __future__ import annotations

import logging
import socket
import threading
import zlib
from collections.abc import Mapping
from dataclasses import dataclass, field
from email.utils import parsedate_to_datetime
from typing import Any

import urllib3
from requests.adapters import HTTPAdapter
from urllib3.connection import HTTPConnection, HTTPSConnection
from urllib3.connectionpool import HTTPConnectionPool, HTTPSConnectionPool

_READ_BYTES = 65536
_PIECE = 4096  # zlib copies what follows a gzip member, so many tiny members in a large piece would cost time
_GZIP_FORMAT = 31
_LIBRARY_LOGGERS = ("urllib3.connectionpool", "urllib3.connection")


def read_some(raw: Any) -> bytes | None:
    """What has come of a body, as it was sent; empty at its end, None if the connection broke."""
    # `read` would wait for a full buffer, however slowly the bytes drip.
    try:
        return raw.read1(_READ_BYTES, decode_content=False) or b""
    except urllib3.exceptions.HTTPError:
        return None


def retry_after(headers: Mapping[str, str]) -> float | None:
    """Seconds to wait by Retry-After: a number, or a date held against the server's own `Date`; None where it says neither."""
    text = headers.get("Retry-After", "").strip()
    if text.isascii() and text.isdigit():
        return float(text[:9])
    try:
        return (parsedate_to_datetime(text) - parsedate_to_datetime(headers.get("Date", ""))).total_seconds()
    except (ValueError, TypeError, OverflowError):
        return None


class Gunzip:
    """Undoes gzip piece by piece, one member after the other."""

    def __init__(self) -> None:
        self._stream = zlib.decompressobj(wbits=_GZIP_FORMAT)

    @property
    def is_whole(self) -> bool:
        return self._stream.eof

    def feed(self, data: bytes, room: int) -> bytes | None:
        """The text of `data`, cut off one byte after `room`; None for damaged data."""
        parts: list[bytes] = []
        for start in range(0, len(data), _PIECE):
            rest = data[start : start + _PIECE]
            while rest and room >= 0:
                if self._stream.eof:
                    rest = rest.lstrip(b"\x00")
                    self._stream = zlib.decompressobj(wbits=_GZIP_FORMAT) if rest else self._stream
                    continue
                try:
                    part = self._stream.decompress(rest, room + 1)
                except zlib.error:
                    return None
                room -= len(part)
                parts.append(part)
                rest = self._stream.unused_data
        return b"".join(parts)


@dataclass(slots=True)
class Watch:
    """Ends all connections when the time is over: a time limit on each read alone lets a server send a byte a minute."""

    is_cut: bool = False
    _sockets: list[socket.socket] = field(default_factory=list)
    _lock: threading.Lock = field(default_factory=threading.Lock)

    def add(self, connection: object) -> None:
        if isinstance(connection, socket.socket):
            with self._lock:
                self._sockets.append(connection)
                if self.is_cut:
                    _end(connection)

    def cut(self) -> None:
        with self._lock:
            self.is_cut = True
            for connection in self._sockets:
                _end(connection)


def _end(connection: socket.socket) -> None:
    try:
        socket.socket.shutdown(connection, socket.SHUT_RDWR)  # that of a TLS socket takes its state from the reader
    except OSError:
        return  # closed already


class WatchedAdapter(HTTPAdapter):
    """The usual transport, without retries of its own, whose connections the watch knows."""

    def __init__(self, watch: Watch) -> None:
        super().__init__()

        class Plain(HTTPConnection):
            def connect(self) -> None:
                super().connect()
                watch.add(self.sock)

        class Secure(HTTPSConnection):
            def connect(self) -> None:
                super().connect()
                watch.add(self.sock)

        class PlainPool(HTTPConnectionPool):
            ConnectionCls = Plain

        class SecurePool(HTTPSConnectionPool):
            ConnectionCls = Secure

        self.poolmanager.pool_classes_by_scheme = {"http": PlainPool, "https": SecurePool}


def keep_addresses_out_of_logs() -> None:
    """Silence the library's own log: its lines hold addresses, and those hold the patient's id."""
    for name in _LIBRARY_LOGGERS:
        logging.getLogger(name).setLevel(logging.CRITICAL)
