"""Orders under the pen: what an order brings, what it closes, and silence where there is nothing to say."""

from __future__ import annotations

from datetime import UTC
from zoneinfo import ZoneInfo

import orjson
import pytest
from asking import order_check_of
from builders import bundle, dosage, lvef, named, order, patient, problem, test_order, until, visit
from published import faults

from cds.assessment import check_orders
from cds.content.load import load_content
from cds.fhir.dates import parse_as_of

TODAY = "2025-09-15T12:00:00Z"
DAY = "2025-09-12"
NEW_YORK = ZoneInfo("America/New_York")

ENALAPRIL = order("enalapril", 10, 2, since="2025-03-01")
BISOPROLOL = order("bisoprolol", 10, since="2025-03-01")
SPIRONOLACTONE = order("spironolactone", 25, since="2025-03-01")
DAPAGLIFLOZIN = order("dapagliflozin", 10, since="2025-03-01")
FOUR = (ENALAPRIL, BISOPROLOL, SPIRONOLACTONE, DAPAGLIFLOZIN)


def failing(*more, k=4.4, percent=30):
    """A man of 58 in NYHA class II with good values."""
    return [
        patient(born="1967-05-04"),
        problem("heart failure", "2024-05-01"),
        lvef(percent, "2025-06-01"),
        *visit(DAY, bp=(124, 76), pulse=72, k=k, crea=1.0, nyha_class=2, kg=80),
        *more,
    ]


def draft(drug, dose_mg=None, times_per_day=1, **more):
    given = {"since": "2025-09-15", "status": "draft", **more}
    return order(drug, dose_mg, times_per_day, **given)


def draft_by_name(drug, dose_mg=None, times_per_day=1):
    return named(drug, dose_mg, times_per_day, since="2025-09-15", status="draft")


def first_dose(medication, when):
    """The draft with the instant of its first dose as `timing.event`."""
    line = medication["dosageInstruction"][0]
    return {**medication, "dosageInstruction": [{**line, "timing": {**line["timing"], "event": [when]}}]}


def checked(*more, k=4.4, percent=30, as_of=TODAY, zone=UTC):
    return order_check_of(*failing(*more, k=k, percent=percent), as_of=as_of, zone=zone)


def only_order(answer):
    (one,) = answer["orders"]
    return one


def rules(one):
    """The tier and rule of each card of an order, in their order."""
    return [f"{c['tier']} {c['rule']}" for c in one["cards"]]


def text_of(one):
    return " ".join(text for c in one["cards"] for text in (c["headline"], *c["because"]))


def drafted_tests(one):
    return {
        (d["code"]["text"], d["occurrencePeriod"]["start"], d["occurrencePeriod"]["end"])
        for c in one["cards"]
        for d in c["drafts"]
        if d["resourceType"] == "ServiceRequest"
    }


def drafted_drugs(one):
    return [
        d["medicationCodeableConcept"]["text"]
        for c in one["cards"]
        for d in c["drafts"]
        if d["resourceType"] == "MedicationRequest"
    ]


@pytest.mark.parametrize("percent", [30, 58])
def test_an_nsaid_in_heart_failure_is_one_card_with_all_its_reasons(percent):
    # 2022 AHA/ACC/HFSA guideline, section 7.3.7
    one = only_order(checked(*FOUR, draft("ibuprofen", 400, 3), percent=percent))
    assert (one["verdict"], rules(one)) == ("cards", ["act stop-harmful-drug"])
    assert "Enalapril + ibuprofen" in text_of(one)
    assert "Ibuprofen + spironolactone" in text_of(one)
    assert drafted_drugs(one) == []


def test_verapamil_is_stopped_in_reduced_ejection_fraction_and_left_alone_in_preserved():
    # 2022 AHA/ACC/HFSA guideline, section 7.3.7
    assert rules(only_order(checked(ENALAPRIL, draft("verapamil", 80, 3)))) == ["act stop-harmful-drug"]
    preserved = only_order(checked(ENALAPRIL, draft("verapamil", 80, 3), percent=58))
    assert (preserved["verdict"], preserved["cards"]) == ("clear", [])


