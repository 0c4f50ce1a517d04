"""The public keys that tokens are checked with: from a file, or from the issuer's address. Nothing of tokens here."""

from __future__ import annotations

import os
import threading
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from datetime import datetime, timedelta
from pathlib import Path
from types import MappingProxyType
from typing import Any, Protocol

import orjson
import requests
from cryptography.hazmat.primitives.asymmetric.ec import EllipticCurvePublicKey
from cryptography.hazmat.primitives.asymmetric.rsa import RSAPublicKey
from jwt.algorithms import ECAlgorithm, RSAAlgorithm
from jwt.exceptions import InvalidKeyError
from urllib3.exceptions import HTTPError

from cds.errors import CdsError
from cds.service.settings import SettingsError

PublicKey = RSAPublicKey | EllipticCurvePublicKey
Keys = Mapping[tuple[str, str], PublicKey]  # by kid and algorithm
Fetch = Callable[[str], bytes]
LONGEST_KID = 256
LEAST_RSA_BITS, MOST_RSA_BITS = 2048, 8192
LARGEST_KEY_SET_BYTES = 256 * 1024
FETCH_SECONDS = 5.0
BETWEEN_FETCHES = timedelta(minutes=1)  # strangers can ask for unknown keys as often as they like
FRESH = timedelta(minutes=10)  # how long a key that its issuer withdrew may still be taken
KEPT_WITHOUT_ADDRESS = timedelta(hours=6)
KEPT_WITHOUT_FILE = timedelta(minutes=5)  # a file is missing or half-written only while somebody replaces it


class KeysUnavailableError(CdsError):
    """No key can be had to check tokens with, so nobody can be let in or refused. `reason` is a code for metrics."""

    exit_code = 42
    http_status = 503

    def __init__(self, reason: str) -> None:
        self.problem = "the keys to check tokens with cannot be had at present"
        self.fix = "Try again in a minute. If it stays so, tell those who run the service"
        super().__init__(f"{self.problem}.\n{self.fix}.")
        self.reason = reason
        self.headers = {"Retry-After": str(int(BETWEEN_FETCHES.total_seconds()))}


class KeySource(Protocol):
    """Where keys come from."""

    def find(self, kid: str, algorithm: str) -> PublicKey | None: ...


def usable_keys(data: bytes) -> Keys:
    """Read a JSON Web Key Set (RFC 7517) and give its keys for us: with `kid` and use "sig", RSA 2048 to 8192 bits, or P-384.

    All others are left out, private keys too: what signs tokens must not lie where they are checked. Of two with the
    same kid and algorithm the first counts. May be empty. Raises KeysUnavailableError if the bytes are no key set.
    """
    try:
        body = orjson.loads(data)
    except orjson.JSONDecodeError:
        body = None
    if not isinstance(body, dict) or not isinstance(body.get("keys"), list):
        raise KeysUnavailableError("keys-not-a-set")
    found: dict[tuple[str, str], PublicKey] = {}
    for member in body["keys"]:
        usable = _usable(member) if isinstance(member, dict) else None
        if usable is not None:
            algorithm, key = usable
            found.setdefault((member["kid"], algorithm), key)
    return MappingProxyType(found)


def _usable(member: dict[str, Any]) -> tuple[str, PublicKey] | None:
    kid, kind = member.get("kid"), member.get("kty")
    if not isinstance(kid, str) or not 0 < len(kid) <= LONGEST_KID or member.get("use") != "sig" or "d" in member:
        return None
    try:
        if kind == "RSA" and member.get("alg", "RS256") == "RS256":
            rsa = RSAAlgorithm.from_jwk({name: member[name] for name in ("kty", "n", "e")})
            if isinstance(rsa, RSAPublicKey) and LEAST_RSA_BITS <= rsa.key_size <= MOST_RSA_BITS:
                return "RS256", rsa
        if kind == "EC" and member.get("crv") == "P-384" and member.get("alg", "ES384") == "ES384":
            curve = ECAlgorithm.from_jwk({name: member[name] for name in ("kty", "crv", "x", "y")})
            if isinstance(curve, EllipticCurvePublicKey):
                return "ES384", curve
    except (InvalidKeyError, LookupError, TypeError, ValueError, AttributeError):
        return None
    return None


def open_keys(jwks: Path | str, *, now: Callable[[], datetime], fetch: Fetch, tell: Callable[[str], None]) -> KeySource:
    """Give the source of keys that the settings name. `tell` hears a code whenever keys cannot be read or fetched.

    Raises SettingsError for a file without a usable key. An address may be out of reach at the start.
    """
    if isinstance(jwks, Path):
        return KeysFromFile(jwks, now=now, tell=tell)
    return KeysFromAddress(jwks, now=now, fetch=fetch, tell=tell)


@dataclass(frozen=True, slots=True)
class _Held:
    """The keys held, and when their source was last found good."""

    keys: Keys
    good_at: datetime


