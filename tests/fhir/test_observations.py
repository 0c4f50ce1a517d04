"""Observations as the field sends them: what becomes a measurement, what an issue, and never a guess."""

from __future__ import annotations

from datetime import date
from typing import Any
from zoneinfo import ZoneInfo

import pytest
from hypothesis import given
from hypothesis import strategies as st
from small_book import LOINC, UCUM, concept, observation, quantity, small_context

from cds.clinical.record import Measurement
from cds.clinical.timeline import PartialDate
from cds.fhir.intake import Intake
from cds.fhir.observations import read_observation

POTASSIUM, CREATININE, CREATININE_MOLAR, EGFR, MDRD = "2823-3", "2160-0", "14682-9", "98979-8", "33914-3"
LVEF, NYHA, BP_PANEL, SYSTOLIC, DIASTOLIC = "10230-1", "88020-3", "85354-9", "8480-6", "8462-4"
HEART_RATE, WEIGHT, TSAT, HAEMOGLOBIN, INR, NT_PROBNP = "8867-4", "29463-7", "2502-3", "718-7", "6301-6", "33762-6"


def read(resource: dict[str, Any], zone: str = "UTC", **more: Any) -> tuple[tuple[Measurement, ...], Intake]:
    context = small_context(ZoneInfo(zone))
    before = repr(resource)
    found = read_observation(resource, context, **more)
    assert repr(resource) == before  # the input is never changed
    return found, context.intake


def one(resource: dict[str, Any], **more: Any) -> Measurement:
    """The one measurement of a resource that is read without any issue."""
    (found,), intake = read(resource, **more)
    assert intake.issues == []
    return found


def refused(resource: dict[str, Any]) -> str:
    """The path at which a resource that gives nothing is refused."""
    found, intake = read(resource)
    assert found == ()
    (issue,) = intake.issues
    assert issue.severity == "refused"
    assert issue.resource == "Observation/o1"
    assert issue.problem
    assert issue.fix
    return issue.path


def told(intake: Intake) -> list[tuple[str, str]]:
    return [(issue.path, issue.severity) for issue in intake.issues]


def text(code: str, value: str) -> dict[str, Any]:
    return observation(code, valueString=value)


def panel(*components: tuple[str, Any], **more: Any) -> dict[str, Any]:
    parts = [{"code": concept(code), **value} for code, value in components]
    return observation(BP_PANEL, component=parts, **more)


def mmhg(value: float) -> dict[str, Any]:
    return {"valueQuantity": quantity(value, "mm[Hg]")}


# --- value and unit ---------------------------------------------------------------------------------------------------

VALUES = """
    code    | sent          | value | unit               | reported
    2823-3  | 4.5 mmol/L    | 4.5   | mmol/L             | 4.5 mmol/L
    2823-3  | 4.56 meq/L    | 4.56  | mmol/L             | 4.56 meq/L
    22760-3 | 19.6 mg/dL    | 5.0   | mmol/L             | 19.6 mg/dL
    2160-0  | 1.25 mg/dL    | 111   | umol/L             | 1.25 mg/dL
    14682-9 | 110.5 umol/L  | 110.5 | umol/L             | 110.5 umol/L
    98979-8 | 58 mL/min/{1.73_m2} | 58 | mL/min/{1.73_m2} | 58 mL/min/{1.73_m2}
    10230-1 | 35 %          | 35    | %                  | 35 %
    10230-1 | 0.35 1        | 35    | %                  | 0.35 1
    8480-6  | 16 kPa        | 120   | mm[Hg]             | 16 kPa
    29463-7 | 180 [lb_av]   | 81.6  | kg                 | 180 [lb_av]
    718-7   | 125 g/L       | 12.5  | g/dL               | 125 g/L
    33762-6 | 212.8 pmol/L  | 1800  | pg/mL              | 212.8 pmol/L
    4548-4  | 48 mmol/mol   | 6.54  | %                  | 48 mmol/mol
"""


def lines(table: str) -> list[list[str]]:
    return [[cell.strip() for cell in line.split("|")] for line in table.strip().splitlines()[1:]]


@pytest.mark.parametrize(("code", "sent", "value", "unit", "reported"), lines(VALUES))
def test_a_value_is_converted_once_and_kept_as_reported(code, sent, value, unit, reported):
    number, sent_unit = sent.split()
    (found,), _ = read(observation(code, quantity(float(number), sent_unit)))
    assert (found.value, found.unit) == (float(value), unit)
    assert f"{found.reported_value:g} {found.reported_unit}" == reported
    assert found.source == "Observation/o1"
    assert found.taken == PartialDate.of_day(date(2025, 6, 1))


