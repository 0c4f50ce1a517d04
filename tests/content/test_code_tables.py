"""The code tables as they stand, and what happens when a row is wrong."""

from __future__ import annotations

import csv
import io
import re
import tomllib
from importlib import resources

import pytest

from cds.clinical.units import UNITS
from cds.content.codes import DRUG_CLASSES, WORD_ONLY_REACTIONS, code_book_from, code_table_bytes
from cds.errors import ContentError

TEXTS = {name: content.decode() for name, content in code_table_bytes()}
ROWS = {name: list(csv.DictReader(io.StringIO(text))) for name, text in TEXTS.items()}
DRUG_TABLES = [name for name, rows in ROWS.items() if "drugs" in rows[0] and name != "snomed_allergies.csv"]
PROBLEM_TABLES = ("snomed_conditions.csv", "icd10cm_conditions.csv")
PROCEDURE_TABLES = ("snomed_procedures_devices.csv", "icd10pcs_procedures.csv")
PROBLEM_CONCEPTS = {row["concept"] for name in PROBLEM_TABLES for row in ROWS[name] if row["role"] != "exclude"}
CONCEPTS = PROBLEM_CONCEPTS | {row["concept"] for name in PROCEDURE_TABLES for row in ROWS[name]}


def with_change(table, old, new):
    assert TEXTS[table].count(old) == 1
    return TEXTS | {table: TEXTS[table].replace(old, new)}


def toml(name):
    return tomllib.loads(resources.files("cds.content").joinpath(name).read_text("utf-8"))


def test_the_tables_are_listed_by_name_with_their_bytes():
    names = [name for name, _ in code_table_bytes()]
    assert names == sorted(names)
    assert len(names) == 16


@pytest.mark.parametrize("table", TEXTS)
def test_every_row_says_whether_its_source_was_read(table):
    assert {row["checked"] for row in ROWS[table]} <= {"read", "memory"}
    assert all(row["source"] for row in ROWS[table])


def test_no_display_holds_a_name_in_square_brackets():
    # Brands stand there (ruling 54). LOINC's own names carry the property in brackets; they are never shown.
    shown = [row["display"] for name, rows in ROWS.items() if name != "loinc.csv" for row in rows if "display" in row]
    assert not [display for display in shown if "[" in display or "]" in display]


def test_every_class_of_a_drug_is_a_known_one():
    used = {part for name in DRUG_TABLES for row in ROWS[name] for part in re.split("[;|]", row["classes"])}
    assert used - {"", "none"} == DRUG_CLASSES


def test_every_measured_analyte_has_units():
    measured = {row["analyte"] for row in ROWS["loinc.csv"] if row["use"] not in ("container", "exclude")}
    assert measured == set(UNITS)


def test_every_concept_of_the_phenotype_stands_in_a_code_table():
    groups = dict(toml("phenotype.toml")["concepts"])
    del groups["heart_failure_only"]  # drug classes and drugs
    reasons = set(groups.pop("adverse_reasons"))
    assert {concept for group in groups.values() for concept in group} - CONCEPTS == set()
    assert reasons - CONCEPTS - WORD_ONLY_REACTIONS == set()


def test_every_concept_and_reaction_of_the_therapy_table_stands_in_a_code_table():
    rows = [row for part in toml("therapy.toml").values() if isinstance(part, list) for row in part]
    keys = ("concepts", "needs_concepts", "unless")
    concepts = {concept for row in rows for key in keys for concept in row.get(key, ())}
    reactions = {reaction for row in rows for reaction in row.get("reactions", ())}
    assert concepts - CONCEPTS == set()
    assert reactions - PROBLEM_CONCEPTS - WORD_ONLY_REACTIONS == set()


def test_sacubitril_and_valsartan_are_one_drug_everywhere():
    rows = [row for name in DRUG_TABLES for row in ROWS[name] if "sacubitril" in row["drugs"]]
    assert {(row["drugs"], row["classes"].removesuffix("|none")) for row in rows} == {("sacubitril/valsartan", "arni")}