class KeysFromFile:
    """The keys of a file, read again when the file has changed. While it is of no use, the old keys serve for 5 minutes."""

    def __init__(self, path: Path, *, now: Callable[[], datetime], tell: Callable[[str], None]) -> None:
        self._path, self._now, self._tell = path, now, tell
        self._stamp: tuple[int, ...] | None = None
        self._is_good = False
        try:
            self._stamp = _stamp(path)
            self._held = _Held(_keys_in(path), now())
        except (OSError, KeysUnavailableError):
            self._held = _Held({}, now())
        if not self._held.keys:
            raise SettingsError(
                "TOKEN_JWKS",
                "the file holds no usable key",
                'Give a JSON Web Key Set of public keys, each with "kid" and "use": "sig", RSA of '
                f"{LEAST_RSA_BITS} bits or more, or EC on P-384",
            )
        self._is_good = True

    def find(self, kid: str, algorithm: str) -> PublicKey | None:
        """Give the key; None if there is none. Raises KeysUnavailableError if the file is of no use for too long."""
        moment = self._now()
        self._look(moment)
        return _of(self._held, moment, KEPT_WITHOUT_FILE).get((kid, algorithm))

    def _look(self, moment: datetime) -> None:
        try:
            stamp = _stamp(self._path)
            if stamp != self._stamp:
                self._stamp, self._is_good = stamp, False
                self._held, self._is_good = _Held(_keys_in(self._path), moment), True
            elif self._is_good:
                self._held = _Held(self._held.keys, moment)
        except OSError:
            self._stamp = None  # try again next time: the file may be as it was, and too many others were open
            self._tell("keys-unreadable")
        except KeysUnavailableError as error:
            self._tell(error.reason)


class KeysFromAddress:
    """The keys behind an address: fetched again after ten minutes and for an unknown key, at most once a minute.

    While the address fails, the old keys serve for six hours. Safe to share between threads; only a thread that lacks
    its key waits for a fetch.
    """

    def __init__(self, url: str, *, now: Callable[[], datetime], fetch: Fetch, tell: Callable[[str], None]) -> None:
        self._url, self._now, self._fetch, self._tell = url, now, fetch, tell
        self._held: _Held | None = None
        self._tried_at: datetime | None = None
        self._fetching = threading.Lock()

    def find(self, kid: str, algorithm: str) -> PublicKey | None:
        """Give the key; None if the issuer has none such. Raises KeysUnavailableError without keys, or with too old ones."""
        moment, name = self._now(), (kid, algorithm)
        is_missing = self._held is None or name not in self._held.keys
        if self._is_due(moment, is_missing=is_missing) and self._fetching.acquire(blocking=is_missing):
            try:
                moment = self._now()  # another thread may have fetched while this one waited
                if self._is_due(moment, is_missing=is_missing):
                    self._refresh(moment)
            finally:
                self._fetching.release()
        if self._held is None:
            raise KeysUnavailableError("keys-none")
        return _of(self._held, moment, KEPT_WITHOUT_ADDRESS).get(name)

    def _is_due(self, moment: datetime, *, is_missing: bool) -> bool:
        # The lower bounds: a clock that was set back must not stop the fetching.
        if self._tried_at is not None and timedelta(0) <= moment - self._tried_at < BETWEEN_FETCHES:
            return False
        return is_missing or self._held is None or not timedelta(0) <= moment - self._held.good_at < FRESH

    def _refresh(self, moment: datetime) -> None:
        try:
            self._held = _Held(usable_keys(self._fetch(self._url)), moment)
        except KeysUnavailableError as error:
            self._tell(error.reason)
        finally:
            self._tried_at = self._now()  # not before: who comes meanwhile with a new key must wait, not be refused


def fetch_key_set(url: str) -> bytes:
    """Fetch a key set: no redirect, no login, five seconds and 256 KiB at most. Raises KeysUnavailableError."""
    deadline = time.monotonic() + FETCH_SECONDS
    headers = {"Accept": "application/json", "Accept-Encoding": "identity"}
    with requests.Session() as session:
        session.auth = _no_login
        try:
            with session.get(
                url, headers=headers, timeout=FETCH_SECONDS / 2, allow_redirects=False, stream=True
            ) as answer:
                if answer.status_code != requests.codes.ok:
                    raise KeysUnavailableError("keys-status")
                data = bytearray()
                while piece := answer.raw.read1(LARGEST_KEY_SET_BYTES + 1):
                    data += piece
                    if len(data) > LARGEST_KEY_SET_BYTES:
                        raise KeysUnavailableError("keys-too-large")
                    if time.monotonic() > deadline:
                        raise KeysUnavailableError("keys-too-slow")
        except (requests.RequestException, HTTPError, OSError):
            raise KeysUnavailableError("keys-unreachable") from None
    return bytes(data)


def _no_login(request: requests.PreparedRequest) -> requests.PreparedRequest:
    """Keep a login of the machine's own netrc file from being sent."""
    return request


def _of(held: _Held, moment: datetime, longest: timedelta) -> Keys:
    if moment - held.good_at > longest:
        raise KeysUnavailableError("keys-too-old")
    return held.keys


def _stamp(path: Path) -> tuple[int, ...]:
    status = os.stat(path)  # noqa: PTH116  # once per request
    return status.st_mtime_ns, status.st_ctime_ns, status.st_size, status.st_ino


def _keys_in(path: Path) -> Keys:
    with path.open("rb") as file:
        data = file.read(LARGEST_KEY_SET_BYTES + 1)
    if len(data) > LARGEST_KEY_SET_BYTES:
        raise KeysUnavailableError("keys-too-large")
    return usable_keys(data)
