"""How the tables came to be what they are. Run by `Store.migrate`, never by hand.

To change a table: change `models.py`, add `versions/NNNN_what.py` after the manner of the newest one, and run the tests.
"""

from __future__ import annotations

from pathlib import Path

from alembic import command
from alembic.config import Config
from alembic.runtime.migration import MigrationContext
from alembic.script import ScriptDirectory
from alembic.script.revision import ResolutionError
from alembic.util.exc import CommandError
from sqlalchemy import Connection

from cds.store.failures import StoreError

VERSION_TABLE = "store_version"


def config_for(connection: Connection) -> Config:
    """The migration tool's settings for one open connection; what it does joins the connection's transaction."""
    config = _config()
    config.attributes["connection"] = connection
    return config


def upgrade(connection: Connection) -> None:
    """Bring the tables to the newest version. Raises StoreError if they are of a newer program than this one."""
    try:
        command.upgrade(config_for(connection), "head")
    except (CommandError, ResolutionError):
        raise StoreError(
            "the store's tables were made by a newer version of this program",
            "Run that version, or point the store's URL at another database.",
        ) from None


def newest() -> str | None:
    """The version the tables should have."""
    return ScriptDirectory.from_config(_config()).get_current_head()


def present(connection: Connection) -> str | None:
    """The version the tables have; None for an empty database."""
    return MigrationContext.configure(connection, opts={"version_table": VERSION_TABLE}).get_current_revision()


def _config() -> Config:
    config = Config()
    config.set_main_option("script_location", str(Path(__file__).parent).replace("%", "%%"))
    return config
