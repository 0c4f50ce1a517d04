"""Dosage shapes -> mg a day, as a pharmacist would work them out."""

from __future__ import annotations

from datetime import UTC, date

import pytest

from cds.clinical.timeline import PartialDate
from cds.fhir.code_matches import DrugComponent
from cds.fhir.codes import CodeBook
from cds.fhir.dosage import read_doses, read_given
from cds.fhir.intake import Context, Intake
from cds.fhir.timing import Place

UCUM = "http://unitsofmeasure.org"
FORMS = "http://terminology.hl7.org/CodeSystem/v3-orderableDrugForm"
METOPROLOL_25 = DrugComponent(
    drug="metoprolol succinate", drug_class="beta-blocker", strength_mg=25, strength_unit="MG"
)
METOPROLOL = DrugComponent(drug="metoprolol succinate", drug_class="beta-blocker")
SOLUTION = DrugComponent(drug="furosemide", drug_class="loop-diuretic", strength_mg=10, strength_unit="MG/ML")
POTASSIUM = DrugComponent(
    drug="potassium chloride", drug_class="potassium-supplement", strength=20, strength_unit="MEQ"
)
# sacubitril/valsartan 24/26 mg: one drug, its strength the sum (ruling 36)
ARNI_50 = DrugComponent(drug="sacubitril/valsartan", drug_class="arni", strength_mg=50)
ARNI = DrugComponent(drug="sacubitril/valsartan", drug_class="arni")
LISINOPRIL_20 = DrugComponent(drug="lisinopril", drug_class="ace-inhibitor", strength_mg=20)
THIAZIDE = DrugComponent(drug="hydrochlorothiazide", drug_class="thiazide-diuretic", strength_mg=12.5)

DAILY = {"repeat": {"frequency": 1, "period": 1, "periodUnit": "d"}}
TWICE = {"repeat": {"frequency": 2, "period": 1, "periodUnit": "d"}}


def doses(*dosages, of=(METOPROLOL_25,)):
    intake = Intake()
    place = Place(Context(codes=CodeBook(), zone=UTC, intake=intake), "MedicationRequest/m1", "dosageInstruction")
    return read_doses(list(dosages), of, place, ordered=PartialDate.of_day(date(2025, 1, 1))), intake.issues


def line(dosage, of=METOPROLOL_25):
    read, issues = doses(dosage, of=(of,))
    (only,) = read.lines[0]
    return only, issues


def quantity(value, code=None, system=UCUM, unit=None):
    parts = {"value": value, "unit": unit, "code": code, "system": system if code else None}
    return {key: part for key, part in parts.items() if part is not None}


def dose(value, code=None, timing=DAILY, **more):
    return {"timing": timing, "doseAndRate": [{"doseQuantity": quantity(value, code)}], **more}


def with_quantity(amount, timing=DAILY):
    return {"timing": timing, "doseAndRate": [{"doseQuantity": amount}]}