@pytest.mark.parametrize("unit", ["mmol/l", "MMOL/L", "mEq/L", "mmol/L{plasma}"])
def test_a_misspelt_unit_is_read(unit):
    assert one(observation(POTASSIUM, {"value": 4.5, "unit": unit})).value == 4.5


def test_unit_and_code_that_mean_the_same_agree_and_others_are_refused():
    same = {"value": 4.5, "system": UCUM, "code": "mmol/L", "unit": "mEq/L"}
    assert one(observation(POTASSIUM, same)).reported_unit == "mmol/L"
    other = {"value": 1.2, "system": UCUM, "code": "mg/dL", "unit": "umol/L"}
    assert refused(observation(CREATININE, other)) == "valueQuantity.unit"


@pytest.mark.parametrize(
    ("value", "path"),
    [
        (quantity(4.5, "stones"), "valueQuantity.code"),
        (quantity(4.5, "kg"), "valueQuantity.code"),  # a unit of weight, not of potassium
        ({"value": 4.5, "unit": "stones"}, "valueQuantity.unit"),
        ({"value": 4.5, "unit": "umol/L"}, "valueQuantity.unit"),
        ({"value": 4.5, "system": "urn:example:units", "code": "mmol/L"}, "valueQuantity.system"),
        ({"value": 4.5, "code": 7}, "valueQuantity.code"),
        ({"unit": "mmol/L"}, "valueQuantity.value"),
        ({"value": "4.5", "unit": "mmol/L"}, "valueQuantity.value"),
        ({"value": True, "unit": "mmol/L"}, "valueQuantity.value"),
        ({"value": [4.5], "unit": "mmol/L"}, "valueQuantity.value"),
        ({"value": 10**400, "unit": "mmol/L"}, "valueQuantity.value"),
        ("4.5", "valueQuantity"),
        ([{"value": 4.5}], "valueQuantity"),
    ],
)
def test_a_quantity_that_is_not_understood_is_refused_at_its_place(value, path):
    assert refused(observation(POTASSIUM, value)) == path


MISSING_UNIT = [
    (LVEF, 35, 35, "%"),
    (LVEF, 1.5, None, None),  # percent, and no patient has it
    (LVEF, 0.35, 35, "1"),
    (SYSTOLIC, 120, 120, "mm[Hg]"),
    (DIASTOLIC, 70, 70, "mm[Hg]"),
    (HEART_RATE, 62, 62, "/min"),
    (POTASSIUM, 4.5, None, None),
    (CREATININE, 1.2, None, None),
    (WEIGHT, 80, None, None),
    (TSAT, 0.18, None, None),
    (TSAT, 18, None, None),
    (EGFR, 58, None, None),
]


@pytest.mark.parametrize(("code", "sent", "value", "unit"), MISSING_UNIT)
def test_a_missing_unit_is_a_refusal_but_for_the_few_of_ruling_5(code, sent, value, unit):
    found, intake = read(observation(code, quantity(sent)))
    if value is None:
        assert found == ()
        assert [issue.severity for issue in intake.issues] == ["refused"]
    else:
        assert (found[0].value, found[0].reported_unit) == (value, unit)
        assert "without unit" in str(found[0].note)


def test_a_score_has_no_unit_by_nature():
    assert one(observation(INR, quantity(2.5))).note is None
    assert one(observation(INR, quantity(2.5, "1"))).value == 2.5
    assert one(observation(INR, quantity(2.5, "{INR}"))).value == 2.5


IMPLAUSIBLE = [
    (POTASSIUM, 45, "mmol/L"),
    (POTASSIUM, 0, "mmol/L"),
    (POTASSIUM, -4.5, "mmol/L"),
    (CREATININE, 104, "mg/dL"),  # umol/L under the wrong unit
    (CREATININE_MOLAR, 1.2, "umol/L"),
    (LVEF, 4.9, "%"),
    (LVEF, 0.35, "%"),
    (LVEF, 35, "1"),
    (LVEF, 90, "%"),
    (HAEMOGLOBIN, 125, "g/dL"),
    (WEIGHT, 5, "kg"),
    (EGFR, 900, "mL/min/{1.73_m2}"),
    (SYSTOLIC, 1200, "mm[Hg]"),
]