def test_a_second_ras_inhibitor_is_a_danger_beside_an_mra_and_major_without():
    # 2013 ACCF/AHA guideline: the triple is harm
    with_mra = only_order(checked(*FOUR, draft("losartan", 50)))
    assert rules(with_mra)[0] == "danger interaction"
    without = only_order(checked(ENALAPRIL, BISOPROLOL, draft("losartan", 50)))
    assert rules(without)[0] == "act interaction"
    assert "The one to stop is losartan" in text_of(without)


# label of sacubitril/valsartan: 36 hours, in both directions
@pytest.mark.parametrize(
    ("last_dose", "hours", "meets"),
    [
        ("2025-09-14T14:00:00Z", 22, True),
        ("2025-09-14T00:01:00Z", 35, True),
        ("2025-09-14T00:00:00Z", 36, False),
        ("2025-09-13T20:00:00Z", 40, False),
    ],
)
@pytest.mark.parametrize(
    ("gone", "ordered"),
    [
        (ENALAPRIL, draft("sacubitril/valsartan", 50, 2, since=TODAY)),
        (order("sacubitril/valsartan", 100, 2, since="2025-03-01"), draft("enalapril", 2.5, 2, since=TODAY)),
    ],
    ids=["arni after ace inhibitor", "ace inhibitor after arni"],
)
def test_arni_and_ace_inhibitor_keep_36_hours_apart(last_dose, hours, meets, gone, ordered):
    one = only_order(checked(until(gone, last_dose), BISOPROLOL, ordered))
    assert ("danger interaction" in rules(one)) == meets
    assert ("washout ends" in text_of(one)) == meets


@pytest.mark.parametrize(
    "ordered",
    [draft("sacubitril/valsartan", 50, 2), draft("sacubitril/valsartan", 50, 2, since=None)],
    ids=["written today", "without a date"],
)
def test_an_order_without_a_time_is_taken_at_once(ordered):
    one = only_order(checked(until(ENALAPRIL, "2025-09-14T14:00:00Z"), ordered))
    assert "2025-09-16 02:00" in text_of(one)


# The enalapril of V02: last dose at 8 in the morning of 14 September
@pytest.mark.parametrize(
    ("planned", "meets"),
    [
        ("2025-09-15T09:00:00Z", True),
        ("2025-09-15T19:59:00Z", True),
        ("2025-09-15T20:00:00Z", False),
        ("2025-09-15T16:00:00-04:00", False),
        ("2025-09-15T15:59:00-04:00", True),
    ],
)
def test_the_first_dose_counts_and_not_the_moment_of_writing(planned, meets):
    arni = first_dose(draft("sacubitril/valsartan", 100, 2), planned)
    one = only_order(checked(until(ENALAPRIL, "2025-09-14T08:00:00Z"), arni, as_of="2025-09-15T08:30:00Z"))
    assert ("danger interaction" in rules(one)) == meets


@pytest.mark.parametrize(("start", "meets"), [("2025-09-15", True), ("2025-09-16T11:58:00Z", True)])
def test_an_end_known_to_the_day_is_the_last_minute_of_that_day(start, meets):
    # policy: 23:59 of the recorded day, so nothing before 11:59 two days later
    line = dosage(100, 2)
    bounded = {**line, "timing": {"repeat": {**line["timing"]["repeat"], "boundsPeriod": {"start": start}}}}
    arni = draft("sacubitril/valsartan", 100, 2, dosageInstruction=[bounded])
    one = only_order(checked(until(ENALAPRIL, "2025-09-14"), arni, as_of="2025-09-15T08:30:00Z"))
    assert ("danger interaction" in rules(one)) == meets
    assert "2025-09-16 11:59" in text_of(one)


def test_the_last_minute_of_a_day_is_that_of_the_zone_of_the_site():
    arni = first_dose(draft("sacubitril/valsartan", 100, 2), "2025-09-16T15:00:00Z")
    gone = until(ENALAPRIL, "2025-09-14")
    assert "danger interaction" not in rules(only_order(checked(gone, arni)))
    in_new_york = checked(gone, arni, as_of="2025-09-15T08:00:00-04:00", zone=NEW_YORK)
    assert "danger interaction" in rules(only_order(in_new_york))


