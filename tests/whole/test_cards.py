"""What a card promises its reader: a stable id, an order by urgency, its reasons, its cautions, and how to answer."""

from __future__ import annotations

from datetime import UTC, date
from functools import cache
from typing import Any

import orjson
import pytest
from asking import assessed, card
from builders import (
    Resource,
    bundle,
    creatinine,
    heart_rate,
    lvef,
    nyha,
    order,
    patient,
    potassium,
    pressure,
    problem,
    sodium,
    test_order,
)
from hypothesis import given
from random_patients import AS_OF, day, of_another_patient, patients, written_patients

from cds.assessment import assess
from cds.cards.card import FAMILIES, LONGEST_HEADLINE, TIERS
from cds.content.load import load_content
from cds.fhir.dates import parse_as_of

CONTENT = load_content()
NOTICE = CONTENT.wording.notice


@cache
def written_answers() -> tuple[dict[str, Any], ...]:
    found: list[dict[str, Any]] = []
    for data, when in written_patients().values():
        answer = assess(data, CONTENT, as_of=parse_as_of(when, UTC), trace=True)
        found += orjson.loads(orjson.dumps(answer))["assessments"]
    return tuple(found)


def answer_about(resources: list[Resource]) -> dict[str, Any]:
    (one,) = orjson.loads(orjson.dumps(assess(bundle(*resources), CONTENT, as_of=AS_OF, trace=True)))["assessments"]
    return dict(one)


def check_promises(answer: dict[str, Any]) -> None:
    """What holds for the cards of every patient."""
    cards = answer["cards"]
    places = [(TIERS.index(one["tier"]), FAMILIES.index(one["family"])) for one in cards]
    assert places == sorted(places), "the most urgent tier comes first, within it safety"
    ids = [one["card_id"] for one in cards] + [one["card_id"] for one in answer["held_back"]]
    assert len(set(ids)) == len(ids)
    for one in cards:
        assert 0 < len(one["headline"]) <= LONGEST_HEADLINE == 120
        assert "{" not in one["headline"]
        assert "  " not in one["headline"]
        assert one["because"]
        assert all(text.strip() for text in one["because"])
        assert one["evidence"], f"{one['rule']}: {one['headline']} rests on nothing"
        assert one["cautions"][-1] == NOTICE
        assert [reply["code"] for reply in one["replies"]] == ["accepted", "declined", "done-elsewhere", "later"]
        assert date.fromisoformat(one["expires_on"])
    shown = {one["card_id"] for one in cards}
    for item in answer["held_back"]:
        assert item["reason"] == "folded"
        assert item["into"] in shown
    open_ones = {(f["rule"], f["about"]) for f in answer["findings"] if f["outcome"] == "open"}
    listed = {(one["rule"], one["about"]) for one in (*cards, *answer["held_back"])}
    assert open_ones <= listed, "what is open is on a card, or held back by name"


def test_the_cards_of_the_written_patients_keep_their_promises():
    for answer in written_answers():
        check_promises(answer)


@given(resources=patients())
def test_the_cards_of_random_patients_keep_their_promises(resources):
    check_promises(answer_about(resources))


def test_the_notice_says_that_no_clinician_has_signed_the_content():
    assert "not clinically signed off" in NOTICE


def test_the_written_patients_have_cards_of_every_tier_but_those_of_an_order():
    cards = [one for answer in written_answers() for one in answer["cards"]]
    assert {one["tier"] for one in cards} == set(TIERS)
    assert {one["family"] for one in cards} == set(FAMILIES) - {"order"}


def test_a_card_with_a_graded_recommendation_shows_class_level_and_source():
    graded = [
        basis
        for answer in written_answers()
        for one in answer["cards"]
        for basis in one["basis"]
        if one["rule"].startswith("start-") and basis["recommendation"] is not None
    ]
    assert graded
    for basis in graded:
        assert basis["class_of_recommendation"]
        assert basis["level_of_evidence"]
        assert basis["title"]
        assert basis["locator"]