@pytest.mark.parametrize(("code", "value", "unit"), IMPLAUSIBLE)
def test_a_value_that_no_patient_has_is_an_issue_not_a_fact(code, value, unit):
    assert refused(observation(code, quantity(value, unit))) == "valueQuantity"


@pytest.mark.parametrize(
    ("code", "value", "unit"),
    [
        (POTASSIUM, 1.5, "mmol/L"),
        (POTASSIUM, 10, "mmol/L"),
        (LVEF, 5, "%"),
        (CREATININE, 0.2, "mg/dL"),
        (CREATININE, 20, "mg/dL"),
    ],
)
def test_the_ends_of_what_is_believed_are_believed(code, value, unit):
    one(observation(code, quantity(value, unit)))


def test_haemoglobin_in_mmol_too_low_to_tell_monomer_from_tetramer_is_refused():
    (found,), _ = read(observation(HAEMOGLOBIN, quantity(7.5, "mmol/L")))
    assert found.value == 12.1
    assert refused(observation(HAEMOGLOBIN, quantity(2.1, "mmol/L"))) == "valueQuantity"


def test_egfr_in_ml_min_is_taken_with_a_note():
    assert "sent in mL/min" in str(one(observation(EGFR, quantity(58, "mL/min"))).note)


def test_mass_under_a_code_for_moles_trusts_the_unit_and_says_so():
    (found,), intake = read(observation(CREATININE, quantity(104, "umol/L")))
    assert found.value == 104
    assert told(intake) == [("code", "doubtful")]


# --- comparators, texts, ranges ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("comparator", ["<", "<=", ">=", ">"])
def test_a_comparator_is_kept(comparator):
    assert one(observation(EGFR, quantity(60, "mL/min/{1.73_m2}", comparator=comparator))).comparator == comparator


@pytest.mark.parametrize("comparator", ["~", "ad", "=", "", 1, ["<"]])
def test_an_unknown_comparator_is_refused(comparator):
    sent = quantity(60, "mL/min/{1.73_m2}", comparator=comparator)
    assert refused(observation(EGFR, sent)) == "valueQuantity.comparator"


def test_below_the_measuring_range_may_lie_below_what_is_believed():
    assert one(observation(NT_PROBNP, quantity(4, "pg/mL", comparator="<"))).value == 4
    assert refused(observation(NT_PROBNP, quantity(4, "pg/mL", comparator=">"))) == "valueQuantity"


TEXTS = """
    code     | sent          | value | comparator | unit   | note
    2823-3   | 4.5 mmol/L    | 4.5   |            | mmol/L | number sent as text
    2823-3   | 4,5 mmol/L    | 4.5   |            | mmol/L | number sent as text; decimal comma
    2823-3   | 4,56 mEq/L    | 4.56  |            | meq/L  | number sent as text; decimal comma
    98979-8  | >60 mL/min/1.73m2 | 60 | >         | mL/min/{1.73_m2} | number sent as text
    98979-8  | ≥ 60 mL/min/1.73 m2 | 60 | >=      | mL/min/{1.73_m2} | number sent as text
    33762-6  | < 50 pg/mL    | 50    | <          | pg/mL  | number sent as text
    10230-1  | 35%           | 35    |            | %      | number sent as text
    10230-1  | 35            | 35    |            | %      | number sent as text; sent without unit; taken as %
    10230-1  | <=40 percent  | 40    | <=         | %      | number sent as text
    8867-4   | 62 bpm        | 62    |            | /min   | number sent as text
"""


@pytest.mark.parametrize(("code", "sent", "value", "comparator", "unit", "note"), lines(TEXTS))
def test_a_text_that_is_a_number_is_read_with_a_note(code, sent, value, comparator, unit, note):
    found = one(text(code, sent))
    assert (found.value, found.comparator, found.reported_unit, found.note) == (
        float(value),
        comparator or None,
        unit,
        note,
    )


@pytest.mark.parametrize(
    "sent",
    [
        "",
        "high",
        "4.5",
        "see report",
        "4.5 or 4.7 mmol/L",
        "4.5-4.7 mmol/L",
        "4.5 stones",
        "1,234 mmol/L",
        "4..5 mmol/L",
        "-4.5 mmol/L",
        "4.5 mmol/L?",
        "about 4.5 mmol/L",
        "4.5 mmol/L haemolysed",
        "4e0 mmol/L",
        "٤ mmol/L",
        "4.5 mmol/L" + " " * 200,
    ],
)
def test_a_text_that_is_more_or_less_than_a_number_is_refused(sent):
    assert refused(text(POTASSIUM, sent)) == "valueString"


