"""One FHIR server, asked within limits: base addresses, single requests with retries, and search results page by page.

Which resources are wanted belongs to `fetch.py`. Nothing a server sends is trusted: it never chooses where the next request
goes outside its own base address, how long we wait, or how much we hold in memory. No error names a patient, a token or a
body. What the name of a server resolves to is for those who put it on the list: the list is of names, not of addresses.
"""

from __future__ import annotations

import re
import threading
from collections.abc import Callable, Iterator, Mapping
from contextlib import closing
from dataclasses import dataclass
from typing import Any
from urllib.parse import urljoin

import requests
import urllib3

from cds.errors import CdsError, InputError
from cds.fhir.reading import Limits, read_json
from cds.service.fetch_transport import (
    Gunzip,
    Watch,
    WatchedAdapter,
    keep_addresses_out_of_logs,
    read_some,
    retry_after,
)

_DEFAULT_PORTS = {"http": 80, "https": 443}
_ADDRESS = re.compile(
    r"(?P<scheme>https?)://(?P<host>[a-z0-9._\-]+|\[[0-9a-f:.]+\])(?::(?P<port>[0-9]{1,5}))?"
    r"(?P<path>(?:/[a-z0-9\-._~!$&'()*+,;=:@%/]*)?)(?:\?(?P<query>[!\x22$-~]*))?",
    re.ASCII | re.IGNORECASE,
)
_HIDDEN_STEP = re.compile(r"%(?:2e|2f|5c|25|00)", re.IGNORECASE)  # a dot, slash, backslash or per cent sign in disguise
_STEP = re.compile(r"/\.\.?(?:[/;]|$)")  # some servers drop what follows a semicolon, and then take the step
_SENDABLE = re.compile(r"[!-~]{1,16384}")
_TRY_AGAIN = frozenset({429, 502, 503, 504})
_CONNECT_SECONDS = 5.0
_FIRST_PAUSE_SECONDS, _LONGEST_PAUSE_SECONDS = 0.5, 8.0
_GZIP_MARK = b"\x1f\x8b"
_MAX_DEPTH = 197  # in our Bundle a resource lies three levels deeper, and 200 are read
_SEND_ITSELF = "Send the Bundle itself instead of a reference"


class FetchError(CdsError):
    """A patient could not be fetched from a FHIR server.

    `http_status` is 400 where the request breaks our rules, 403 where the server refuses the access token, 422 where it
    knows no such patient, 502 where its answer is wrong or beyond our limits, 504 where the time is over.
    """

    exit_code = 43

    def __init__(self, status: int, problem: str, fix: str) -> None:
        super().__init__(f"{problem}.\n{fix}")
        self.http_status = status
        self.problem, self.fix = problem, fix


@dataclass(frozen=True, slots=True)
class Address:
    """The base address of a FHIR server; equal if they lead to the same place. `path` has no slash at its end."""

    scheme: str
    host: str
    port: int
    path: str

    @property
    def name(self) -> str:
        """The host, with the port where it is not the usual one: what an error may say."""
        return self.host if self.port == _DEFAULT_PORTS[self.scheme] else f"{self.host}:{self.port}"

    @property
    def url(self) -> str:
        return f"{self.scheme}://{self.name}{self.path}"


@dataclass(frozen=True, slots=True)
class FetchRules:
    """From where, how long and how much may be fetched for one patient.

    `seconds`, `max_bytes` (after decompression), `max_entries` and `max_pages` are for everything together; `attempts`
    is for each request. Raises FetchError (500) for a server that is no http(s) base address.
    """

    servers: tuple[str, ...]
    seconds: float
    max_bytes: int
    max_entries: int
    max_pages: int = 200
    attempts: int = 3

    def __post_init__(self) -> None:
        for position, server in enumerate(self.servers, start=1):
            if base_address(server) is None:
                raise FetchError(
                    500,
                    f"FHIR server {position} of the settings is no base address",
                    "Write it like https://fhir.example.org/r4, without credentials, query or fragment",
                )


@dataclass(frozen=True, slots=True)
class Answer:
    """What a server said: `document` is None for every status but 200."""

    status: int
    document: dict[str, Any] | None


@dataclass(frozen=True, slots=True)
class _Again:
    """The attempt may be repeated; the server may have said after how many seconds."""

    reason: str
    wait: float | None = None


def base_address(text: str) -> Address | None:
    """Read a base address; None for any that has credentials, a query, a fragment, path tricks or another scheme."""
    parsed = _parse(text)
    return None if parsed is None or parsed[1] is not None else parsed[0]


