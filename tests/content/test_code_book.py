"""What a code means. RxNorm, ATC, LOINC, ICD-10-CM and SNOMED CT codes as published by their keepers."""

from __future__ import annotations

import pytest

from cds.content.codes import load_code_book

RXNORM = "http://www.nlm.nih.gov/research/umls/rxnorm"
ATC = "http://www.whocc.no/atc"
LOINC = "http://loinc.org"
SNOMED = "http://snomed.info/sct"
ICD = "http://hl7.org/fhir/sid/icd-10-cm"
PCS = "http://www.cms.gov/Medicare/Coding/ICD10"
BOOK = load_code_book()


def coded(system, code):
    return {"coding": [{"system": system, "code": code}]}


def table(text):
    rows = [[cell.strip() for cell in line.split("|")] for line in text.strip().splitlines()]
    return [tuple(row) for row in rows[1:]]


def meaning(match):
    """Each part as drug, class and milligrams of one unit."""
    return " + ".join(f"{c.drug}, {c.drug_class}, {c.strength_mg or 'no'} mg" for c in match.components)


# Names and strengths as RxNorm has them. The sum of sacubitril/valsartan is ours: doses are counted in it.
PRODUCTS = """
    RXCUI   | meaning
    866436  | metoprolol succinate, beta-blocker, 50.0 mg
    866924  | metoprolol tartrate, beta-blocker, 25.0 mg
    200031  | carvedilol, beta-blocker, 6.25 mg
    200030  | carvedilol, beta-blocker, 3.125 mg
    860516  | carvedilol phosphate, beta-blocker, 20.0 mg
    854905  | bisoprolol, beta-blocker, 5.0 mg
    1656340 | sacubitril/valsartan, arni, 50.0 mg
    1656349 | sacubitril/valsartan, arni, 100.0 mg
    1656354 | sacubitril/valsartan, arni, 200.0 mg
    858817  | enalapril, ace-inhibitor, 10.0 mg
    314077  | lisinopril, ace-inhibitor, 20.0 mg
    197885  | hydrochlorothiazide, thiazide-diuretic, 12.5 mg + lisinopril, ace-inhibitor, 10.0 mg
    313096  | spironolactone, mra, 25.0 mg
    351256  | eplerenone, mra, 25.0 mg
    1488569 | dapagliflozin, sglt2-inhibitor, 10.0 mg
    1545658 | empagliflozin, sglt2-inhibitor, 10.0 mg
    313988  | furosemide, loop-diuretic, 40.0 mg
    905377  | hydralazine, hydralazine, 37.5 mg + isosorbide dinitrate, nitrate, 20.0 mg
"""


@pytest.mark.parametrize(("rxcui", "expected"), table(PRODUCTS))
def test_a_product_code_gives_drug_class_and_strength(rxcui, expected):
    match = BOOK.drug(coded(RXNORM, rxcui))
    assert meaning(match) == expected
    assert (match.matched_by, match.is_systemic, match.route) == ("product-code", True, "oral")


def test_potassium_keeps_its_milliequivalents():
    (potassium,) = BOOK.drug(coded(RXNORM, "1867544")).components
    assert (potassium.drug_class, potassium.strength_mg) == ("potassium-supplement", None)
    assert (potassium.strength, potassium.strength_unit) == (20.0, "MEQ")


def test_the_form_of_the_heart_failure_metoprolol_is_extended_release():
    assert BOOK.drug(coded(RXNORM, "866436")).dose_form == "Extended Release Oral Tablet"
    assert BOOK.drug(coded(RXNORM, "866924")).dose_form == "Oral Tablet"


def test_a_pack_gives_its_drugs_but_no_strength():
    match = BOOK.drug(coded(RXNORM, "758486"))  # lansoprazole with naproxen
    assert [(c.drug, c.drug_class, c.strength) for c in match.components] == [
        ("lansoprazole", None, None),
        ("naproxen", "nsaid", None),
    ]


def test_the_implausible_strength_of_a_retired_code_is_not_used():
    (captopril,) = BOOK.drug(coded(RXNORM, "428811")).components
    assert (captopril.drug_class, captopril.strength_mg) == ("ace-inhibitor", None)