def test_a_comma_before_three_digits_may_part_thousands_so_it_is_not_read():
    assert refused(text(NT_PROBNP, "1,800 pg/mL")) == "valueString"


@pytest.mark.parametrize("sent", ["35-40%", "35 - 40 %", "35–40 %", "35% - 40%", "35 to 40%", "35-40", "0.35-0.40"])
def test_an_ejection_fraction_sent_as_a_range_keeps_both_ends_and_the_middle(sent):
    found = one(text(LVEF, sent))
    assert (found.low, found.value, found.high) == (35, 37.5, 40)
    assert "midpoint" in str(found.note)


@pytest.mark.parametrize("sent", ["40-35%", "35-400%", "0.35-40", "moderately reduced", "35-", "35-40-45%"])
def test_a_range_that_does_not_fit_together_is_refused(sent):
    assert refused(text(LVEF, sent)) == "valueString"


def test_a_range_is_read_for_ejection_fraction_and_for_nothing_else():
    ends = {"low": quantity(35, "%"), "high": quantity(40, "%")}
    found = one(observation(LVEF, valueRange=ends))
    assert (found.low, found.value, found.high, found.unit) == (35, 37.5, 40, "%")
    assert refused(observation(POTASSIUM, valueRange={"low": quantity(4, "mmol/L")})) == "valueRange"


def test_a_range_open_on_one_side_is_a_bound():
    at_most = one(observation(LVEF, valueRange={"high": quantity(40, "%")}))
    assert (at_most.value, at_most.comparator, at_most.low) == (40, "<=", None)
    assert one(observation(LVEF, valueRange={"low": quantity(55, "%")})).comparator == ">="


@pytest.mark.parametrize(
    ("value", "path"),
    [
        ({}, "valueRange"),
        ("35-40", "valueRange"),
        ({"low": quantity(40, "%"), "high": quantity(35, "%")}, "valueRange"),
        ({"low": quantity(35, "%"), "high": quantity(0.4, "1")}, "valueRange"),
        ({"low": quantity(35, "%", comparator=">"), "high": quantity(40, "%")}, "valueRange.low.comparator"),
        ({"low": quantity("35", "%"), "high": quantity(40, "%")}, "valueRange.low.value"),
        ({"low": quantity(3, "%"), "high": quantity(40, "%")}, "valueRange"),
    ],
)
def test_a_range_that_is_none_is_refused_at_its_place(value, path):
    assert refused(observation(LVEF, valueRange=value)) == path


def test_an_integer_needs_a_unit_like_any_other_number():
    assert one(observation(LVEF, valueInteger=35)).value == 35
    assert refused(observation(POTASSIUM, valueInteger=4)) == "valueInteger"


@pytest.mark.parametrize(
    ("more", "path"),
    [
        ({"valueBoolean": True}, "valueBoolean"),
        ({"valueDateTime": "2025-06-01"}, "valueDateTime"),
        ({"valueSampledData": {}}, "valueSampledData"),
        ({"valueCodeableConcept": {"text": "high"}}, "valueCodeableConcept"),
        ({"valueString": "4.5 mmol/L", "valueInteger": 4}, "value"),
        ({}, "value"),
    ],
)
def test_a_value_in_another_form_or_in_two_or_in_none_is_refused(more, path):
    assert refused(observation(POTASSIUM, **more)) == path


def test_a_value_said_to_be_absent_is_no_error():
    absent = {"dataAbsentReason": {"text": "not performed"}}
    found, intake = read(observation(POTASSIUM, **absent))
    assert found == ()
    assert told(intake) == [("dataAbsentReason", "information")]
    assert refused(observation(POTASSIUM, quantity(4.5, "mmol/L"), **absent)) == "dataAbsentReason"


# --- components and blood pressure ------------------------------------------------------------------------------------


def test_a_blood_pressure_panel_gives_both_pressures():
    found, intake = read(panel((SYSTOLIC, mmhg(118)), (DIASTOLIC, mmhg(72))))
    assert [(m.analyte, m.value) for m in found] == [("systolic-bp", 118), ("diastolic-bp", 72)]
    assert intake.issues == []
    assert not intake.not_recognised


