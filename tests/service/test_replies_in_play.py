"""Order checks and assessments with the real store: what was answered yesterday is in play today."""

from __future__ import annotations

import json
import uuid
from datetime import timedelta
from pathlib import Path

import pytest
from builders import bundle, order
from in_process import CHART, NOW, Client, parts

TREATED = (
    *CHART,
    order("sacubitril/valsartan", 200, 2, since="2025-09-01"),
    order("bisoprolol", 10, since="2025-09-01"),
)
FIXTURES = Path(__file__).parent.parent.parent / "fixtures" / "patients"
ORDERS = sorted(path.parent for path in FIXTURES.glob("order-*/bundle.json"))


def answer(client: Client, card: dict, **body: str):
    data = json.dumps({"patient": "Patient/p1", "facts": card["facts"], **body}).encode()
    response = client.post(f"/v1/cards/{card['card_id']}/replies", data, content_type="application/json")
    assert response.status_code == 201
    return response.json


def cards_of(client: Client, *more: dict) -> list[dict]:
    (only,) = client.post("/v1/assessments", bundle(*TREATED, *more)).json["assessments"]
    return only["cards"]


def test_a_card_declined_in_one_worker_is_held_back_by_another(store):
    card = next(card for card in cards_of(Client(parts(store=store))) if card["rule"] == "start-mra")
    answer(Client(parts(store=store)), card, code="declined", reason="patient-declines")
    assert "start-mra" not in {card["rule"] for card in cards_of(Client(parts(store=store)))}


def test_an_order_check_shows_its_danger_again_after_a_day_though_it_was_answered(store):
    written = order("enalapril", 5, 2, since="2026-03-01", status="draft")
    client = Client(parts(store=store))

    def dangers(asking: Client) -> list[dict]:
        (check,) = asking.post("/v1/order-checks", bundle(*TREATED, written)).json["checks"]
        return [card for o in check["orders"] for card in o["cards"] if card["tier"] == "danger"]

    (danger,) = dangers(client)
    assert "enalapril" in danger["headline"]
    answer(client, danger, code="declined", reason="disagrees")
    assert dangers(client) == []
    (again,) = dangers(Client(parts(store=store, now=lambda: NOW + timedelta(days=2))))
    assert again["card_id"] == danger["card_id"]


def test_replies_of_one_patient_hold_back_no_card_of_another(store):
    card = next(card for card in cards_of(Client(parts(store=store))) if card["rule"] == "start-mra")
    answer(Client(parts(store=store)), card, code="declined", reason="disagrees")
    other = json.loads(bundle(*TREATED).decode().replace('"p1"', '"p2"').replace("Patient/p1", "Patient/p2"))
    (only,) = Client(parts(store=store)).post("/v1/assessments", json.dumps(other).encode()).json["assessments"]
    assert "start-mra" in {card["rule"] for card in only["cards"]}


def test_the_same_key_with_another_answer_is_refused(store):
    client = Client(parts(store=store))
    card = next(card for card in cards_of(client) if card["rule"] == "start-mra")
    key = str(uuid.uuid4())
    for body, status in (({"code": "accepted"}, 201), ({"code": "done-elsewhere"}, 409)):
        data = json.dumps({"patient": "Patient/p1", "facts": card["facts"], **body}).encode()
        response = client.post(
            f"/v1/cards/{card['card_id']}/replies",
            data,
            content_type="application/json",
            headers={"Idempotency-Key": key},
        )
        assert response.status_code == status


@pytest.mark.parametrize("folder", ORDERS, ids=lambda folder: folder.name)
def test_an_order_whose_cards_were_all_answered_is_not_called_clear(store, folder):
    data = (folder / "bundle.json").read_bytes()
    client = Client(parts(store=store))
    path = "/v1/order-checks?as_of=2026-03-01"
    (before,) = client.post(path, data).json["checks"]
    for order_ in before["orders"]:
        for card in order_["cards"]:
            answer(client, card, code="declined", reason="disagrees", patient=before["patient"])
    (after,) = client.post(path, data).json["checks"]
    for first, then in zip(before["orders"], after["orders"], strict=True):
        assert then["cards"] == []
        assert then["verdict"] == ("answered" if first["cards"] else first["verdict"])
        assert (then["drugs"], then["closes"]) == (first["drugs"], first["closes"])
    held = {item["card_id"] for item in after["held_back"]}
    assert held >= {card["card_id"] for one in before["orders"] for card in one["cards"]}
