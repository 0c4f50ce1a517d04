"""From an empty database to the present tables, by one worker or many, and never back by accident."""

from __future__ import annotations

import subprocess
import sys
import threading
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from datetime import UTC, datetime
from pathlib import Path

import pytest
from alembic import command
from alembic.autogenerate import compare_metadata
from alembic.runtime.migration import MigrationContext
from sqlalchemy import create_engine, inspect, text

from cds.cards.replies import Reply
from cds.store import Store, StoreError, migrations, open_store
from cds.store.models import metadata

WRITER = Path(__file__).parent / "reply_writer.py"
REPLY = Reply(
    card_id="c1",
    rule="start-mra",
    about="mra",
    code="accepted",
    facts="0123",
    made_at=datetime(2026, 3, 1, tzinfo=UTC),
)


def test_an_empty_database_is_not_ready_until_it_is_migrated(opened: Callable[..., Store]):
    store = opened()
    assert not store.is_ready()
    with pytest.raises(StoreError, match="no tables yet"):
        store.replies_of("Patient/one")
    store.migrate()
    assert store.is_ready()
    assert store.replies_of("Patient/one") == ()


def test_migrating_again_changes_nothing(store: Store, opened: Callable[..., Store]):
    store.add_reply("Patient/one", REPLY)
    store.migrate()
    opened().migrate()
    assert store.replies_of("Patient/one") == (REPLY,)
    assert store.is_ready()


def test_the_migrations_make_the_tables_that_the_program_uses(store: Store, store_url: str):
    engine = create_engine(store_url)
    with engine.connect() as connection:
        context = MigrationContext.configure(
            connection, opts={"version_table": migrations.VERSION_TABLE, "compare_type": True}
        )
        assert compare_metadata(context, metadata) == []
        names = set(inspect(connection).get_table_names())
    engine.dispose()
    assert names == {"replies", "shown_cards", "secret_check", migrations.VERSION_TABLE}


def test_four_workers_that_start_at_once_on_an_empty_database_all_become_ready(store_url: str):
    workers = [
        subprocess.Popen(
            [sys.executable, str(WRITER), store_url, "Patient/one", "1"],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
        )
        for _ in range(4)
    ]
    said = [worker.communicate("go\n", timeout=50) for worker in workers]
    assert [(worker.returncode, err) for worker, (_, err) in zip(workers, said, strict=True)] == [(0, "")] * 4
    store = open_store(store_url, secret=b"a secret for tests, 32 bytes long")
    assert len(store.replies_of("Patient/one")) == 4
    store.close()


def test_migrations_that_start_at_the_same_moment_wait_for_each_other(opened: Callable[..., Store]):
    stores = [opened() for _ in range(8)]
    together = threading.Barrier(len(stores))

    def start(store: Store) -> bool:
        together.wait(timeout=20)
        store.migrate()
        return store.is_ready()

    with ThreadPoolExecutor(len(stores)) as threads:
        assert list(threads.map(start, stores)) == [True] * len(stores)


def test_going_back_is_refused_and_loses_nothing(store: Store, store_url: str):
    store.add_reply("Patient/one", REPLY)
    engine = create_engine(store_url)
    with pytest.raises(StoreError, match="throw every reply away"), engine.begin() as connection:
        command.downgrade(migrations.config_for(connection), "base")
    engine.dispose()
    assert store.is_ready()
    assert store.replies_of("Patient/one") == (REPLY,)


def test_tables_of_a_newer_program_are_left_alone(store: Store, store_url: str):
    engine = create_engine(store_url)
    with engine.begin() as connection:
        connection.execute(text(f"UPDATE {migrations.VERSION_TABLE} SET version_num = '9999'"))
    engine.dispose()
    assert not store.is_ready()
    with pytest.raises(StoreError, match="newer version of this program"):
        store.migrate()


def test_a_migration_that_fails_half_way_leaves_nothing(opened: Callable[..., Store], store_url: str):
    engine = create_engine(store_url)
    with engine.begin() as connection:  # the third table of the first migration cannot be made
        connection.execute(text("CREATE TABLE secret_check (other INTEGER)"))
    store = opened()
    with pytest.raises(StoreError):
        store.migrate()
    with engine.begin() as connection:
        assert inspect(connection).get_table_names() == ["secret_check"]
        connection.execute(text("DROP TABLE secret_check"))
    engine.dispose()
    store.migrate()
    assert store.is_ready()


def test_a_file_that_is_no_database_is_told_plainly(tmp_path: Path):
    file = tmp_path / "store.db"
    file.write_bytes(b"these are the minutes of a meeting, not a database" * 40)
    store = open_store(f"sqlite:///{file}", secret=b"a secret for tests, 32 bytes long")
    assert not store.is_ready()
    with pytest.raises(StoreError, match="SQLITE_NOTADB"):
        store.migrate()
    store.close()
