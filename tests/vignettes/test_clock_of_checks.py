"""The clock of the timed blood tests, from bundle to finding: what starts it, what resets it, what satisfies it.

Spironolactone from 2 March 2026 unless said otherwise: days 3 to 7 (grace to day 10) and days 21 to 35 (grace to day 42),
2022 AHA/ACC/HFSA guideline, section 7.3.3; then 150 to 182 days after the last result. The clock rules are policy.
"""

from __future__ import annotations

from zoneinfo import ZoneInfo

import pytest
from asking import assessed, finding, said
from builders import (
    administration,
    admission,
    creatinine,
    dispense,
    icd,
    lvef,
    order,
    patient,
    potassium,
    problem,
    statement,
    test_order,
    until,
)

CHECK = "check-potassium-creatinine"
NEW_YORK = ZoneInfo("America/New_York")
HEART = [patient(born="1961-08-08"), problem("heart failure", "2024-05-01"), lvef(35, "2025-12-01")]
SPIRONOLACTONE = order("spironolactone", 25, since="2026-03-02")


def both(day, **more):
    """Potassium and creatinine of one draw."""
    return [potassium(4.6, day, **more), creatinine(1.1, day, **more)]


def due(answer, drug="spironolactone"):
    return finding(answer, CHECK, drug)["due"]


def spoken(answer, rule):
    """The card that speaks for a rule: its own, or the one its finding was folded into."""
    into = {item["into"] for item in answer["held_back"] if item["rule"] == rule}
    (only,) = [c for c in answer["cards"] if c["rule"] == rule or c["card_id"] in into]
    return only


def asked(*resources, as_of, **more):
    return due(assessed(*HEART, *resources, as_of=as_of, **more))


# Day 0: the first evidence that the drug was taken. Due seven days later.
DAY_0 = [
    ([order("spironolactone", 25, since="2026-03-01")], "2026-03-08", "the order alone"),
    (
        [order("spironolactone", 25, since="2026-03-01"), statement("spironolactone", 25, since="2026-03-02")],
        "2026-03-09",
        "a statement",
    ),
    (
        [order("spironolactone", 25, since="2026-03-01"), dispense("spironolactone", "2026-03-03")],
        "2026-03-10",
        "a dispense",
    ),
    (
        [
            order("spironolactone", 25, since="2026-03-01"),
            statement("spironolactone", 25, since="2026-03-02"),
            dispense("spironolactone", "2026-03-03"),
        ],
        "2026-03-10",
        "a dispense beats a statement",
    ),
    (
        [
            order("spironolactone", 25, since="2026-03-01"),
            statement("spironolactone", 25, since="2026-03-02"),
            dispense("spironolactone", "2026-03-03"),
            administration("spironolactone", "2026-03-04T09:00:00Z"),
        ],
        "2026-03-11",
        "an administration beats them all",
    ),
    (
        [
            order("spironolactone", 25, since="2026-03-01"),
            dispense("spironolactone", "2026-03-03"),
            dispense("spironolactone", "2026-04-01"),
        ],
        "2026-03-10",
        "the first of two dispenses",
    ),
]


@pytest.mark.parametrize(("evidence", "due_by", "_why"), DAY_0, ids=[row[-1] for row in DAY_0])
def test_day_0_is_administration_before_dispense_before_statement_before_order(evidence, due_by, _why):
    assert asked(*evidence, as_of="2026-03-06")["due_by"] == due_by


@pytest.mark.parametrize("more", [{"dateAsserted": "2026-03-05"}, {"dateAsserted": "2026-03-05T10:00:00Z"}])
def test_a_statement_made_on_the_day_it_is_about_says_nothing_of_the_start(more):
    noted = statement("spironolactone", 25, since="2026-03-05", **more)
    assert asked(SPIRONOLACTONE, noted, as_of="2026-03-06")["due_by"] == "2026-03-09"


