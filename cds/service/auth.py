"""Who is asking, and may they? Bearer tokens (RFC 6750): JWT signed with an asymmetric key of the issuer (RFC 7519, 8725).

Every token that is refused gets the same answer; why stands in `reason`, a code for metrics. Nothing of a token is
logged, kept or repeated.
"""

from __future__ import annotations

import hashlib
import math
import re
from collections.abc import Callable
from dataclasses import dataclass
from datetime import datetime
from typing import Any, NoReturn

import jwt
from jwt.types import Options

from cds.errors import CdsError
from cds.service.jwks import LONGEST_KID, Fetch, KeySource, fetch_key_set, open_keys
from cds.service.settings import TokenSettings

SCOPES = ("assess", "record", "check-order", "reply", "cards", "rules", "metrics")
LONGEST_TOKEN = 8 * 1024
_BEARER = re.compile(r"bearer +(.+)", re.IGNORECASE | re.DOTALL)
_TOKEN = re.compile(r"[A-Za-z0-9_-]+\.[A-Za-z0-9_-]+\.[A-Za-z0-9_-]+")
# Times are checked here, against the moment handed in; the rest by the library.
_CHECKS: Options = {
    "verify_signature": True,
    "verify_aud": True,
    "verify_iss": True,
    "verify_exp": False,
    "verify_nbf": False,
    "verify_iat": False,
    "enforce_minimum_key_length": True,
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Caller:
    """Who is asking: `subject_key` is the same at each call of one caller and names nobody."""

    subject_key: str
    scopes: frozenset[str]


ANYONE = Caller(subject_key="anyone", scopes=frozenset(SCOPES))


class TokenError(CdsError):
    """There is no token, or one that is not taken. What the client is told is the same for all that are not taken.

    `error` is the code of RFC 6750 (None without a token), `reason` one for metrics, `headers` go with the answer.
    """

    exit_code = 40
    http_status = 401

    def __init__(self, reason: str) -> None:
        is_missing = reason == "token-missing"
        self.problem = "the request has no bearer token" if is_missing else "the token is not taken"
        self.fix = "Send a valid token of this service's issuer as Authorization: Bearer"
        super().__init__(f"{self.problem}.\n{self.fix}.")
        self.reason = reason
        self.error = None if is_missing else "invalid_token"
        self.headers = {"WWW-Authenticate": "Bearer" if is_missing else f'Bearer error="{self.error}"'}


class ScopeError(CdsError):
    """The token is good but does not allow this; names the scope that does."""

    exit_code = 41
    http_status = 403
    error = "insufficient_scope"
    reason = "scope-missing"

    def __init__(self, scope: str) -> None:
        self.problem = f"the token does not have the scope {scope}"
        self.fix = f"Ask the issuer for a token with the scope {scope}"
        super().__init__(f"{self.problem}.\n{self.fix}.")
        self.headers = {"WWW-Authenticate": f'Bearer error="{self.error}", scope="{scope}"'}


def require(caller: Caller, scope: str) -> None:
    """Raise ScopeError unless the caller has the scope."""
    if scope not in caller.scopes:
        raise ScopeError(scope)


class Gatekeeper:
    """Lets callers in by their tokens; without token settings (loopback only) everyone, with every scope.

    `tell` hears the reason whenever somebody is refused, or keys cannot be had. Raises SettingsError for a key file
    without a usable key.
    """

    def __init__(
        self,
        tokens: TokenSettings | None,
        *,
        now: Callable[[], datetime],
        fetch_keys: Fetch = fetch_key_set,
        tell: Callable[[str], None] = lambda _reason: None,
    ) -> None:
        self._tokens, self._now, self._tell = tokens, now, tell
        self._keys: KeySource | None = None
        if tokens is not None:
            self._keys = open_keys(tokens.jwks, now=now, fetch=fetch_keys, tell=tell)

    def admit(self, authorization: str | None, scope: str) -> str:
        """Give the subject key of a caller who has the scope. Raises TokenError, ScopeError, KeysUnavailableError."""
        try:
            caller = self.caller(authorization)
            require(caller, scope)
        except (TokenError, ScopeError) as error:
            self._tell(error.reason)
            raise
        return caller.subject_key

    def caller(self, authorization: str | None) -> Caller:
        """Say who is asking, by the Authorization header. Raises TokenError; KeysUnavailableError if no key is at hand."""
        if self._tokens is None or self._keys is None:
            return ANYONE
        claims = _verified(_token_in(authorization), self._tokens, self._keys)
        _check_times(claims, self._now().timestamp(), self._tokens.leeway_seconds)
        return Caller(subject_key=_subject_key(claims), scopes=_scopes(claims))


def _refuse(reason: str) -> NoReturn:
    # Nothing chained: the library's words quote the token.
    raise TokenError(reason) from None


def _token_in(authorization: str | None) -> str:
    bearer = _BEARER.fullmatch((authorization or "").strip(" "))
    if bearer is None:
        _refuse("token-missing")
    token = bearer[1]
    if len(token) > LONGEST_TOKEN:
        _refuse("token-too-long")
    if _TOKEN.fullmatch(token) is None:
        _refuse("token-malformed")
    return token


def _verified(token: str, tokens: TokenSettings, keys: KeySource) -> dict[str, Any]:
    """The claims of a token whose signature, issuer and audience are right.

    The key decides on the algorithm: it is looked up under the token's `alg` among those the settings name, so a public
    key never becomes an HMAC secret. A `kid` is only ever looked up; a key or address in the header is not read.
    """
    try:
        header = jwt.get_unverified_header(token)
    except jwt.PyJWTError:
        _refuse("token-malformed")
    algorithm, kid = header.get("alg"), header.get("kid")
    if not isinstance(algorithm, str) or algorithm not in tokens.algorithms:
        _refuse("token-algorithm")
    if not isinstance(kid, str) or not 0 < len(kid) <= LONGEST_KID:
        _refuse("token-kid")
    key = keys.find(kid, algorithm)
    if key is None:
        _refuse("token-kid")
    try:
        return jwt.decode(
            token, key, algorithms=[algorithm], audience=tokens.audience, issuer=tokens.issuer, options=_CHECKS
        )
    except jwt.InvalidSignatureError:
        _refuse("token-signature")
    except jwt.InvalidIssuerError:
        _refuse("token-issuer")
    except jwt.InvalidAudienceError:
        _refuse("token-audience")
    except jwt.MissingRequiredClaimError:
        _refuse("token-claims")
    except jwt.PyJWTError:
        _refuse("token-malformed")


def _check_times(claims: dict[str, Any], now: float, leeway: int) -> None:
    """Refuse a token outside its time. Without `exp` it would never end, without `iat` nobody could say when it began."""
    expires, issued = _moment(claims.get("exp")), _moment(claims.get("iat"))
    begins = _moment(claims["nbf"]) if "nbf" in claims else issued
    if now >= expires + leeway:
        _refuse("token-expired")
    if max(issued, begins) - leeway > now:
        _refuse("token-not-yet-valid")


def _moment(claim: Any) -> int | float:
    """The seconds of a NumericDate, as sent: a whole number may be too large for a float."""
    if not isinstance(claim, (int, float)) or isinstance(claim, bool) or not 0 <= claim < math.inf:
        _refuse("token-claims")
    return claim


def _subject_key(claims: dict[str, Any]) -> str:
    """A hash of issuer and subject, or of issuer and client where a program calls for itself (RFC 9068, section 2.2)."""
    for kind in ("sub", "client_id"):
        name = claims.get(kind)
        if isinstance(name, str) and name:
            parts = "\n".join((claims["iss"], kind, name)).encode("utf-8", "surrogatepass")
            return hashlib.sha256(parts).hexdigest()[:32]
    _refuse("token-claims")


def _scopes(claims: dict[str, Any]) -> frozenset[str]:
    """Our scopes among those granted: of `scope` (words in one string), else of `scp` (a list). None in any other shape."""
    granted = claims.get("scope")
    if granted is None:
        granted = claims.get("scp")
        words = granted if isinstance(granted, list) else []
    else:
        words = granted.split(" ") if isinstance(granted, str) else []
    return frozenset(SCOPES).intersection(word for word in words if isinstance(word, str))