# IN, PIN and MIN codes of RxNorm: the salt is in the PIN alone.
INGREDIENTS = """
    RXCUI   | meaning
    6918    | metoprolol, beta-blocker, no mg
    221124  | metoprolol succinate, beta-blocker, no mg
    203191  | metoprolol tartrate, beta-blocker, no mg
    1656339 | sacubitril/valsartan, arni, no mg
    2562811 | finerenone, mra-nonsteroidal, no mg
"""


@pytest.mark.parametrize(("rxcui", "expected"), table(INGREDIENTS))
def test_an_ingredient_code_gives_the_class_without_strength(rxcui, expected):
    match = BOOK.drug(coded(RXNORM, rxcui))
    assert meaning(match) == expected
    assert match.matched_by == "ingredient-code"


def test_isosorbide_alone_is_no_nitrate():
    # RxNorm 6057 is the parent of the mononitrate and also an osmotic diuretic.
    assert BOOK.drug(coded(RXNORM, "6057")).components[0].drug_class is None


# WHO ATC index. Longest match first: C09DX04 stands under the ARB combinations, S01ED under no beta blocker of the heart.
ATC_CODES = """
    ATC     | meaning
    C09AA05 | ramipril, ace-inhibitor, no mg
    C09AA   | ACE inhibitor (not named), ace-inhibitor, no mg
    C09DX04 | sacubitril/valsartan, arni, no mg
    C09CA03 | valsartan, arb, no mg
    C03DA01 | spironolactone, mra, no mg
    C03DA05 | finerenone, mra-nonsteroidal, no mg
    C07AB02 | metoprolol, beta-blocker, no mg
    C09BX02 | perindopril, ace-inhibitor, no mg + bisoprolol, beta-blocker, no mg
    A10BK01 | dapagliflozin, sglt2-inhibitor, no mg
    C07AA07 | sotalol, antiarrhythmic-class-3, no mg
"""


@pytest.mark.parametrize(("atc", "expected"), table(ATC_CODES))
def test_an_atc_code_gives_the_class(atc, expected):
    match = BOOK.drug(coded(ATC, atc))
    assert meaning(match) == expected
    assert match.is_systemic is None


# Ophthalmic, topical and vaginal groups of the ATC index, and an ophthalmic form code of RxNorm.
LOCAL = """
    system | code    | what
    atc    | S01ED01 | timolol eye drops
    atc    | S01ED51 | timolol eye drops, combined
    atc    | M02AA15 | diclofenac gel
    atc    | S01BC03 | diclofenac eye drops
    atc    | G01AF11 | vaginal ketoconazole
    rxnorm | 91990   | betaxolol eye drops
"""


@pytest.mark.parametrize(("system", "code", "what"), table(LOCAL))
def test_a_local_form_does_not_count_as_the_drug(system, code, what):
    address = {"atc": ATC, "rxnorm": RXNORM}[system]
    assert BOOK.drug(coded(address, code)).is_systemic is False, what


def test_timolol_by_name_is_systemic_only_where_the_text_says_so():
    assert BOOK.drug({"text": "timolol 0.5 % ophthalmic solution"}).is_systemic is False
    assert BOOK.drug({"text": "timolol 10 mg tablet"}).is_systemic is True


def test_a_code_that_does_not_say_which_diuretic_leaves_the_class_open():
    ramipril, partner = BOOK.drug(coded(ATC, "C09BA05")).components
    assert (ramipril.drug, ramipril.drug_class) == ("ramipril", "ace-inhibitor")
    assert partner.drug_class is None
    assert partner.possible_classes == ("loop-diuretic", "potassium-sparing-diuretic", "thiazide-diuretic")


def test_an_unnamed_potassium_sparing_agent_neither_proves_nor_excludes_an_mra():
    _, partner = BOOK.drug(coded(ATC, "C03EA01")).components
    assert (partner.drug_class, partner.possible_classes) == (None, ("mra", "potassium-sparing-diuretic"))


def test_an_opioid_with_an_unnamed_partner_is_no_nsaid_itself():
    codeine, partner = BOOK.drug(coded(ATC, "N02AJ09")).components
    assert (codeine.drug, codeine.drug_class, codeine.possible_classes) == ("codeine", None, ())
    assert partner.possible_classes == ("aspirin", "nsaid")