# dosage | product | mg a day
KNOWN = [
    (dose(25, "mg"), METOPROLOL, 25),
    (dose(25, "mg", TWICE), METOPROLOL, 50),
    (dose(0.5, "g", TWICE), METOPROLOL, 1000),
    (dose(125, "ug"), METOPROLOL, 0.125),
    (with_quantity(quantity(125, unit="mcg")), METOPROLOL, 0.125),
    (dose(1), METOPROLOL_25, 25),
    (dose(2, timing=TWICE), METOPROLOL_25, 100),
    (dose(0.5, "{tbl}"), METOPROLOL_25, 12.5),
    (dose(1, "1"), METOPROLOL_25, 25),
    (dose(1, "{tablet}", TWICE), METOPROLOL_25, 50),
    (with_quantity(quantity(2, "TAB", FORMS)), METOPROLOL_25, 50),
    (with_quantity(quantity(1, "CAP", FORMS, "Capsule")), METOPROLOL_25, 25),
    (with_quantity(quantity(1, unit="tablet(s)")), METOPROLOL_25, 25),
    (with_quantity(quantity(1, unit="Tablets")), METOPROLOL_25, 25),
    (with_quantity(quantity(1, "428673006", "http://snomed.info/sct", "Tablet")), METOPROLOL_25, 25),
    (with_quantity(quantity(12, "{tbl}")), METOPROLOL_25, 300),
    (dose(4, "mL", TWICE), SOLUTION, 80),
    (dose(1, "{tbl}", TWICE), ARNI_50, 100),
    (dose(50, "mg", TWICE), ARNI_50, 100),
    (dose(200, "mg", TWICE), ARNI, 400),
    (dose(25, "mg", {"repeat": {"frequency": 1, "period": 2, "periodUnit": "d"}}), METOPROLOL, 12.5),
    (dose(70, "mg", {"repeat": {"frequency": 1, "period": 1, "periodUnit": "wk"}}), METOPROLOL, 10),
    (dose(10, "mg", {"repeat": {"frequency": 1, "period": 1, "periodUnit": "wk"}}), METOPROLOL, 1.4286),
    ({"text": "take 1 tablet by mouth twice a day"}, METOPROLOL_25, 50),
    ({"text": "25 mg daily"}, METOPROLOL, 25),
    ({"patientInstruction": "half a tablet every morning"}, METOPROLOL_25, 12.5),
    ({"text": "1-0-1"}, METOPROLOL_25, 50),
    ({"text": "25 mg 1-0-1"}, METOPROLOL, 50),
    ({"text": "2 x 25 mg daily"}, METOPROLOL, 50),
    ({"text": "2 tablets (50 mg) daily"}, METOPROLOL_25, 50),
    ({"text": "2 tablets (25 mg) daily"}, METOPROLOL_25, 50),
    ({"text": "1 tablet (25 mg) daily"}, METOPROLOL, 25),
    ({"text": "2 tablets (50 mg total) daily"}, METOPROLOL, 50),
    ({"text": "take two 25 mg tablets daily"}, METOPROLOL, 50),
    ({"text": "metoprolol succinate 25 mg tablet: take 1 tablet daily"}, METOPROLOL, 25),
    ({"text": "50 mg in the morning and 25 mg in the evening"}, METOPROLOL, 75),
    ({"text": "24/26 mg twice daily"}, ARNI, 100),
    ({"timing": TWICE, "text": "25 mg"}, METOPROLOL, 50),
    ({"timing": DAILY, "text": "2 x 25 mg"}, METOPROLOL, 50),
    ({"doseAndRate": [{"doseQuantity": quantity(25, "mg")}], "text": "25 mg twice daily"}, METOPROLOL, 50),
    (dose(1, "{tbl}", text="25 mg daily"), METOPROLOL, 25),
]


@pytest.mark.parametrize(("dosage", "product", "daily_mg"), KNOWN)
def test_a_dose_that_is_plain_is_worked_out_in_mg_a_day(dosage, product, daily_mg):
    read, issues = line(dosage, product)
    assert read.daily_mg == pytest.approx(daily_mg)
    assert read.note
    assert not issues


UNKNOWN = [
    (dose(1, "{tbl}"), METOPROLOL),  # no strength
    (dose(25), METOPROLOL_25),  # 25 tablets, or 25 mg?
    (dose(50), METOPROLOL_25),
    (dose(1, "mL"), METOPROLOL_25),  # no strength of one mL
    (dose(1), SOLUTION),
    (dose(24, "mg", TWICE), ARNI_50),  # of one part, not of the sum
    (dose(97, "mg", TWICE), ARNI),
    (dose(25, "mg", None), METOPROLOL),
    (dose(25, "mg", {"code": {"coding": [{"code": "BID"}]}, **DAILY}), METOPROLOL),
    (dose(25, "mg", {"code": {"text": "as directed"}}), METOPROLOL),
    ({"timing": DAILY}, METOPROLOL_25),
    ({}, METOPROLOL_25),
    ({"text": "take as directed"}, METOPROLOL_25),
    ({"text": "1 tablet daily"}, METOPROLOL),
    ({"text": "25 mg"}, METOPROLOL),
    ({"text": "once daily"}, METOPROLOL_25),
    ({"text": "2 x 25 mg twice daily"}, METOPROLOL),  # two tablets, or twice?
    ({"text": "2 tablets (30 mg) daily"}, METOPROLOL_25),
    ({"text": "2 tablets (25 mg total) daily"}, METOPROLOL_25),
    ({"text": "25 mg daily", "patientInstruction": "50 mg daily"}, METOPROLOL),
    ({"timing": TWICE, "text": "25 mg daily"}, METOPROLOL),
    ({"timing": DAILY, "doseAndRate": [{"rateQuantity": quantity(10, "mg/h")}]}, METOPROLOL),
    ({"timing": {"repeat": {"count": 1}}, "doseAndRate": [{"doseQuantity": quantity(25, "mg")}]}, METOPROLOL),
]