def test_a_component_is_read_under_any_code_of_its_panel():
    resource = observation("0000-0", component=[{"code": concept(HEART_RATE), "valueQuantity": quantity(62, "/min")}])
    found, intake = read(resource)
    assert [m.analyte for m in found] == ["heart-rate"]
    assert not intake.not_recognised


def test_a_spoilt_component_costs_that_component():
    spoilt = {"valueQuantity": quantity(72, "stones")}
    (found,), intake = read(panel((SYSTOLIC, mmhg(118)), (DIASTOLIC, spoilt)))
    assert found.analyte == "systolic-bp"
    assert told(intake) == [("component[1].valueQuantity.code", "refused")]


@pytest.mark.parametrize(("systolic", "diastolic", "count"), [(72, 118, 0), (90, 91, 0), (90, 90, 2), (118, 72, 2)])
def test_a_systolic_below_the_diastolic_spoils_both(systolic, diastolic, count):
    found, intake = read(panel((SYSTOLIC, mmhg(systolic)), (DIASTOLIC, mmhg(diastolic))))
    assert len(found) == count
    assert told(intake) == ([] if count else [("component", "refused")])


def test_a_panel_without_components_says_nothing_and_one_with_a_value_is_refused():
    assert read(observation(BP_PANEL))[0] == ()
    assert refused(observation(BP_PANEL, quantity(120, "mm[Hg]"))) == "value"


@pytest.mark.parametrize(
    "components", ["text", 7, {"code": 1}, [None, "x", 3], [{"code": "8480-6"}], [{"code": {"coding": "x"}}]]
)
def test_components_of_a_wrong_shape_are_passed_over(components):
    found, _ = read(observation(POTASSIUM, quantity(4.5, "mmol/L"), component=components))
    assert [m.analyte for m in found] == ["potassium"]


# --- codes ------------------------------------------------------------------------------------------------------------


def test_a_code_nobody_knows_is_counted_and_no_issue():
    found, intake = read(observation("0000-0", quantity(1, "mmol/L")))
    assert found == ()
    assert intake.issues == []
    ((unknown, count),) = intake.not_recognised.items()
    assert (unknown.kind, unknown.system, unknown.code, count) == ("observation", LOINC, "0000-0", 1)


def test_a_code_counts_only_in_its_system():
    found, intake = read(observation("x", quantity(4.5, "mmol/L"), code=concept(POTASSIUM, system="urn:example:other")))
    assert found == ()
    assert sum(intake.not_recognised.values()) == 1


def test_the_oid_of_loinc_is_loinc_and_a_sites_own_code_is_its_own():
    by_oid = concept(POTASSIUM, system="urn:oid:2.16.840.1.113883.6.1")
    assert one(observation("x", quantity(4.5, "mmol/L"), code=by_oid)).analyte == "potassium"
    assert (
        one(observation("x", quantity(4.5, "mmol/L"), code=concept("K", system="urn:example:lab"))).analyte
        == "potassium"
    )


def test_codings_of_two_measurements_are_refused_and_of_one_agree():
    assert refused(observation("x", quantity(4.5, "mmol/L"), code=concept(POTASSIUM, "2951-2"))) == "code"
    assert one(observation("x", quantity(19.6, "mg/dL"), code=concept("22760-3", "0000-0"))).value == 5.0


def test_a_code_that_must_never_be_used_gives_nothing():
    found, intake = read(observation("29349-8", quantity(4.5, "mmol/L")))  # after dialysis
    assert found == ()
    assert told(intake) == [("code", "information")]


def test_a_code_to_be_used_with_caution_ranks_last_and_says_so():
    found = one(observation("51618-7", quantity(5.4, "mmol/L")))  # before dialysis
    assert found.rank == 2
    assert "nothing better" in str(found.note)
    assert one(observation(EGFR, quantity(58, "mL/min/{1.73_m2}"))).rank == 0


def test_an_mdrd_egfr_is_marked_by_its_code():
    found = one(observation(MDRD, quantity(58, "mL/min/{1.73_m2}")))
    assert (found.method, found.rank) == ("mdrd", 2)


# --- NYHA -------------------------------------------------------------------------------------------------------------