@pytest.mark.parametrize(
    ("running", "ordered"),
    [
        (ENALAPRIL, draft("sacubitril/valsartan", 50, 2)),
        (order("sacubitril/valsartan", 100, 2, since="2025-03-01"), draft("lisinopril", 5)),
    ],
    ids=["arni", "ace inhibitor"],
)
def test_while_the_one_is_still_running_the_other_is_a_danger(running, ordered):
    assert rules(only_order(checked(running, BISOPROLOL, ordered)))[0] == "danger interaction"


# 2022 AHA/ACC/HFSA guideline, section 7.3.3: potassium below 5.0; label of spironolactone: up to 5.0
@pytest.mark.parametrize(
    ("k", "expected", "closes"),
    [
        (4.9, ["plan order-tests"], ["start-mra"]),
        (5.0, ["note order-limits"], ["start-mra"]),
        (5.1, ["act order-limits"], []),
    ],
)
def test_potassium_decides_on_an_order_of_spironolactone(k, expected, closes):
    one = only_order(checked(ENALAPRIL, BISOPROLOL, DAPAGLIFLOZIN, draft("spironolactone", 25), k=k))
    assert (rules(one), one["closes"]) == (expected, closes)
    assert f"potassium {k} mmol/L" in text_of(one) or k == 4.9


def test_metoprolol_tartrate_is_answered_with_the_better_agent():
    # 2022 AHA/ACC/HFSA guideline, section 7.3.2: bisoprolol, carvedilol or metoprolol succinate
    one = only_order(checked(ENALAPRIL, SPIRONOLACTONE, DAPAGLIFLOZIN, draft("metoprolol tartrate", 50, 2)))
    assert (rules(one), one["closes"]) == (["plan start-beta-blocker"], [])
    assert drafted_drugs(one) == ["metoprolol succinate", "bisoprolol", "carvedilol"]


def test_a_first_order_above_the_start_dose_is_answered_with_the_start_dose():
    # label of bisoprolol: 1.25 mg once daily
    one = only_order(checked(ENALAPRIL, draft("bisoprolol", 5)))
    assert rules(one) == ["act order-dose"]
    assert "5 mg a day is above the start dose of the table, 1.25 mg a day" in text_of(one)
    (proposal,) = [d for c in one["cards"] for d in c["drafts"]]
    assert proposal["dosageInstruction"][0]["text"] == "1.25 mg once daily"


@pytest.mark.parametrize("dose_mg", [2.5, 5])  # 2017 ACC/AHA/HFSA drug table: lisinopril starts at 2.5 to 5 mg
def test_a_start_dose_within_the_printed_range_is_right(dose_mg):
    assert "act order-dose" not in rules(only_order(checked(BISOPROLOL, draft("lisinopril", dose_mg))))


@pytest.mark.parametrize(
    ("ordered", "words"),
    [
        (draft("bisoprolol", 5), "more than one step; the next is 3.75 mg a day"),  # ladder of the bisoprolol label
        (draft("bisoprolol", 20), "above the highest dose of the table, 10 mg a day"),
    ],
    ids=["two steps", "above the highest dose"],
)
def test_a_raise_too_high_is_said(ordered, words):
    one = only_order(checked(ENALAPRIL, order("bisoprolol", 2.5, since="2025-03-01"), ordered))
    assert rules(one) == ["act order-dose"]
    assert words in text_of(one)


# 2017 ACC/AHA/HFSA drug table: two weeks between steps of a beta blocker
@pytest.mark.parametrize(("since", "verdict"), [("2025-09-01", "clear"), ("2025-09-02", "cards")])
def test_a_raise_is_too_early_until_14_days_after_the_last(since, verdict):
    one = only_order(checked(ENALAPRIL, order("bisoprolol", 2.5, since=since), draft("bisoprolol", 3.75)))
    assert one["verdict"] == verdict
    assert ("14 days between steps" in text_of(one)) == (verdict == "cards")


def test_a_raise_while_the_pulse_is_slow_is_said():
    # STRONG-HF safety indicator: heart rate below 55
    slow = visit("2025-09-14", bp=(124, 76), pulse=52)
    one = only_order(checked(ENALAPRIL, order("bisoprolol", 2.5, since="2025-03-01"), *slow, draft("bisoprolol", 3.75)))
    assert rules(one) == ["act order-limits"]
    assert "heart rate 52 /min" in text_of(one)


