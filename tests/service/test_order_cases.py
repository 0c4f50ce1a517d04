"""The order check cases over HTTP, with the replies of a patient in play: cards, then answered, and dangers again."""

from __future__ import annotations

import json
from datetime import datetime, timedelta
from typing import Any

import pytest
from builders import bundle, lvef, named, order, patient, problem, until, visit
from in_process import Client, parts

TODAY = "2025-09-15T12:00:00Z"
NOW = datetime.fromisoformat(TODAY)
ENALAPRIL = order("enalapril", 10, 2, since="2025-03-01")
BISOPROLOL = order("bisoprolol", 10, since="2025-03-01")
SPIRONOLACTONE = order("spironolactone", 25, since="2025-03-01")
DAPAGLIFLOZIN = order("dapagliflozin", 10, since="2025-03-01")
THREE = (ENALAPRIL, BISOPROLOL, DAPAGLIFLOZIN)
FOUR = (*THREE, SPIRONOLACTONE)
ARNI = order("sacubitril/valsartan", 50, 2, since=TODAY, status="draft")


def draft(drug: str, dose_mg: float, times_per_day: int = 1) -> dict[str, Any]:
    return order(drug, dose_mg, times_per_day, since="2025-09-15", status="draft")


def draft_by_name(drug: str, dose_mg: float, times_per_day: int = 1) -> dict[str, Any]:
    return named(drug, dose_mg, times_per_day, since="2025-09-15", status="draft")


def chart(*more: dict[str, Any], k: float = 4.4, failing: bool = True) -> bytes:
    """A man of 58 with good values, in NYHA class II where his heart is failing."""
    heart = (problem("heart failure", "2024-05-01"), lvef(30, "2025-06-01")) if failing else ()
    values = visit("2025-09-12", bp=(124, 76), pulse=72, k=k, crea=1.0, nyha_class=2 if failing else None, kg=80)
    return bundle(patient(born="1967-05-04"), *heart, *values, *more)


# Medicine and sources of each case: tests/vignettes/test_order_check.py.
CASES = {
    "NSAID": (chart(*FOUR, draft("ibuprofen", 400, 3)), ["act stop-harmful-drug"]),
    "verapamil": (chart(ENALAPRIL, draft("verapamil", 80, 3)), ["act stop-harmful-drug"]),
    "second RAS inhibitor": (
        chart(ENALAPRIL, BISOPROLOL, draft("losartan", 50)),
        ["act interaction", "plan order-tests"],
    ),
    "ARNI 22 h after": (chart(until(ENALAPRIL, "2025-09-14T14:00:00Z"), BISOPROLOL, ARNI), ["danger interaction"]),
    "ARNI 36 h after": (chart(until(ENALAPRIL, "2025-09-14T00:00:00Z"), BISOPROLOL, ARNI), ["plan order-tests"]),
    "ARNI 40 h after": (chart(until(ENALAPRIL, "2025-09-13T20:00:00Z"), BISOPROLOL, ARNI), ["plan order-tests"]),
    "MRA at 5.0": (chart(*THREE, draft("spironolactone", 25), k=5.0), ["note order-limits"]),
    "MRA at 5.1": (chart(*THREE, draft("spironolactone", 25), k=5.1), ["act order-limits"]),
    "metoprolol tartrate": (
        chart(ENALAPRIL, SPIRONOLACTONE, DAPAGLIFLOZIN, draft("metoprolol tartrate", 50, 2)),
        ["plan start-beta-blocker"],
    ),
    "start dose above the table": (chart(ENALAPRIL, draft("bisoprolol", 5)), ["act order-dose"]),
    "the same twice": (chart(*FOUR, draft("bisoprolol", 10)), ["note order-duplicate"]),
    "trimethoprim under an MRA": (chart(*FOUR, draft_by_name("trimethoprim", 200, 2)), ["act interaction"]),
    "PDE5 inhibitor under a nitrate": (
        chart(*FOUR, named("isosorbide mononitrate", 30), draft_by_name("sildenafil", 20)),
        ["danger interaction"],
    ),
    "nothing to do with heart failure": (chart(*FOUR, draft_by_name("amoxicillin", 500)), []),
    "no heart failure": (chart(draft("ibuprofen", 400, 3), failing=False), []),
}


@pytest.mark.parametrize(("data", "expected"), CASES.values(), ids=CASES)
def test_an_order_is_answered_then_held_back_while_its_replies_hold_and_its_dangers_return(store, data, expected):
    client = Client(parts(store=store, now=lambda: NOW))
    one = checked(client, data)
    assert rules(one) == expected
    assert one["verdict"] == ("cards" if expected else "clear")
    for card in one["cards"]:
        body = {"patient": "Patient/p1", "facts": card["facts"], "code": "declined", "reason": "disagrees"}
        path = f"/v1/cards/{card['card_id']}/replies"
        assert client.post(path, json.dumps(body).encode(), content_type="application/json").status_code == 201
    again = checked(client, data)
    assert (rules(again), again["verdict"]) == ([], "answered" if expected else "clear")
    assert again["closes"] == one["closes"]
    later = checked(Client(parts(store=store, now=lambda: NOW + timedelta(days=2))), data, "2025-09-17T12:00:00Z")
    assert [rule for rule in rules(later) if rule.startswith("danger")] == [
        rule for rule in expected if rule.startswith("danger")
    ]


def checked(client: Client, data: bytes, as_of: str = TODAY) -> dict[str, Any]:
    answer = client.post(f"/v1/order-checks?as_of={as_of}", data)
    assert answer.status_code == 200
    (check,) = answer.json["checks"]
    (one,) = check["orders"]
    return dict(one)


def rules(one: dict[str, Any]) -> list[str]:
    return [f"{card['tier']} {card['rule']}" for card in one["cards"]]