SNOMED = "http://snomed.info/sct"
# LOINC answer list of 88020-3; SNOMED CT findings of NYHA class (our tables mark the first as from memory).
CLASSES = [
    (LOINC, "LA28404-4", 1),
    (LOINC, "LA28405-1", 2),
    (LOINC, "LA28406-9", 3),
    (LOINC, "LA28407-7", 4),
    (SNOMED, "420300004", 1),
    (SNOMED, "421704003", 2),
    (SNOMED, "420913000", 3),
    (SNOMED, "422293003", 4),
]


@pytest.mark.parametrize(("system", "code", "grade"), CLASSES)
def test_a_nyha_class_is_read_by_its_code(system, code, grade):
    assert one(observation(NYHA, valueCodeableConcept=concept(code, system=system))).value == grade


@pytest.mark.parametrize(
    ("more", "grade"),
    [
        ({"valueString": "NYHA III"}, 3),
        ({"valueString": "New York Heart Association functional class II"}, 2),
        ({"valueString": "Class IV"}, 4),
        ({"valueString": " 3 "}, 3),
        ({"valueInteger": 2}, 2),
        ({"valueQuantity": {"value": 2}}, 2),
        ({"valueQuantity": quantity(2, "{score}")}, 2),
        ({"valueCodeableConcept": {"text": "NYHA class II"}}, 2),
        ({"valueCodeableConcept": {"coding": [{"system": "urn:example:x", "code": "y", "display": "Class III"}]}}, 3),
        ({"valueCodeableConcept": concept("LA28405-1", text="Class III")}, 2),  # the code decides
    ],
)
def test_a_nyha_class_is_read_in_words_and_numbers(more, grade):
    assert one(observation(NYHA, **more)).value == grade


@pytest.mark.parametrize(
    "more",
    [
        {"valueString": "II-III"},
        {"valueString": "NYHA class II to III"},
        {"valueString": "not assessed"},
        {"valueString": "V"},
        {"valueString": "0"},
        {"valueString": "not NYHA III"},
        {"valueInteger": 0},
        {"valueInteger": 5},
        {"valueQuantity": {"value": 2.5}},
        {"valueQuantity": {"value": 2, "unit": "mmol/L"}},
        {"valueQuantity": {"value": 2, "comparator": ">="}},
        {"valueCodeableConcept": concept("LA28405-1", "LA28406-9")},
        {"valueCodeableConcept": concept("LA28405-1", system="urn:example:other")},
        {"valueCodeableConcept": {}},
        {"valueCodeableConcept": "LA28405-1"},
        {"valueBoolean": True},
        {},
    ],
)
def test_anything_that_is_not_one_nyha_class_is_refused(more):
    assert refused(observation(NYHA, **more)).startswith("value")


# --- status, time, haemolysis -----------------------------------------------------------------------------------------


@pytest.mark.parametrize("status", ["final", "amended", "corrected"])
def test_a_result_that_stands_counts(status):
    assert not one(observation(POTASSIUM, quantity(4.5, "mmol/L"), status=status)).is_preliminary


def test_a_preliminary_result_counts_and_is_marked():
    found = one(observation(POTASSIUM, quantity(4.5, "mmol/L"), status="preliminary"))
    assert found.is_preliminary
    assert found.note == "preliminary"


@pytest.mark.parametrize("status", ["registered", "cancelled", "entered-in-error", "unknown"])
def test_a_result_that_does_not_stand_gives_nothing(status):
    found, intake = read(observation(POTASSIUM, quantity(4.5, "mmol/L"), status=status))
    assert found == ()
    assert told(intake) == [("status", "information")]


@pytest.mark.parametrize("status", [None, "", "FINAL", "done", 1, ["final"], {"code": "final"}])
def test_a_status_that_r4_does_not_know_is_refused(status):
    assert refused(observation(POTASSIUM, quantity(4.5, "mmol/L"), status=status)) == "status"


TIMES = [
    ({"effectiveDateTime": "2025-06-01"}, "2025-06-01"),
    ({"effectiveDateTime": "2025-06"}, "2025-06"),
    ({"effectiveDateTime": "2025-06-02T01:30:00Z"}, "2025-06-01"),  # in New York
    ({"effectiveInstant": "2025-06-01T12:00:00Z"}, "2025-06-01"),
    ({"effectivePeriod": {"start": "2025-06-01", "end": "2025-06-03"}}, "2025-06-03"),
    ({"effectivePeriod": {"start": "2025-06-01"}}, "2025-06-01"),
    ({"issued": "2025-06-05T12:00:00Z"}, "2025-06-05"),
    ({"effectiveDateTime": "2025-06-01", "issued": "2025-06-05T12:00:00Z"}, "2025-06-01"),
]