@pytest.mark.parametrize(
    ("system", "code", "possible"),
    [
        (ATC, "A10BX09", "sglt2-inhibitor"),  # retired code of dapagliflozin
        (SNOMED, "372658000", "ace-inhibitor"),  # enalapril as a substance
        (SNOMED, "716072000", "arni"),  # sacubitril as a substance
        (RXNORM, "2638675", "sglt2-inhibitor"),  # sotagliflozin
    ],
)
def test_a_code_nobody_checked_gives_only_a_possible_class(system, code, possible):
    match = BOOK.drug(coded(system, code))
    assert [component.drug_class for component in match.components] == [None]
    assert match.possible_classes == (possible,)


def test_an_unchecked_code_still_warns_as_an_allergy():
    assert BOOK.allergy(coded(SNOMED, "372658000")).drug_classes == ("ace-inhibitor",)


# LOINC long common names. 33914-3 is the MDRD equation, not CKD-EPI.
ANALYTES = """
    LOINC   | analyte      | use       | method
    2823-3  | potassium    | accept    | None
    2160-0  | creatinine   | accept    | None
    33914-3 | egfr         | legacy    | mdrd
    98979-8 | egfr         | prefer    | ckd-epi-2021
    10230-1 | lvef         | accept    | None
    8480-6  | systolic-bp  | accept    | None
    8462-4  | diastolic-bp | accept    | None
    8867-4  | heart-rate   | accept    | None
    29463-7 | body-weight  | accept    | None
    33762-6 | nt-probnp    | accept    | None
    88020-3 | nyha-class   | accept    | None
    85354-9 | bp-panel     | container | None
"""


@pytest.mark.parametrize(("loinc", "analyte", "use", "method"), table(ANALYTES))
def test_a_loinc_code_names_its_analyte(loinc, analyte, use, method):
    (match,) = BOOK.analytes(coded(LOINC, loinc))
    assert (match.analyte, match.use, str(match.method)) == (analyte, use, method)


def test_a_loinc_code_under_another_system_means_nothing():
    assert BOOK.analytes(coded(SNOMED, "2823-3")) == ()


# ICD-10-CM 2026. Which concepts count together with which is the trade's reading of the titles (common practice).
PROBLEMS = """
    code    | counts as                                       | does not count as
    I50.22  | heart-failure hfref                             |
    I50.32  | heart-failure hfpef                             |
    I50.9   | heart-failure heart-failure-unspecified         |
    I11.0   | heart-failure heart-failure-unspecified hypertension |
    I50.83  | high-output-failure                             | heart-failure
    I50.810 | isolated-right-heart-failure right-heart-failure | heart-failure
    I50.814 | heart-failure right-heart-failure               | isolated-right-heart-failure
    I42.1   | obstructive-hcm                                 |
    Z95.0   | pacemaker-in-situ                               |
    R57.0   | cardiogenic-shock                               | heart-failure
    O13.4   |                                                 | pregnancy
"""


@pytest.mark.parametrize(("code", "counts", "excluded"), table(PROBLEMS))
def test_an_icd_code_counts_as_its_concepts_with_and_without_the_dot(code, counts, excluded):
    for written in (code, code.replace(".", ""), code.lower()):
        match = BOOK.problem(coded(ICD, written))
        assert (match.include, match.excluded) == (tuple(counts.split()), tuple(excluded.split())), written


# SNOMED CT fully specified names in the table. Stage B is structural disease without symptoms; the adult rules do not
# apply to congenital disease as they stand.
SNOMED_PROBLEMS = """
    code            | counts as                                | does not count as
    84114007        | heart-failure heart-failure-unspecified  |
    10091002        | high-output-failure                      | heart-failure
    367363000       | isolated-right-heart-failure right-heart-failure | heart-failure
    44313006        | heart-failure right-heart-failure        | isolated-right-heart-failure
    717840005       | stage-b-pre-heart-failure                | heart-failure
    471880001       | congenital-heart-failure heart-failure   | advanced-heart-failure
    871617000       | congenital-heart-failure heart-failure   |
    60899001        |                                          | heart-failure
"""


@pytest.mark.parametrize(("code", "counts", "excluded"), table(SNOMED_PROBLEMS))
def test_a_snomed_code_counts_as_its_concepts(code, counts, excluded):
    match = BOOK.problem(coded(SNOMED, code))
    assert set(counts.split()) <= set(match.include)
    assert set(excluded.split()) <= set(match.excluded)
    assert "heart-failure" in {*match.include, *match.excluded}


