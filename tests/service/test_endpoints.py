"""The endpoints as a host EHR's developer meets them; each answer is checked against the published document."""

from __future__ import annotations

import gzip
import json
from dataclasses import replace
from datetime import timedelta
from pathlib import Path

import orjson
import pytest
from builders import bundle, order, potassium
from in_process import CHART, DAY, DOCUMENT, NOW, Client, MemoryStore, Seen, parts

from cds.assessment import assess, check_orders, describe_records
from cds.content.load import load_content
from cds.errors import RequestError
from cds.fhir.reading import Limits

NEW_PATIENT = bundle(*CHART)
FIXTURES = Path(__file__).parent.parent.parent / "fixtures" / "patients"


@pytest.fixture
def client() -> Client:
    return Client(parts())


def test_an_assessment_is_what_the_command_line_gives(client):
    answer = client.post("/v1/assessments?as_of=2026-03-01", NEW_PATIENT)
    assert answer.status_code == 200
    from datetime import UTC

    from cds.fhir.dates import parse_as_of

    expected = assess(NEW_PATIENT, load_content(), as_of=parse_as_of("2026-03-01", UTC))
    assert answer.data == orjson.dumps(expected)


def test_a_record_and_an_order_check_come_from_the_same_path(client):
    drafted = bundle(*CHART, order("ibuprofen", 400, 3, since="2026-03-01", status="draft"))
    from datetime import UTC

    from cds.fhir.dates import parse_as_of

    as_of = parse_as_of("2026-03-01", UTC)
    record = client.post("/v1/records?as_of=2026-03-01", drafted)
    assert record.data == orjson.dumps(describe_records(drafted, load_content(), as_of=as_of))
    check = client.post("/v1/order-checks?as_of=2026-03-01", drafted)
    assert check.data == orjson.dumps(check_orders(drafted, load_content(), as_of=as_of))
    (only,) = check.json["checks"]
    assert [card["headline"].split(":")[0] for card in only["orders"][0]["cards"]] == ["Stop ibuprofen"]


@pytest.mark.parametrize("folder", sorted(FIXTURES.iterdir()), ids=lambda folder: folder.name)
def test_every_invented_patient_gets_an_answer_by_the_contract(client, folder):
    data = (folder / "bundle.json").read_bytes()
    for path in ("/v1/assessments?as_of=2026-03-01&trace=true", "/v1/records?as_of=2026-03-01", "/v1/order-checks"):
        assert client.post(path, data).status_code == 200


def test_a_body_may_come_compressed(client):
    answer = client.post("/v1/assessments", gzip.compress(NEW_PATIENT), headers={"Content-Encoding": "gzip"})
    assert answer.status_code == 200


def test_without_a_moment_the_present_one_counts(client):
    assert client.post("/v1/assessments", NEW_PATIENT).json["as_of"] == NOW.isoformat()


WRONG = """
    what                    | path                             | status
    a word for a date       | /v1/assessments?as_of=yesterday  | 400
    a month for a moment    | /v1/assessments?as_of=2026-03    | 400
    an unknown parameter    | /v1/assessments?asof=2026-03-01  | 400
    a word for a flag       | /v1/assessments?trace=maybe      | 400
    no such path            | /v2/assessments                  | 404
    no such rule            | /v1/rules/start-everything       | 405
"""


@pytest.mark.parametrize("line", WRONG.strip().splitlines()[1:])
def test_a_wrong_request_gets_a_problem_with_the_way_out(client, line):
    _, path, status = (cell.strip() for cell in line.split("|"))
    answer = client.post(path, NEW_PATIENT)
    assert answer.status_code == int(status)
    assert answer.mimetype == "application/problem+json"
    assert answer.json["fix"]


BODIES = [
    (b"", "application/fhir+json", 400, "empty"),
    (b"not json", "application/fhir+json", 400, "not JSON"),
    (b"[]", "application/json", 400, "not an object"),
    (b'{"resourceType":"Bundle","type":"collection","entry":[]}', "application/json", 422, "no patient"),
    (NEW_PATIENT, "text/plain", 415, "not JSON by its Content-Type"),
    (NEW_PATIENT, "application/xml", 415, "not JSON by its Content-Type"),
    (gzip.compress(b" " * (17 * 1024 * 1024)), "application/json", 413, "larger"),
    (b'{"resourceType":' + b"[" * 300 + b"]" * 300 + b"}", "application/json", 413, "levels"),
]