@pytest.mark.parametrize(("when", "taken"), TIMES)
def test_the_time_of_a_result_is_that_of_the_specimen(when, taken):
    resource = {**observation(POTASSIUM, quantity(4.5, "mmol/L"), effectiveDateTime=None), **when}
    found = one(resource, zone="America/New_York")
    assert str(found.taken) == taken
    assert found.note == ("dated by the report (issued)" if "issued" in when and len(when) == 1 else None)


@pytest.mark.parametrize(
    ("when", "path"),
    [
        ({}, "effective"),
        ({"effectiveDateTime": "2025-06-01T10:00:00"}, "effectiveDateTime"),
        ({"effectiveDateTime": "yesterday", "issued": "2025-06-05T12:00:00Z"}, "effectiveDateTime"),
        ({"effectivePeriod": {"start": "2025-06-03", "end": "2025-06-01"}}, "effectivePeriod"),
        ({"effectivePeriod": {}}, "effective"),
        ({"effectivePeriod": "2025"}, "effectivePeriod"),
        ({"issued": 20250605}, "issued"),
        ({"effectiveTiming": {"event": ["2025-06-01"]}}, "effective"),
    ],
)
def test_a_result_without_a_usable_time_is_refused(when, path):
    assert refused({**observation(POTASSIUM, quantity(4.5, "mmol/L"), effectiveDateTime=None), **when}) == path


HAEMOLYSED = [
    {"interpretation": [concept("HEM", system="http://terminology.hl7.org/CodeSystem/v2-0493")]},
    {"interpretation": [{"text": "Haemolysed sample"}]},
    {"interpretation": [{"coding": [{"display": "Specimen hemolyzed"}]}]},
    {"note": [{"text": "Slight hemolysis. Repeat advised."}]},
    {"note": [{"text": "No clots. Marked haemolysis present in this specimen, please repeat."}]},
    {"note": [{"text": "No clots, haemolysed"}]},
    {"note": [{"text": "Haemolysed - no repeat possible"}]},
    {"note": [{"text": "Haemolysis cannot be excluded"}]},
    {"note": [{"text": "Haemolysis: 0.8 g/L"}]},
    {"note": [{"text": "First tube not haemolysed, second tube haemolysed"}]},
]
CLEAN = [
    {"note": [{"text": "No haemolysis"}]},
    {"note": [{"text": "Sample not haemolysed."}]},
    {"note": [{"text": "No visible evidence of hemolysis"}]},
    {"note": [{"text": "Non-haemolysed sample"}]},
    {"note": [{"text": "unhaemolysed"}]},
    {"note": [{"text": "No icterus, lipaemia or haemolysis."}]},
    {"note": [{"text": "Haemolysis: none"}]},
    {"note": [{"text": "Haemolysis: no"}]},
    {"note": [{"text": "Hemolysis index: 0"}]},
    {"note": [{"text": "Haemolysis not detected"}]},
    {"note": [{"text": "Haematology to follow"}]},
    {"interpretation": [concept("H", system="http://terminology.hl7.org/CodeSystem/v3-ObservationInterpretation")]},
    {"interpretation": {"text": "haemolysed"}},  # not a list, so nothing R4 knows
    {"note": "haemolysed", "interpretation": 7},
]


@pytest.mark.parametrize("more", HAEMOLYSED)
def test_a_haemolysed_sample_is_kept_and_marked(more):
    (found,), intake = read(observation(POTASSIUM, quantity(6.3, "mmol/L"), **more))
    assert found.is_haemolysed
    assert "haemolysed" in str(found.note)
    assert told(intake) == [("interpretation", "doubtful")]


@pytest.mark.parametrize("more", CLEAN)
def test_a_sample_that_is_not_haemolysed_is_not_marked(more):
    assert not one(observation(POTASSIUM, quantity(4.5, "mmol/L"), **more)).is_haemolysed


def test_the_encounter_is_named_or_found():
    by_name = {"encounter": {"reference": "https://a.example/Encounter/e1"}}
    assert one(observation(POTASSIUM, quantity(4.5, "mmol/L"), **by_name)).encounter == "Encounter/e1"
    by_urn = observation(POTASSIUM, quantity(4.5, "mmol/L"), encounter={"reference": "urn:uuid:1"})
    assert one(by_urn).encounter is None
    assert one(by_urn, resolve=lambda _r, _h: {"resourceType": "Encounter", "id": "e2"}).encounter == "Encounter/e2"
    assert one(by_urn, resolve=lambda _r, _h: {"resourceType": "Patient", "id": "p2"}).encounter is None


