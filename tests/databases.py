"""A store for each test: a SQLite file, or a PostgreSQL schema of its own where a server is named."""

from __future__ import annotations

import os
import uuid
from collections.abc import Callable, Iterator
from contextlib import ExitStack, closing
from pathlib import Path

import pytest
from sqlalchemy import create_engine, make_url, text

from cds.store import Store, open_store

SECRET = b"a secret for tests, 32 bytes long"
_SERVER = os.environ.get("GDMT_CARDS_TEST_POSTGRES")


@pytest.fixture(params=["sqlite", "postgresql"])
def store_url(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[str]:
    """The URL of an empty database."""
    if request.param == "sqlite":
        yield f"sqlite:///{tmp_path / 'store.db'}"
        return
    if not _SERVER:
        pytest.skip("GDMT_CARDS_TEST_POSTGRES names no PostgreSQL server")
    schema = f"store_{uuid.uuid4().hex}"
    server = create_engine(_SERVER)
    try:
        with server.begin() as connection:
            connection.execute(text(f"CREATE SCHEMA {schema}"))
        in_schema = make_url(_SERVER).update_query_dict({"options": f"-csearch_path={schema}"})
        yield in_schema.render_as_string(hide_password=False)
        with server.begin() as connection:
            connection.execute(text(f"DROP SCHEMA {schema} CASCADE"))
    finally:
        server.dispose()


@pytest.fixture
def opened(store_url: str) -> Iterator[Callable[..., Store]]:
    """Open the store; closed after the test. Its tables are whatever they are."""
    with ExitStack() as stores:

        def open_it(secret: bytes = SECRET, *, keep_references: bool = False) -> Store:
            return stores.enter_context(closing(open_store(store_url, secret=secret, keep_references=keep_references)))

        yield open_it


@pytest.fixture
def store(opened: Callable[..., Store]) -> Store:
    """An empty store whose tables are in place."""
    made = opened()
    made.migrate()
    return made