@pytest.mark.parametrize(
    ("oid", "code", "concept"),
    [
        ("urn:oid:2.16.840.1.113883.6.90", "I50.22", "heart-failure"),
        ("urn:oid:2.16.840.1.113883.6.96", "84114007", "heart-failure"),
    ],
)
def test_the_oid_of_a_system_is_the_same_system(oid, code, concept):
    assert concept in BOOK.problem(coded(oid, code)).include


def test_the_oids_of_drug_and_laboratory_systems_are_known_too():
    assert BOOK.drug(coded("urn:oid:2.16.840.1.113883.6.88", "313096")).components[0].drug == "spironolactone"
    assert BOOK.drug(coded("urn:oid:2.16.840.1.113883.6.73", "C03DA01")).components[0].drug == "spironolactone"
    assert BOOK.analytes(coded("urn:oid:2.16.840.1.113883.6.1", "2823-3"))[0].analyte == "potassium"


@pytest.mark.parametrize("system", ["http://hl7.org/fhir/sid/icd-10", "http://hl7.org/fhir/sid/icd-10-gm", ""])
def test_another_icd_is_not_matched_however_alike_its_codes_look(system):
    assert BOOK.problem(coded(system, "I50.22")) is None


def test_a_code_that_counts_only_with_a_second_one_names_its_partners():
    match = BOOK.problem(coded(ICD, "E85.4"))
    assert (match.include, match.weak) == (("amyloidosis",), ("amyloid-cardiomyopathy",))
    assert "heart-failure" in BOOK.partners["amyloid-cardiomyopathy"]


def test_a_severity_alone_is_no_problem():
    match = BOOK.problem(coded(SNOMED, "24484000"))  # severe
    assert (match.include, match.weak, match.qualifiers) == ((), (), ("lvsd-moderate-severe",))


def test_procedures_and_devices_are_read_from_both_systems():
    assert BOOK.procedure_or_device(coded(PCS, "5A1D70Z")).include == ("dialysis",)
    assert "lvad-implant" in BOOK.procedure_or_device(coded(PCS, "02HA0QZ")).include
    assert "crt-implant" in BOOK.procedure_or_device(coded(SNOMED, "429064006")).include


def test_a_pacemaker_generator_known_from_memory_only_hints():
    match = BOOK.procedure_or_device(coded(PCS, "0JH604Z"))
    assert (match.include, match.weak) == ((), ("pacemaker-or-icd-generator",))


# Titles of ICD-10-CM and SNOMED CT.
ALLERGIES = """
    system | code      | drugs      | classes                | kind        | reactions
    icd    | T46.4X5A  |            | ace-inhibitor          | intolerance |
    icd    | T465X5D   |            |                        | intolerance |
    icd    | Z88.2     |            | sulfonamide-antibiotic | allergy     |
    snomed | 293967003 | bisoprolol | beta-blocker           | allergy     |
    snomed | 407564000 |            | ace-inhibitor          | intolerance |
    snomed | 403607004 |            | ace-inhibitor          | unspecified | angioedema
"""


@pytest.mark.parametrize(("system", "code", "drugs", "classes", "kind", "reactions"), table(ALLERGIES))
def test_an_allergy_code_names_drug_class_and_reaction(system, code, drugs, classes, kind, reactions):
    match = BOOK.allergy(coded({"icd": ICD, "snomed": SNOMED}[system], code))
    assert match.drugs == tuple(drugs.split())
    assert match.drug_classes == tuple(classes.split())
    assert match.reactions == tuple(reactions.split())
    assert (match.kind, match.is_finding) == (kind, True)


def test_long_term_use_of_a_drug_is_no_allergy_to_it():
    match = BOOK.allergy(coded(ICD, "Z79.1"))  # long-term use of NSAIDs
    assert (match.drugs, match.drug_classes, match.is_finding) == ((), (), False)


def test_a_substance_is_an_allergy_only_where_an_allergy_is_recorded():
    assert BOOK.allergy(coded(SNOMED, "372733002")).is_finding is False  # ACE inhibitor as a substance


def test_problems_reactions_and_classes_are_known_in_words():
    assert BOOK.problem({"text": "HFrEF"}).include == ("heart-failure", "hfref")
    assert BOOK.problem({"text": "no heart failure"}) is None
    assert BOOK.reactions({"text": "lip swelling"}) == ("angioedema",)
    assert BOOK.allergy({"text": "ACE inhibitors - dry cough"}).drug_classes == ("ace-inhibitor",)


def test_the_code_book_is_loaded_once():
    assert load_code_book() is BOOK