def test_every_therapy_and_safety_card_has_a_basis():
    for answer in written_answers():
        for one in answer["cards"]:
            if one["family"] in ("therapy-gap", "dose", "safety", "monitoring"):
                assert one["basis"], f"{answer['patient']}: {one['headline']}"


def on_spironolactone(*more: Resource, since: str = "2026-02-24") -> list[Resource]:
    return [
        patient(),
        problem("heart failure", "2024-01-15"),
        lvef(32, "2025-12-01"),
        nyha(2, "2026-02-20"),
        pressure(118, 70, "2026-02-20"),
        heart_rate(66, "2026-02-20"),
        potassium(4.4, "2026-02-20"),
        sodium(140, "2026-02-20"),
        creatinine(1.0, "2026-02-20"),
        order("spironolactone", 25, since=since),
        *more,
    ]


def ids(answer: dict[str, Any]) -> dict[tuple[str, str | None], str]:
    return {(one["rule"], one["about"]): one["card_id"] for one in answer["cards"]}


def test_a_card_keeps_its_id_on_another_day_and_with_a_new_potassium():
    first = ids(assessed(*on_spironolactone(), as_of="2026-03-01"))
    later = ids(assessed(*on_spironolactone(potassium(4.6, "2026-02-28")), as_of="2026-03-02"))
    common = set(first) & set(later)
    assert {rule for rule, _ in common} >= {"start-beta-blocker", "start-ras-inhibitor", "start-sglt2-inhibitor"}
    assert {key: first[key] for key in common} == {key: later[key] for key in common}


def test_the_same_card_of_another_patient_has_another_id():
    here = ids(assessed(*on_spironolactone(), as_of="2026-03-01"))
    there = ids(assessed(*of_another_patient(on_spironolactone(), "p2"), as_of="2026-03-01"))
    assert set(here) == set(there)
    assert set(here.values()).isdisjoint(there.values())


def test_a_new_order_behind_a_check_makes_a_new_card():
    first, second = (
        card(assessed(*on_spironolactone(since=since), as_of="2026-03-01"), "check-potassium-creatinine")["card_id"]
        for since in ("2026-02-23", "2026-02-24")
    )
    assert first != second


ORDERED = test_order("2823-3", "2026-02-25"), test_order("2160-0", "2026-02-25")


def test_a_check_that_is_ordered_already_is_a_note_until_it_is_overdue():
    """Ruling 20; after a start of spironolactone potassium and creatinine are wanted by day 7."""
    on_time, ordered = (
        card(assessed(*on_spironolactone(*more), as_of="2026-02-28"), "check-potassium-creatinine")
        for more in ((), ORDERED)
    )
    assert (on_time["tier"], on_time["due"]["already_ordered"]) == ("act", None)
    assert ordered["tier"] == "note"
    assert ordered["due"]["already_ordered"].startswith("ServiceRequest/")
    assert ordered["drafts"] == []
    late = card(assessed(*on_spironolactone(*ORDERED), as_of="2026-03-05"), "check-potassium-creatinine")
    assert late["due"]["status"] == "overdue-in-grace"
    assert late["tier"] == "act"


@pytest.mark.parametrize(
    "reason", ["not-tolerated-before", "contraindicated", "patient-declines", "wrong-data", "other"]
)
def test_a_refusal_can_name_its_reason(reason):
    one = assessed(*on_spironolactone(), as_of="2026-03-01")["cards"][0]
    (declined,) = [reply for reply in one["replies"] if reply["code"] == "declined"]
    assert reason in {item["code"] for item in declined["reasons"]}


def test_urgent_cards_expire_before_quiet_ones():
    shown = {
        one["tier"]: (date.fromisoformat(one["expires_on"]) - AS_OF.date()).days
        for answer in written_answers()
        for one in answer["cards"]
    }
    assert shown["danger"] < shown["act"] < shown["plan"]
    assert day(0) == "2026-03-01"
