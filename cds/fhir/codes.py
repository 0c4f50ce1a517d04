"""Matching codes: (system, code) in, our own words out. The tables come from `cds.content`.

Code beats text. All codings of a concept are read; text is the last resort and marked as such (`matched_by` "text").
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any

from cds.fhir.allergy_codes import AllergyCodes, match_allergy
from cds.fhir.code_matches import AllergyMatch as AllergyMatch
from cds.fhir.code_matches import AnalyteMatch as AnalyteMatch
from cds.fhir.code_matches import ConceptMatch as ConceptMatch
from cds.fhir.code_matches import DrugComponent as DrugComponent
from cds.fhir.code_matches import DrugMatch as DrugMatch
from cds.fhir.codings import codings_of, shown_text, texts_of
from cds.fhir.concept_codes import ConceptCodes
from cds.fhir.drug_agreement import agree
from cds.fhir.drug_codes import RANKS, DrugCodes, DrugRow
from cds.fhir.drug_text import DrugNames, complete_from_text
from cds.fhir.words import Phrases


@dataclass(frozen=True, slots=True, kw_only=True)
class CodeTables:
    """Everything a code book knows. `site_analytes` has the address of the system as the site sends it."""

    drugs: DrugCodes = field(default_factory=DrugCodes)
    drug_names: DrugNames = field(default_factory=DrugNames)
    analytes: Mapping[str, AnalyteMatch] = field(default_factory=dict)  # by LOINC code
    site_analytes: Mapping[tuple[str, str], AnalyteMatch] = field(default_factory=dict)
    problems: ConceptCodes = field(default_factory=ConceptCodes)
    procedures: ConceptCodes = field(default_factory=ConceptCodes)
    allergies: AllergyCodes = field(default_factory=AllergyCodes)
    problem_words: Phrases = field(default_factory=Phrases)
    reaction_words: Phrases = field(default_factory=Phrases)
    class_words: Phrases = field(default_factory=Phrases)


class CodeBook:
    """All code tables, ready to ask. Immutable once built; shared by threads and processes."""

    __slots__ = ("_tables",)

    def __init__(self, tables: CodeTables | None = None) -> None:
        self._tables = tables if tables is not None else CodeTables()

    def with_site_codes(
        self,
        *,
        drugs: Mapping[tuple[str, str], tuple[DrugComponent, ...]] | None = None,
        analytes: Mapping[tuple[str, str], str] | None = None,
    ) -> CodeBook:
        """A book that also knows a site's own (system, code) pairs; the system as the site sends it."""
        tables = self._tables
        rows = {
            key: DrugRow(components=components, matched_by="site", rank=RANKS["site"])
            for key, components in (drugs or {}).items()
        }
        measured = {
            key: AnalyteMatch(analyte=analyte, use="accept", matched_by="site")
            for key, analyte in (analytes or {}).items()
        }
        return CodeBook(
            replace(
                tables,
                drugs=replace(tables.drugs, site={**tables.drugs.site, **rows}),
                site_analytes={**tables.site_analytes, **measured},
            )
        )

    @property
    def partners(self) -> Mapping[str, tuple[str, ...]]:
        """Concepts that count only together with another: which others."""
        return self._tables.problems.partners

    def drug(self, concept: Mapping[str, Any], *, other_text: str = "") -> DrugMatch | None:
        """What a medication concept means; None if neither its codes nor its texts are known.

        `other_text` is the display of a reference. Text decides alone only where no code says which class it is; it
        never contradicts one, but completes an open salt and an open form.
        """
        rows = self._tables.drugs.rows(codings_of(concept))
        texts = texts_of(concept, other_text)
        if any(row.has_class for row in rows):
            match = agree(rows)
            return complete_from_text(match, min(row.rank for row in rows if row.has_class), texts)
        told = [row for text in texts if (row := self._tables.drug_names.read(text)) is not None]
        if not rows:
            return agree(told) if told else None
        coded = agree(rows)
        read = [row for row in told if _names_the_same(row, coded)]
        if read and coded.is_systemic is not False:
            return agree(read)
        return complete_from_text(coded, rows[0].rank, texts)

    def analytes(self, concept: Mapping[str, Any]) -> tuple[AnalyteMatch, ...]:
        """Every analyte the codings name, each row once, in their order. Text names none."""
        found: dict[AnalyteMatch, None] = {}
        for coding in codings_of(concept):
            match = self._tables.analytes.get(coding.code) if coding.system == "loinc" else None
            match = match or self._tables.site_analytes.get((coding.system, coding.code))
            if match is not None:
                found[match] = None
        return tuple(found)

    def problem(self, concept: Mapping[str, Any]) -> ConceptMatch | None:
        """The concepts a problem counts as. A text counts only if it is one of our phrases and nothing else."""
        match = self._tables.problems.match(codings_of(concept))
        if match is not None:
            return replace(match, display=shown_text(concept) or match.display)
        for text in texts_of(concept):
            if concepts := self._tables.problem_words.whole(text):
                return ConceptMatch(include=concepts, display=shown_text(concept), matched_by="text")
        return None

    def procedure_or_device(self, concept: Mapping[str, Any]) -> ConceptMatch | None:
        """The concepts a procedure or device counts as; by code only."""
        match = self._tables.procedures.match(codings_of(concept))
        return None if match is None else replace(match, display=shown_text(concept) or match.display)

    def allergy(self, concept: Mapping[str, Any]) -> AllergyMatch | None:
        """What an allergy, intolerance or adverse-effect code is about."""
        tables = self._tables
        return match_allergy(
            concept, tables.allergies, tables.drugs, tables.drug_names, tables.class_words, tables.reaction_words
        )

    def reactions(self, concept: Mapping[str, Any]) -> tuple[str, ...]:
        """The reactions a manifestation names, as concept slugs: by code, else by words that nothing denies."""
        match = self._tables.problems.match(codings_of(concept))
        if match is not None and match.include:
            return match.include
        found: dict[str, None] = {}
        for text in texts_of(concept):
            found |= dict.fromkeys(self._tables.reaction_words.held(text))
        return tuple(found)


def _names_the_same(row: DrugRow, coded: DrugMatch) -> bool:
    """True if a text names a drug of the code, or completes a name the code leaves open."""
    names = {component.drug for component in coded.components}
    firsts = {name.split()[0] for name in names}
    return any(component.drug in names or component.drug.split()[0] in firsts for component in row.components)