def test_the_same_order_twice_is_noted():
    one = only_order(checked(*FOUR, draft("bisoprolol", 10)))
    assert rules(one) == ["note order-duplicate"]


def test_a_lower_dose_of_a_running_drug_is_clear():
    assert only_order(checked(*FOUR, draft("bisoprolol", 7.5)))["cards"] == []


def test_trimethoprim_under_an_mra_comes_with_potassium_on_day_2_to_5():
    # label of spironolactone; the days are policy
    one = only_order(checked(*FOUR, draft_by_name("trimethoprim", 200, 2)))
    assert rules(one) == ["act interaction"]
    assert ("potassium", "2025-09-17", "2025-09-20") in drafted_tests(one)


@pytest.mark.parametrize("pde5", ["sildenafil", "tadalafil", "vardenafil"])
def test_a_pde5_inhibitor_under_a_nitrate_is_a_danger(pde5):
    # label of isosorbide dinitrate with hydralazine
    one = only_order(checked(*FOUR, named("isosorbide mononitrate", 30), draft_by_name(pde5, 20)))
    assert rules(one) == ["danger interaction"]


@pytest.mark.parametrize("other", ["amoxicillin", "omeprazole", "levothyroxine"])
def test_an_order_that_has_nothing_to_do_with_heart_failure_meets_silence(other):
    answer = checked(*FOUR, draft_by_name(other, 500))
    one = only_order(answer)
    assert (one["verdict"], one["cards"], one["closes"], one["drugs"]) == ("clear", [], [], [])
    assert "nothing about it was checked" in one["because"]
    assert answer["cards"] == []


UNREADABLE = {
    "the R5 form": {"medication": {"concept": {"text": "lisinopril 10 mg"}}, "medicationCodeableConcept": None},
    "a reference that leads nowhere": {
        "medicationReference": {"reference": "Medication/gone"},
        "medicationCodeableConcept": None,
    },
}


@pytest.mark.parametrize("shape", UNREADABLE.values(), ids=UNREADABLE)
def test_an_order_that_could_not_be_read_is_never_called_clear(shape):
    unread = {k: v for k, v in {**draft("lisinopril", 10), **shape}.items() if v is not None}
    one = only_order(checked(*FOUR, unread))
    assert (one["verdict"], one["cards"]) == ("not-checked", [])
    assert one["because"]


@pytest.mark.parametrize("who", [{"deceasedBoolean": True}, {"born": "2012-01-01"}], ids=["dead", "aged 13"])
def test_an_order_for_a_patient_no_rule_is_asked_about_is_never_called_clear(who):
    answer = order_check_of(
        patient(**who), problem("heart failure", "2025-01-15"), draft("spironolactone", 25), as_of=TODAY
    )
    assert only_order(answer)["verdict"] == "not-checked"


@pytest.mark.parametrize(("running", "drug"), [("dapagliflozin", "empagliflozin"), ("bisoprolol", "carvedilol")])
def test_a_second_drug_of_a_class_is_said_to_be_one(running, drug):
    one = only_order(checked(named(running, 10), draft(drug, 3.125)))
    assert "interaction" in {card["rule"] for card in one["cards"]}
    assert any("are on the list: end one" in " ".join(card["because"]) for card in one["cards"])


def test_an_order_that_pregnancy_forbids_brings_no_draft_of_a_lower_dose():
    one = only_order(checked(problem("pregnancy", "2025-08-01"), draft("lisinopril", 10)))
    assert "danger" in {card["tier"] for card in one["cards"]}
    assert not [d for card in one["cards"] for d in card["drafts"] if d["resourceType"] == "MedicationRequest"]


@pytest.mark.parametrize("drug", ["ibuprofen", "verapamil", "spironolactone"])
def test_without_heart_failure_every_order_is_clear(drug):
    answer = order_check_of(patient(), problem("hypertension", "2015-03-01"), draft(drug, 25), as_of=TODAY)
    assert (only_order(answer)["verdict"], only_order(answer)["cards"], answer["cards"]) == ("clear", [], [])


