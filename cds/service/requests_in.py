"""What a request brings: a Bundle by value, or where to fetch one; the moment to assess; who is asking."""

from __future__ import annotations

from collections.abc import Callable
from datetime import datetime, tzinfo
from typing import Any

import orjson
from flask import Request

from cds.errors import RequestError
from cds.fhir.dates import DateNotUnderstood, parse_as_of
from cds.fhir.reading import Limits

_JSON_TYPES = frozenset({"application/json", "application/fhir+json"})
_ENCODINGS = frozenset({"", "identity", "gzip"})
_LARGEST_REFERENCE_BYTES = 16 * 1024
_BY_REFERENCE = ("fhir_server", "patient", "access_token")
_SEND = "Send a FHIR R4 Bundle as application/fhir+json or application/json, gzip or not"
Fetch = Callable[
    [str, str, str | None], tuple[bytes, tuple[str, ...]]
]  # the Bundle, and types the server does not offer


def read_body(request: Request, limits: Limits, *, seconds: float) -> bytes:
    """Read the body within the limits. Raises RequestError 413, 415 or 408, and 400 for an empty one."""
    if request.mimetype not in _JSON_TYPES:
        raise RequestError(415, "the body is not JSON by its Content-Type", _SEND)
    if request.headers.get("Content-Encoding", "").strip().lower() not in _ENCODINGS:
        raise RequestError(415, "the body has an encoding that is not read", "Send it plain or with gzip")
    if request.content_length is not None and request.content_length > limits.max_bytes:
        raise RequestError(413, f"the body is larger than {limits.max_bytes} bytes", "Send fewer resources at a time")
    socket = request.environ.get("gunicorn.socket")
    if socket is not None:  # a sender that stops in the middle must not hold a worker
        socket.settimeout(seconds)
    try:
        data: bytes = request.stream.read(limits.max_bytes + 1)
    except OSError:
        raise RequestError(408, "the body came too slowly", "Send it at once, or in smaller parts") from None
    if len(data) > limits.max_bytes:
        raise RequestError(413, f"the body is larger than {limits.max_bytes} bytes", "Send fewer resources at a time")
    if not data:
        raise RequestError(400, "the body is empty", _SEND)
    return data


def by_reference(data: bytes) -> tuple[str, str, str | None] | None:
    """The server, patient and token of a body that names a patient instead of sending one; None for every other body."""
    if len(data) > _LARGEST_REFERENCE_BYTES or b'"fhir_server"' not in data:
        return None
    try:
        body = orjson.loads(data)
    except orjson.JSONDecodeError:
        return None
    if not isinstance(body, dict) or "resourceType" in body:
        return None
    unknown = sorted(set(body) - set(_BY_REFERENCE))
    if unknown:
        raise RequestError(400, "the body has keys that are not known", f"Send only {', '.join(_BY_REFERENCE)}")
    server, patient, token = (body.get(key) for key in _BY_REFERENCE)
    if not isinstance(server, str) or not isinstance(patient, str) or not isinstance(token, (str, type(None))):
        raise RequestError(400, "fhir_server, patient or access_token is no text", "Send each as a JSON string")
    return server, patient, token


def moment(request: Request, zone: tzinfo, now: Callable[[], datetime]) -> datetime:
    """The moment of `?as_of=`, else the present one, in the zone whose calendar days count."""
    text = request.args.get("as_of")
    if text is None:
        return now().astimezone(zone)
    try:
        return parse_as_of(text, zone)
    except DateNotUnderstood as error:
        raise RequestError(
            400, f"as_of {error.problem}", "Write YYYY-MM-DD, or an instant with its time zone"
        ) from None


def is_true(request: Request, name: str) -> bool:
    """Read a flag of the query: absent or false, or true. Raises RequestError 400 for other words."""
    text = request.args.get(name, "false").lower()
    if text not in ("true", "false"):
        raise RequestError(400, f"{name} is neither true nor false", "Write true or false")
    return text == "true"


def refuse_unknown(request: Request, known: frozenset[str]) -> None:
    """Raise RequestError 400 for a query parameter nobody reads: a misspelt one must not pass in silence."""
    if set(request.args) - known:
        fix = f"This path reads {', '.join(sorted(known))}" if known else "This path reads none"
        raise RequestError(400, "the query has a parameter that is not known", fix)


def json_object(data: bytes) -> dict[str, Any]:
    """Read a small JSON object. Raises RequestError 400."""
    try:
        body = orjson.loads(data)
    except orjson.JSONDecodeError:
        raise RequestError(400, "the body is not JSON", "Send a JSON object") from None
    if not isinstance(body, dict):
        raise RequestError(400, "the body is not a JSON object", "Send a JSON object")
    return body
