"""Prescriptions in words: read whole or not at all. The words are common practice."""

from __future__ import annotations

import pytest

from cds.fhir.dosage_text import read_dosage_text, read_rhythm_text
from cds.fhir.dosage_words import strengths_in

# text | amount at one time | times a day
PLAIN = """
    take 1 tablet by mouth daily             | 1 of the product    | 1
    1 tab po bid                             | 1 of the product    | 2
    take one tablet twice a day              | 1 of the product    | 2
    half a tablet once daily                 | 0.5 of the product  | 1
    1/2 tab qd                               | 0.5 of the product  | 1
    ½ tablet b.i.d.                          | 0.5 of the product  | 2
    1½ tablets daily                         | 1.5 of the product  | 1
    one and a half tablets daily             | 1.5 of the product  | 1
    Take two capsules three times a day      | 2 of the product    | 3
    25 mg daily                              | 25 mg                       | 1
    25mg PO BID                              | 25 mg                       | 2
    12,5 mg twice daily                      | 12.5 mg                     | 2
    0.5 g every 12 hours                     | 500 mg                      | 2
    125 mcg daily                            | 0.125 mg                    | 1
    40 mg q6h                                | 40 mg                       | 4
    25 mg every other day                    | 25 mg                       | 0.5
    70 mg weekly                             | 70 mg                       | 0.142857
    25 mg qAM                                | 25 mg                       | 1
    25 mg daily in the morning               | 25 mg                       | 1
    20 mg at bedtime                         | 20 mg                       | 1
    25 mg every other day in the morning     | 25 mg                       | 0.5
    1 tablet every morning and every evening | 1 of the product    | 2
    24/26 mg twice daily                     | 24/26 mg                    | 2
    2 x 25 mg daily                          | 50 mg                       | 1
    50 mg/day                                | 50 mg                       | 1
    2x daily 1 tablet                        | 1 of the product    | 2
    1-0-1                                    | 2 of the product    | 1
    1/2-0-0 tablets                          | 0.5 of the product  | 1
    5 ml twice a day                         | 5 mL                        | 2
    20 meq daily                             | 20 meq                      | 1
"""

UNCLEAR = [
    "take as directed",
    "use as directed by your doctor",
    "1 tablet daily for 1 week then 2 tablets daily",
    "25 mg daily, 50 mg daily",
    "1 tablet daily with an extra tablet on Mondays",
    "do not take 1 tablet daily",
    "HOLD 25 mg daily",
    "stop 25 mg daily",
    "1,000 mg daily",
    "10 mg/5 ml daily",
    "25 mg daily twice daily",
    "0-0-0",
    "20-0-20",
    "every 0 hours 1 tablet",
    "titrate to 50 mg daily",
    "25 mg daily " * 40,
]


@pytest.mark.parametrize("row", PLAIN.strip().splitlines())
def test_a_plain_text_gives_the_amount_and_how_often(row):
    text, amount, often = (cell.strip() for cell in row.split("|"))
    dose = read_dosage_text(text)
    assert dose is not None
    assert len(dose.parts) == 1
    assert str(dose.parts[0].amounts[0]) == amount
    assert dose.parts[0].rhythm.per_day == pytest.approx(float(often), rel=1e-5)


@pytest.mark.parametrize("text", UNCLEAR)
def test_one_word_that_is_not_understood_makes_the_whole_text_unclear(text):
    assert read_dosage_text(text) is None


@pytest.mark.parametrize(
    "text", ["(" * 299, "1/" * 149, "1 and " * 49, "for " * 74, "1-" * 149, "q" * 300, None, 7, ["a"]]
)
def test_a_hostile_text_is_unclear_and_costs_nothing(text):
    dose = read_dosage_text(text)
    assert dose is None or not dose.parts[0].amounts


def test_as_needed_for_anything_is_as_needed():
    dose = read_dosage_text("40 mg daily as needed for swelling of the legs")
    assert dose.is_as_needed


def test_two_amounts_at_different_times_of_day_are_two_parts():
    dose = read_dosage_text("40 mg in the morning and 20 mg in the evening")
    assert [(part.amounts[0].low, part.rhythm.times) for part in dose.parts] == [(40, ("MORN",)), (20, ("EVE",))]


def test_a_length_is_kept_in_days():
    assert read_dosage_text("1 tablet daily for 2 weeks").days == 14


def test_the_name_of_the_medicine_itself_does_not_disturb():
    assert read_dosage_text("furosemide 40 mg daily") is None
    assert read_dosage_text("furosemide 40 mg daily", {"furosemide"}) is not None


@pytest.mark.parametrize(("text", "often"), [("Twice daily", 2), ("every 8 hours", 3), ("BID", 2), ("3x/day", 3)])
def test_the_text_of_a_timing_says_how_often_and_nothing_else(text, often):
    assert read_rhythm_text(text).per_day == pytest.approx(often)


@pytest.mark.parametrize("text", ["25 mg daily", "as needed", "", "as directed"])
def test_a_timing_text_with_more_or_less_than_that_is_unclear(text):
    assert read_rhythm_text(text) is None


@pytest.mark.parametrize(
    ("text", "strengths"),
    [
        ("furosemide 40 MG Oral Tablet", ((40, False),)),
        ("digoxin 125 mcg tablet", ((0.125, False),)),
        ("furosemide 10 MG/ML Oral Solution", ((10, True),)),
        ("furosemide 50 mg/5 ml solution", ((10, True),)),
        ("sacubitril 24 MG / valsartan 26 MG Oral Tablet", ((24, False), (26, False))),
        ("sacubitril/valsartan 49/51 mg", ((49, False), (51, False))),
        ("nitroglycerin 0.4 MG/HR patch", ()),
        ("furosemide", ()),
    ],
)
def test_the_strength_in_the_name_of_a_product_is_read_in_mg(text, strengths):
    assert strengths_in(text) == strengths
