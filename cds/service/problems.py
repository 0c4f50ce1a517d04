"""Every error as application/problem+json (RFC 9457), with the issues list. Never a value, token or traceback."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from http import HTTPStatus
from typing import Any

import orjson
from flask import Flask, Response, g
from werkzeug.exceptions import HTTPException

from cds.errors import CdsError, InputError, Issue, ResourceError
from cds.fhir.record_shape import issue_shape

MEDIA_TYPE = "application/problem+json"
_TYPE = "https://gdmt-cards.example/problems/"
_FIXES = {
    404: "Look up the path in /openapi.json.",
    405: "Look up the methods of this path in /openapi.json.",
    413: "Send fewer resources at a time.",
}


def problem(
    status: int, detail: str, fix: str, *, issues: Sequence[Issue] = (), headers: Mapping[str, str] | None = None
) -> Response:
    """Build the answer: what is wrong, the way out, the request's id, and the issues."""
    title = HTTPStatus(status).phrase
    body: dict[str, Any] = {
        "type": f"{_TYPE}{title.lower().replace(' ', '-')}",
        "title": title,
        "status": status,
        "detail": detail,
        "fix": fix,
        "instance": f"urn:request:{g.get('request_id', 'none')}",
        "issues": [issue_shape(issue) for issue in issues],
    }
    return Response(orjson.dumps(body), status=status, mimetype=MEDIA_TYPE, headers=dict(headers or {}))


def register(app: Flask) -> None:
    """Answer every error of ours, of the framework, and any other, as a problem."""
    app.register_error_handler(CdsError, _ours)
    app.register_error_handler(HTTPException, _of_the_framework)
    app.register_error_handler(Exception, _unexpected)


def _ours(error: CdsError) -> Response:
    detail, _, fix = str(error).partition("\n")
    issues: Sequence[Issue] = ()
    if isinstance(error, InputError):
        issues = error.issues
    elif isinstance(error, ResourceError):
        issues = (error.issue,)
    headers = getattr(error, "headers", None)
    return problem(error.http_status, detail, fix or "See the issues.", issues=issues, headers=headers)


def _of_the_framework(error: HTTPException) -> Response:
    status = error.code or 500
    headers = {name: value for name, value in error.get_headers() if name in ("Allow", "Retry-After")}
    fix = _FIXES.get(status, "See /openapi.json.")
    return problem(status, HTTPStatus(status).description or HTTPStatus(status).phrase, fix, headers=headers)


def _unexpected(error: Exception) -> Response:
    """The last resort: the type and place go to the log, nothing of the request to anyone."""
    g.error_type = type(error).__name__
    g.error_place = _place(error)
    return problem(500, "an error of the program itself", "Report it with the id in `instance`.")


def _place(error: Exception) -> str:
    trace = error.__traceback__
    while trace is not None and trace.tb_next is not None:
        trace = trace.tb_next
    return "?" if trace is None else f"{trace.tb_frame.f_globals.get('__name__', '?')}:{trace.tb_lineno}"
