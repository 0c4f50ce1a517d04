"""The one door to what is kept: open a store, bring its tables up to date, read and write.

Nothing is written before the secret was held against the check value in the database, so that two secrets never mix.
"""

from __future__ import annotations

import os
from collections.abc import Iterable, Iterator
from contextlib import contextmanager, suppress
from datetime import date
from functools import cached_property
from pathlib import Path

from sqlalchemy import Connection, Engine, inspect, select, text
from sqlalchemy.engine import URL, make_url
from sqlalchemy.exc import ArgumentError, SQLAlchemyError

from cds.cards.replies import Reply
from cds.store import migrations, models, replies, retention, shown
from cds.store.connections import engine_for
from cds.store.failures import StoreError, telling_plainly
from cds.store.keys import Keys
from cds.store.retention import PurgeCount
from cds.store.shown import NotedCard, ShownCard

# Any number that no other program on the same database uses for its own locks.
_MIGRATION_LOCK = 0x67646D74
_LONG_WORK = text("SET LOCAL statement_timeout = '120s'")


def open_store(url: str, *, secret: bytes, keep_references: bool = False) -> Store:
    """Open the store at a URL: `sqlite:///file.db`, or `postgresql://user@host/database`.

    A database that cannot be reached now is no error yet: `is_ready` and every use will tell. Raises StoreError for a
    URL of no use, a secret that is too short, and a secret other than the one the data were written with.
    With `keep_references` the patient's reference stands in clear beside each reply written from now on.
    """
    keys = Keys(secret)
    store = Store(engine_for(_checked(url)), keys, keep_references=keep_references)
    store.check_secret()
    return store


