"""Drug codes -> rows of the tables: RxNorm, ATC (longest match first), SNOMED CT, and a site's own codes."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field

from cds.clinical.record import MatchedBy, Route
from cds.fhir.code_matches import DrugComponent
from cds.fhir.codings import Coding

# The more specific kind of code decides; of one kind the first coding sent.
RANKS: Mapping[str, int] = {
    "product": 0,
    "form": 1,
    "precise": 2,
    "combination": 3,
    "ingredient": 4,
    "atc": 5,
    "snomed": 6,
    "site": 7,
    "text": 8,
}
_LONGEST_ATC = 7


@dataclass(frozen=True, slots=True, kw_only=True)
class DrugRow:
    """What one code means. `rank` orders codes from specific (0) to general (see `RANKS`).

    `salt` matters only for text: a row without a salt may be completed by it.
    """

    components: tuple[DrugComponent, ...]
    matched_by: MatchedBy
    rank: int
    is_systemic: bool | None = None
    route: Route | None = None
    dose_form: str | None = None
    note: str | None = None

    @property
    def has_class(self) -> bool:
        return any(component.drug_class for component in self.components)


@dataclass(frozen=True, slots=True, kw_only=True)
class DrugCodes:
    """The drug tables by code. `site` has the address of the system as the site sends it."""

    rxnorm: Mapping[str, DrugRow] = field(default_factory=dict)
    atc_exact: Mapping[str, DrugRow] = field(default_factory=dict)
    atc_prefix: Mapping[str, DrugRow] = field(default_factory=dict)
    snomed: Mapping[str, DrugRow] = field(default_factory=dict)
    site: Mapping[tuple[str, str], DrugRow] = field(default_factory=dict)

    def row(self, coding: Coding) -> DrugRow | None:
        """The row of one coding, or None. What is no number under RxNorm is no RXCUI and is in no table."""
        if coding.system == "rxnorm":
            found = self.rxnorm.get(coding.code)
        elif coding.system == "snomed":
            found = self.snomed.get(coding.code)
        elif coding.system == "atc":
            found = self._atc(coding.code.upper())
        else:
            found = None
        return found if found is not None else self.site.get((coding.system, coding.code))

    def rows(self, codings: Iterable[Coding]) -> list[DrugRow]:
        """The rows of all codings that have one, in their order."""
        return [row for coding in codings if (row := self.row(coding)) is not None]

    def _atc(self, code: str) -> DrugRow | None:
        if len(code) > _LONGEST_ATC:
            return None
        if (row := self.atc_exact.get(code)) is not None:
            return row
        for length in range(len(code), 0, -1):
            if (row := self.atc_prefix.get(code[:length])) is not None:
                return row
        return None
