"""A patient by reference: how often, how long and how much, however slow, broken or generous the server is."""

from __future__ import annotations

import gzip
import socket
import threading
import time
from collections.abc import Iterator
from datetime import UTC, datetime, timedelta
from email.utils import format_datetime

import orjson
import pytest
import requests
from fhir_server_on_loopback import (
    MEGABYTE,
    PATIENT,
    TOKEN,
    FhirServer,
    Respond,
    Time,
    as_json,
    body,
    fetch,
    fetched,
    observation,
    page,
    raw_server,
    refusal,
    rules,
    searchset,
    status,
)
from werkzeug import Request, Response

from cds.assessment import assess
from cds.content.load import load_content
from cds.service.fetch import FetchError, FetchResult, Wanted, fetch_patient

# Again, and how long


def test_a_busy_server_is_asked_again_after_the_pause_it_names(server: FhirServer):
    moments = Time()
    server.says("Observation", status(429, Retry_After="7"), page(searchset(observation(1))))
    assert "Observation/o1" in fetched(fetch(server, ours=moments))
    assert moments.slept == [7.0]


def test_a_pause_that_ends_at_a_date_is_held_against_the_clock_of_the_server(server: FhirServer):
    moments = Time()
    later = format_datetime(datetime.now(UTC) + timedelta(seconds=12), usegmt=True)
    server.says("Observation", status(503, Retry_After=later), page(searchset(observation(1))))
    fetch(server, ours=moments)
    (pause,) = moments.slept
    assert 10 <= pause <= 12


@pytest.mark.parametrize(
    "hint", ["", "0", "-5", "soon", "٧", "Sun, 01 Mar 2020 12:00:00 GMT", "Sun, 99 Mar 2026", "Mon, 01 Jan 99999 1:1:1"]
)
def test_without_a_pause_that_can_be_kept_the_pauses_double(server: FhirServer, hint: str):
    moments = Time()
    server.says(
        "Observation",
        lambda _: Response(b"", 502, {"Retry-After": hint.encode().decode("latin-1")}),
        status(504),
        page(searchset(observation(1))),
    )
    fetch(server, ours=moments)
    assert moments.slept == [0.5, 1.0]  # with the largest jitter


def test_jitter_shortens_a_pause_to_half_of_it_at_most(server: FhirServer):
    moments = Time()
    server.says("Observation", status(503), page(searchset()))
    fetch_patient(
        Wanted(server.base, PATIENT),
        rules(server.base),
        session_factory=requests.Session,
        sleep=moments.sleep,
        clock=moments.clock,
        jitter=lambda: 0.0,
    )
    assert moments.slept == [0.25]


def test_after_the_last_attempt_the_server_is_left_alone(server: FhirServer):
    server.says("Condition", status(503))
    error = refusal(server)
    assert error.http_status == 502
    assert error.problem.endswith("Condition could not be read, the status was 503, in 3 attempts")
    assert server.paths().count("/fhir/Condition") == 3


@pytest.mark.parametrize("hint", ["60", "999999999999999999999999"])
def test_a_pause_longer_than_the_time_left_ends_the_fetch_at_once(server: FhirServer, hint: str):
    moments = Time()
    server.says("Observation", status(429, Retry_After=hint))
    error = refusal(server, ours=moments, by=rules(server.base, seconds=30))
    assert error.http_status == 504
    assert "within 30 seconds" in error.problem
    assert moments.slept == []


def test_a_server_that_cannot_be_reached_is_tried_as_often_as_the_rules_say():
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        base = f"http://127.0.0.1:{taken.getsockname()[1]}/fhir"
        moments = Time()
        with pytest.raises(FetchError, match="no connection, or one that broke, in 4 attempts") as caught:
            fetch_patient(
                Wanted(base, PATIENT, TOKEN),
                rules(base, attempts=4),
                session_factory=requests.Session,
                sleep=moments.sleep,
                clock=moments.clock,
                jitter=lambda: 1.0,
            )
    assert caught.value.http_status == 502
    assert caught.value.__context__ is None
    assert moments.slept == [0.5, 1.0, 2.0]


def test_many_answers_that_are_each_in_time_still_end_at_the_total(server: FhirServer):
    moments = Time(per_look=1.0)
    error = refusal(server, ours=moments, by=rules(server.base, seconds=20))
    assert error.http_status == 504
    assert 1 < len(server.asked) < 12


