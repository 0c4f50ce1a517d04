"""Run by the migration tool, on the connection that `cds.store.migrations` hands over."""

from __future__ import annotations

from alembic import context

from cds.store.migrations import VERSION_TABLE
from cds.store.models import metadata

context.configure(
    connection=context.config.attributes["connection"],
    target_metadata=metadata,
    version_table=VERSION_TABLE,
)
with context.begin_transaction():
    context.run_migrations()
