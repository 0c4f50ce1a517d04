"""How senders write units, checked against UCUM itself as ucumvert reads it."""

from __future__ import annotations

import pytest
from small_book import UCUM
from ucumvert import PintUcumRegistry

from cds.clinical.units import UNITS
from cds.fhir.units import MISSPELLINGS, UCUM_CODES, UCUM_SPELLINGS, UnitReading, understand_text, understand_unit

# Ruling 42, the usual misspellings, each with the code it means; upper or lower case alike. Common practice in the field.
RULED = {
    "mEq/L": "meq/L",
    "meq/l": "meq/L",
    "mmol/L": "mmol/L",
    "umol/L": "umol/L",
    "\N{MICRO SIGN}mol/L": "umol/L",
    "\N{GREEK SMALL LETTER MU}mol/l": "umol/L",
    "mg/dl": "mg/dL",
    "gm/dL": "g/dL",
    "g/dl": "g/dL",
    "ng/ml": "ng/mL",
    "pg/ml": "pg/mL",
    "bpm": "/min",
    "beats/min": "/min",
    "mm Hg": "mm[Hg]",
    "mmHg": "mm[Hg]",
    "lb": "[lb_av]",
    "lbs": "[lb_av]",
    "kgs": "kg",
    "percent": "%",
    "mL/min/1.73m2": "mL/min/{1.73_m2}",
    "mL/min/1.73 m2": "mL/min/{1.73_m2}",
    "mL/min/1.73m^2": "mL/min/{1.73_m2}",
    "mL/min/1.73.m2": "mL/min/{1.73_m2}",
}


@pytest.fixture(scope="module")
def ucum() -> PintUcumRegistry:
    return PintUcumRegistry()


@pytest.mark.parametrize("spelling", sorted(UCUM_SPELLINGS))
def test_another_spelling_of_ucum_is_the_same_quantity_as_the_code_it_is_read_as(ucum, spelling):
    ratio = (ucum.from_ucum(spelling) / ucum.from_ucum(UCUM_SPELLINGS[spelling])).to_base_units()
    assert ratio.dimensionless
    assert ratio.magnitude == pytest.approx(1, rel=1e-12)


@pytest.mark.parametrize("spelling", sorted(s for s in MISSPELLINGS if s in UCUM_SPELLINGS))
def test_a_misspelling_that_ucum_allows_means_what_ucum_says(ucum, spelling):
    assert MISSPELLINGS[spelling] == UCUM_SPELLINGS[spelling]
    ratio = (ucum.from_ucum(spelling) / ucum.from_ucum(MISSPELLINGS[spelling])).to_base_units()
    assert ratio.magnitude == pytest.approx(1, rel=1e-12)


def test_every_misspelling_means_a_code_that_some_analyte_is_known_in():
    assert set(MISSPELLINGS.values()) <= UCUM_CODES
    assert set(UCUM_SPELLINGS.values()) <= UCUM_CODES


@pytest.mark.parametrize("spelling", sorted(RULED))
def test_the_usual_misspellings_are_read_in_either_case_and_any_spacing(spelling):
    plain = spelling[0] + spelling[1:].upper()  # a micro sign has no capital of its own
    for text in (spelling, plain, spelling.lower(), f"  {spelling} ", spelling.replace(" ", "  ")):
        assert understand_text(text) == RULED[spelling]


def test_a_capital_mu_looks_like_a_capital_m_so_it_is_not_read_as_either():
    assert "\N{MICRO SIGN}mol/L".upper() == "\N{GREEK CAPITAL LETTER MU}MOL/L"
    assert understand_text("\N{GREEK CAPITAL LETTER MU}MOL/L") is None


def test_the_list_of_misspellings_is_the_ruled_one_and_no_longer():
    plain = {text.lower().replace("\N{MICRO SIGN}", "u").replace("\N{GREEK SMALL LETTER MU}", "u") for text in RULED}
    assert set(MISSPELLINGS) == plain


@pytest.mark.parametrize("code", sorted(UCUM_CODES))
def test_every_code_of_our_table_means_itself(code):
    assert understand_text(code) == code