# as of | results (days of potassium and creatinine) | outcome | status | due by | days overdue
WINDOWS = """
    2026-03-04 |                       | met       | not-due          | 2026-03-09 | 0   # day 2, before the window
    2026-03-05 |                       | open/test | due              | 2026-03-09 | 0   # day 3, the first day
    2026-03-09 |                       | open/test | due              | 2026-03-09 | 0   # day 7, the due day
    2026-03-10 |                       | open/test | overdue-in-grace | 2026-03-09 | 1   # counted from the due day
    2026-03-12 |                       | open/test | overdue-in-grace | 2026-03-09 | 3   # the last day of grace
    2026-03-13 |                       | open/test | overdue          | 2026-03-09 | 4
    2026-03-13 | 2026-03-04            | open/test | overdue          | 2026-03-09 | 4   # day 2 shows the old state
    2026-03-13 | 2026-03-05            | met       | not-due          | 2026-04-06 | 0   # day 3 counts
    2026-03-20 | 2026-03-18            | met       | not-due          | 2026-04-06 | 0   # done late is done
    2026-03-22 |                       | open/test | overdue          | 2026-03-09 | 13  # week 4 not open yet
    2026-03-23 |                       | open/test | due              | 2026-04-06 | 0   # week 4 supersedes the missed week 1
    2026-04-14 |                       | open/test | overdue          | 2026-04-06 | 8
    2026-03-24 | 2026-03-23            | met       | not-due          | 2026-09-21 | 0   # day 21 closes both
    2026-07-01 | 2026-03-09 2026-04-20 | met       | not-due          | 2026-10-19 | 0   # repeats count from the result
    2026-09-16 | 2026-03-09 2026-04-20 | met       | not-due          | 2026-10-19 | 0   # day 149 after it
    2026-09-17 | 2026-03-09 2026-04-20 | open/test | due              | 2026-10-19 | 0   # day 150 after it
    2026-10-20 | 2026-03-09 2026-04-20 | open/test | overdue-in-grace | 2026-10-19 | 1
    2026-08-04 |                       | open/test | overdue          | 2026-04-06 | 120 # never tested: week 4 stays
    2026-08-20 | 2026-03-09            | open/test | due              | 2026-09-07 | 0   # a result since: the half year takes over
"""


def windows():
    for line in WINDOWS.strip().splitlines():
        row, _, why = line.partition("#")
        as_of, results, outcome, status, due_by, overdue = (cell.strip() for cell in row.split("|"))
        yield pytest.param(results.split(), as_of, outcome, status, due_by, int(overdue), id=f"{as_of} {why.strip()}")


@pytest.mark.parametrize(("results", "as_of", "outcome", "status", "due_by", "overdue"), list(windows()))
def test_a_check_opens_falls_due_and_is_overdue_by_the_day(results, as_of, outcome, status, due_by, overdue):
    drawn = [one for day in results for one in both(day)]
    answer = assessed(*HEART, SPIRONOLACTONE, *drawn, as_of=as_of)
    assert said(answer, CHECK) == outcome
    found = due(answer)
    assert (found["status"], found["due_by"], found["days_overdue"]) == (status, due_by, overdue)


def test_a_missed_check_is_named_when_a_later_one_supersedes_it():
    answer = assessed(*HEART, SPIRONOLACTONE, as_of="2026-03-23")
    assert "An earlier check of the series was missed." in finding(answer, CHECK)["because"]


def test_an_increase_restarts_the_series():
    found = asked(
        SPIRONOLACTONE, order("spironolactone", 50, since="2026-04-20"), *both("2026-04-10"), as_of="2026-04-24"
    )
    assert (found["status"], found["window_opens"], found["due_by"]) == ("due", "2026-04-23", "2026-04-27")


def test_a_decrease_leaves_the_clock_where_it_was():
    lower = order("spironolactone", 12.5, since="2026-03-20")
    answer = assessed(*HEART, SPIRONOLACTONE, lower, *both("2026-03-09"), as_of="2026-03-23")
    assert (due(answer)["status"], due(answer)["due_by"]) == ("due", "2026-04-06")


