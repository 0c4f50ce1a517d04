"""The code tables -> one `CodeBook`. Reads `codes/*.csv`, checks every row, and refuses to start at any doubt.

A code nobody checked (`checked` is "memory") only recognises (ruling 53): a drug has no class there, only a possible
one; a problem or procedure is weak. A part of a drug that is no subject of ours has no class either.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator, Mapping
from functools import cache
from importlib import resources
from typing import cast, get_args

from cds.clinical.record import MatchedBy, Route
from cds.clinical.units import UNITS, is_known
from cds.content.csv_rows import CsvTable, amount, read_table
from cds.errors import ContentError
from cds.fhir.allergy_codes import AllergyCodes
from cds.fhir.code_matches import AllergyMatch, AnalyteMatch, DrugComponent
from cds.fhir.codes import CodeBook, CodeTables
from cds.fhir.codings import words_of
from cds.fhir.concept_codes import ConceptCodes, ConceptRow, Role, plain_code
from cds.fhir.drug_codes import RANKS, DrugCodes, DrugRow
from cds.fhir.drug_text import DrugNames
from cds.fhir.words import Phrases

_CLASS_WORDS = (
    "ace-inhibitor alpha-1-blocker anthracycline antianginal-other antiarrhythmic-class-1 antiarrhythmic-class-3 "
    "arb arni aspirin beta-blocker biguanide calcineurin-inhibitor cardiac-glycoside cardiac-myosin-inhibitor "
    "central-sympatholytic checkpoint-inhibitor corticosteroid cyp3a4-inducer cyp3a4-inhibitor dhp-ccb "
    "digoxin-antidote direct-renin-inhibitor direct-vasodilator dpp4-inhibitor "
    "dual-endothelin-angiotensin-antagonist endothelin-antagonist erythropoiesis-stimulating-agent gabapentinoid "
    "glp1-agonist heparin her2-inhibitor hydralazine if-channel-inhibitor inotrope insulin iv-iron lithium "
    "loop-diuretic mra mra-nonsteroidal nitrate non-dhp-ccb nsaid oral-anticoagulant oral-iron pde3-inhibitor "
    "pde5-inhibitor potassium-binder potassium-sparing-diuretic potassium-supplement proteasome-inhibitor "
    "sgc-stimulator sglt2-inhibitor ssri sulfonamide-antibiotic sulfonylurea sympathomimetic thiazide-diuretic "
    "thiazolidinedione tnf-inhibitor tricyclic-antidepressant trimethoprim ttr-therapy vasopressin-antagonist "
    "vegf-inhibitor"
)
DRUG_CLASSES = frozenset(_CLASS_WORDS.split())
ALLERGY_KINDS = frozenset({"allergy", "intolerance", "unspecified"})
ANALYTE_USES = frozenset(
    {"prefer", "accept", "convert", "caution", "accept-low-rank", "legacy", "legacy-race", "container", "exclude"}
)
# Reactions no problem code of ours stands for.
_REACTION_WORDS = (
    "anaphylaxis bronchospasm cough diarrhoea dizziness erectile-dysfunction fatigue "
    "gastrointestinal-bleeding gynaecomastia headache maximal-tolerated-dose nausea pruritus rash renal-failure syncope urticaria"
)
WORD_ONLY_REACTIONS = frozenset(_REACTION_WORDS.split())
_NO_SUBJECT = "none"  # beside a class: the code may also mean a drug that is no subject of ours
_NO_REACTION = "use of a drug, no reaction to it"
_NO_DRUG = "does not name a drug or class"

_CONCEPT_COLUMNS = ("concept", "code", "match", "role", "pair", "display", "source", "checked")
_COLUMNS: Mapping[str, tuple[str, ...]] = {
    "atc.csv": ("atc", "match", "drugs", "classes", "systemic", "note", "source", "checked"),
    "class_words.csv": ("words", "classes", "source", "checked"),
    "drug_names.csv": ("name", "drugs", "classes", "systemic", "source", "checked"),
    "icd10cm_allergies.csv": ("code", "match", "classes", "kind", "note", "display", "source", "checked"),
    "icd10cm_conditions.csv": _CONCEPT_COLUMNS,
    "icd10pcs_procedures.csv": _CONCEPT_COLUMNS,
    "loinc.csv": ("loinc", "analyte", "use", "method", "unit", "display", "note", "source", "checked"),
    "problem_words.csv": ("words", "concepts", "source", "checked"),
    "reaction_words.csv": ("words", "reactions", "source", "checked"),
    "rxnorm_forms.csv": (
        *("rxcui", "drugs", "classes", "dose_form", "route", "systemic", "release", "note", "source", "checked"),
    ),
    "rxnorm_ingredients.csv": ("rxcui", "kind", "drugs", "classes", "systemic", "note", "source", "checked"),
    "rxnorm_products.csv": (
        *("rxcui", "kind", "drugs", "classes", "strengths_mg", "strengths", "units", "salts"),
        *("dose_form", "route", "systemic", "release", "note", "source", "checked"),
    ),
    "snomed_allergies.csv": (
        "code",
        "drugs",
        "classes",
        "kind",
        "reactions",
        "is_condition",
        "display",
        "source",
        "checked",
    ),
    "snomed_conditions.csv": _CONCEPT_COLUMNS,
    "snomed_drugs.csv": ("code", "drugs", "classes", "systemic", "note", "source", "checked"),
    "snomed_procedures_devices.csv": _CONCEPT_COLUMNS,
}
_RXCUI = re.compile(r"[1-9][0-9]{0,7}").fullmatch
_SCTID = re.compile(r"[1-9][0-9]{5,17}").fullmatch
_ATC = re.compile(r"[A-Z]([0-9]{2}([A-Z]([A-Z]([0-9]{2})?)?)?)?").fullmatch
_LOINC = re.compile(r"[0-9]{1,6}-[0-9]").fullmatch
_ICD10CM = re.compile(r"[A-Z][0-9][0-9A-Z](\.[0-9A-Z]{1,4})?").fullmatch
# A class stands for the drug in a code that names none: "ACE inhibitor (not named)".
_DRUG = re.compile(r"[a-z0-9]([a-z0-9 ,/()'-]*[a-z0-9)])?|[A-Za-z0-9 ]+ \(not named\)").fullmatch
_SLUG = re.compile(r"[a-z0-9]+(-[a-z0-9]+)*").fullmatch
_ICD10PCS = re.compile(r"[0-9A-HJ-NP-Z]{3,7}").fullmatch  # no I and no O

_SYSTEMIC: Mapping[str, bool | None] = {"yes": True, "no": False, "": None}
_ROUTES = ("", "oral", "parenteral", "transdermal", "other")
_RELEASES = ("", "IR", "ER", "DR")
_UNITS = ("", "MG", "MCG", "MG/ML", "MG/MG", "MG/ACTUAT", "MEQ", "MEQ/ML", "MMOL", "UNT/ML")
_KINDS: Mapping[str, tuple[MatchedBy, int]] = {
    "product": ("product-code", RANKS["product"]),
    "component": ("form-code", RANKS["form"]),
    "pack": ("product-code", RANKS["product"]),
    "ingredient": ("ingredient-code", RANKS["ingredient"]),
    "precise": ("ingredient-code", RANKS["precise"]),
    "combination": ("ingredient-code", RANKS["combination"]),
    # tables of one kind
    "rxnorm_forms.csv": ("form-code", RANKS["form"]),
    "atc.csv": ("atc", RANKS["atc"]),
    "snomed_drugs.csv": ("snomed", RANKS["snomed"]),
}
_PART_COLUMNS = ("drugs", "classes", "strengths_mg", "strengths", "units", "salts")


@cache
def load_code_book() -> CodeBook:
    """Load all code tables, once per process. Raises ContentError naming the table and the row at any doubt."""
    return code_book_from(_texts())


def code_table_bytes() -> Iterator[tuple[str, bytes]]:
    """Yield every code table as file name and content, in the order of the names: what a content hash is made of."""
    folder = resources.files("cds.content").joinpath("codes")
    for file in sorted(folder.iterdir(), key=lambda file: file.name):
        if file.name.endswith(".csv"):
            yield file.name, file.read_bytes()


def code_book_from(texts: Mapping[str, str]) -> CodeBook:
    """Build the code book from the texts of the tables, by file name. Raises ContentError as `load_code_book` does."""
    for name in sorted(texts.keys() ^ _COLUMNS.keys()):
        problem = "is not a table we know" if name in texts else "is missing"
        raise ContentError(name, "the whole table", problem, "Restore the tables as released.")
    tables = {name: read_table(name, texts[name], columns) for name, columns in _COLUMNS.items()}
    problems = [
        *_concepts(tables["snomed_conditions.csv"], "snomed"),
        *_concepts(tables["icd10cm_conditions.csv"], "icd-10-cm"),
    ]
    procedures = [
        *_concepts(tables["snomed_procedures_devices.csv"], "snomed"),
        *_concepts(tables["icd10pcs_procedures.csv"], "icd-10-pcs"),
    ]
    concepts = frozenset(row.concept for row in problems)
    reactions = concepts | WORD_ONLY_REACTIONS
    for name in (
        "snomed_conditions.csv",
        "icd10cm_conditions.csv",
        "snomed_procedures_devices.csv",
        "icd10pcs_procedures.csv",
    ):
        tables[name].check_words("pair", concepts | {""}, separators=";")
    atc = tables["atc.csv"]
    by_atc = _drugs(atc, _ATC)
    return CodeBook(
        CodeTables(
            drugs=DrugCodes(
                rxnorm=_rxnorm(tables),
                atc_exact={row[0]: by_atc[row[0], "exact"] for row in atc.rows if row[1] == "exact"},
                atc_prefix={row[0]: by_atc[row[0], "prefix"] for row in atc.rows if row[1] == "prefix"},
                snomed={code: row for (code, _), row in _drugs(tables["snomed_drugs.csv"], _SCTID).items()},
            ),
            drug_names=_drug_names(tables["drug_names.csv"]),
            analytes=_analytes(tables["loinc.csv"]),
            problems=ConceptCodes(problems),
            procedures=ConceptCodes(procedures),
            allergies=_allergies(tables["snomed_allergies.csv"], tables["icd10cm_allergies.csv"], reactions),
            problem_words=_phrases(tables["problem_words.csv"], concepts),
            reaction_words=_phrases(tables["reaction_words.csv"], reactions),
            class_words=_phrases(tables["class_words.csv"], DRUG_CLASSES),
        )
    )


def _texts() -> dict[str, str]:
    texts = {}
    for name, content in code_table_bytes():
        try:
            texts[name] = content.decode("utf-8")
        except UnicodeDecodeError as error:
            raise ContentError(name, "the whole table", "is not UTF-8 text", "Restore it.") from error
    return texts


def _rxnorm(tables: Mapping[str, CsvTable]) -> dict[str, DrugRow]:
    found: dict[str, DrugRow] = {}
    for name in ("rxnorm_ingredients.csv", "rxnorm_forms.csv", "rxnorm_products.csv"):
        table = tables[name]
        for (code, _), row in _drugs(table, _RXCUI).items():
            if code in found:
                table.fail_cell("rxcui", code, "stands in another RxNorm table as well", "Remove one of the two.")
            found[code] = row
    return found


def _drugs(table: CsvTable, is_code: Callable[[str], object]) -> dict[tuple[str, str], DrugRow]:
    """Read a table of drug codes: the rows by code and match ("" where the table has no such column)."""
    columns = table.columns
    has_match, has_kind, has_form = "match" in columns, "kind" in columns, "dose_form" in columns
    key = columns[0]
    table.check_unique(*((key, "match") if has_match else (key,)))
    table.check(key, is_code, "is no code of this system", "Correct it, from the source.")
    table.check_words("systemic", _SYSTEMIC)
    table.check_words("classes", DRUG_CLASSES | {"", _NO_SUBJECT}, separators=";|")
    if has_match:
        table.check_words("match", ("exact", "prefix"))
    if has_kind:
        table.check_words("kind", _KINDS)
    if has_form:
        table.check_words("route", _ROUTES)
        table.check_words("release", _RELEASES)
    if "units" in columns:
        table.check_words("units", _UNITS, separators=";")
    # Products of many labellers share one meaning: each is read once.
    meanings = zip(*(table.cells[name] for name in columns if name not in (key, "source", "release")), strict=True)
    matches = table.cells["match"] if has_match else [""] * len(table.rows)
    made: dict[tuple[str, ...], DrugRow] = {}
    found: dict[tuple[str, str], DrugRow] = {}
    for row, match, meaning in zip(table.rows, matches, meanings, strict=True):
        drug = made.get(meaning)
        if drug is None:
            try:
                drug = made[meaning] = _drug_row(dict(zip(columns, row, strict=True)), table.name)
            except ValueError as error:
                table.fail(row, str(error), "Correct it.")
        found[row[0], match] = drug
    return found


def _drug_row(cells: Mapping[str, str], table: str) -> DrugRow:
    matched_by, rank = _KINDS[cells.get("kind", table)]
    return DrugRow(
        components=_components(cells["checked"], *(cells.get(name, "") for name in _PART_COLUMNS)),
        matched_by=matched_by,
        rank=rank,
        is_systemic=_SYSTEMIC[cells["systemic"]],
        route=cast("Route", cells["route"]) if cells.get("route") else None,
        dose_form=cells.get("dose_form") or None,
        note=cells["note"] or None,
    )


@cache
def _components(checked: str, drugs: str, *parts: str) -> tuple[DrugComponent, ...]:
    """Read the parts of a drug: lists of one length, separated by semicolons. Raises ValueError saying what is wrong."""
    names = drugs.split(";")
    blank = [""] * len(names)
    lists = [cell.split(";") if cell else blank for cell in parts]
    if any(len(cells) != len(names) for cells in lists):
        raise ValueError("its lists differ in length")
    if len(set(names)) != len(names):
        raise ValueError("drugs: one is named twice")
    return tuple(map(_component, [checked] * len(names), names, *lists))


@cache
def _component(
    checked: str, drug: str, classes: str, strength_mg: str = "", strength: str = "", unit: str = "", _salt: str = ""
) -> DrugComponent:
    if not _DRUG(drug):
        raise ValueError("drugs: a part is empty or not in lower case")
    possible = tuple(sorted(set(classes.split("|")) - {_NO_SUBJECT, ""}))
    is_open = "|" in classes
    if classes and not possible:
        raise ValueError(f"classes: '{_NO_SUBJECT}' stands only beside a class")
    if possible and not is_open and checked != "read":
        raise ValueError("a code nobody checked has only a possible class (ruling 53)")
    if bool(strength) != bool(unit):
        raise ValueError("a strength without unit, or a unit without strength")
    if strength_mg and unit not in ("MG", "MCG", "MG/ML"):
        raise ValueError("strengths_mg: only a mass, or a mass in one mL, has milligrams")
    return DrugComponent(
        drug=drug,
        drug_class=possible[0] if possible and not is_open else None,
        strength_mg=amount(strength_mg),
        strength=amount(strength),
        strength_unit=unit or None,
        possible_classes=possible if is_open else (),
    )


def _drug_names(table: CsvTable) -> DrugNames:
    table.check_unique("name")
    table.check("name", words_of, "has no word", "Correct it.")
    table.check_words("systemic", _SYSTEMIC)
    table.check_words("classes", DRUG_CLASSES | {"", _NO_SUBJECT}, separators=";|")
    names = []
    for row in table.rows:
        name, drugs, classes, systemic, _, _ = row
        try:
            # A name is no code: ruling 53 does not concern it.
            names.append((name, _components("read", drugs, classes), _SYSTEMIC[systemic] is False))
        except ValueError as error:
            table.fail(row, str(error), "Correct it.")
    return DrugNames(names)


def _analytes(table: CsvTable) -> dict[str, AnalyteMatch]:
    table.check_unique("loinc")
    table.check("loinc", _LOINC, "is no LOINC code", "Correct it, from the source.")
    table.check_words("use", ANALYTE_USES)
    found = {}
    for row in table.rows:
        code, analyte, use, method, unit, _, note, _, checked = row
        if analyte not in UNITS and use not in ("container", "exclude"):
            table.fail(row, f"the analyte '{analyte}' has no units", "Correct it, or add its units.")
        if unit and not unit.startswith("{") and not is_known(analyte, unit):
            table.fail(row, f"'{unit}' is no unit of {analyte}", "Correct it, or add the unit.")
        if checked == "memory" and use not in ("caution", "exclude"):
            table.fail(row, "a code nobody checked counts only with caution (ruling 53)", "Use caution or exclude.")
        found[code] = AnalyteMatch(
            analyte=analyte, use=use, matched_by="loinc", method=method or None, note=note or None, unit=unit or None
        )
    return found


def _concepts(table: CsvTable, system: str) -> list[ConceptRow]:
    is_code = {"snomed": _SCTID, "icd-10-cm": _ICD10CM, "icd-10-pcs": _ICD10PCS}[system]
    table.check_unique("concept", "code", "match")
    table.check("code", is_code, "is no code of this system", "Correct it, from the source.")
    table.check_words("match", ("exact",) if system == "snomed" else ("exact", "prefix"))
    table.check_words("role", get_args(Role))
    table.check("concept", _SLUG, "is no slug", "Write it in lower case with hyphens.")
    rows = []
    for row in table.rows:
        concept, code, match, role, pair, display, _, checked = row
        if (role == "needs-pair") != bool(pair):
            table.fail(row, "only the role needs-pair has a pair, and it needs one", "Correct it.")
        if checked == "memory" and role != "weak":
            table.fail(row, "a code nobody checked is weak (ruling 53)", "Correct the role.")
        rows.append(
            ConceptRow(
                concept=concept,
                system=system,
                code=code,
                is_prefix=match == "prefix",
                role=cast("Role", role),
                display=display,
                partners=tuple(pair.split(";")) if pair else (),
            )
        )
    return rows


def _allergies(snomed: CsvTable, icd: CsvTable, reactions: frozenset[str]) -> AllergyCodes:
    for table, is_code in ((snomed, _SCTID), (icd, _ICD10CM)):
        table.check_unique("code")
        table.check("code", is_code, "is no code of this system", "Correct it, from the source.")
        table.check_words("classes", DRUG_CLASSES | {""}, separators=";")
        table.check_words("kind", ALLERGY_KINDS)
    snomed.check_words("reactions", reactions | {""}, separators=";")
    snomed.check_words("is_condition", ("yes", "no"))
    icd.check_words("match", ("exact", "prefix"))
    icd.check_words("note", ("", _NO_DRUG, _NO_REACTION))
    by_snomed = {}
    for code, drugs, classes, kind, told, is_condition, display, _, _ in snomed.rows:
        by_snomed[code] = AllergyMatch(
            drugs=_listed(drugs),
            drug_classes=_listed(classes),
            reactions=_listed(told),
            kind=kind,
            display=display,
            matched_by="snomed",
            is_finding=is_condition == "yes",
        )
    by_icd: dict[str, dict[str, AllergyMatch]] = {"exact": {}, "prefix": {}}
    for row in icd.rows:
        code, match, classes, kind, note, display, _, _ = row
        if bool(classes) == bool(note):
            icd.fail(row, "needs either a class or a note that says why it has none", "Correct it.")
        by_icd[match][plain_code("icd-10-cm", code)] = AllergyMatch(
            drug_classes=_listed(classes),
            kind=kind,
            display=display,
            matched_by="icd-10-cm",
            is_finding=note != _NO_REACTION,
        )
    return AllergyCodes(snomed=by_snomed, icd_exact=by_icd["exact"], icd_prefix=by_icd["prefix"])


def _phrases(table: CsvTable, meanings: frozenset[str]) -> Phrases:
    table.check_unique("words")
    table.check("words", words_of, "has no word", "Correct it.")
    table.check_words(table.columns[1], meanings, separators=";")
    return Phrases((words, _listed(meaning)) for words, meaning, _, _ in table.rows)


def _listed(cell: str) -> tuple[str, ...]:
    return tuple(cell.split(";")) if cell else ()
