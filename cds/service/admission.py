"""Who may ask, and how often: what every endpoint that serves patients or content asks first."""

from __future__ import annotations

from flask import Request

from cds.errors import RequestError
from cds.service.parts import Parts


def admit(request: Request, parts: Parts, scope: str) -> str:
    """Let a caller with the scope in, and say who it is. Raises the errors of the token, and RequestError 429."""
    caller = parts.callers.admit(request.headers.get("Authorization"), scope)
    wait = parts.wait(caller)
    if wait is not None:
        seconds = max(1, round(wait))
        raise RequestError(429, "too many requests", f"Wait {seconds} seconds", headers={"Retry-After": f"{seconds}"})
    return caller