def test_a_decrease_after_an_increase_counts_from_the_increase():
    steps = [
        SPIRONOLACTONE,
        order("spironolactone", 50, since="2026-05-04"),
        order("spironolactone", 25, since="2026-05-20"),
    ]
    assert asked(*steps, *both("2026-04-10"), as_of="2026-05-22")["due_by"] == "2026-05-11"


def test_the_same_daily_dose_at_other_times_of_day_is_no_change():
    twice = order("spironolactone", 12.5, 2, since="2026-04-20")
    answer = assessed(*HEART, SPIRONOLACTONE, twice, *both("2026-03-23"), as_of="2026-04-27")
    assert said(answer, CHECK) == "met"
    assert due(answer)["due_by"] == "2026-09-21"


@pytest.mark.parametrize(
    ("before", "after"), [("lisinopril", "ramipril"), ("ramipril", "candesartan"), ("losartan", "sacubitril/valsartan")]
)
def test_another_drug_of_the_pillar_is_a_start(before, after):
    old = until(order(before, 10, since="2025-06-02"), "2026-03-01")
    new = order(after, 10, 1, since="2026-03-02")
    answer = assessed(*HEART, old, new, *both("2026-02-20"), as_of="2026-03-10")
    # ESC practical guidance: 1 to 2 weeks after the start
    assert said(answer, CHECK, after) == "open/test"
    assert due(answer, after)["due_by"] == "2026-03-16"


def test_a_later_order_of_the_same_dose_is_no_start():
    renewed = order("spironolactone", 25, since="2026-06-01")
    answer = assessed(*HEART, SPIRONOLACTONE, renewed, *both("2026-03-23"), as_of="2026-06-08")
    assert said(answer, CHECK) == "met"


def test_on_hold_nothing_falls_due():
    held = order("spironolactone", 25, since="2026-03-02", status="on-hold")
    answer = assessed(*HEART, held, as_of="2026-03-20")
    assert said(answer, CHECK) == "not-applicable"
    assert finding(answer, CHECK)["because"] == "Spironolactone is on hold: nothing falls due."


def resumed(off, on):
    held = {**SPIRONOLACTONE, "status": "on-hold", "meta": {"lastUpdated": f"{off}T08:00:00Z"}}
    return [held, order("spironolactone", 25, since=on), *both("2026-03-23")]


def test_resumed_after_a_week_or_more_the_series_starts_again():
    assert asked(*resumed("2026-05-04", "2026-05-11"), as_of="2026-05-15")["due_by"] == "2026-05-18"


def test_resumed_within_a_week_the_clock_went_on():
    assert said(assessed(*HEART, *resumed("2026-05-04", "2026-05-10"), as_of="2026-05-15"), CHECK) == "met"


INACTIVE = [
    {"status": "draft"},
    {"status": "cancelled"},
    {"status": "entered-in-error"},
    {"doNotPerform": True},
    {"intent": "proposal"},
    {"intent": "plan"},
    {"intent": "option"},
]


@pytest.mark.parametrize("inactive", INACTIVE, ids=str)
def test_an_order_that_gives_no_therapy_asks_for_no_check(inactive):
    answer = assessed(*HEART, {**SPIRONOLACTONE, **inactive}, as_of="2026-03-13")
    assert said(answer, CHECK) == "not-applicable"


@pytest.mark.parametrize("status", ["stopped", "completed"])
def test_an_order_that_ended_asks_for_no_check(status):
    answer = assessed(*HEART, until(SPIRONOLACTONE, "2026-03-06", status), as_of="2026-03-13")
    assert said(answer, CHECK) == "not-applicable"


