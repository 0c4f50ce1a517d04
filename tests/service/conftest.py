"""The endpoints' tests use the real store where replies are in play."""

from databases import opened, store, store_url

__all__ = ["opened", "store", "store_url"]
