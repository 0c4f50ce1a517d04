"""Replies and shown cards come back as they were given, on both databases."""

from __future__ import annotations

from collections.abc import Callable
from datetime import UTC, date, datetime, timedelta, timezone
from typing import Any

import pytest

from cds.cards.replies import Reply
from cds.store import NotedCard, PurgeCount, ReplyIdError, ReplyIdTakenError, ShownCard, Store

ONE, OTHER = "Patient/one", "Patient/other"
ID = "5b0a4a0e-6d0c-4f0b-9d9a-3f1f3b7d2a10"


def answer(**changes: Any) -> Reply:
    given: dict[str, Any] = {
        "card_id": "c1",
        "rule": "start-mra",
        "about": "mra",
        "code": "declined",
        "reason": "patient-declines",
        "facts": "0123456789abcdef",
        "made_at": datetime(2026, 3, 1, 9, 30, 15, 123456, tzinfo=UTC),
    }
    return Reply(**{**given, **changes})


def card(**changes: Any) -> ShownCard:
    given = {"card_id": "c1", "rule": "start-mra", "about": "mra", "tier": "act", "facts": "aaaa"}
    return ShownCard(**{**given, **changes})


def test_a_reply_comes_back_as_it_was_given(store: Store):
    full = answer(code="later", reason="other", text="après la visite 'au' lit; \x1f ok", until=date(2026, 4, 1))
    bare = answer(card_id="c2", about=None, reason=None, made_at=datetime(2026, 3, 2, tzinfo=UTC))
    store.add_reply(ONE, full, made_by="Practitioner/7")
    store.add_reply(ONE, bare)
    assert store.replies_of(ONE) == (full, bare)


def test_an_instant_given_in_another_zone_is_the_same_instant(store: Store):
    made_at = datetime(2026, 3, 1, 0, 30, tzinfo=timezone(timedelta(hours=9)))
    store.add_reply(ONE, answer(made_at=made_at))
    (kept,) = store.replies_of(ONE)
    assert kept.made_at == made_at
    assert kept.made_at.utcoffset() == timedelta(0)


def test_an_instant_without_a_zone_is_refused(store: Store):
    with pytest.raises(ValueError, match="zone"):
        store.add_reply(ONE, answer(made_at=datetime(2026, 3, 1)))  # noqa: DTZ001 (meant)


def test_replies_come_oldest_first_and_those_of_one_instant_as_they_came(store: Store):
    first_of_two, second_of_two = answer(code="accepted", reason=None), answer(code="declined")
    oldest = answer(made_at=datetime(2026, 2, 1, tzinfo=UTC))
    for reply in (first_of_two, second_of_two, oldest):
        store.add_reply(ONE, reply)
    assert store.replies_of(ONE) == (oldest, first_of_two, second_of_two)


def test_nobody_sees_the_replies_and_cards_of_another_patient(store: Store):
    store.add_reply(ONE, answer())
    store.note_shown(ONE, [card()], date(2026, 3, 1))
    assert store.replies_of(OTHER) == ()
    assert store.shown_to(OTHER) == ()


def test_a_call_repeated_with_its_id_is_kept_once(store: Store):
    first = store.add_reply(ONE, answer(), reply_id=ID)
    again = store.add_reply(ONE, answer(made_at=datetime(2026, 3, 1, 9, 31, tzinfo=UTC)), reply_id=ID.upper())
    assert first == again == ID
    assert store.replies_of(ONE) == (answer(),)


@pytest.mark.parametrize(
    ("patient", "changes"),
    [
        (OTHER, {}),
        (ONE, {"card_id": "c2"}),
        (ONE, {"code": "accepted"}),
        (ONE, {"reason": "disagrees"}),
        (ONE, {"text": "more"}),
        (ONE, {"until": date(2026, 5, 1)}),
    ],
)
def test_an_id_used_for_something_else_is_refused_rather_than_swallowed(
    store: Store, patient: str, changes: dict[str, Any]
):
    store.add_reply(ONE, answer(), reply_id=ID)
    with pytest.raises(ReplyIdTakenError) as refusal:
        store.add_reply(patient, answer(**changes), reply_id=ID)
    assert refusal.value.http_status == 409
    assert ONE not in str(refusal.value)
    assert store.replies_of(ONE) == (answer(),)
    assert store.replies_of(OTHER) == ()