@pytest.mark.parametrize("status", ["final", "amended", "corrected"])
def test_a_final_or_corrected_result_satisfies(status):
    answer = assessed(*HEART, SPIRONOLACTONE, *both("2026-03-06", status=status), as_of="2026-03-10")
    assert said(answer, CHECK) == "met"


@pytest.mark.parametrize("status", ["preliminary", "registered", "cancelled", "entered-in-error"])
def test_a_result_that_is_not_final_does_not_satisfy(status):
    answer = assessed(*HEART, SPIRONOLACTONE, *both("2026-03-06", status=status), as_of="2026-03-10")
    assert said(answer, CHECK) == "open/test"


def test_a_result_that_no_living_patient_has_does_not_satisfy():
    drawn = [potassium(46, "2026-03-06"), creatinine(1.1, "2026-03-06")]
    assert asked(SPIRONOLACTONE, *drawn, as_of="2026-03-10")["tests"] == ["potassium"]


def test_results_of_an_admission_count():
    stay = admission("2026-03-05", "2026-03-09")
    drawn = both("2026-03-06", encounter={"reference": f"Encounter/{stay['id']}"})
    assert said(assessed(*HEART, SPIRONOLACTONE, stay, *drawn, as_of="2026-03-10"), CHECK) == "met"


def test_one_draw_satisfies_the_checks_of_two_drugs():
    answer = assessed(
        *HEART, SPIRONOLACTONE, order("ramipril", 2.5, since="2026-03-02"), *both("2026-03-09"), as_of="2026-03-20"
    )
    assert [said(answer, CHECK, drug) for drug in ("spironolactone", "ramipril")] == ["met", "met"]


def test_two_drugs_that_want_the_same_tests_share_one_card_the_earliest_due_first():
    answer = assessed(*HEART, order("ramipril", 2.5, since="2026-03-02"), SPIRONOLACTONE, as_of="2026-03-20")
    assert [said(answer, CHECK, drug) for drug in ("spironolactone", "ramipril")] == ["open/test", "open/test"]
    shared = spoken(answer, CHECK)
    assert (shared["about"], shared["due"]["due_by"]) == ("spironolactone", "2026-03-09")
    assert [d["code"]["text"] for d in shared["drafts"]] == ["potassium", "creatinine"]


def test_a_start_known_to_the_month_gives_the_days_overdue_as_a_range():
    # week 4 of a start on 1 or on 31 March 2026 was due by 5 April or by 5 May
    found = asked(order("spironolactone", 25, since="2026-03"), as_of="2026-05-20")
    assert (found["status"], found["days_overdue"]) == ("overdue", {"at_least": 15, "at_most": 45})


def test_a_start_known_to_the_month_leaves_open_what_depends_on_the_day():
    answer = assessed(*HEART, order("spironolactone", 25, since="2026-03"), as_of="2026-03-20")
    assert said(answer, CHECK) == "unknown"


def test_a_start_without_a_date_is_unknown_and_asks_for_it():
    answer = assessed(*HEART, order("spironolactone", 25, since=None), as_of="2026-03-20")
    assert said(answer, CHECK) == "unknown"
    assert "date of the start" in finding(answer, CHECK)["missing"][0]


SUPPRESSED = [
    (problem("haemodialysis", "2025-01-10", code=icd("Z99.2", "Dependence on renal dialysis")), "on dialysis"),
    (problem("hospice care", "2026-02-01"), "Hospice or comfort care"),
]


@pytest.mark.parametrize(("reason", "words"), SUPPRESSED, ids=[row[1] for row in SUPPRESSED])
def test_on_dialysis_or_in_hospice_the_schedule_is_silent_and_says_why(reason, words):
    answer = assessed(*HEART, SPIRONOLACTONE, reason, as_of="2026-03-13")
    assert said(answer, CHECK) == "not-applicable"
    assert words in finding(answer, CHECK)["because"]


def test_after_death_nothing_is_due():
    died = patient(born="1961-08-08", deceasedDateTime="2026-03-10")
    answer = assessed(died, *HEART[1:], SPIRONOLACTONE, as_of="2026-03-13")
    assert said(answer, CHECK) == "not-applicable"
    assert answer["cards"] == []


