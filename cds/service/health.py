"""/healthz, /readyz, /metrics and /openapi.json: for those who run the service."""

from __future__ import annotations

from flask import Blueprint, Response, request

from cds.service.answers import as_json
from cds.service.contract import Contract
from cds.service.parts import Parts


def blueprint(parts: Parts, contract: Contract) -> Blueprint:
    """Liveness says the process answers; readiness that the store and the content are there.

    A store written with another secret is no matter of waiting: its error goes through as a problem.
    """
    pages = Blueprint("health", __name__)

    @pages.get("/healthz")
    def alive() -> Response:
        return as_json({"status": "alive"})

    @pages.get("/readyz")
    def ready() -> Response:
        is_ready = _store_is_ready(parts)
        store = "none" if parts.store is None else "ready" if is_ready else "not ready"
        body = {
            "status": "ready" if is_ready else "not ready",
            "store": store,
            "content": {"version": parts.content.version, "sha256": parts.content.sha256, "site": parts.content.site},
        }
        return as_json(body, 200 if is_ready else 503)

    @pages.get("/metrics")
    def metrics() -> Response:
        parts.callers.admit(request.headers.get("Authorization"), "metrics")
        body, media_type = parts.watch.metrics()
        return Response(body, content_type=media_type)

    @pages.get("/openapi.json")
    def document() -> Response:
        return as_json(contract.document)

    return pages


def _store_is_ready(parts: Parts) -> bool:
    if parts.store is None:
        return True
    return parts.store.is_ready()
