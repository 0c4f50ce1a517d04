"""A site's own codes and the units its systems leave out: each held against the content, so that none means two things."""

from __future__ import annotations

import csv
import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from typing import Any

from cds.clinical import units
from cds.clinical.readings import show
from cds.clinical.tables import ClinicalTables
from cds.content.codes import code_table_bytes
from cds.content.site import SitePart, SiteProfile, nearest
from cds.fhir.code_matches import DrugComponent
from cds.fhir.codes import CodeBook
from cds.fhir.codings import SYSTEMS

_Path = tuple[str | int, ...]
Refuse = Callable[[_Path, str, str], None]  # notes a problem: path of the key, what is wrong, the way out


def site_codes(book: CodeBook, tables: ClinicalTables, site: SiteProfile, refuse: Refuse) -> CodeBook:
    """Return the code book with the site's codes. What cannot stand is refused, and left out where it has no meaning."""
    return _Codes(book, tables, site, refuse).made()


def site_units(site: SiteProfile, refuse: Refuse) -> Mapping[str, str]:
    """Return the UCUM unit the site's systems leave out, by analyte."""
    for analyte, unit in site.units.items():
        path = ("units", analyte)
        if _is_analyte(path, analyte, refuse) and not units.is_known(analyte, unit):
            known = units.UNITS[analyte]
            fix = f"Give one of {', '.join(known)} (UCUM).{nearest(unit, known)}"
            refuse(path, f"'{unit}' is no unit of {analyte}", fix)
    return dict(site.units)


def _is_analyte(path: _Path, analyte: str, refuse: Refuse) -> bool:
    if analyte in units.UNITS:
        return True
    fix = f"Known are {', '.join(units.UNITS)}.{nearest(analyte, units.UNITS)}"
    refuse(path, f"'{analyte}' is nothing the content measures", fix)
    return False


@dataclass(frozen=True, slots=True)
class _Codes:
    """The codes of one profile beside those of the content."""

    book: CodeBook
    tables: ClinicalTables
    site: SiteProfile
    refuse: Refuse

    def made(self) -> CodeBook:
        drugs: dict[tuple[str, str], tuple[DrugComponent, ...]] = {}
        for place, row in enumerate(self.site.drug_codes):
            path = ("code", "drug", place)
            key = self._key(path, row.system, row.code, drugs)
            if self.book.drug({"coding": [{"system": row.system, "code": row.code}]}) is not None:
                self._already_known(path)
            ends = [("parts", n) for n in range(len(row.parts))] if row.is_combination else [()]
            parts = [self._part((*path, *end), part) for end, part in zip(ends, row.parts, strict=True)]
            if len({part.drug for part in row.parts}) < len(row.parts):
                self.refuse((*path, "parts"), "names a drug twice", "Name each ingredient once.")
            drugs[key] = tuple(part for part in parts if part is not None)
        analytes: dict[tuple[str, str], str] = {}
        for place, measured in enumerate(self.site.analyte_codes):
            path = ("code", "analyte", place)
            key = self._key(path, measured.system, measured.code, analytes)
            if self.book.analytes({"coding": [{"system": measured.system, "code": measured.code}]}):
                self._already_known(path)
            _is_analyte((*path, "analyte"), measured.analyte, self.refuse)
            analytes[key] = measured.analyte
        return self.book.with_site_codes(drugs=drugs, analytes=analytes)

    def _key(self, path: _Path, system: str, code: str, known: Mapping[tuple[str, str], Any]) -> tuple[str, str]:
        """System and code as codings are read: the systems the program knows by their short name."""
        key = SYSTEMS.get(system, system), code
        if key in known:
            self.refuse(path, f"gives the code '{code}' of this system a second meaning", "Keep one of the two.")
        return key

    def _already_known(self, path: _Path) -> None:
        fix = "Remove it; if the content is wrong about the code, have the content corrected."
        self.refuse(path, "is about a code the content already knows, and whose meaning no site changes", fix)

    def _part(self, path: _Path, part: SitePart) -> DrugComponent | None:
        match = self.book.drug({"text": part.drug})
        known = match.components if match is not None else ()
        if len(known) != 1 or known[0].drug != part.drug:
            names = " and ".join(f"'{component.drug}'" for component in known)
            wanted = f" Here it is called {names}." if len(known) == 1 else f" It is {names}: give them as parts."
            fix = "Give the non-proprietary name (INN) in lower case, with its salt where it matters."
            more = wanted if known else nearest(part.drug, _drug_names())
            self.refuse((*path, "drug"), f"'{part.drug}' is no single drug the content knows by this name", fix + more)
            return None
        drug_class = known[0].drug_class
        if part.drug_class is not None and part.drug_class != drug_class:
            said = f"of the class '{drug_class}'" if drug_class is not None else "of no class of ours"
            problem = f"'{part.drug_class}' is not the class of {part.drug}: to the content it is {said}"
            self.refuse((*path, "class"), problem, "Correct drug or class, or leave class out.")
        if part.strength_mg is not None:
            self._check_strength((*path, "strength_mg"), part.drug, part.strength_mg)
        has_strength = part.strength_mg is not None
        return replace(
            known[0],
            strength_mg=part.strength_mg,
            strength=part.strength_mg,
            strength_unit="MG" if has_strength else None,
        )

    def _check_strength(self, path: _Path, drug: str, strength_mg: float) -> None:
        """A drug of two parts that counts as one has few tablets, and both parts count: 24/26 mg is 50."""
        tablets = {step for row in self.tables.doses if row.drug == drug for step in row.steps_mg}
        is_pair = "/" in drug and bool(tablets)
        if not math.isfinite(strength_mg) or (is_pair and strength_mg not in tablets):
            some = ", ".join(show(step) for step in sorted(tablets))
            fix = f"Give both parts together: {some}." if is_pair else "Give the milligrams of one tablet."
            self.refuse(path, f"is no strength of {drug}", fix)


def _drug_names() -> set[str]:
    """The names a profile may use, for a suggestion."""
    table = dict(code_table_bytes())["drug_names.csv"].decode("utf-8")
    return {row["drugs"] for row in csv.DictReader(table.splitlines())}