@pytest.mark.parametrize(("body", "content_type", "status", "said"), BODIES)
def test_a_body_that_cannot_be_read_says_why(client, body, content_type, status, said):
    answer = client.post("/v1/assessments", body, content_type=content_type)
    assert answer.status_code == status
    assert said in answer.json["detail"]


def test_a_body_longer_than_allowed_is_refused_before_it_is_read():
    client = Client(parts(limits=Limits(max_bytes=1000, max_entries=10)))
    answer = client.post("/v1/assessments", NEW_PATIENT)
    assert answer.status_code == 413


def test_an_unknown_encoding_is_refused(client):
    answer = client.post("/v1/assessments", NEW_PATIENT, headers={"Content-Encoding": "br"})
    assert answer.status_code == 415


def test_a_bundle_without_a_patient_gets_its_issues(client):
    answer = client.post("/v1/assessments", bundle(potassium(4.4, DAY)))
    assert answer.status_code == 422
    assert {issue["path"] for issue in answer.json["issues"]} >= {"entry"}


def test_a_method_that_is_not_there_names_those_that_are(client):
    answer = client.open("DELETE", "/v1/assessments")
    assert answer.status_code == 405
    assert "POST" in answer.headers["Allow"]


def test_every_answer_carries_its_request_id_and_the_security_headers(client):
    answer = client.post("/v1/assessments", NEW_PATIENT, headers={"X-Request-Id": "night-run-7"})
    assert answer.headers["X-Request-Id"] == "night-run-7"
    assert answer.headers["X-Content-Type-Options"] == "nosniff"
    assert answer.headers["Cache-Control"] == "no-store"
    hostile = client.post("/v1/assessments", NEW_PATIENT, headers={"X-Request-Id": "<script>"})
    assert hostile.headers["X-Request-Id"] != "<script>"


def test_an_error_of_the_program_shows_nothing_of_it():
    class Broken(MemoryStore):
        def replies_of(self, patient):
            raise KeyError("Patient/p1 has potassium 4.4")

    answer = Client(parts(store=Broken())).post("/v1/assessments", NEW_PATIENT)
    assert answer.status_code == 500
    assert "4.4" not in answer.text
    assert "KeyError" not in answer.text


LIMITED_PATHS = (
    ("POST", "/v1/assessments"),
    ("POST", "/v1/records"),
    ("POST", "/v1/order-checks"),
    ("POST", f"/v1/cards/{'0' * 24}/replies"),
    ("GET", "/v1/patients/p1/cards"),
    ("GET", "/v1/rules"),
    ("GET", "/v1/rules/start-mra"),
)


@pytest.mark.parametrize(("method", "path"), LIMITED_PATHS)
def test_too_many_requests_are_told_how_long_to_wait(method: str, path: str):
    client = Client(parts(wait=lambda _caller: 7.0))
    answer = client.post(path, NEW_PATIENT) if method == "POST" else client.get(path)
    assert (answer.status_code, answer.headers["Retry-After"]) == (429, "7")


def test_a_patient_may_be_named_instead_of_sent():
    asked = []

    def fetch(server, who, token):
        asked.append((server, who, token))
        return NEW_PATIENT, ("AllergyIntolerance",)

    client = Client(parts(fetch=fetch))
    body = {"fhir_server": "https://fhir.example/r4", "patient": "p1", "access_token": "secret"}
    answer = client.post("/v1/assessments", json.dumps(body).encode(), content_type="application/json")
    assert answer.status_code == 200
    assert asked == [("https://fhir.example/r4", "p1", "secret")]
    assert "AllergyIntolerance" in answer.json["issues"][0]["problem"]


def test_naming_a_patient_needs_a_service_that_fetches(client):
    body = json.dumps({"fhir_server": "https://fhir.example/r4", "patient": "p1"}).encode()
    assert client.post("/v1/assessments", body, content_type="application/json").status_code == 400


