"""A patient by reference: what is asked of a FHIR server, and what becomes of its answers."""

from __future__ import annotations

import logging
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import orjson
import pytest
from fhir_server_on_loopback import (
    PATIENT,
    TOKEN,
    FhirServer,
    as_json,
    fetch,
    fetched,
    observation,
    page,
    refusal,
    rules,
    searchset,
    status,
)

from cds.assessment import assess
from cds.content.load import load_content
from cds.fhir.bundle import USED_TYPES
from cds.service.fetch import Wanted

SEARCHED = USED_TYPES - {"Patient", "Medication"}


# What is fetched


def test_the_fetched_patient_gets_the_cards_of_the_same_patient_sent_by_value(server: FhirServer):
    sent = orjson.dumps(
        {"resourceType": "Bundle", "type": "collection", "entry": [{"resource": one} for one in server.resources]}
    )
    content, as_of = load_content(), datetime(2026, 3, 1, 12, tzinfo=UTC)
    by_value = assess(sent, content, as_of=as_of, trace=True)
    by_reference = assess(fetch(server).bundle, content, as_of=as_of, trace=True)
    assert by_reference == by_value
    assert by_reference["assessments"][0]["intake"]["read"] == len(server.resources)


def test_medications_that_orders_refer_to_come_with_the_orders(server: FhirServer):
    as_sent = assess_of(server)
    drugs = []
    for one in server.resources:
        if one["resourceType"] == "MedicationRequest":
            concept = one.pop("medicationCodeableConcept")
            one["medicationReference"] = {"reference": f"{server.base}/Medication/m-{one['id']}"}
            drugs.append({"resourceType": "Medication", "id": f"m-{one['id']}", "code": concept})
    server.resources += drugs
    assert drugs
    assert [finding["outcome"] for finding in assess_of(server)["findings"]] == [
        finding["outcome"] for finding in as_sent["findings"]
    ]


def assess_of(server: FhirServer) -> dict[str, Any]:
    data = fetch(server).bundle
    (one,) = assess(data, load_content(), as_of=datetime(2026, 3, 1, tzinfo=UTC), trace=True)["assessments"]
    return one


def test_a_server_that_writes_another_base_address_into_full_urls_still_serves_the_patient(server: FhirServer):
    as_sent = assess_of(server)
    observations = [one for one in server.resources if one["resourceType"] == "Observation"]
    server.says("Observation", page(searchset(*observations, base="http://behind-the-gateway:8080/fhir")))
    assert assess_of(server) == as_sent


def test_every_type_in_use_is_searched_for_the_one_patient(server: FhirServer):
    fetch(server)
    searches = {request.path.removeprefix("/fhir/"): request.args for request in server.asked[1:]}
    assert server.asked[0].path == f"/fhir/Patient/{PATIENT}"
    assert searches.keys() == SEARCHED
    assert {(args["patient"], args["_count"]) for args in searches.values()} == {(PATIENT, "200")}
    assert searches["MedicationRequest"]["_include"] == "MedicationRequest:medication"


def test_the_token_travels_in_the_authorization_header_and_nowhere_else(server: FhirServer):
    fetch(server)
    assert {request.headers["Authorization"] for request in server.asked} == {f"Bearer {TOKEN}"}
    for request in server.asked:
        rest = [value for name, value in request.headers if name != "Authorization"]
        assert TOKEN not in request.url + "".join(rest)


def test_without_a_token_no_authorization_is_sent_not_even_from_a_netrc(
    server: FhirServer, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
):
    (tmp_path / "netrc").write_text("machine localhost login someone password else\n")
    monkeypatch.setenv("NETRC", str(tmp_path / "netrc"))
    fetch(server, token=None)
    assert not [request for request in server.asked if "Authorization" in request.headers]


def test_the_patient_may_be_named_with_its_type(server: FhirServer):
    assert fetch(server, f"Patient/{PATIENT}").bundle == fetch(server).bundle


def test_a_slash_at_the_end_and_the_case_of_the_host_make_no_other_server(server: FhirServer):
    shouted = server.base.replace("localhost", "LOCALHOST") + "/"
    assert fetch(server, asked_for=shouted).skipped == ()


def test_outcomes_and_resources_nobody_asked_for_are_left_out(server: FhirServer):
    outcome = {"resourceType": "OperationOutcome", "id": "warning", "issue": []}
    stranger = {"resourceType": "Patient", "id": "someone-else"}
    answer = searchset(observation(1), outcome, stranger)
    answer["entry"] += [{"search": {"mode": "outcome"}}, None, "text", {"resource": 3}, {"resource": observation(2)}]
    server.says("Observation", page(answer))
    server.resources = [one for one in server.resources if one["resourceType"] == "Patient"]
    assert fetched(fetch(server)) == [f"Patient/{PATIENT}", "Observation/o1", "Observation/o2"]


