"""A FHIR server on loopback that can be told to misbehave, a clock of ours, and a fetch from the one by the other."""

from __future__ import annotations

import re
import socket
import threading
import traceback
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import orjson
import pytest
import requests
from pytest_httpserver import HTTPServer
from werkzeug import Request, Response

from cds.service.fetch import FetchError, FetchResult, FetchRules, Wanted, fetch_patient

TOKEN = "s3cr3t-t0ken.of~the+sender/=="
PATIENT = "tl-0123"
MEGABYTE = 1024 * 1024
Resource = dict[str, Any]
Respond = Callable[[Request], Response]


@dataclass
class Time:
    """A clock that moves only when somebody sleeps, or `per_look` seconds each time somebody looks."""

    now: float = 1000.0
    slept: list[float] = field(default_factory=list)
    per_look: float = 0.0

    def clock(self) -> float:
        self.now += self.per_look
        return self.now

    def sleep(self, seconds: float) -> None:
        self.slept.append(seconds)
        self.now += seconds


@dataclass
class FhirServer:
    """A FHIR server that holds some resources. `instead` holds what it says in place of the usual, by first path step."""

    http: HTTPServer
    resources: list[Resource]
    page_size: int = 100
    instead: dict[str, list[Respond]] = field(default_factory=dict)
    asked: list[Request] = field(default_factory=list)

    @property
    def base(self) -> str:
        return self.http.url_for("/fhir")

    def answer(self, request: Request) -> Response:
        self.asked.append(request)
        kind, _, identity = request.path.removeprefix("/fhir/").partition("/")
        if self.instead.get(kind):
            waiting = self.instead[kind]
            return (waiting.pop(0) if len(waiting) > 1 else waiting[0])(request)
        return self.usual(request, kind, identity)

    def usual(self, request: Request, kind: str, identity: str) -> Response:
        held = [one for one in self.resources if one["resourceType"] == kind]
        if identity:
            return as_json(next(one for one in held if one["id"] == identity))
        if "_include" in request.args:
            held += [one for one in self.resources if one["resourceType"] == "Medication"]
        start = int(request.args.get("from", "0"))
        page = searchset(*held[start : start + self.page_size], base=self.base)
        if start + self.page_size < len(held):
            url = f"{self.base}/{kind}?patient={request.args['patient']}&from={start + self.page_size}"
            page["link"] = [{"relation": "self", "url": request.url}, {"relation": "next", "url": url}]
        return as_json(page)

    def says(self, kind: str, *answers: Respond) -> None:
        """Give these answers in turn for a type, the last one again and again."""
        self.instead[kind] = list(answers)

    def paths(self) -> list[str]:
        return [request.path for request in self.asked]


def searchset(*resources: Resource, base: str = "", next_url: object = None) -> Resource:
    page: Resource = {
        "resourceType": "Bundle",
        "type": "searchset",
        "entry": [
            {"fullUrl": f"{base}/{one['resourceType']}/{one['id']}", "resource": one, "search": {"mode": "match"}}
            for one in resources
        ],
    }
    return page if next_url is None else {**page, "link": [{"relation": "next", "url": next_url}]}


def as_json(document: object, status: int = 200) -> Response:
    return Response(orjson.dumps(document), status, content_type="application/fhir+json")


def status(code: int, **headers: str) -> Respond:
    named = {name.replace("_", "-"): value for name, value in headers.items()}
    return lambda _: Response(b'{"resourceType": "OperationOutcome"}', code, named)


def body(data: bytes, **headers: str) -> Respond:
    named = {name.replace("_", "-"): value for name, value in headers.items()}
    return lambda _: Response(data, 200, named)


def page(document: object) -> Respond:
    return lambda _: as_json(document)


def fixture(name: str) -> list[Resource]:
    text = (Path(__file__).parents[2] / "fixtures" / "patients" / name / "bundle.json").read_bytes()
    return [entry["resource"] for entry in orjson.loads(text)["entry"]]


def observation(number: int) -> Resource:
    return {"resourceType": "Observation", "id": f"o{number}", "subject": {"reference": f"Patient/{PATIENT}"}}


def serve(http: HTTPServer) -> FhirServer:
    """A server that holds one patient of the fixtures."""
    one = FhirServer(http, fixture("all-four-pillars"))
    http.expect_request(re.compile(".*")).respond_with_handler(one.answer)
    return one


def rules(*servers: str, seconds: float = 30.0, **limits: int) -> FetchRules:
    return FetchRules(servers, seconds, **{"max_bytes": 16 * MEGABYTE, "max_entries": 20_000, **limits})


def fetch(
    server: FhirServer,
    patient: str = PATIENT,
    *,
    token: str | None = TOKEN,
    by: FetchRules | None = None,
    asked_for: str | None = None,
    ours: Time | None = None,
    session_factory: Callable[[], requests.Session] = requests.Session,
) -> FetchResult:
    moments = ours or Time()
    return fetch_patient(
        Wanted(server.base if asked_for is None else asked_for, patient, token),
        by or rules(server.base),
        session_factory=session_factory,
        sleep=moments.sleep,
        clock=moments.clock,
        jitter=lambda: 1.0,
    )


def refusal(server: FhirServer, patient: str = PATIENT, **how: Any) -> FetchError:
    """The error of a fetch that must fail; whatever it is, it holds neither token nor patient."""
    with pytest.raises(FetchError) as caught:
        fetch(server, patient, **how)
    error = caught.value
    whole = "".join(traceback.format_exception(error)) + repr(error.__context__) + repr(error.__cause__)
    assert TOKEN not in whole
    assert f"patient={PATIENT}" not in whole
    assert PATIENT not in str(error)
    assert error.exit_code == 43
    assert str(error) == f"{error.problem}.\n{error.fix}"
    return error


def fetched(result: FetchResult) -> list[str]:
    return [
        f"{entry['resource']['resourceType']}/{entry['resource']['id']}"
        for entry in orjson.loads(result.bundle)["entry"]
    ]


@contextmanager
def raw_server(talk: Callable[[socket.socket], None]) -> Iterator[str]:
    """A server that speaks bytes: `talk` answers each connection once its request has come."""
    with socket.create_server(("127.0.0.1", 0)) as listener:

        def serve() -> None:
            while True:
                try:
                    connection, _ = listener.accept()
                except OSError:
                    return
                with connection:
                    try:
                        connection.recv(65536)
                        talk(connection)
                    except OSError:
                        continue

        thread = threading.Thread(target=serve, daemon=True)
        thread.start()
        yield f"http://127.0.0.1:{listener.getsockname()[1]}/fhir"
        listener.shutdown(socket.SHUT_RDWR)
    thread.join(5)