def test_an_id_that_is_no_uuid_is_refused_and_not_repeated(store: Store):
    with pytest.raises(ReplyIdError) as refusal:
        store.add_reply(ONE, answer(), reply_id="Patient/one:1")
    assert "Patient" not in str(refusal.value)
    assert store.replies_of(ONE) == ()


def test_a_card_shown_on_several_days_has_a_first_and_a_last_day(store: Store):
    for day in (date(2026, 3, 5), date(2026, 3, 9), date(2026, 3, 7)):
        store.note_shown(ONE, [card()], day)
    assert store.shown_to(ONE) == (noted(card(), first=5, last=9),)


def test_a_card_stands_as_it_was_on_its_last_day(store: Store):
    store.note_shown(ONE, [card(tier="plan", facts="aaaa")], date(2026, 3, 5))
    store.note_shown(ONE, [card(tier="danger", facts="bbbb")], date(2026, 3, 5))
    store.note_shown(ONE, [card(tier="note", facts="cccc")], date(2026, 3, 4))
    assert store.shown_to(ONE) == (noted(card(tier="danger", facts="bbbb"), first=4, last=5),)


def test_a_card_named_twice_at_once_is_noted_once(store: Store):
    store.note_shown(ONE, [card(), card(facts="bbbb"), card(card_id="c0", about=None)], date(2026, 3, 5))
    assert store.shown_to(ONE) == (
        noted(card(card_id="c0", about=None), first=5, last=5),
        noted(card(facts="bbbb"), first=5, last=5),
    )


def test_no_cards_shown_is_fine(store: Store):
    store.note_shown(ONE, [], date(2026, 3, 5))
    assert store.shown_to(ONE) == ()


def test_one_card_id_under_two_patients_is_two_cards(store: Store):
    store.note_shown(ONE, [card()], date(2026, 3, 5))
    store.note_shown(OTHER, [card(tier="note")], date(2026, 3, 6))
    assert store.shown_to(ONE) == (noted(card(), first=5, last=5),)
    assert store.shown_to(OTHER) == (noted(card(tier="note"), first=6, last=6),)


def test_a_purge_takes_what_is_older_than_the_day_and_leaves_the_day_itself(store: Store):
    midnight = datetime(2026, 3, 10, tzinfo=UTC)
    kept = answer(made_at=midnight)
    store.add_reply(ONE, kept)
    store.add_reply(ONE, answer(code="later", until=date(2026, 9, 1), made_at=midnight - timedelta(microseconds=1)))
    store.note_shown(ONE, [card(card_id="c1"), card(card_id="c2")], date(2026, 3, 9))
    store.note_shown(ONE, [card(card_id="c1")], date(2026, 3, 10))
    assert store.purge(date(2026, 3, 10)) == PurgeCount(replies=1, shown_cards=1)
    assert store.replies_of(ONE) == (kept,)
    assert store.shown_to(ONE) == (noted(card(card_id="c1"), first=9, last=10),)
    assert store.purge(date(2026, 3, 10)) == PurgeCount(replies=0, shown_cards=0)


def test_a_patient_who_is_forgotten_leaves_the_others(store: Store):
    for patient in (ONE, OTHER):
        store.add_reply(patient, answer())
        store.note_shown(patient, [card()], date(2026, 3, 9))
    assert store.forget(ONE) == PurgeCount(replies=1, shown_cards=1)
    assert (store.replies_of(ONE), store.shown_to(ONE)) == ((), ())
    assert store.replies_of(OTHER) == (answer(),)
    assert store.shown_to(OTHER) == (noted(card(), first=9, last=9),)


def test_replies_are_there_after_closing_and_opening_again(store: Store, opened: Callable[..., Store]):
    store.add_reply(ONE, answer())
    store.close()
    assert opened().replies_of(ONE) == (answer(),)


def noted(shown: ShownCard, *, first: int, last: int) -> NotedCard:
    return NotedCard(
        card_id=shown.card_id,
        rule=shown.rule,
        about=shown.about,
        tier=shown.tier,
        facts=shown.facts,
        first_shown_on=date(2026, 3, first),
        last_shown_on=date(2026, 3, last),
    )
