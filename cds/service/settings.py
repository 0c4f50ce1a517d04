"""What a deployment may choose, read once from `GDMT_CARDS_*` variables. No other module of the service reads the environment.

An empty variable counts as not set. No message repeats a value: a secret may stand in the wrong variable.
"""

from __future__ import annotations

import difflib
import ipaddress
import os
import re
import secrets
import stat
from collections.abc import Mapping
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Any
from urllib.parse import urlsplit
from zoneinfo import ZoneInfo

from sqlalchemy.engine import URL, make_url
from sqlalchemy.exc import ArgumentError

from cds.errors import CdsError
from cds.fhir.reading import SERVICE_LIMITS, Limits

PREFIX = "GDMT_CARDS_"
ALGORITHMS = ("RS256", "ES384")
# Not "debug": at that level the libraries below us write addresses, and a patient's id stands in those.
LOG_LEVELS = ("info", "warning", "error")
SHORTEST_SECRET_BYTES = 32
_LARGEST_SECRET_FILE_BYTES = 4096
_TOKEN_NEEDS = ("TOKEN_ISSUER", "TOKEN_AUDIENCE", "TOKEN_JWKS")
_SECRETS = ("STORE_URL", "STORE_SECRET")
_OPTIONS = (
    *("HOST", "PORT", "WORKERS", "REQUEST_SECONDS", "KEEP_REFERENCES", "ZONE", "SITE", "MAX_BYTES", "MAX_ENTRIES"),
    *("MAX_DEPTH", "REQUESTS_A_MINUTE", "TOKEN_ALGORITHMS"),
    *("TOKEN_LEEWAY_SECONDS", "FHIR_SERVERS", "OPEN_PAGES", "RETENTION_DAYS", "LOG_LEVEL"),
)
KNOWN = frozenset({*_OPTIONS, *_TOKEN_NEEDS, *_SECRETS, *(f"{name}_FILE" for name in _SECRETS)})
# Named one by one, so that a new field is not told before somebody thought about it.
_TOLD_AS_THEY_ARE = (
    *("host", "port", "workers", "request_seconds", "keep_references", "requests_a_minute", "fhir_servers"),
    *("open_pages", "retention_days", "log_level"),
)
_HOST_NAME = re.compile(r"(?!-)[a-z0-9-]{1,63}(?<!-)(\.(?!-)[a-z0-9-]{1,63}(?<!-))*")
_URL_SIGNS = re.compile(r"[!-\[\]-~]+")  # printable ASCII without the backslash, which readers of URLs take differently
_TRUE, _FALSE = frozenset({"true", "1"}), frozenset({"false", "0"})


class SettingsError(CdsError):
    """A variable cannot be used: names it, what is wrong and the way out, never its value. The program does not start."""

    exit_code = 21
    http_status = 500

    def __init__(self, name: str, problem: str, fix: str) -> None:
        self.variable = f"{PREFIX}{name}"
        super().__init__(f"{self.variable}: {problem}.\n{fix}.")
        self.problem, self.fix = problem, fix


@dataclass(frozen=True, kw_only=True)
class TokenSettings:
    """Whose tokens are taken: issued by `issuer` for `audience`, signed with a key of `jwks` (a file, or an address)."""

    issuer: str
    audience: str
    jwks: Path | str
    algorithms: tuple[str, ...] = ALGORITHMS
    leeway_seconds: int = 30


@dataclass(frozen=True, kw_only=True)
class Settings:
    """Everything a deployment chose. `tokens` is None only on a loopback address, where every caller may do all.

    `fhir_servers` are the only servers a patient may be fetched from, each written as a request has to name it.
    """

    host: str = "127.0.0.1"
    port: int = 8712
    workers: int = 2
    request_seconds: int = 30
    store_url: str = field(default="sqlite:///gdmt-cards.sqlite", repr=False)
    store_secret: bytes = field(repr=False)
    keep_references: bool = False
    zone: ZoneInfo | None = None  # None: the site profile's, else UTC
    site_profile: Path | None = None
    limits: Limits = SERVICE_LIMITS
    requests_a_minute: int = 600
    tokens: TokenSettings | None = None
    fhir_servers: tuple[str, ...] = ()
    open_pages: bool = False
    retention_days: int = 730
    log_level: str = "info"