@pytest.mark.parametrize("code", [400, 404, 501])
def test_a_type_the_server_does_not_offer_costs_that_type_only_and_is_named(server: FhirServer, code: int):
    whole = fetched(fetch(server))
    server.says("Device", status(code))
    server.says("ServiceRequest", status(code))
    result = fetch(server)
    assert result.skipped == ("Device", "ServiceRequest")
    assert fetched(result) == whole
    assert b"OperationOutcome" not in result.bundle


def test_a_server_that_cannot_include_medications_is_asked_for_the_orders_alone(server: FhirServer):
    orders = [one for one in server.resources if one["resourceType"] == "MedicationRequest"]
    server.says("MedicationRequest", status(400), page(searchset(*orders)))
    result = fetch(server)
    assert result.skipped == ("Medication",)
    assert "MedicationRequest/" in "".join(fetched(result))
    assert [r.args.get("_include") for r in server.asked if r.path == "/fhir/MedicationRequest"] == [
        "MedicationRequest:medication",
        None,
    ]


@pytest.mark.parametrize("code", [204, 401, 403, 405, 410, 500])
def test_any_other_status_of_a_search_is_an_error_because_silence_would_read_as_no_allergies(
    server: FhirServer, code: int
):
    server.says("AllergyIntolerance", status(code))
    error = refusal(server)
    assert error.http_status == (403 if code in (401, 403) else 502)
    assert "AllergyIntolerance" in error.problem
    assert str(code) in error.problem


# Pages


def test_all_pages_are_read(server: FhirServer):
    server.page_size = 2
    one_page = [name for name in fetched(fetch(server)) if name.startswith("Observation/")]
    held = [f"Observation/{one['id']}" for one in server.resources if one["resourceType"] == "Observation"]
    assert one_page == held
    assert len(held) > 4


@pytest.mark.parametrize("link", ["?page=2", "Observation?page=2", "/fhir?page=2", "/fhir/Observation/_page;n=2?a=b|c"])
def test_a_relative_next_link_is_read_against_the_base_address(server: FhirServer, link: str):
    server.says("Observation", page(searchset(observation(1), next_url=link)), page(searchset(observation(2))))
    server.says("", page(searchset(observation(2))))
    server.says("fhir", page(searchset(observation(2))))
    server.instead["/fhir"] = server.instead["fhir"]
    assert "Observation/o2" in fetched(fetch(server))


def test_two_next_links_are_one_too_many(server: FhirServer):
    answer = searchset(observation(1))
    answer["link"] = [{"relation": "next", "url": "?page=2"}, {"relation": "next", "url": "?page=3"}]
    server.says("Observation", page(answer))
    assert "next link" in refusal(server).problem


def test_links_of_other_kinds_and_shapes_are_no_next_page(server: FhirServer):
    for links in ("next", {"relation": "next"}, [None, "next", {"relation": "last", "url": "http://elsewhere/"}]):
        server.says("Observation", page({**searchset(observation(1)), "link": links}))
        assert "Observation/o1" in fetched(fetch(server))


def test_pages_that_lead_in_a_circle_are_noticed(server: FhirServer):
    there, back = f"{server.base}/Observation?page=2", f"{server.base}/Observation?page=1"
    server.says(
        "Observation",
        page(searchset(observation(1), next_url=there)),
        page(searchset(observation(2), next_url=back)),
        page(searchset(observation(1), next_url=there)),
    )
    assert "circle" in refusal(server).problem
    assert server.paths().count("/fhir/Observation") == 3


def test_pages_without_an_end_stop_at_the_limit_that_holds_for_all_searches_together(server: FhirServer):
    server.says(
        "Observation",
        lambda request: as_json(searchset(next_url=f"{server.base}/Observation?n={len(server.asked)}")),
    )
    error = refusal(server, by=rules(server.base, max_pages=20))
    assert error.http_status == 502
    assert "more than 20 pages" in error.problem
    medications_before = 4
    assert server.paths().count("/fhir/Observation") == 20 - medications_before


@pytest.mark.parametrize("code", [400, 404, 410, 501])
def test_a_page_that_has_gone_is_an_error_because_half_of_the_results_would_pass_for_all(server: FhirServer, code: int):
    server.says("Observation", page(searchset(observation(1), next_url="Observation?page=2")), status(code))
    error = refusal(server)
    assert error.http_status == 502
    assert f"Observation has the status {code}" in error.problem


# What is never said


def test_neither_the_patient_nor_the_token_reach_a_log(server: FhirServer, caplog: pytest.LogCaptureFixture):
    caplog.set_level(logging.DEBUG)
    caplog.set_level(logging.DEBUG, logger="urllib3.connectionpool")
    server.says("Observation", status(503), page(searchset(observation(1))))
    fetch(server)
    told = [record.getMessage() for record in caplog.records if not record.name.startswith("werkzeug")]
    assert not [line for line in told if PATIENT in line or TOKEN in line]


def test_what_is_wanted_and_what_came_show_no_patient_when_printed(server: FhirServer):
    wanted = Wanted(server.base, PATIENT, TOKEN)
    assert repr(wanted) == f"Wanted(fhir_server={server.base!r})"
    assert repr(fetch(server)) == "FetchResult(skipped=())"