def test_the_watch_hears_numbers_only():
    seen = Seen()
    Client(parts(watch=seen)).post("/v1/assessments", NEW_PATIENT)
    ((endpoint, status, facts),) = seen.answers
    assert (endpoint, status, facts["patients"]) == ("/v1/assessments", 200, 1)
    assert "p1" not in repr(facts["cards"])


def test_a_service_without_its_store_is_not_ready():
    store = MemoryStore(ready=False)
    assert Client(parts(store=store)).get("/readyz").status_code == 503
    assert Client(parts()).get("/readyz").json["status"] == "ready"
    assert Client(parts(store=None)).get("/readyz").json["store"] == "none"


def test_the_catalogue_lists_every_rule_and_gives_each_alone(client):
    rules = client.get("/v1/rules").json["rules"]
    for rule in rules:
        assert client.get(f"/v1/rules/{rule['rule']}").json == rule
    assert client.get("/v1/rules/start-everything").status_code == 404


def test_the_document_is_served_whole(client):
    assert client.get("/openapi.json").json == DOCUMENT
    assert "schema.json" not in client.get("/openapi.json").text


def mra_card(client):
    (only,) = client.post("/v1/assessments?as_of=2026-03-01", NEW_PATIENT).json["assessments"]
    return next(card for card in only["cards"] if card["rule"] == "start-mra")


def reply(client, card, body, **more):
    data = json.dumps({"patient": "Patient/p1", "facts": card["facts"], **body}).encode()
    return client.post(f"/v1/cards/{card['card_id']}/replies", data, content_type="application/json", **more)


def test_a_declined_card_is_held_back_and_said_to_be(client):
    card = mra_card(client)
    answer = reply(client, card, {"code": "declined", "reason": "not-tolerated-before"})
    assert answer.status_code == 201
    (only,) = client.post("/v1/assessments?as_of=2026-03-01", NEW_PATIENT).json["assessments"]
    assert "start-mra" not in {c["rule"] for c in only["cards"]}
    (held,) = [item for item in only["held_back"] if item["card_id"] == card["card_id"]]
    assert (held["reason"], held["until"]) == ("answered", answer.json["held_until"])


def test_a_new_value_brings_the_card_back(client):
    card = mra_card(client)
    reply(client, card, {"code": "declined", "reason": "disagrees"})
    newer = bundle(*CHART, potassium(4.6, "2026-02-28"))
    (only,) = client.post("/v1/assessments?as_of=2026-03-01", newer).json["assessments"]
    assert card["card_id"] in {c["card_id"] for c in only["cards"]}


def test_later_holds_until_its_day_and_no_longer():
    store = MemoryStore()
    client = Client(parts(store=store))
    card = mra_card(client)
    reply(client, card, {"code": "later", "until": "2026-03-05"})
    for day, is_shown in ((5, False), (6, True)):
        later = Client(parts(store=store, now=lambda day=day: NOW + timedelta(days=day - 1)))
        (only,) = later.post("/v1/assessments", NEW_PATIENT).json["assessments"]
        assert (card["card_id"] in {c["card_id"] for c in only["cards"]}) is is_shown


def test_a_danger_can_be_answered_but_comes_back_the_day_after_next():
    chart = bundle(*CHART[:-1], potassium(6.7, DAY), order("spironolactone", 25, since="2025-09-01"))
    store = MemoryStore()
    client = Client(parts(store=store))
    (only,) = client.post("/v1/assessments", chart).json["assessments"]
    danger = next(card for card in only["cards"] if card["tier"] == "danger")
    assert reply(client, danger, {"code": "declined", "reason": "disagrees"}).json["held_until"] == "2026-03-02"
    after = Client(parts(store=store, now=lambda: NOW + timedelta(days=2)))
    (only,) = after.post("/v1/assessments", chart).json["assessments"]
    assert danger["card_id"] in {card["card_id"] for card in only["cards"]}