def read_settings(environ: Mapping[str, str]) -> Settings:
    """Read the settings, and refuse at the first doubt, so that the program never starts other than meant.

    On loopback without a secret for the store, one is made and kept beside the SQLite file (readable by its owner only).
    Raises SettingsError; also for an address other than loopback without token settings.
    """
    given = _Given(environ)
    given.refuse_misspelt()
    host = _host(given)
    tokens = _tokens(given)
    if tokens is None and not is_loopback(host):
        problem = f"is not set, and {PREFIX}HOST is not loopback: everyone who reaches it could read and write"
        fix = f"Set {', '.join(PREFIX + name for name in _TOKEN_NEEDS)}, or leave {PREFIX}HOST at {Settings.host}"
        raise SettingsError("TOKEN_ISSUER", problem, fix)
    store_url, store_file = _store_url(given)
    return Settings(
        host=host,
        port=_port(given),
        workers=given.number("WORKERS", Settings.workers, 1, 64),
        request_seconds=given.number("REQUEST_SECONDS", Settings.request_seconds, 1, 600),
        store_url=store_url,
        store_secret=_store_secret(given, store_file if is_loopback(host) else None),
        keep_references=given.flag("KEEP_REFERENCES"),
        zone=_zone(given),
        site_profile=_site_profile(given),
        limits=Limits(
            max_bytes=given.number("MAX_BYTES", SERVICE_LIMITS.max_bytes, 1024, 256 * 1024 * 1024),
            max_entries=given.number("MAX_ENTRIES", SERVICE_LIMITS.max_entries, 1, 200_000),
            max_depth=given.number("MAX_DEPTH", SERVICE_LIMITS.max_depth, 10, SERVICE_LIMITS.max_depth),
        ),
        requests_a_minute=given.number("REQUESTS_A_MINUTE", Settings.requests_a_minute, 1, 1_000_000),
        tokens=tokens,
        fhir_servers=_fhir_servers(given),
        open_pages=given.flag("OPEN_PAGES"),
        retention_days=given.number("RETENTION_DAYS", Settings.retention_days, 1, 36_500),
        log_level=_log_level(given),
    )


def describe(settings: Settings) -> dict[str, Any]:
    """Give the settings for a log, as plain JSON values: no secret, and of the store's URL only kind, host and database."""
    tokens, store, profile = settings.tokens, make_url(settings.store_url), settings.site_profile
    told: dict[str, Any] = {name: getattr(settings, name) for name in _TOLD_AS_THEY_ARE}
    told["store"] = {"kind": store.get_backend_name(), "host": store.host, "database": store.database}
    told["zone"] = None if settings.zone is None else settings.zone.key
    told["site_profile"] = None if profile is None else str(profile)
    told["limits"] = asdict(settings.limits)
    told["tokens"] = None if tokens is None else {**asdict(tokens), "jwks": str(tokens.jwks).partition("?")[0]}
    return told


def is_loopback(host: str) -> bool:
    """Say whether only this machine reaches the host: 127.0.0.0/8, ::1 and localhost. Every other spelling is not."""
    if host == "localhost":
        return True
    try:
        address = ipaddress.ip_address(host)
    except ValueError:
        return False
    return address == ipaddress.IPv6Address("::1") or (
        isinstance(address, ipaddress.IPv4Address) and address.is_loopback
    )


class _Given:
    """Our variables in one environment. Every method raises SettingsError for a value of no use."""

    def __init__(self, environ: Mapping[str, str]) -> None:
        self._values = {name.removeprefix(PREFIX): value for name, value in environ.items() if name.startswith(PREFIX)}

    def refuse_misspelt(self) -> None:
        """Refuse names that look like one of ours. Others stay: a platform or another program may use the prefix."""
        for name in sorted(set(self._values) - KNOWN):
            if name.removesuffix("_FILE") in KNOWN:
                raise SettingsError(name, "only secrets are read from a file", f"Set {PREFIX}{name[:-5]} itself")
            close = difflib.get_close_matches(name, sorted(KNOWN), n=1, cutoff=0.8)
            if close:
                raise SettingsError(name, "is not a variable of this program", f"Perhaps {PREFIX}{close[0]} is meant")

    def text(self, name: str) -> str | None:
        return self._values.get(name, "").strip() or None

    def words(self, name: str) -> tuple[str, ...]:
        """The parts between commas or spaces, each once, in the order given."""
        return tuple(dict.fromkeys((self.text(name) or "").replace(",", " ").split()))

    def number(self, name: str, default: int, lowest: int, highest: int) -> int:
        text = self.text(name)
        if text is None:
            return default
        if not re.fullmatch(r"[0-9]{1,12}", text) or not lowest <= int(text) <= highest:
            fix = f"Give such a number; without it {default} holds"
            raise SettingsError(name, f"is not a whole number from {lowest} to {highest}", fix)
        return int(text)

    def flag(self, name: str) -> bool:
        text = (self.text(name) or "false").lower()
        if text not in _TRUE | _FALSE:
            raise SettingsError(name, "is neither true nor false", "Give true or false; without it false holds")
        return text in _TRUE

    def secret(self, name: str) -> bytes | None:
        """The variable, or what stands in the file its `_FILE` twin names, without the line end."""
        value, path = os.fsencode(self._values.get(name, "")).rstrip(b"\r\n"), self.text(f"{name}_FILE")
        if path is None:
            return value or None
        if value:
            raise SettingsError(name, f"is set, and {PREFIX}{name}_FILE too", "Set one of the two")
        try:
            with Path(path).open("rb") as file:
                value = file.read(_LARGEST_SECRET_FILE_BYTES + 1)
        except (OSError, ValueError) as error:
            fix = "Give the path of a file that this program may read"
            raise SettingsError(f"{name}_FILE", f"the file cannot be read ({_reason(error)})", fix) from None
        if len(value) > _LARGEST_SECRET_FILE_BYTES or not value.strip():
            fix = "Let the file hold the secret and nothing else"
            raise SettingsError(f"{name}_FILE", "the file is empty, or too long for a secret", fix)
        return value.rstrip(b"\r\n")