def test_a_server_that_does_not_answer_costs_no_more_than_the_time_limit(server: FhirServer):
    done = threading.Event()

    def hang(_: Request) -> Response:
        done.wait(10)
        return as_json(searchset())

    server.says("Observation", hang)
    started = time.monotonic()
    try:
        with pytest.raises(FetchError) as caught:
            fetch_in_real_time(server.base, seconds=0.4)
    finally:
        took = time.monotonic() - started
        done.set()
    assert caught.value.http_status == 504
    assert took < 2


@pytest.mark.parametrize(
    "opening",
    [
        b"",
        b"HTTP/1.1 200 OK\r\n",
        b"HTTP/1.1 200 OK\r\nContent-Length: 100000\r\n\r\n",
        b"HTTP/1.1 200 OK\r\n\r\n",
        b"HTTP/1.1 200 OK\r\nTransfer-Encoding: chunked\r\n\r\nFFFF\r\n",
        b"HTTP/1.1 200 OK\r\nTransfer-Encoding: chunked\r\n\r\n",
    ],
    ids=["status line", "headers", "body", "body without a length", "chunk", "chunk size"],
)
def test_a_server_that_sends_a_byte_at_a_time_costs_no_more_than_the_time_limit(opening: bytes):
    def drip(connection: socket.socket) -> None:
        connection.sendall(opening)
        for _ in range(300):
            connection.sendall(b"0")
            time.sleep(0.02)

    with raw_server(drip) as base:
        started = time.monotonic()
        with pytest.raises(FetchError) as caught:
            fetch_in_real_time(base, seconds=0.4)
        assert caught.value.http_status == 504
        assert time.monotonic() - started < 2


def fetch_in_real_time(base: str, *, seconds: float) -> FetchResult:
    return fetch_patient(
        Wanted(base, PATIENT, TOKEN),
        rules(base, seconds=seconds),
        session_factory=requests.Session,
        sleep=time.sleep,
        clock=time.monotonic,
    )


BROKEN = {
    "nothing at all": b"",
    "no HTTP": b"220 ready for mail\r\n",
    "more headers than anyone needs": b"HTTP/1.1 200 OK\r\n" + b"X: y\r\n" * 200 + b"\r\n{}",
    "a header without an end": b"HTTP/1.1 200 OK\r\nX: " + b"y" * 100_000,
    "half of the body": b"HTTP/1.1 200 OK\r\nContent-Length: 500\r\n\r\n{",
    "half of a chunk": b"HTTP/1.1 200 OK\r\nTransfer-Encoding: chunked\r\n\r\nFF\r\n{",
    "half of the gzip data": b"HTTP/1.1 200 OK\r\nContent-Encoding: gzip\r\n\r\n" + gzip.compress(b"{}")[:-4],
}


@pytest.mark.parametrize("answer", BROKEN.values(), ids=BROKEN)
def test_an_answer_that_breaks_off_is_asked_for_again(answer: bytes):
    moments = Time()
    with (
        raw_server(lambda connection: connection.sendall(answer)) as base,
        pytest.raises(FetchError, match="in 3 attempts") as caught,
    ):
        fetch_patient(
            Wanted(base, PATIENT, TOKEN),
            rules(base),
            session_factory=requests.Session,
            sleep=moments.sleep,
            clock=moments.clock,
        )
    assert caught.value.http_status == 502
    assert len(moments.slept) == 2


def test_lengths_that_contradict_each_other_are_refused_at_once():
    moments = Time()
    answer = b"HTTP/1.1 200 OK\r\nContent-Length: 2, 4\r\n\r\n{}{}"
    with (
        raw_server(lambda connection: connection.sendall(answer)) as base,
        pytest.raises(FetchError, match="cannot be read as HTTP") as caught,
    ):
        fetch_patient(
            Wanted(base, PATIENT, TOKEN),
            rules(base),
            session_factory=requests.Session,
            sleep=moments.sleep,
            clock=moments.clock,
        )
    assert caught.value.http_status == 502
    assert not moments.slept


# How much


def test_a_body_beyond_the_limit_is_not_read_to_its_end(server: FhirServer):
    sent: list[int] = []

    def flood(_: Request) -> Response:
        def endless() -> Iterator[bytes]:
            for number in range(64):
                sent.append(number)
                yield b" " * MEGABYTE

        return Response(endless(), 200)

    server.says("Observation", flood)
    error = refusal(server, by=rules(server.base, max_bytes=MEGABYTE))
    assert error.http_status == 502
    assert f"more than {MEGABYTE} bytes" in error.problem
    assert len(sent) < 64


def test_a_gzip_bomb_is_stopped_while_it_unpacks(server: FhirServer):
    bomb = gzip.compress(b" " * 64 * MEGABYTE)
    assert len(bomb) < MEGABYTE / 8
    server.says("Observation", body(bomb, Content_Encoding="gzip"))
    assert f"more than {MEGABYTE} bytes" in refusal(server, by=rules(server.base, max_bytes=MEGABYTE)).problem


