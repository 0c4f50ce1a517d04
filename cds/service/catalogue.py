"""GET /v1/rules and /v1/rules/{id}: the rule catalogue, from content."""

from __future__ import annotations

from flask import Blueprint, Response, request

from cds.content.catalogue import catalogue
from cds.errors import RequestError
from cds.service.admission import admit
from cds.service.answers import as_json
from cds.service.parts import Parts
from cds.service.requests_in import refuse_unknown


def blueprint(parts: Parts) -> Blueprint:
    """The catalogue, whole and by rule."""
    pages = Blueprint("rules", __name__)
    rules = catalogue(parts.content)
    by_id = {rule["rule"]: rule for rule in rules}

    @pages.get("/v1/rules")
    def every() -> Response:
        refuse_unknown(request, frozenset())
        admit(request, parts, "rules")
        return as_json(
            {"format": "gdmt-cards/rules", "format_version": "1.0", "version": parts.content.version, "rules": rules}
        )

    @pages.get("/v1/rules/<rule>")
    def one(rule: str) -> Response:
        refuse_unknown(request, frozenset())
        admit(request, parts, "rules")
        if rule not in by_id:
            raise RequestError(404, "no rule has such an id", "Look it up in /v1/rules")
        return as_json(by_id[rule])

    return pages
