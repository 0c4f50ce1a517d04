"""What can go wrong with the store, and how a database's own error becomes one of ours.

CdsError
└── StoreError             the store cannot be used as it is                 exit 30   503
    ├── ReplyIdError       an id given for a reply is no UUID                exit 31   422
    └── ReplyIdTakenError  the id given for a reply belongs to another one   exit 32   409
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager

from sqlalchemy.exc import SQLAlchemyError

from cds.errors import CdsError


class StoreError(CdsError):
    """The store cannot be used: names the problem and the way out, never a patient, a card or a text."""

    exit_code = 30
    http_status = 503

    def __init__(self, problem: str, fix: str) -> None:
        super().__init__(f"{problem}.\n{fix}")
        self.problem, self.fix = problem, fix


class ReplyIdError(StoreError):
    """An id given for a reply is no UUID."""

    exit_code = 31
    http_status = 422


class ReplyIdTakenError(StoreError):
    """An id given for a reply is the id of another reply, so this one was not kept."""

    exit_code = 32
    http_status = 409


@contextmanager
def telling_plainly() -> Iterator[None]:
    """Turn an error of the database into a StoreError with the database's code, and without its words.

    The database's own words may repeat what was being written.
    """
    try:
        yield
    except SQLAlchemyError as error:
        raise StoreError(
            f"the store's database does not do what it is asked ({_code(error)})",
            "Check that it runs, has room and may be written by this program, and that the store's URL is right; "
            "then try again.",
        ) from None


def _code(error: SQLAlchemyError) -> str:
    """The SQLSTATE or SQLite's name of the error, else the kind of error."""
    origin = getattr(error, "orig", None)
    code = getattr(origin, "sqlstate", None) or getattr(origin, "sqlite_errorname", None)
    return code if isinstance(code, str) else type(origin or error).__name__