def test_a_first_dose_at_half_past_one_utc_was_taken_the_day_before_in_new_york():
    taken = [SPIRONOLACTONE, administration("spironolactone", "2026-03-02T01:30:00Z")]
    taken[0] = order("spironolactone", 25, since="2026-03-01")
    assert asked(*taken, as_of="2026-03-06")["due_by"] == "2026-03-09"
    assert asked(*taken, as_of="2026-03-06", zone=NEW_YORK)["due_by"] == "2026-03-08"


def test_blood_drawn_late_in_the_evening_counts_for_its_local_day():
    # 5 March 02:30 UTC is still 4 March in New York, day 2
    drawn = both("2026-03-05T02:30:00Z")
    assert said(assessed(*HEART, SPIRONOLACTONE, *drawn, as_of="2026-03-08"), CHECK) == "met"
    assert said(assessed(*HEART, SPIRONOLACTONE, *drawn, as_of="2026-03-08", zone=NEW_YORK), CHECK) == "open/test"


def test_a_panel_already_ordered_keeps_the_check_open_and_drafts_no_second_order():
    ordered = test_order("24321-2", "2026-03-05", display="Basic metabolic panel")
    answer = assessed(*HEART, SPIRONOLACTONE, ordered, as_of="2026-03-08")
    assert said(answer, CHECK) == "open/test"
    assert due(answer)["already_ordered"] == "ServiceRequest/order-24321-2-2026-03-05"
    shown = spoken(answer, CHECK)
    assert (shown["tier"], shown["drafts"]) == ("note", [])


def test_potassium_and_creatinine_ordered_one_by_one_are_ordered():
    ordered = [
        test_order("2823-3", "2026-03-05", display="Potassium"),
        test_order("2160-0", "2026-03-05", display="Creatinine"),
    ]
    answer = assessed(*HEART, SPIRONOLACTONE, *ordered, as_of="2026-03-08")
    assert due(answer)["already_ordered"] in {
        "ServiceRequest/order-2823-3-2026-03-05",
        "ServiceRequest/order-2160-0-2026-03-05",
    }
    assert spoken(answer, CHECK)["drafts"] == []


def test_potassium_ordered_alone_does_not_order_the_creatinine():
    ordered = test_order("2823-3", "2026-03-05", display="Potassium")
    answer = assessed(*HEART, SPIRONOLACTONE, ordered, as_of="2026-03-08")
    assert due(answer)["already_ordered"] is None
    assert "creatinine" in {d["code"]["text"] for d in spoken(answer, CHECK)["drafts"]}


@pytest.mark.parametrize(
    "inactive", [{"status": "revoked"}, {"status": "completed"}, {"intent": "plan"}, {"doNotPerform": True}], ids=str
)
def test_a_test_order_that_is_not_running_orders_nothing(inactive):
    ordered = test_order("24321-2", "2026-03-05", display="Basic metabolic panel", **inactive)
    assert asked(SPIRONOLACTONE, ordered, as_of="2026-03-08")["already_ordered"] is None


def test_a_test_order_answered_by_a_result_does_not_order_the_next_check():
    ordered = test_order("24321-2", "2026-03-05", display="Basic metabolic panel")
    found = asked(SPIRONOLACTONE, ordered, *both("2026-03-06"), as_of="2026-03-25")
    assert (found["due_by"], found["already_ordered"]) == ("2026-04-06", None)


def test_an_overdue_check_that_is_ordered_stays_as_urgent_as_before():
    ordered = test_order("24321-2", "2026-03-05", display="Basic metabolic panel")
    answer = assessed(*HEART, SPIRONOLACTONE, ordered, as_of="2026-03-13")
    assert (due(answer)["status"], spoken(answer, CHECK)["tier"]) == ("overdue", "act")
