"""The store's tests run on both databases."""

from databases import opened, store, store_url

__all__ = ["opened", "store", "store_url"]