def test_the_tests_that_go_with_an_order_are_asked_for():
    # 2022 AHA/ACC/HFSA guideline, section 7.3.3: about one week after the start; from day 3 by policy
    one = only_order(checked(ENALAPRIL, BISOPROLOL, DAPAGLIFLOZIN, draft("spironolactone", 25)))
    assert drafted_tests(one) == {
        ("potassium", "2025-09-18", "2025-09-22"),
        ("creatinine", "2025-09-18", "2025-09-22"),
    }


def test_a_draft_that_orders_the_tests_already_leaves_nothing_to_say():
    tests = [test_order(code, "2025-09-15", status="draft") for code in ("2823-3", "2160-0")]
    one = only_order(checked(ENALAPRIL, BISOPROLOL, DAPAGLIFLOZIN, draft("spironolactone", 25), *tests))
    assert (one["verdict"], one["closes"], one["cards"]) == ("closes", ["start-mra"], [])


def test_a_draft_of_potassium_alone_does_not_order_the_creatinine():
    tests = [test_order("2823-3", "2025-09-15", status="draft")]
    one = only_order(checked(ENALAPRIL, BISOPROLOL, DAPAGLIFLOZIN, draft("spironolactone", 25), *tests))
    assert rules(one) == ["plan order-tests"]


@pytest.mark.parametrize(
    ("ordered", "running", "closes"),
    [
        (draft("dapagliflozin", 10), (ENALAPRIL, BISOPROLOL, SPIRONOLACTONE), "start-sglt2-inhibitor"),
        (draft("bisoprolol", 1.25), (ENALAPRIL, SPIRONOLACTONE, DAPAGLIFLOZIN), "start-beta-blocker"),
        (draft("carvedilol", 3.125, 2), (ENALAPRIL, SPIRONOLACTONE, DAPAGLIFLOZIN), "start-beta-blocker"),
    ],
    ids=["dapagliflozin", "bisoprolol", "carvedilol"],
)
def test_an_order_that_closes_a_gap_says_so(ordered, running, closes):
    one = only_order(checked(*running, ordered))
    assert (one["verdict"], one["closes"], one["cards"]) == ("closes", [closes], [])


def test_a_danger_of_another_drug_is_shown_beside_the_order_and_the_rest_held_back_with_the_reason():
    flecainide = named("flecainide", 100, 2)
    answer = checked(*FOUR, flecainide, draft("amlodipine", 5))
    assert only_order(answer)["verdict"] == "clear"
    assert [(c["tier"], c["about"]) for c in answer["cards"]] == [("danger", "flecainide")]
    held = {(item["rule"], item["about"], item["reason"]) for item in answer["held_back"]}
    assert ("switch-to-arni", "arni", "not-about-this-order") in held


def test_each_of_two_orders_has_its_own_verdict():
    answer = checked(ENALAPRIL, BISOPROLOL, SPIRONOLACTONE, draft("ibuprofen", 400), draft("dapagliflozin", 10))
    assert {one["order"]: one["verdict"] for one in answer["orders"]} == {
        "MedicationRequest/dapagliflozin-2025-09-15": "closes",
        "MedicationRequest/ibuprofen-2025-09-15": "cards",
    }


def test_two_orders_of_one_session_that_must_not_meet_are_both_answered():
    answer = checked(BISOPROLOL, draft("lisinopril", 5), draft("sacubitril/valsartan", 50, 2))
    assert [rules(one)[0] for one in answer["orders"]] == ["danger interaction", "danger interaction"]


def test_without_a_draft_nothing_is_checked():
    answer = checked(*FOUR)
    assert (answer["orders"], answer["cards"]) == ([], [])


@pytest.mark.parametrize(
    "more",
    [
        (draft("ibuprofen", 400, 3),),
        (draft("sacubitril/valsartan", 50, 2),),
        (draft("bisoprolol", 20),),
        (draft_by_name("amoxicillin", 500),),
        (named("flecainide", 100, 2), draft("carvedilol", 3.125, 2), draft_by_name("trimethoprim", 200, 2)),
        (),
    ],
    ids=["harm", "combination", "dose", "nothing to do with it", "three things", "no draft"],
)
def test_every_answer_is_valid_against_the_published_schema(more):
    whole = check_orders(bundle(*failing(*FOUR, *more)), load_content(), as_of=parse_as_of(TODAY, UTC))
    assert faults("order-check", orjson.loads(orjson.dumps(whole))) == []
