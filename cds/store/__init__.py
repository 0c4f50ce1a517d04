"""What is kept between requests, in SQLite or PostgreSQL: replies, and which cards were shown. No medicine, no HTTP."""

from __future__ import annotations

from cds.store.engine import Store, open_store
from cds.store.failures import ReplyIdError, ReplyIdTakenError, StoreError
from cds.store.retention import PurgeCount
from cds.store.shown import NotedCard, ShownCard

__all__ = [
    "NotedCard",
    "PurgeCount",
    "ReplyIdError",
    "ReplyIdTakenError",
    "ShownCard",
    "Store",
    "StoreError",
    "open_store",
]