@pytest.mark.parametrize(("dosage", "product"), UNKNOWN)
def test_a_dose_that_could_mean_two_things_is_none_and_says_why(dosage, product):
    read, issues = line(dosage, product)
    assert read.daily_mg is None
    assert read.note
    assert not issues


HOSTILE = [
    7,
    "25 mg daily",
    dose(0, "mg"),
    dose(-25, "mg"),
    dose("25", "mg"),
    dose(True, "mg"),
    dose(10**400, "mg"),
    dose(1e12, "mg"),
    dose(500, "{tbl}"),
    dose(25, "furlong"),
    with_quantity(quantity(25, "mg", unit="tablet")),
    with_quantity({"value": 25, "code": "mg", "comparator": "<"}),
    with_quantity([25]),
    {"timing": DAILY, "doseAndRate": ["25 mg"]},
    {"timing": DAILY, "doseAndRate": [{"doseRange": {"low": quantity(2), "high": quantity(1)}}]},
    {"timing": DAILY, "doseAndRate": [{"doseRange": {"low": quantity(2, "mg"), "high": quantity(3, "{tbl}")}}]},
    dose(25, "mg", {"repeat": {"frequency": 0, "period": 1, "periodUnit": "d"}}),
    dose(25, "mg", asNeededBoolean="true"),
]


@pytest.mark.parametrize("dosage", HOSTILE)
def test_a_value_that_cannot_be_is_refused_at_its_place_and_gives_no_dose(dosage):
    read, issues = doses(dosage)
    assert all(one.daily_mg is None for one in read.lines[0])
    assert issues
    assert all(issue.path.startswith("dosageInstruction[0]") and issue.severity == "refused" for issue in issues)


def test_a_refused_amount_is_not_replaced_by_the_text():
    assert line(dose(-25, "mg", text="25 mg daily"))[0].daily_mg is None


def test_ordered_beats_calculated():
    kind = "http://terminology.hl7.org/CodeSystem/dose-rate-type"
    rates = [
        {"type": {"coding": [{"system": kind, "code": "calculated"}]}, "doseQuantity": quantity(30, "mg")},
        {"type": {"coding": [{"system": kind, "code": "ordered"}]}, "doseQuantity": quantity(25, "mg")},
    ]
    assert line({"timing": DAILY, "doseAndRate": rates})[0].daily_mg == 25


def test_tablets_and_mg_side_by_side_must_agree():
    rates = [{"doseQuantity": quantity(2, "{tbl}")}, {"doseQuantity": quantity(50, "mg")}]
    assert line({"timing": DAILY, "doseAndRate": rates})[0].daily_mg == 50
    rates[1] = {"doseQuantity": quantity(25, "mg")}
    assert line({"timing": DAILY, "doseAndRate": rates})[0].daily_mg is None


def test_a_range_gives_its_upper_end_as_the_most_a_day():
    read, _ = line({"timing": DAILY, "doseAndRate": [{"doseRange": {"low": quantity(1), "high": quantity(2)}}]})
    assert (read.daily_mg, read.max_daily_mg) == (None, 50)


def test_as_needed_gives_only_the_most_a_day():
    for needed in ({"asNeededBoolean": True}, {"asNeededCodeableConcept": {"text": "swelling"}}):
        read, _ = line(dose(40, "mg", TWICE, **needed), METOPROLOL)
        assert (read.daily_mg, read.max_daily_mg, read.is_as_needed) == (None, 80, True)