class Store:
    """Replies and shown cards of all patients; safe to share between threads, and to carry through a fork.

    Every method raises StoreError if the database fails, has no tables yet, or was written with another secret.
    """

    def __init__(self, engine: Engine, keys: Keys, *, keep_references: bool) -> None:
        self._engine = engine
        self._writer = engine.execution_options(sqlite_begin="BEGIN IMMEDIATE")
        self._keys, self._keep_references = keys, keep_references
        self._secret_is_known = False

    def migrate(self) -> None:
        """Bring the tables to the newest version, whatever they are now. Workers that start at once wait for each other."""
        with telling_plainly(), self._writer.begin() as connection:
            if connection.dialect.name == "postgresql":
                connection.execute(_LONG_WORK)
                connection.execute(text("SELECT pg_advisory_xact_lock(:lock)"), {"lock": _MIGRATION_LOCK})
            migrations.upgrade(connection)
            check = {"id": 1, "value": self._keys.check_value}
            connection.execute(
                models.insert_into(connection, models.secret_check).values(check).on_conflict_do_nothing()
            )
            self._check(connection)
        self._engine.dispose()  # who migrates before forking leaves no open connection to its workers

    def is_ready(self) -> bool:
        """Say whether the database answers and its tables have the version this program needs.

        Raises StoreError if the data were written with another secret.
        """
        try:
            with self._engine.connect() as connection:
                if migrations.present(connection) != self._newest:
                    return False
                self._check(connection)
        except SQLAlchemyError:
            return False
        return True

    def check_secret(self) -> None:
        """Hold the secret against the database, if that can be reached and has tables. Raises StoreError."""
        try:
            with suppress(SQLAlchemyError), self._engine.connect() as connection:
                if inspect(connection).has_table(models.secret_check.name):
                    self._check(connection)
        finally:
            self._engine.dispose()

    def close(self) -> None:
        """Close the connections that are not in use."""
        self._engine.dispose()

    def add_reply(self, patient: str, reply: Reply, *, made_by: str | None = None, reply_id: str | None = None) -> str:
        """Keep a reply and give its id (a UUID) back once it is on the disk.

        With the `reply_id` of an earlier call the reply is kept only once, so a client may repeat a call whose answer it
        missed. Raises ReplyIdError for an id that is no UUID, ReplyIdTakenError for the id of a reply that said something
        else, ValueError for a `made_at` without a zone.
        """
        if reply.made_at.utcoffset() is None:
            raise ValueError("made_at needs a zone")
        new = replies.NewReply(
            patient=patient,
            reply=reply,
            reply_id=replies.id_of(reply_id),
            made_by=made_by,
            keep_reference=self._keep_references,
        )
        with self._writing() as connection:
            replies.add(connection, self._keys, new)
        return new.reply_id

    def replies_of(self, patient: str) -> tuple[Reply, ...]:
        """The replies to a patient's cards, oldest first, instants in UTC; empty if there are none."""
        with self._reading() as connection:
            return replies.of_patient(connection, self._keys, patient)

    def note_shown(self, patient: str, cards: Iterable[ShownCard], on: date) -> None:
        """Note that cards of a patient were shown on a day. Writes nothing if that is known already."""
        of_today = tuple(cards)
        if not of_today:
            return
        with self._reading() as connection:
            news = shown.not_noted(connection, self._keys, patient, of_today, on)
        if news:
            with self._writing() as connection:
                shown.note(connection, self._keys, patient, news, on)

    def shown_to(self, patient: str) -> tuple[NotedCard, ...]:
        """The cards that were shown of a patient, the longest known first; empty if there are none."""
        with self._reading() as connection:
            return shown.of_patient(connection, self._keys, patient)

    def purge(self, before: date) -> PurgeCount:
        """Remove the replies made and the cards last shown before a day (UTC), and say how many."""
        with self._writing(long=True) as connection:
            count = retention.purge(connection, before)
        self._wipe_journal()
        return count

    def forget(self, patient: str) -> PurgeCount:
        """Remove all that is kept of a patient, and say how many."""
        with self._writing(long=True) as connection:
            count = retention.forget(connection, self._keys.patient(patient))
        self._wipe_journal()
        return count

    @cached_property
    def _newest(self) -> str | None:
        return migrations.newest()

    @contextmanager
    def _reading(self) -> Iterator[Connection]:
        with telling_plainly(), self._engine.connect() as connection:
            self._check_once(connection)
            yield connection

    @contextmanager
    def _writing(self, *, long: bool = False) -> Iterator[Connection]:
        with telling_plainly(), self._writer.begin() as connection:
            if long and connection.dialect.name == "postgresql":
                connection.execute(_LONG_WORK)
            self._check_once(connection)
            yield connection

    def _check_once(self, connection: Connection) -> None:
        if self._secret_is_known:
            return
        if not inspect(connection).has_table(models.secret_check.name):
            raise StoreError("the store has no tables yet", "Run its migration first.")
        self._check(connection)

    def _check(self, connection: Connection) -> None:
        written = connection.execute(select(models.secret_check.c.value)).scalar_one_or_none()
        if written is None or not self._keys.is_check_value(written):
            raise StoreError(
                "the store was written with another secret",
                "Give the secret it was written with. If that is lost, its replies cannot be read any more: "
                "point the store's URL at a new, empty database.",
            )
        self._secret_is_known = True

    def _wipe_journal(self) -> None:
        """Move what was removed out of SQLite's journal too; what readers still hold goes with a later one."""
        if self._engine.dialect.name == "sqlite":
            with suppress(SQLAlchemyError), self._engine.connect() as connection:
                connection.execution_options(sqlite_begin="").exec_driver_sql("PRAGMA wal_checkpoint(TRUNCATE)")


def _checked(url: str) -> URL:
    """The URL with the driver we use. A SQLite file that is not there yet is made, readable by its owner only."""
    fix = "Give sqlite:///path/to/file.db, or postgresql://user@host/database."
    try:
        parsed = make_url(url)
    except (ArgumentError, ValueError):
        raise StoreError("the store's URL is not understood", fix) from None
    kind = parsed.get_backend_name()
    if kind in ("postgresql", "postgres"):
        return parsed.set(drivername="postgresql+psycopg")
    if kind != "sqlite":
        raise StoreError("the store's URL is of a database that is not supported", fix)
    if not parsed.database or parsed.database == ":memory:" or parsed.database.startswith("file:"):
        raise StoreError("the store's URL names no file", fix)
    try:
        os.close(os.open(Path(parsed.database), os.O_RDWR | os.O_CREAT, 0o600))
    except OSError as error:
        raise StoreError(
            f"the store's file cannot be opened or made ({error.strerror})",
            "Make its folder, and let this program write there.",
        ) from None
    return parsed.set(drivername="sqlite+pysqlite")