def test_the_cards_shown_for_a_patient_are_listed_with_their_answers(client):
    card = mra_card(client)
    reply(client, card, {"code": "accepted"})
    listed = client.get("/v1/patients/p1/cards").json["cards"]
    assert {c["rule"] for c in listed} >= {"start-mra", "start-beta-blocker"}
    (answered,) = [c for c in listed if c["card_id"] == card["card_id"]]
    assert [r["code"] for r in answered["replies"]] == ["accepted"]
    assert client.get("/v1/patients/nobody/cards").json["cards"] == []


def test_a_reply_sent_twice_with_one_key_is_kept_once(client):
    card = mra_card(client)
    for _ in range(2):
        answer = reply(
            client, card, {"code": "accepted"}, headers={"Idempotency-Key": "3f0e2f0a-5f0b-4c57-9a53-0a4d5a3f9a10"}
        )
        assert answer.json["reply_id"] == "3f0e2f0a-5f0b-4c57-9a53-0a4d5a3f9a10"
    (answered,) = [c for c in client.get("/v1/patients/p1/cards").json["cards"] if c["card_id"] == card["card_id"]]
    assert len(answered["replies"]) == 1


WRONG_REPLIES = [
    ({"code": "maybe"}, "code"),
    ({"code": "declined"}, "reason"),
    ({"code": "declined", "reason": "bored"}, "reason"),
    ({"code": "accepted", "reason": "disagrees"}, "reason"),
    ({"code": "declined", "reason": "other"}, "text"),
    ({"code": "accepted", "text": "x" * 501}, "text"),
    ({"code": "later"}, "until"),
    ({"code": "later", "until": "2026-02-28"}, "until"),
    ({"code": "later", "until": "soon"}, "until"),
    ({"code": "accepted", "until": "2026-04-01"}, "until"),
    ({"code": "accepted", "facts": "short"}, "facts"),
    ({"code": "accepted", "patient": 7}, "patient"),
    ({"code": "accepted", "patient": "Patient/../admin"}, "patient"),
    ({"code": "accepted", "mood": "good"}, "keys"),
]


@pytest.mark.parametrize(("body", "said"), WRONG_REPLIES)
def test_a_wrong_reply_names_the_key_and_keeps_nothing(body, said):
    store = MemoryStore()
    client = Client(parts(store=store))
    answer = reply(client, mra_card(client), body)
    assert answer.status_code == 400
    assert said in answer.json["detail"]
    assert store.replies == {}


def test_a_reply_to_a_card_nobody_was_shown_is_not_found(client):
    card = {"card_id": "0" * 24, "facts": "0" * 16}
    assert reply(client, card, {"code": "accepted"}).status_code == 404
    assert reply(client, {**card, "card_id": "..%2Fadmin"}, {"code": "accepted"}).status_code == 404


def test_a_service_without_a_store_keeps_no_replies():
    client = Client(parts(store=None))
    assert reply(client, {"card_id": "0" * 24, "facts": "0" * 16}, {"code": "accepted"}).status_code == 503


def test_who_may_not_is_told_so_before_the_body_is_read():
    class Closed:
        def admit(self, authorization, scope):
            raise RequestError(403, "the token lacks the scope", f"Ask for the scope {scope}")

    client = Client(parts(callers=Closed()))
    for method, path in (
        ("POST", "/v1/assessments"),
        ("POST", "/v1/records"),
        ("POST", "/v1/order-checks"),
        ("POST", f"/v1/cards/{'0' * 24}/replies"),
        ("GET", "/v1/patients/p1/cards"),
        ("GET", "/v1/rules"),
        ("GET", "/v1/rules/start-mra"),
        ("GET", "/metrics"),
    ):
        assert client.open(method, path, data=b"not json", content_type="application/json").status_code == 403


def test_a_rule_a_site_switched_off_answers_nothing_and_is_named():
    content = replace(load_content(), rules_off=frozenset({"start-mra"}))
    answer = Client(parts(content=content)).post("/v1/assessments?trace=true", NEW_PATIENT).json
    assert answer["content"]["rules_off"] == ["start-mra"]
    (only,) = answer["assessments"]
    assert "start-mra" not in {item["rule"] for item in (*only["cards"], *only["findings"])}