def test_the_most_allowed_a_day_bounds_what_is_taken_as_needed():
    ratio = {"numerator": quantity(60, "mg"), "denominator": quantity(24, "h")}
    read, _ = line(dose(40, "mg", TWICE, asNeededBoolean=True, maxDosePerPeriod=ratio), METOPROLOL)
    assert read.max_daily_mg == 60


def test_a_text_that_says_as_needed_counts_unless_the_element_denies_it():
    assert line({"text": "40 mg daily as needed"}, METOPROLOL)[0].is_as_needed
    read, _ = line(dose(40, "mg", text="40 mg daily as needed", asNeededBoolean=False), METOPROLOL)
    assert (read.daily_mg, read.is_as_needed) == (40, False)


def test_structured_counts_with_a_doubt_where_the_text_says_another_dose():
    read, issues = line(dose(25, "mg", text="take 50 mg daily"), METOPROLOL)
    assert read.daily_mg == 25
    assert not read.is_from_text
    assert [(issue.severity, issue.path) for issue in issues] == [("doubtful", "dosageInstruction[0].text")]


def test_a_dose_read_from_words_is_marked():
    assert line({"text": "25 mg daily"}, METOPROLOL)[0].is_from_text
    assert line(dose(25, "mg", {"code": {"text": "twice daily"}}), METOPROLOL)[0].is_from_text
    assert not line(dose(25, "mg"), METOPROLOL)[0].is_from_text


def test_an_amount_that_is_not_in_mg_stays_as_it_is():
    assert line(dose(20, "meq", TWICE), POTASSIUM)[0].other == "40 meq"
    assert line(dose(2, "{tbl}"), POTASSIUM)[0].other == "40 meq"
    assert line(dose(12, "[iU]"), DrugComponent(drug="insulin", drug_class="insulin"))[0].other == "12 units"


def test_one_tablet_of_a_combination_gives_each_part_its_own_mg():
    read, _ = doses(dose(1, "{tbl}", TWICE), of=(LISINOPRIL_20, THIAZIDE))
    assert [lines[0].daily_mg for lines in read.lines] == [40, 25]


@pytest.mark.parametrize(
    ("mg", "daily_mg"),
    [
        (20, [20, 12.5]),  # the strength of one part
        (32.5, [20, 12.5]),  # of both together
        (40, [None, None]),
        (25, [None, None]),  # two tablets by the thiazide, or 25 mg of either?
    ],
)
def test_mg_of_a_combination_count_only_if_they_equal_one_reading(mg, daily_mg):
    read, _ = doses(dose(mg, "mg"), of=(LISINOPRIL_20, THIAZIDE))
    assert [lines[0].daily_mg for lines in read.lines] == daily_mg


def test_the_two_strengths_of_a_combination_mean_one_tablet():
    read, _ = doses({"text": "20/12.5 mg daily"}, of=(LISINOPRIL_20, THIAZIDE))
    assert [lines[0].daily_mg for lines in read.lines] == [20, 12.5]


def test_lines_keep_their_times_sequence_and_bounds():
    morning = {"repeat": {"when": ["MORN"], "boundsDuration": {"value": 7, "code": "d"}}}
    read, _ = line(dose(25, "mg", morning, sequence=2), METOPROLOL)
    assert (read.times, read.sequence, str(read.ends)) == (("MORN",), 2, "2025-01-07")


def test_the_length_a_text_names_ends_its_line():
    assert str(line({"text": "25 mg daily for 7 days"}, METOPROLOL)[0].ends) == "2025-01-07"


def test_without_any_dosage_there_are_no_lines():
    assert doses()[0].lines == ((),)


def test_a_dose_that_was_given_once_says_nothing_of_a_day():
    place = Place(Context(codes=CodeBook(), zone=UTC, intake=Intake()), "MedicationAdministration/a1", "dosage")
    (only,) = read_given({"dose": quantity(40, "mg")}, (METOPROLOL,), place).lines[0]
    assert (only.daily_mg, only.note) == (None, "a single dose: 40 mg")