def test_only_the_extended_release_carvedilol_is_the_phosphate():
    forms = {row["dose_form"] for row in ROWS["rxnorm_products.csv"] if row["drugs"] == "carvedilol phosphate"}
    assert forms == {"", "Extended Release Capsule", "Extended Release Oral Capsule"}
    plain = {row["release"] for row in ROWS["rxnorm_products.csv"] if row["drugs"] == "carvedilol"}
    assert plain == {"", "IR"}


def test_snomed_codes_stand_only_in_the_files_that_can_be_left_out():
    others = [name for name in TEXTS if not name.startswith(("snomed", "rxnorm"))]  # RXCUIs are bare numbers too
    first_columns = [("code" if "code" in ROWS[name][0] else next(iter(ROWS[name][0])), name) for name in others]
    assert not [row for column, name in first_columns for row in ROWS[name] if re.fullmatch("[0-9]{6,18}", row[column])]


def is_verhoeff(code):
    """SNOMED CT identifiers end in a Verhoeff check digit (SNOMED CT release file specification)."""
    times = [[0, 1, 2, 3, 4, 5, 6, 7, 8, 9]]
    times += [[1, 2, 3, 4, 0, 6, 7, 8, 9, 5], [2, 3, 4, 0, 1, 7, 8, 9, 5, 6], [3, 4, 0, 1, 2, 8, 9, 5, 6, 7]]
    times += [[4, 0, 1, 2, 3, 9, 5, 6, 7, 8], [5, 9, 8, 7, 6, 0, 4, 3, 2, 1], [6, 5, 9, 8, 7, 1, 0, 4, 3, 2]]
    times += [[7, 6, 5, 9, 8, 2, 1, 0, 4, 3], [8, 7, 6, 5, 9, 3, 2, 1, 0, 4], [9, 8, 7, 6, 5, 4, 3, 2, 1, 0]]
    shift = [1, 5, 7, 6, 2, 8, 3, 0, 9, 4]
    state = 0
    for place, digit in enumerate(map(int, reversed(code))):
        for _ in range(place % 8):
            digit = shift[digit]
        state = times[state][digit]
    return state == 0


@pytest.mark.parametrize("table", [name for name in TEXTS if name.startswith("snomed")])
def test_every_snomed_code_has_a_valid_check_digit(table):
    assert [row["code"] for row in ROWS[table] if not is_verhoeff(row["code"])] == []


def test_every_loinc_code_has_a_valid_check_digit():
    # LOINC users' guide: the Luhn algorithm over the digits before the hyphen.
    assert [row["loinc"] for row in ROWS["loinc.csv"] if not is_luhn(row["loinc"].replace("-", ""))] == []


def is_luhn(number):
    doubled = [str(int(digit) * (1 + place % 2)) for place, digit in enumerate(reversed(number))]
    return sum(map(int, "".join(doubled))) % 10 == 0


def test_a_full_procedure_code_has_seven_characters_as_icd_10_pcs_and_not_five_as_cpt():
    full = [row["code"] for row in ROWS["icd10pcs_procedures.csv"] if row["match"] == "exact"]
    assert {len(code) for code in full} == {7}


