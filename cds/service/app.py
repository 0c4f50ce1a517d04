"""The WSGI application: what every request passes, and the endpoints. Built from parts handed in; reads no environment."""

from __future__ import annotations

import secrets

from flask import Flask, Response, g, request

from cds.service import assessments, catalogue, health, problems, replies
from cds.service.contract import Contract
from cds.service.parts import Parts

_SECURITY_HEADERS = {
    "Cache-Control": "no-store",
    "Content-Security-Policy": "default-src 'none'; frame-ancestors 'none'",
    "Referrer-Policy": "no-referrer",
    "X-Content-Type-Options": "nosniff",
    "X-Frame-Options": "DENY",
}
_LONGEST_REQUEST_ID = 64


def create_app(parts: Parts) -> Flask:
    """Build the application. The contract is the published OpenAPI document; answers are not checked against it here."""
    app = Flask("cds.service", static_folder=None)
    app.json.sort_keys = False  # type: ignore[attr-defined]  # of the default provider
    app.url_map.strict_slashes = True
    contract = Contract.load()
    problems.register(app)
    app.before_request(lambda: _begin(parts))
    app.after_request(lambda response: _finish(response, parts))
    app.register_blueprint(assessments.blueprint(parts))
    app.register_blueprint(replies.blueprint(parts))
    app.register_blueprint(catalogue.blueprint(parts))
    app.register_blueprint(health.blueprint(parts, contract))
    return app


def _begin(parts: Parts) -> None:
    sent = request.headers.get("X-Request-Id", "")
    is_plain = 0 < len(sent) <= _LONGEST_REQUEST_ID and sent.replace("-", "").isalnum() and sent.isascii()
    g.request_id = sent if is_plain else secrets.token_hex(8)
    g.began = parts.clock()
    g.facts = {}


def _finish(response: Response, parts: Parts) -> Response:
    for name, value in _SECURITY_HEADERS.items():
        response.headers.setdefault(name, value)
    response.headers["X-Request-Id"] = g.get("request_id", "none")
    facts = {
        **g.get("facts", {}),
        "request_id": g.get("request_id"),
        "error": g.get("error_type"),
        "at": g.get("error_place"),
    }
    endpoint = request.url_rule.rule if request.url_rule is not None else "none"
    seconds = parts.clock() - g.get("began", parts.clock())
    parts.watch.answered(endpoint, response.status_code, seconds, {k: v for k, v in facts.items() if v is not None})
    return response
