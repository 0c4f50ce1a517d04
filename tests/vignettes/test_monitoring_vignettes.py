"""Worked patients, from bundle to the timed blood tests: due, too early, half done, done late, for which drug.

All patients are invented. Windows: MRA days 3 to 7 and 21 to 35 after each start or increase, then 150 to 182 after the
last result (2022 AHA/ACC/HFSA guideline, section 7.3.3; label of spironolactone, section 5.1); ACE inhibitor, ARB and
ARNI days 7 to 14 (ESC practical guidance), then the same half year. Window widths and grace are policy.
"""

from __future__ import annotations

import pytest
from asking import assessed, finding, said
from builders import administration, creatinine, egfr, lvef, order, patient, potassium, problem

CHECK = "check-potassium-creatinine"


def failing_heart(born="1961-08-08", sex="male"):
    return [patient(born=born, sex=sex), problem("heart failure", "2024-05-01"), lvef(35, "2025-12-01")]


def first_spironolactone(*more):
    """Spironolactone 25 mg, first dose in the evening of 2 March 2026, blood drawn that morning."""
    return [
        *failing_heart(),
        order("spironolactone", 25, since="2026-03-02T17:30:00Z"),
        administration("spironolactone", "2026-03-02T18:00:00Z"),
        potassium(4.6, "2026-03-02T08:10:00Z"),
        creatinine(1.1, "2026-03-02T08:10:00Z"),
        *more,
    ]


def spoken(answer, rule):
    """The card that speaks for a rule: its own, or the one its finding was folded into."""
    into = {item["into"] for item in answer["held_back"] if item["rule"] == rule}
    (only,) = [c for c in answer["cards"] if c["rule"] == rule or c["card_id"] in into]
    return only


def due(answer, drug):
    return finding(answer, CHECK, drug)["due"]


def test_blood_drawn_on_the_morning_of_the_first_dose_does_not_count_as_the_check_after_it():
    answer = assessed(*first_spironolactone(), as_of="2026-03-13")
    assert said(answer, CHECK) == "open/test"
    assert due(answer, "spironolactone") == {
        "tests": ["potassium", "creatinine"],
        "status": "overdue",
        "window_opens": "2026-03-05",
        "due_by": "2026-03-09",
        "grace_ends": "2026-03-12",
        "days_overdue": 4,
        "already_ordered": None,
    }
    drafts = spoken(answer, CHECK)["drafts"]
    assert [(d["resourceType"], d["code"]["text"]) for d in drafts] == [
        ("ServiceRequest", "potassium"),
        ("ServiceRequest", "creatinine"),
    ]


def test_blood_drawn_on_day_2_is_too_early_and_the_check_stays_due():
    too_early = [potassium(4.7, "2026-03-04"), creatinine(1.1, "2026-03-04")]
    answer = assessed(*first_spironolactone(*too_early), as_of="2026-03-08")
    assert said(answer, CHECK) == "open/test"
    found = due(answer, "spironolactone")
    assert (found["status"], found["due_by"], found["days_overdue"]) == ("due", "2026-03-09", 0)


def test_lowering_lisinopril_makes_nothing_due_before_the_half_year_after_the_last_result():
    answer = assessed(
        *failing_heart(),
        order("lisinopril", 20, since="2025-04-01"),
        order("lisinopril", 10, since="2026-03-01"),
        potassium(4.5, "2025-11-20"),
        creatinine(1.0, "2025-11-20"),
        as_of="2026-03-20",
    )
    assert said(answer, CHECK) == "met"
    found = due(answer, "lisinopril")
    assert (found["status"], found["due_by"]) == ("not-due", "2026-05-21")
    assert [c["rule"] for c in answer["cards"] if c["rule"] == CHECK] == []


def test_creatinine_in_micromoles_satisfies_the_check_ten_days_after_an_arni():
    answer = assessed(
        *failing_heart(born="1957-06-01"),
        order("sacubitril/valsartan", 50, 2, since="2026-02-02"),
        creatinine(104, "2026-01-28", "umol/L"),
        creatinine(151, "2026-02-12", "umol/L"),
        potassium(4.9, "2026-02-12"),
        as_of="2026-02-12",
    )
    assert said(answer, CHECK) == "met"
    # the half year counts from the result, not from the day it was due
    assert due(answer, "sacubitril/valsartan")["due_by"] == "2026-08-13"


HAEMOLYSED = [
    {"note": [{"text": "Specimen haemolysed"}]},
    {
        "interpretation": [
            {
                "coding": [
                    {"system": "http://terminology.hl7.org/CodeSystem/v2-0493", "code": "HEM", "display": "Hemolyzed"}
                ]
            }
        ]
    },
]


@pytest.mark.parametrize("mark", HAEMOLYSED)
def test_a_haemolysed_sample_gives_the_creatinine_but_leaves_potassium_due(mark):
    drawn = [potassium(6.3, "2026-03-09", **mark), creatinine(1.0, "2026-03-09")]
    answer = assessed(*first_spironolactone(*drawn), as_of="2026-03-09")
    assert said(answer, CHECK) == "open/test"
    found = due(answer, "spironolactone")
    assert found["tests"] == ["potassium"]
    assert (found["status"], found["due_by"], found["days_overdue"]) == ("due", "2026-03-09", 0)
    assert [d["code"]["text"] for d in spoken(answer, CHECK)["drafts"]] == ["potassium"]


def test_potassium_alone_leaves_creatinine_overdue_within_grace():
    answer = assessed(*first_spironolactone(potassium(4.8, "2026-03-09")), as_of="2026-03-11")
    assert said(answer, CHECK) == "open/test"
    found = due(answer, "spironolactone")
    assert found["tests"] == ["creatinine"]
    assert (found["status"], found["days_overdue"], found["grace_ends"]) == ("overdue-in-grace", 2, "2026-03-12")


def test_potassium_and_creatinine_from_two_specimens_satisfy_one_check():
    drawn = [potassium(4.8, "2026-03-06"), creatinine(1.1, "2026-03-08")]
    answer = assessed(*first_spironolactone(*drawn), as_of="2026-03-13")
    assert said(answer, CHECK) == "met"
    assert due(answer, "spironolactone")["due_by"] == "2026-04-06"


def test_a_reported_egfr_stands_in_for_the_creatinine():
    drawn = [potassium(4.8, "2026-03-06"), egfr(71, "2026-03-06")]
    assert said(assessed(*first_spironolactone(*drawn), as_of="2026-03-13"), CHECK) == "met"


def test_spironolactone_for_five_months_without_any_result_is_overdue_since_its_last_early_check():
    # policy: the half-yearly check counts from a result; with none, week 4 stays outstanding
    answer = assessed(*failing_heart(), order("spironolactone", 25, since="2026-03-02"), as_of="2026-08-04")
    assert said(answer, CHECK) == "open/test"
    found = due(answer, "spironolactone")
    assert (found["status"], found["due_by"], found["days_overdue"]) == ("overdue", "2026-04-06", 120)
    assert "An earlier check of the series was missed." in finding(answer, CHECK)["because"]


def test_an_ace_inhibitor_for_years_without_any_result_is_overdue_since_its_first_weeks():
    answer = assessed(*failing_heart(), order("ramipril", 5, since="2025-06-02"), as_of="2026-03-02")
    found = due(answer, "ramipril")
    assert (found["status"], found["due_by"], found["days_overdue"]) == ("overdue", "2025-06-16", 259)
