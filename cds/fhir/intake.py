"""What is collected while one patient's resources are read: issues, and codes nobody here knows."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import tzinfo

from cds.errors import Issue
from cds.fhir.codes import CodeBook


@dataclass(frozen=True, slots=True, order=True)
class NotRecognised:
    """A code or text that no table knows. `kind` is medicine, observation, problem, allergy, procedure or device."""

    kind: str
    system: str
    code: str
    text: str


@dataclass(slots=True)
class Intake:
    """The one mutable thing at the edge: readers add to it, `build_record` freezes it."""

    issues: list[Issue] = field(default_factory=list)
    not_recognised: Counter[NotRecognised] = field(default_factory=Counter)

    def refuse(self, resource: str, path: str, problem: str, fix: str) -> None:
        """Say that the resource (or value) at `path` is not used."""
        self.issues.append(Issue(resource=resource, path=path, problem=problem, fix=fix))

    def doubt(self, resource: str, path: str, problem: str, fix: str) -> None:
        """Say that something is used with a reservation."""
        self.issues.append(Issue(resource=resource, path=path, problem=problem, fix=fix, severity="doubtful"))

    def inform(self, resource: str, path: str, problem: str, fix: str) -> None:
        """Say something worth knowing that changes nothing."""
        self.issues.append(Issue(resource=resource, path=path, problem=problem, fix=fix, severity="information"))


@dataclass(frozen=True, slots=True, kw_only=True)
class Context:
    """What every reader needs: the code tables, the zone whose calendar days count, and where to put issues."""

    codes: CodeBook
    zone: tzinfo
    intake: Intake
    default_units: Mapping[str, str] = field(default_factory=dict)  # units a site's systems leave out, by analyte