@pytest.mark.parametrize(
    ("text", "code"),
    [
        ("mmol/L{serum}", "mmol/L"),
        ("%{saturation}", "%"),
        ("{beats}/min", "/min"),
        ("{score}", "1"),
        ("{INR}", "1"),
        ("1/min", "/min"),
        ("m[iU]/L", "m[IU]/L"),
        ("ml/min/{1.73_m2}", "mL/min/{1.73_m2}"),
        ("mL/min/{1.73m2}", "mL/min/{1.73_m2}"),
        ("mL/min/{1.73.m2}", "mL/min/{1.73_m2}"),
        ("ug/l", "ug/L"),
    ],
)
def test_annotations_and_the_small_litre_change_nothing(text, code):
    assert understand_text(text) == code


@pytest.mark.parametrize(
    "text",
    [
        "",
        "   ",
        "mmol",
        "mg/100ml",
        "mg%",
        "U",
        "K",
        "KG",
        "Kg",
        "LB_AV",
        "grams",
        "ug/DL",
        "mcg/L",
        "mmol/L mg/dL",
        "mmol/24h",
        "mmol/L}",
        "{",
        "10*3/uL",
        "mL/min/{bsa}",
        "mL/min/{2.00_m2}",
        "MMHG[",
        "x" * 65,
        None,
        7,
        ["mmol/L"],
        "mmol∕L",
    ],
)
def test_a_unit_that_must_be_guessed_is_not_understood(text):
    assert understand_text(text) is None


def test_case_matters_where_ucum_says_so():
    # UCUM, case-sensitive form: a capital M is mega, a small one milli
    assert understand_text("MS") is None
    assert understand_text("ms") == "ms"
    assert understand_text("M") is None


UNDERSTOOD = [
    ({"system": UCUM, "code": "mmol/L"}, UnitReading(code="mmol/L")),
    ({"system": UCUM, "code": "mmol/L", "unit": "mmol/l"}, UnitReading(code="mmol/L")),
    ({"system": "urn:oid:2.16.840.1.113883.6.8", "code": "meq/L"}, UnitReading(code="meq/L")),
    ({"code": "mmol/L"}, UnitReading(code="mmol/L")),
    ({"unit": "mEq/L"}, UnitReading(code="meq/L", path="unit")),
    ({"system": UCUM, "code": "mmol/L", "unit": "mEq/L"}, UnitReading(code="mmol/L", by_text="meq/L")),
    ({"system": UCUM, "code": "mmol/L", "unit": "millimoles per litre"}, UnitReading(code="mmol/L")),
    ({"system": UCUM, "code": " ", "unit": "mEq/L"}, UnitReading(code="meq/L", path="unit")),
    ({}, UnitReading()),
    ({"code": "", "unit": " "}, UnitReading()),
]
NOT_UNDERSTOOD = [
    ({"system": UCUM, "code": "Zyxw987"}, "code"),
    ({"unit": "Zyxw987"}, "unit"),
    ({"system": UCUM, "code": "Zyxw987", "unit": "mmol/L"}, "code"),
    ({"system": "urn:example:Zyxw987", "code": "mmol/L"}, "system"),
    ({"system": 7, "code": "mmol/L"}, "system"),
    ({"system": UCUM, "code": ["Zyxw987"]}, "code"),
    ({"unit": {"Zyxw987": 1}}, "unit"),
]


@pytest.mark.parametrize(("quantity", "reading"), UNDERSTOOD)
def test_the_code_decides_and_the_text_stands_in_where_there_is_none(quantity, reading):
    assert understand_unit({"value": 1, **quantity}) == reading


@pytest.mark.parametrize(("quantity", "path"), NOT_UNDERSTOOD)
def test_a_unit_that_is_not_understood_is_a_problem_with_its_place(quantity, path):
    reading = understand_unit({"value": 1, **quantity})
    assert reading.code is None
    assert reading.path == path
    assert reading.problem is not None
    assert "Zyxw987" not in reading.problem


def test_every_analyte_can_be_sent_in_its_canonical_unit():
    for row in UNITS.values():
        assert understand_unit({"system": UCUM, "code": next(iter(row))}).code == next(iter(row))
