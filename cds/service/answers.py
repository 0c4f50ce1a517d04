"""An answer as JSON: the same bytes for the same body."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import orjson
from flask import Response


def as_json(body: Mapping[str, Any], status: int = 200) -> Response:
    """Serialise in the order of the keys as built."""
    return Response(orjson.dumps(body), status=status, mimetype="application/json")
