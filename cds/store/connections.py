"""Connections of the two databases: durable when they say so, never waiting without end, never shared by two processes."""

from __future__ import annotations

import os
import sqlite3
import weakref
from contextlib import suppress
from typing import Any

from sqlalchemy import Connection, Engine, create_engine, event
from sqlalchemy.engine import URL
from sqlalchemy.pool import QueuePool

_WAIT_MS = 10_000


def engine_for(url: URL) -> Engine:
    """Make the engine of a SQLite file or a PostgreSQL database. Connects to nothing yet."""
    is_sqlite = url.get_backend_name() == "sqlite"
    engine = create_engine(
        url,
        poolclass=QueuePool,
        pool_size=5,
        max_overflow=15,
        pool_timeout=_WAIT_MS / 1000,
        pool_pre_ping=not is_sqlite,  # a restarted server is noticed before a statement is lost on it
        hide_parameters=True,  # an error's text would otherwise repeat what was being written
        connect_args={} if is_sqlite or "connect_timeout" in url.query else {"connect_timeout": 5},
    )
    if is_sqlite:
        event.listen(engine, "connect", _prepare_sqlite)
        event.listen(engine, "begin", _begin_sqlite)
    else:
        event.listen(engine, "connect", _prepare_postgresql)
    _stay_in_one_process(engine)
    return engine


def _prepare_sqlite(connection: sqlite3.Connection, _record: object) -> None:
    connection.isolation_level = None  # transactions begin where we say, also for tables and reads
    connection.execute(f"PRAGMA busy_timeout = {_WAIT_MS}")
    with suppress(sqlite3.OperationalError):  # busy: another process is changing the file's mode at this moment
        if connection.execute("PRAGMA journal_mode").fetchone() != ("wal",):
            connection.execute("PRAGMA journal_mode = WAL")
    connection.execute("PRAGMA synchronous = FULL")
    connection.execute("PRAGMA foreign_keys = ON")
    connection.execute("PRAGMA secure_delete = ON")  # what is forgotten is overwritten too


def _begin_sqlite(connection: Connection) -> None:
    """Begin. A writer asks for the lock at once: one that reads first could not wait for it later."""
    begin = connection.get_execution_options().get("sqlite_begin", "BEGIN")
    if begin:  # what moves the journal stands outside any transaction
        connection.exec_driver_sql(begin)


def _prepare_postgresql(connection: Any, _record: object) -> None:
    connection.execute(f"SET statement_timeout = {_WAIT_MS + 5_000}")
    connection.execute(  # a site may have switched it off; a stricter setting stays
        "SELECT set_config('synchronous_commit', 'on', false) WHERE current_setting('synchronous_commit') = 'off'"
    )
    connection.commit()


def _stay_in_one_process(engine: Engine) -> None:
    """Let each process open its own connections: a fork hands none on that is idle, and uses none that it was handed."""
    engine_if_alive = weakref.ref(engine)
    inherited: list[object] = []  # kept, because closing one in the child would disturb the parent's

    def before_fork() -> None:
        if (alive := engine_if_alive()) is not None:
            alive.dispose()

    def in_child() -> None:
        if (alive := engine_if_alive()) is not None:
            inherited.append(alive.pool)
            alive.dispose(close=False)

    os.register_at_fork(before=before_fork, after_in_child=in_child)