def _host(given: _Given) -> str:
    host = (given.text("HOST") or Settings.host).lower()
    try:
        return str(ipaddress.ip_address(host))
    except ValueError:
        if _HOST_NAME.fullmatch(host) is None:
            fix = "Give one of them, without brackets, port or scheme"
            raise SettingsError("HOST", "is neither an address nor a host name", fix) from None
    return host


def _port(given: _Given) -> int:
    if (given.text("PORT") or "").startswith("tcp://"):
        problem = "was set by the container platform, which does so for a service named gdmt-cards"
        fix = f"Set {PREFIX}PORT to a number yourself, or turn the platform's service links off"
        raise SettingsError("PORT", problem, fix)
    return given.number("PORT", Settings.port, 1, 65_535)


def _tokens(given: _Given) -> TokenSettings | None:
    issuer, audience, jwks = (given.text(name) for name in _TOKEN_NEEDS)
    if issuer is None or audience is None or jwks is None:
        for name in (*_TOKEN_NEEDS, "TOKEN_ALGORITHMS", "TOKEN_LEEWAY_SECONDS"):
            if given.text(name) is not None:
                missing = next(other for other in _TOKEN_NEEDS if given.text(other) is None)
                fix = f"Set {', '.join(PREFIX + each for each in _TOKEN_NEEDS)}, or none of them"
                raise SettingsError(missing, f"is not set, but {PREFIX}{name} is", fix)
        return None
    algorithms = given.words("TOKEN_ALGORITHMS") or ALGORITHMS
    if not set(algorithms) <= set(ALGORITHMS):
        fix = f"Give {' or '.join(ALGORITHMS)}, or both"
        raise SettingsError("TOKEN_ALGORITHMS", "names an algorithm that is not taken", fix)
    return TokenSettings(
        issuer=issuer,
        audience=audience,
        jwks=_jwks(jwks),
        algorithms=tuple(name for name in ALGORITHMS if name in algorithms),
        leeway_seconds=given.number("TOKEN_LEEWAY_SECONDS", TokenSettings.leeway_seconds, 0, 300),
    )


def _jwks(text: str) -> Path | str:
    if "://" in text:
        _refuse_bad_url("TOKEN_JWKS", text)
        if "#" in text:
            raise SettingsError("TOKEN_JWKS", "has a # in it", "Give the address without it")
        return text
    if not Path(text).is_file():
        fix = "Give the path of a JSON Web Key Set, or its https:// address"
        raise SettingsError("TOKEN_JWKS", "there is no such file", fix)
    return Path(text)


def _fhir_servers(given: _Given) -> tuple[str, ...]:
    servers = given.words("FHIR_SERVERS")
    for server in servers:
        _refuse_bad_url("FHIR_SERVERS", server)
        if "?" in server or "#" in server or set(urlsplit(server).path.split("/")[1:]) & {"", ".", ".."}:
            fix = "Give each as https://host/path, without a slash at the end, ?, # or dots for a folder"
            raise SettingsError("FHIR_SERVERS", "an address is not the plain base of a server", fix)
    return servers


def _refuse_bad_url(name: str, text: str) -> None:
    """Refuse all but https://host... (http:// on loopback): a token or a patient goes to, or comes from, that address."""
    try:
        parts = urlsplit(text)
        host, _ = parts.hostname, parts.port
    except ValueError:
        host = None
    if not host or "@" in parts.netloc or _URL_SIGNS.fullmatch(text) is None:
        fix = "Give it as https://host/path, without a user"
        raise SettingsError(name, "holds an address that is not understood", fix)
    if not (text.startswith("https://") or (text.startswith("http://") and is_loopback(host))):
        raise SettingsError(name, "holds an address that is not https", "Use https://; http:// serves on loopback only")