def _parse(text: str) -> tuple[Address, str | None] | None:
    match = _ADDRESS.fullmatch(text)
    if match is None:
        return None
    path, scheme = match["path"], match["scheme"].lower()
    port = int(match["port"]) if match["port"] else _DEFAULT_PORTS[scheme]
    if not 0 < port < 65536 or _HIDDEN_STEP.search(path) or _STEP.search(path):
        return None
    return Address(scheme, match["host"].lower(), port, path.removesuffix("/")), match["query"]


class Source:
    """One server, asked for one patient. Counts time, bytes, entries and pages over all requests. Use as a context."""

    def __init__(
        self,
        base: Address,
        access_token: str | None,
        rules: FetchRules,
        session: requests.Session,
        *,
        sleep: Callable[[float], None],
        clock: Callable[[], float],
        jitter: Callable[[], float],
    ) -> None:
        self._base, self._rules, self._session = base, rules, session
        self._sleep, self._clock, self._jitter = sleep, clock, jitter
        self._headers = {
            "Accept": "application/fhir+json, application/json;q=0.9",
            "Accept-Encoding": "gzip",
            "User-Agent": "gdmt-cards",
            **({} if access_token is None else {"Authorization": f"Bearer {access_token}"}),
        }
        self._ends_at = clock() + rules.seconds
        self._bytes_left, self._entries_left, self._pages_left = rules.max_bytes, rules.max_entries, rules.max_pages
        self._watch = Watch()
        self._timer = threading.Timer(rules.seconds, self._watch.cut)
        self._timer.daemon = True
        session.trust_env = False  # a .netrc would put other credentials into the place of the token
        self._adapter = WatchedAdapter(self._watch)

    def __enter__(self) -> Source:
        keep_addresses_out_of_logs()
        self._timer.start()
        return self

    def __exit__(self, *_: object) -> None:
        self._timer.cancel()
        self._adapter.close()
        self._session.close()

    def read(self, path: str, what: str) -> Answer:
        """Read `base/path`, again if need be. `what` is the resource type, for errors. Raises FetchError."""
        return self._read(f"{self._base.url}/{path}", what)

    def pages(self, first: Mapping[str, Any], path: str, what: str) -> Iterator[list[Any]]:
        """Yield the entries of each page of a search that began with `base/path` and answered `first`.

        Raises FetchError for what is no Bundle, and for a next link that leads elsewhere, in a circle or on for too long.
        """
        page, seen = first, {f"{self._base.url}/{path}"}
        while True:
            self._pages_left -= 1
            yield self._entries(page, what)
            url = self._next_of(page, what)
            if url is None:
                return
            if url in seen:
                raise self._wrong(what, "has pages that lead in a circle")
            if self._pages_left <= 0:
                raise self._wrong(what, f"brings the patient's data to more than {self._rules.max_pages} pages")
            seen.add(url)
            answer = self._read(url, what)
            if answer.document is None:
                raise self.refused(answer.status, what)
            page = answer.document

    def refused(self, status: int, what: str) -> FetchError:
        """The error for a status other than 200."""
        if status in (401, 403):
            return FetchError(
                403,
                f"FHIR server {self._base.name}: the access token was refused for {what} (status {status})",
                "Send an access_token that is still valid and may read the patient's data there",
            )
        return self._wrong(what, f"has the status {status}")

    def _wrong(self, what: str, problem: str) -> FetchError:
        return FetchError(502, f"FHIR server {self._base.name}: the answer for {what} {problem}", _SEND_ITSELF)

    def _too_late(self, what: str) -> FetchError:
        return FetchError(
            504,
            f"FHIR server {self._base.name}: no whole answer within {self._rules.seconds:g} seconds, waiting for {what}",
            f"Try again later. {_SEND_ITSELF}",
        )

    def _left(self, what: str) -> float:
        left = self._ends_at - self._clock()
        if left <= 0 or self._watch.is_cut:
            raise self._too_late(what)
        return left

    def _read(self, url: str, what: str) -> Answer:
        attempt = 1
        while True:
            got = self._attempt(url, what)
            if isinstance(got, Answer):
                return got
            left = self._left(what)
            if attempt >= self._rules.attempts:
                raise FetchError(
                    502,
                    f"FHIR server {self._base.name}: {what} could not be read, {got.reason}, in {attempt} attempts",
                    f"Try again later. {_SEND_ITSELF}",
                )
            pause = min(_FIRST_PAUSE_SECONDS * 2 ** (attempt - 1), _LONGEST_PAUSE_SECONDS) * (0.5 + self._jitter() / 2)
            pause = max(pause, got.wait or 0.0)
            if pause >= left:  # to wait out the rest would only hold the worker
                raise self._too_late(what)
            self._sleep(pause)
            attempt += 1

    def _attempt(self, url: str, what: str) -> Answer | _Again:
        """Send one request. Errors are raised after the `except`: those of the library hold the address and the token."""
        left = self._left(what)
        session = self._session
        failure: FetchError | None = None
        try:
            # Not by `session.send`: even if told not to follow a redirect, it reads the whole body of one.
            response = self._adapter.send(
                session.prepare_request(requests.Request("GET", url, headers=self._headers)),
                stream=True,
                timeout=(min(left, _CONNECT_SECONDS), left),
                verify=session.verify or True,
                cert=session.cert,
                proxies=session.proxies,
            )
        except requests.exceptions.SSLError:
            failure = FetchError(
                502,
                f"FHIR server {self._base.name}: its certificate cannot be verified, or TLS failed",
                "Have the server's certificate, or the authorities this service trusts, put right",
            )
        except requests.ReadTimeout:
            failure = self._too_late(what)
        except requests.ConnectionError:
            return _Again("no connection, or one that broke")
        except (requests.RequestException, urllib3.exceptions.HTTPError):
            failure = self._wrong(what, "cannot be read as HTTP")
        if failure is not None:
            raise failure
        with closing(response):
            return self._take(response, what)

    def _take(self, response: requests.Response, what: str) -> Answer | _Again:
        status = response.status_code
        if 300 <= status < 400:
            raise FetchError(
                502,
                f"FHIR server {self._base.name}: it redirects {what} elsewhere, and no redirect is followed",
                "Have the address it redirects to put on the list of servers, and send that as fhir_server",
            )
        if status in _TRY_AGAIN:
            return _Again(f"the status was {status}", retry_after(response.headers))
        if status != 200:
            return Answer(status, None)
        body = self._body(response, what)
        if isinstance(body, _Again):
            return body
        problem = "it is compressed without saying so" if body.startswith(_GZIP_MARK) else ""
        if not problem:
            limits = Limits(max_bytes=self._rules.max_bytes, max_entries=self._rules.max_entries, max_depth=_MAX_DEPTH)
            try:
                return Answer(status, read_json(body, limits))
            except InputError as error:
                problem = error.problem
        raise self._wrong(what, f"is no FHIR resource: {problem}")

    def _body(self, response: requests.Response, what: str) -> bytes | _Again:
        """Read the body as it comes, never more than is left of the bytes, compressed or not."""
        encoding = response.headers.get("Content-Encoding", "").strip().lower()
        if encoding not in ("", "identity", "gzip", "x-gzip"):
            raise self._wrong(what, "has an encoding that was not asked for")
        unpack = Gunzip() if "gzip" in encoding else None
        parts: list[bytes] = []
        sent = room = self._bytes_left
        while True:
            self._left(what)
            part = read_some(response.raw)
            if part is None:
                return _Again("the connection broke")
            if not part:
                break
            sent -= len(part)
            text = part if unpack is None else unpack.feed(part, room)
            if text is None:
                raise self._wrong(what, "has damaged gzip data")
            room -= len(text)
            if min(sent, room) < 0:
                raise self._wrong(what, f"brings the patient's data to more than {self._rules.max_bytes} bytes")
            parts.append(text)
        self._left(what)  # a connection that the watch cut looks like the end of the body
        if unpack is not None and not unpack.is_whole:
            return _Again("the gzip data ended too early")
        self._bytes_left = room
        return b"".join(parts)

    def _entries(self, page: Mapping[str, Any], what: str) -> list[Any]:
        entries = page.get("entry", [])
        if page.get("resourceType") != "Bundle" or not isinstance(entries, list):
            raise self._wrong(what, "is no Bundle with a list of entries")
        self._entries_left -= len(entries)
        if self._entries_left < 0:
            raise self._wrong(what, f"brings the patient's data to more than {self._rules.max_entries} entries")
        return entries

    def _next_of(self, page: Mapping[str, Any], what: str) -> str | None:
        """The address of the next page, written with our own base address; None on the last page."""
        links = page.get("link")
        found = [
            link.get("url")
            for link in (links if isinstance(links, list) else ())
            if isinstance(link, dict) and link.get("relation") == "next"
        ]
        if not found:
            return None
        text, base = found[0], self._base
        if len(found) > 1 or not isinstance(text, str) or not _SENDABLE.fullmatch(text):
            raise self._wrong(what, "has a next link that cannot be read")
        parsed = _parse(_joined(base, text))
        if parsed is not None:
            there, query = parsed
            if (there.scheme, there.host, there.port) == (base.scheme, base.host, base.port) and (
                there.path == base.path or there.path.startswith(f"{base.path}/")
            ):
                return there.url + (f"?{query}" if query is not None else "")
        raise FetchError(
            502,
            f"FHIR server {base.name}: the next link of {what} leads outside the server's base address",
            "Have the server write its links with the base address by which it is on the list",
        )


def _joined(base: Address, text: str) -> str:
    try:
        return urljoin(f"{base.url}/", text)
    except ValueError:  # brackets that hold no address
        return ""
