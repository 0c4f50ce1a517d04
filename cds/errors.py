"""Every deliberate exception, with its exit code at the command line and its HTTP status.

    CdsError
    ├── InputError                 the bytes as a whole cannot be read            exit 10   400
    │   ├── InputTooLargeError     more bytes, entries or depth than allowed      exit 12   413
    │   └── NoPatientError         nothing to assess: no Patient resource         exit 13   422
    ├── RequestError               a request over HTTP cannot be served         exit 14   its own
    ├── ResourceError              one FHIR resource cannot be used as sent       exit 11   422
    ├── ContentError               our own tables are wrong: refuse to start      exit 20   500
    └── in the packages that raise them: SettingsError 21 (500), SiteProfileError 22 (500), StoreError 30 (503) and its
        kinds 31 (422), 32 (409), TokenError 40 (401), ScopeError 41 (403), KeysError 42, FetchError 40 as well (400 to 504)

A message names the resource, the place, the problem and the way out. It never repeats a patient's values.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass


@dataclass(frozen=True, slots=True, kw_only=True)
class Issue:
    """One thing in the input that was not used as sent, or was used with a reservation.

    `severity` is "refused" (the resource or value is not used), "doubtful" (used, with the reservation
    said) or "information". `path` is FHIRPath-like. No field ever holds a patient's value.
    """

    resource: str
    path: str
    problem: str
    fix: str
    severity: str = "refused"

    def __str__(self) -> str:
        return f"{self.resource}: {self.path}: {self.problem}. {self.fix}"


class CdsError(Exception):
    """Base of every exception this package raises on purpose."""

    exit_code = 1
    http_status = 500


class InputError(CdsError):
    """The input as a whole cannot be read. `issues` may say more."""

    exit_code = 10
    http_status = 400

    def __init__(self, problem: str, fix: str, issues: Sequence[Issue] = ()) -> None:
        super().__init__(f"{problem}.\n{fix}")
        self.problem, self.fix, self.issues = problem, fix, tuple(issues)


class InputTooLargeError(InputError):
    """The input is larger, longer or deeper than the limits allow."""

    exit_code = 12
    http_status = 413


class NoPatientError(InputError):
    """The bundle holds no Patient resource, so there is nobody to assess."""

    exit_code = 13
    http_status = 422


class RequestError(CdsError):
    """A request over HTTP cannot be served as sent; `status` says in which way."""

    exit_code = 14

    def __init__(self, status: int, problem: str, fix: str, *, headers: Mapping[str, str] | None = None) -> None:
        super().__init__(f"{problem}.\n{fix}")
        self.http_status = status
        self.problem, self.fix, self.headers = problem, fix, dict(headers or {})


class ResourceError(CdsError):
    """A FHIR resource cannot be used as sent; carries the issue that says why."""

    exit_code = 11
    http_status = 422

    def __init__(self, resource: str, path: str, problem: str, fix: str) -> None:
        super().__init__(f"{resource}: {path}: {problem}.\n{fix}")
        self.issue = Issue(resource=resource, path=path, problem=problem, fix=fix)


class ContentError(CdsError):
    """A table of ours is wrong: names the file, the row and the way out. The program refuses to start."""

    exit_code = 20
    http_status = 500

    def __init__(self, table: str, row: str, problem: str, fix: str) -> None:
        super().__init__(f"{table}: {row}: {problem}.\n{fix}")
        self.table, self.row, self.problem, self.fix = table, row, problem, fix
