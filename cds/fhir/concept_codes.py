"""Problem, procedure and device codes -> concepts, by role. The longest matching row decides inside each concept."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Literal

from cds.fhir.code_matches import ConceptMatch
from cds.fhir.codings import Coding

Role = Literal["include", "weak", "exclude", "needs-pair", "qualifier"]
DOTTED = frozenset({"icd-10-cm", "icd-10-pcs"})  # systems whose codes come with and without the dot
_SHORTEST_PREFIX = 3


@dataclass(frozen=True, slots=True, kw_only=True)
class ConceptRow:
    """A code (or every code that begins with it) and what it means for one concept.

    `partners`: the concepts one of which must also be recorded, for the role "needs-pair".
    """

    concept: str
    system: str
    code: str
    is_prefix: bool
    role: Role
    display: str
    partners: tuple[str, ...] = ()


def plain_code(system: str, code: str) -> str:
    """The code as the tables compare it: ICD in capitals and without dots, others as they are."""
    return code.replace(".", "").upper() if system in DOTTED else code


class ConceptCodes:
    """The rows of one subject, ready to ask."""

    __slots__ = ("_exact", "_prefixes", "partners")

    def __init__(self, rows: Iterable[ConceptRow] = ()) -> None:
        exact: dict[tuple[str, str], list[ConceptRow]] = defaultdict(list)
        prefixes: dict[tuple[str, str], list[ConceptRow]] = defaultdict(list)
        partners: dict[str, tuple[str, ...]] = {}
        for row in rows:
            key = row.system, plain_code(row.system, row.code)
            (prefixes if row.is_prefix else exact)[key].append(row)
            if row.partners:
                partners[row.concept] = row.partners
        self._exact, self._prefixes = dict(exact), dict(prefixes)
        self.partners: Mapping[str, tuple[str, ...]] = partners

    def match(self, codings: Iterable[Coding]) -> ConceptMatch | None:
        """What the codings count as together; None if no table knows any of them.

        A concept that one coding includes and another excludes is weak: one of the two is wrong.
        """
        roles: dict[str, set[Role]] = defaultdict(set)
        display = matched_by = ""
        for coding in codings:
            rows = self._rows(coding)
            for concept, row in rows.items():
                roles[concept].add(row.role)
            if rows and not matched_by:
                display, matched_by = next(iter(rows.values())).display, coding.system
        if not matched_by:
            return None
        settled = {concept: _settle(found) for concept, found in roles.items()}

        def having(role: Role) -> tuple[str, ...]:
            return tuple(sorted(concept for concept, settled_role in settled.items() if settled_role == role))

        return ConceptMatch(
            include=having("include"),
            weak=having("weak"),
            excluded=having("exclude"),
            qualifiers=having("qualifier"),
            display=display,
            matched_by=matched_by,
        )

    def _rows(self, coding: Coding) -> dict[str, ConceptRow]:
        """The deciding row of each concept."""
        code = plain_code(coding.system, coding.code)
        found: dict[str, ConceptRow] = {}
        if coding.system in DOTTED:
            for length in range(_SHORTEST_PREFIX, len(code) + 1):
                for row in self._prefixes.get((coding.system, code[:length]), ()):
                    found[row.concept] = row
        for row in self._exact.get((coding.system, code), ()):
            found[row.concept] = row
        return found


def _settle(roles: set[Role]) -> Role:
    if "include" in roles:
        return "weak" if "exclude" in roles else "include"
    if roles & {"weak", "needs-pair"}:
        return "weak"
    return "qualifier" if roles == {"qualifier"} else "exclude"
