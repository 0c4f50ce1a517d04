"""The tables. What is here and what the migrations make must be the same; a test compares them."""

from __future__ import annotations

from datetime import UTC, datetime

from sqlalchemy import (
    BigInteger,
    Column,
    Connection,
    Date,
    DateTime,
    Dialect,
    Index,
    Integer,
    MetaData,
    Table,
    Text,
    UniqueConstraint,
)
from sqlalchemy.dialects import postgresql, sqlite
from sqlalchemy.types import TypeDecorator

NAMES = {
    "ix": "%(table_name)s_%(column_0_N_name)s_index",
    "uq": "%(table_name)s_%(column_0_N_name)s_key",
    "pk": "%(table_name)s_pkey",
}
metadata = MetaData(naming_convention=NAMES)


class Instant(TypeDecorator[datetime]):
    """An instant with its zone; written in UTC, because SQLite keeps no zone. Comes back in UTC."""

    impl = DateTime(timezone=True)
    cache_ok = True

    def process_bind_param(self, value: datetime | None, dialect: Dialect) -> datetime | None:
        if value is None:
            return None
        if value.utcoffset() is None:
            raise ValueError("an instant needs a zone")
        in_utc = value.astimezone(UTC)
        return in_utc.replace(tzinfo=None) if dialect.name == "sqlite" else in_utc

    def process_result_value(self, value: datetime | None, dialect: Dialect) -> datetime | None:
        if value is None:
            return None
        return value.replace(tzinfo=UTC) if dialect.name == "sqlite" else value.astimezone(UTC)


replies = Table(
    "replies",
    metadata,
    Column("number", BigInteger().with_variant(Integer(), "sqlite"), primary_key=True),  # order of arrival
    Column("id", Text, nullable=False),
    Column("patient_key", Text, nullable=False),
    Column("patient_reference", Text),
    Column("card_key", Text, nullable=False),
    Column("card_sealed", Text, nullable=False),
    Column("rule", Text, nullable=False),
    Column("about", Text),
    Column("code", Text, nullable=False),
    Column("reason", Text),
    Column("text", Text),  # sealed
    Column("until", Date),
    Column("facts", Text, nullable=False),  # sealed: a digest of few possible values can be found by trying them
    Column("made_at", Instant, nullable=False),
    Column("made_by_key", Text),
    UniqueConstraint("id"),
    Index(None, "patient_key"),
    Index(None, "made_at"),
)

shown_cards = Table(
    "shown_cards",
    metadata,
    Column("patient_key", Text, primary_key=True),
    Column("card_key", Text, primary_key=True),
    Column("card_sealed", Text, nullable=False),
    Column("rule", Text, nullable=False),
    Column("about", Text),
    Column("tier", Text, nullable=False),
    Column("facts", Text, nullable=False),  # sealed, as above
    Column("first_shown_on", Date, nullable=False),
    Column("last_shown_on", Date, nullable=False),
    Index(None, "last_shown_on"),
)

# One row: what the secret gives for a fixed text, so that another secret is noticed before it writes anything.
secret_check = Table(
    "secret_check",
    metadata,
    Column("id", Integer, primary_key=True, autoincrement=False),
    Column("value", Text, nullable=False),
)


def insert_into(connection: Connection, table: Table) -> postgresql.Insert | sqlite.Insert:
    """An INSERT that can say what happens on a conflict, in the words of the database at hand."""
    return postgresql.insert(table) if connection.dialect.name == "postgresql" else sqlite.insert(table)
