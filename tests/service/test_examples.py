"""Every example of the published document runs, and is answered by the contract."""

from __future__ import annotations

import json
from typing import Any

import pytest
from in_process import Client, parts

from cds.service.contract import Contract

DOCUMENT = Contract.load().document
READ_A_BUNDLE = ("/v1/assessments", "/v1/records", "/v1/order-checks")


def body_of(media_type: str) -> list[tuple[str, Any]]:
    content = DOCUMENT["components"]["requestBodies"]["Patients"]["content"][media_type]
    return [(name, example["value"]) for name, example in content["examples"].items()]


(NAME, BUNDLE), *_ = body_of("application/fhir+json")
AS_OF = DOCUMENT["components"]["parameters"]["as_of"]["example"]
REPLIES = DOCUMENT["paths"]["/v1/cards/{card_id}/replies"]["post"]["requestBody"]["content"]["application/json"][
    "examples"
]


def shown(client: Client) -> dict[str, Any]:
    answer = client.post(f"/v1/order-checks?as_of={AS_OF}", json.dumps(BUNDLE).encode())
    (check,) = answer.json["checks"]
    (order,) = check["orders"]
    return order["cards"][0]


@pytest.mark.parametrize("path", READ_A_BUNDLE)
@pytest.mark.parametrize(("name", "value"), body_of("application/fhir+json"), ids=lambda given: str(given)[:40])
def test_the_bundle_of_the_document_is_answered(path: str, name: str, value: Any):
    answer = Client(parts()).post(f"{path}?as_of={AS_OF}", json.dumps(value).encode())
    assert answer.status_code == 200
    assert answer.json["as_of"] == AS_OF
    assert [
        issue for one in answer.json.values() if isinstance(one, list) for issue in one if "severity" in issue
    ] == []


def test_the_order_of_the_document_gets_the_card_its_name_promises():
    assert shown(Client(parts()))["headline"].startswith("Stop ibuprofen")


@pytest.mark.parametrize("path", READ_A_BUNDLE)
@pytest.mark.parametrize(("name", "value"), body_of("application/json"), ids=lambda given: str(given)[:40])
def test_the_patient_named_in_the_document_is_fetched(path: str, name: str, value: Any):
    asked = []

    def fetch(*wanted: str | None) -> tuple[bytes, tuple[str, ...]]:
        asked.append(wanted)
        return json.dumps(BUNDLE).encode(), ()

    client = Client(parts(fetch=fetch))
    answer = client.post(f"{path}?as_of={AS_OF}", json.dumps(value).encode(), content_type="application/json")
    assert answer.status_code == 200
    assert asked == [tuple(value.values())]


@pytest.mark.parametrize("name", REPLIES)
def test_the_replies_of_the_document_are_kept(name: str):
    client = Client(parts())
    body = json.dumps(REPLIES[name]["value"]).encode()
    path = f"/v1/cards/{shown(client)['card_id']}/replies"
    assert client.post(path, body, content_type="application/json").status_code == 201


def test_the_rule_of_the_document_is_in_the_catalogue():
    (parameter,) = DOCUMENT["paths"]["/v1/rules/{rule}"]["get"]["parameters"]
    assert Client(parts()).get(f"/v1/rules/{parameter['example']}").status_code == 200


def test_no_example_of_the_document_is_left_out():
    found = json.dumps(DOCUMENT).count('"example": ') + json.dumps(DOCUMENT).count('"examples": ')
    assert found == 5  # as_of, the Bundle, by reference, the replies, the rule