def _zone(given: _Given) -> ZoneInfo | None:
    name = given.text("ZONE")
    try:
        return None if name is None else ZoneInfo(name)
    except (KeyError, ValueError, OSError):
        raise SettingsError("ZONE", "is not a time zone", "Give an IANA name, as Europe/Dublin") from None


def _site_profile(given: _Given) -> Path | None:
    text = given.text("SITE")
    if text is None:
        return None
    if not Path(text).is_file():
        raise SettingsError("SITE", "there is no such file", "Give the path of a site profile, or nothing")
    return Path(text)


def _log_level(given: _Given) -> str:
    level = (given.text("LOG_LEVEL") or Settings.log_level).lower()
    if level not in LOG_LEVELS:
        raise SettingsError("LOG_LEVEL", "is not a level", f"Give one of {', '.join(LOG_LEVELS)}")
    return level


def _store_url(given: _Given) -> tuple[str, Path | None]:
    """The store's URL, and the file if it is SQLite."""
    fix = "Give sqlite:///path/to/file.db, or postgresql://user@host/database"
    secret = given.secret("STORE_URL")
    try:
        text = Settings.store_url if secret is None else secret.decode().strip()
        parsed: URL = make_url(text)
        kind = parsed.get_backend_name()
    except (ArgumentError, ValueError):
        raise SettingsError("STORE_URL", "is not understood", fix) from None
    if kind in ("postgresql", "postgres"):
        return text, None
    if kind != "sqlite":
        raise SettingsError("STORE_URL", "is of a database that is not supported", fix)
    path = Path(parsed.database or "")
    if not path.name or path.name == ":memory:" or str(path).startswith("file:") or path.is_dir():
        raise SettingsError("STORE_URL", "names no file", fix)
    return text, path


def _store_secret(given: _Given, beside: Path | None) -> bytes:
    """The secret given; else, if there is a file to keep it beside, the one kept there or a new one."""
    secret = given.secret("STORE_SECRET")
    fix = f"Give {SHORTEST_SECRET_BYTES} random bytes or more, and keep them as long as the data"
    if secret is None:
        if beside is None:
            only = "only on loopback with SQLite does the program make its own"
            raise SettingsError("STORE_SECRET", f"is not set; {only}", fix)
        secret = _kept_secret(beside.with_name(f"{beside.name}.secret"))
    if len(secret) < SHORTEST_SECRET_BYTES:
        raise SettingsError("STORE_SECRET", f"is shorter than {SHORTEST_SECRET_BYTES} bytes", fix)
    return secret


def _kept_secret(path: Path) -> bytes:
    try:
        if not os.path.lexists(path):
            _make_secret(path)
        return _read_own(path)
    except OSError as error:
        problem = f"is not set, and none can be kept beside the SQLite file ({_reason(error)})"
        fix = "Make its folder and let this program write there, or set the variable"
        raise SettingsError("STORE_SECRET", problem, fix) from None


def _make_secret(path: Path) -> None:
    """Put a new secret there, whole or not at all; one that another process put there in the meantime stays."""
    draft = path.with_name(f"{path.name}.{secrets.token_hex(8)}")
    handle = os.open(draft, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o600)
    try:
        with os.fdopen(handle, "wb") as file:
            file.write(secrets.token_hex(32).encode() + b"\n")
            file.flush()
            os.fsync(file.fileno())
        try:
            os.link(draft, path)
        except FileExistsError:
            return
    finally:
        draft.unlink()
    folder = os.open(path.parent, os.O_RDONLY)
    try:
        os.fsync(folder)  # data written with a secret that a power cut took back could not be read again
    finally:
        os.close(folder)


def _read_own(path: Path) -> bytes:
    handle = os.open(path, os.O_RDONLY | os.O_NOFOLLOW | os.O_NONBLOCK)
    with os.fdopen(handle, "rb") as file:
        status = os.fstat(file.fileno())
        if not stat.S_ISREG(status.st_mode) or status.st_mode & 0o077:
            fix = f"Look who could have read {path.name}, and give it mode 600"
            raise SettingsError("STORE_SECRET", "the secret kept beside the SQLite file can be read by others", fix)
        return file.read(_LARGEST_SECRET_FILE_BYTES).rstrip(b"\r\n")


def _reason(error: Exception) -> str:
    return (error.strerror if isinstance(error, OSError) else None) or type(error).__name__