BROKEN = [
    ("rxnorm_products.csv", "\n313096,product,", "\n31309X,product,", "rxcui"),
    ("rxnorm_products.csv", "313096,product,spironolactone,mra,25,25,MG", "313096,product,spironolactone,mra,25,25mg,MG", "strength"),
    ("rxnorm_products.csv", "313096,product,spironolactone,mra,25,25,MG", "313096,product,spironolactone,mra,25,25,", "unit"),
    ("rxnorm_products.csv", "313096,product,spironolactone,mra,25,25,MG", "313096,product,spironolactone,mra,25;5,25,MG", "length"),
    ("rxnorm_products.csv", "313096,product,spironolactone,mra,", "313096,product,spironolactone,mras,", "mras"),
    ("rxnorm_products.csv", "313096,product,spironolactone,mra,", "313096,tablet,spironolactone,mra,", "tablet"),
    ("rxnorm_products.csv", "313096,product,spironolactone,mra,", "313096,product,Spironolactone,mra,", "lower case"),
    ("rxnorm_products.csv", "\n313096,product,", "\n351256,product,", "a second row"),
    ("rxnorm_products.csv", "\n313096,product,", "\n6918,product,", "another RxNorm table"),
    ("rxnorm_ingredients.csv", "\n6918,ingredient,metoprolol,beta-blocker,", "\n6918,ingredient,metoprolol,none,", "none"),
    ("snomed_drugs.csv", "372658000,enalapril,ace-inhibitor|none", "372658000,enalapril,ace-inhibitor", "ruling 53"),
    ("atc.csv", "\nC09AA05,exact,", "\nC09AA05,longest,", "longest"),
    ("loinc.csv", "\n2823-3,potassium,", "\n2823-3,kalium,", "kalium"),
    ("loinc.csv", "\n2823-3,potassium,accept,,mmol/L", "\n2823-3,potassium,accept,,mmHg", "mmHg"),
    ("loinc.csv", "\n2823-3,potassium,accept,", "\n2823-3,potassium,good,", "good"),
    ("icd10cm_conditions.csv", "\nhigh-output-failure,I50.83,exact,include,", "\nhigh-output-failure,I50.83,exact,exclude-phenotype,", "exclude-phenotype"),
    ("icd10cm_conditions.csv", "\nhigh-output-failure,I50.83,exact,include,", "\nhigh-output-failure,I50.83,exact,needs-pair,", "pair"),
    ("icd10cm_conditions.csv", "\nhigh-output-failure,I50.83,exact,include,,High output heart failure", "\nhigh-output-failure,I50.83,exact,include,,High output heart failure [brand]", "brackets"),
    ("icd10cm_allergies.csv", "\nZ88.2,exact,sulfonamide-antibiotic,allergy,", "\nZ88.2,exact,sulfonamide-antibiotic,rash,", "rash"),
    ("icd10cm_allergies.csv", "\nZ88.2,exact,sulfonamide-antibiotic,allergy,", "\nZ88.2,exact,,allergy,", "class"),
    ("problem_words.csv", "\nhfref,heart-failure;hfref,", "\nhfref,heart-failure;hf-ref,", "hf-ref"),
    ("reaction_words.csv", "\nlip swelling,angioedema,", "\nlip swelling,swollen-lip,", "swollen-lip"),
    ("class_words.csv", "\nacei,ace-inhibitor,house wording,memory", "\nacei,ace-inhibitor,house wording,yes", "yes"),
    ("class_words.csv", "\nacei,ace-inhibitor,house wording,memory", "\nacei,ace-inhibitor,,memory", "empty"),
    ("class_words.csv", "\nacei,ace-inhibitor,house wording,memory", "\nacei,ace-inhibitor,house, wording,memory", "5 cells"),
]  # fmt: skip


@pytest.mark.parametrize(("table", "old", "new", "problem"), BROKEN)
def test_a_wrong_row_stops_the_program_naming_table_and_row(table, old, new, problem):
    number = TEXTS[table][: TEXTS[table].index(old)].count("\n") + (2 if old.startswith("\n") else 1)
    key = new.strip().split(",")[0]
    with pytest.raises(ContentError) as stopped:
        code_book_from(with_change(table, old, new))
    assert stopped.value.table == table
    assert problem in stopped.value.problem
    assert key in stopped.value.row
    assert str(number) in stopped.value.row or "second row" in problem


def test_an_unknown_column_stops_the_program():
    with pytest.raises(ContentError, match="brand") as stopped:
        code_book_from(with_change("class_words.csv", "words,classes,", "words,classes,brand,"))
    assert (stopped.value.table, stopped.value.row) == ("class_words.csv", "row 1")


def test_a_missing_or_strange_table_stops_the_program():
    without = {name: text for name, text in TEXTS.items() if name != "atc.csv"}
    with pytest.raises(ContentError, match=r"atc\.csv: the whole table: is missing"):
        code_book_from(without)
    with pytest.raises(ContentError, match="is not a table we know"):
        code_book_from(TEXTS | {"brands.csv": "name\n"})


@pytest.mark.parametrize("text", ["", 'words,classes\n"open'])
def test_a_damaged_file_stops_the_program(text):
    with pytest.raises(ContentError, match="no CSV text"):
        code_book_from(TEXTS | {"class_words.csv": text})