def test_a_flood_of_empty_gzip_members_counts_as_it_was_sent(server: FhirServer):
    server.says("Observation", body(gzip.compress(b"") * 60_000, Content_Encoding="gzip"))
    assert f"more than {MEGABYTE} bytes" in refusal(server, by=rules(server.base, max_bytes=MEGABYTE)).problem


def test_the_limit_of_bytes_holds_for_all_answers_together(server: FhirServer):
    padded = body(orjson.dumps(searchset()) + b" " * 40_000)
    for kind in ("Condition", "Encounter", "Procedure"):
        server.says(kind, padded)
    assert fetch(server, by=rules(server.base, max_bytes=200_000)).skipped == ()
    assert "more than 100000 bytes" in refusal(server, by=rules(server.base, max_bytes=100_000)).problem


def test_numbers_that_grow_when_written_again_do_not_pass_the_limit(server: FhirServer):
    answer = searchset(observation(1))
    answer["entry"][0]["resource"]["extension"] = "NUMBERS"
    text = orjson.dumps(answer).replace(b'"NUMBERS"', b"[" + b",".join([b"1e15"] * 10_000) + b"]")
    server.says("Observation", body(text))
    assert "more than 100000 bytes" in refusal(server, by=rules(server.base, max_bytes=100_000)).problem


def test_compressed_answers_are_read_several_members_too(server: FhirServer):
    whole = orjson.dumps(searchset(observation(1)))
    members = gzip.compress(whole[:40]) + gzip.compress(whole[40:]) + b"\x00" * 512
    server.says("Observation", body(members, Content_Encoding="gzip"))
    assert "Observation/o1" in fetched(fetch(server))


@pytest.mark.parametrize(
    ("answer", "problem"),
    [
        (body(b"no gzip", Content_Encoding="gzip"), "damaged gzip data"),
        (body(b"{}", Content_Encoding="br"), "encoding that was not asked for"),
        (body(gzip.compress(gzip.compress(b"{}")), Content_Encoding="gzip, gzip"), "encoding that was not asked for"),
        (body(gzip.compress(gzip.compress(b"{}")), Content_Encoding="gzip"), "compressed without saying so"),
        (body(gzip.compress(b"{}")), "compressed without saying so"),
        (body(b""), "is empty"),
        (body(b"<html>Please sign in, tl-0123</html>"), "not JSON"),
        (body(b'{"resourceType": "Bundle", "entry": [NaN]}'), "NaN"),
        (body(b"\xff\xfe{\x00}\x00"), "UTF-16"),
        (body(b"[]"), "not an object"),
        (body(b'{"a":' * 250 + b"1" + b"}" * 250), "more than 197 levels"),
        (page({"resourceType": "OperationOutcome", "issue": []}), "no Bundle"),
        (page({"resourceType": "Bundle", "entry": {"resource": {}}}), "no Bundle with a list"),
    ],
)
def test_an_answer_that_is_no_fhir_bundle_is_the_servers_fault(server: FhirServer, answer: Respond, problem: str):
    server.says("Observation", answer)
    error = refusal(server)
    assert error.http_status == 502
    assert problem in error.problem
    assert f"FHIR server {server.http.host}:{server.http.port}: the answer for Observation" in error.problem


def test_the_deepest_patient_that_is_fetched_can_be_assessed(server: FhirServer):
    deep = b'{"resourceType":"Patient","id":"tl-0123","x":' + b"[" * 196 + b"]" * 196 + b"}"
    server.says("Patient", body(deep))
    answer = assess(fetch(server).bundle, load_content(), as_of=datetime(2026, 3, 1, tzinfo=UTC))
    assert answer["format"] == "gdmt-cards/assessment"
    server.says("Patient", body(deep.replace(b"[]", b"[[]]")))
    assert "levels" in refusal(server).problem


def test_entries_are_counted_over_all_pages_and_types(server: FhirServer):
    pages = [page(searchset(*map(observation, range(30)), next_url=f"Observation?page={n}")) for n in range(2, 5)]
    server.says("Observation", *pages, page(searchset()))
    others = sum(one["resourceType"] not in ("Patient", "Observation") for one in server.resources)
    assert len(fetched(fetch(server, by=rules(server.base, max_entries=90 + others)))) == 1 + 90 + others
    server.says("Observation", *pages, page(searchset()))
    assert "entries" in refusal(server, by=rules(server.base, max_entries=89 + others)).problem