# --- for every input --------------------------------------------------------------------------------------------------

SECRET_TEXT, SECRET_NUMBER = "Zyxw987", 7319.0642


@pytest.mark.parametrize(
    "value",
    [
        {"valueQuantity": quantity(SECRET_NUMBER, "mmol/L")},
        {"valueQuantity": quantity(SECRET_NUMBER)},
        {"valueQuantity": quantity(SECRET_NUMBER, SECRET_TEXT)},
        {"valueQuantity": quantity(4.5, SECRET_TEXT)},
        {"valueQuantity": quantity(4.5, "mmol/L", comparator=SECRET_TEXT)},
        {"valueQuantity": {"value": SECRET_TEXT, "unit": "mmol/L"}},
        {"valueQuantity": {"value": 4.5, "unit": SECRET_TEXT}},
        {"valueQuantity": {"value": 4.5, "system": SECRET_TEXT, "code": "mmol/L"}},
        {"valueQuantity": SECRET_TEXT},
        {"valueString": SECRET_TEXT},
        {"valueString": f"{SECRET_NUMBER} mmol/L"},
        {"valueString": f"4.5 {SECRET_TEXT}"},
        {"valueRange": {"low": quantity(SECRET_NUMBER, "%"), "high": quantity(1, "%")}},
        {"valueCodeableConcept": {"text": SECRET_TEXT}},
        {"valueInteger": SECRET_NUMBER},
        {"valueQuantity": quantity(4.5, "mmol/L"), "status": SECRET_TEXT},
        {"valueQuantity": quantity(4.5, "mmol/L"), "effectiveDateTime": SECRET_TEXT},
        {"valueQuantity": quantity(4.5, "mmol/L"), "effectiveDateTime": "2025-02-30T07:31:09"},
        {"valueQuantity": quantity(4.5, "mmol/L"), "note": [{"text": f"haemolysed, {SECRET_TEXT}"}]},
        {"dataAbsentReason": {"text": SECRET_TEXT}},
    ],
)
@pytest.mark.parametrize("code", [POTASSIUM, LVEF, NYHA])
def test_no_issue_ever_repeats_what_was_sent(code, value):
    _, intake = read(observation(code, **value))
    for issue in intake.issues:
        for secret in (SECRET_TEXT, "7319", "0642", "07:31"):
            assert secret not in f"{issue} {issue!r}"


JUNK = st.recursive(
    st.none()
    | st.booleans()
    | st.integers()
    | st.floats(allow_nan=False)
    | st.text(max_size=8)
    | st.sampled_from(["final", "mmol/L", POTASSIUM, LVEF, NYHA, LOINC, UCUM, "2025-06-01", "35-40%", "<5 %"]),
    lambda inner: (
        st.lists(inner, max_size=3)
        | st.dictionaries(
            st.sampled_from(
                [
                    "coding",
                    "system",
                    "code",
                    "value",
                    "unit",
                    "comparator",
                    "low",
                    "high",
                    "start",
                    "end",
                    "text",
                    "reference",
                    "valueQuantity",
                    "valueString",
                ]
            ),
            inner,
            max_size=4,
        )
    ),
    max_leaves=12,
)
ELEMENTS = [
    "id", "status", "code", "effectiveDateTime", "effectivePeriod", "issued", "valueQuantity", "valueString", "valueRange",
    "valueInteger", "valueCodeableConcept", "component", "interpretation", "note", "dataAbsentReason", "encounter",
]  # fmt: skip
GOOD = [
    observation(POTASSIUM, quantity(4.5, "mmol/L")),
    observation(LVEF, valueString="35-40%"),
    observation(NYHA, valueCodeableConcept=concept("LA28405-1")),
    panel((SYSTOLIC, mmhg(118)), (DIASTOLIC, mmhg(72))),
]


@given(good=st.sampled_from(GOOD), junk=st.dictionaries(st.sampled_from(ELEMENTS), JUNK, max_size=4))
def test_no_shape_whatever_crashes_the_reader(good, junk):
    found, intake = read({**good, **junk})
    for measurement in found:
        assert measurement.source.startswith("Observation/")
    for issue in intake.issues:
        assert issue.resource.startswith("Observation/")
        assert issue.fix
