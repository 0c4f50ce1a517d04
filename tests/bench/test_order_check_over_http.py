"""The budget of order entry: an order check over HTTP against an endpoint that only parses and validates the same body.

Both stand behind the same server with the same settings. Run as a program with a port, this file serves that endpoint.
"""

from __future__ import annotations

import http.client
import os
import socket
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import ExitStack, closing, contextmanager, suppress
from pathlib import Path

import orjson
from builders import bundle, creatinine, heart_rate, lvef, nyha, order, patient, potassium, pressure, problem, sodium
from flask import Flask, Response, request

from cds.fhir.bundle import USED_TYPES
from cds.fhir.validate import refusal

BAR = 2.5
WORKERS, ROUNDS, REQUESTS = 2, 25, 30


def forty_resources() -> bytes:
    """What an order-entry hook sends for one patient: the present problems and drugs, the values of the last months, the draft."""
    days = [f"2025-{month:02d}-12" for month in range(8, 13)]
    chart = [
        patient(),
        problem("heart failure", "2024-02-01"),
        problem("type 2 diabetes", "2024-06-01"),
        problem("hypertension", "2019-03-01"),
        lvef(32, "2025-08-01"),
        nyha(2, "2026-02-20"),
        order("enalapril", 10, 2, since="2025-03-01"),
        order("carvedilol", 12.5, 2, since="2025-04-01"),
        order("furosemide", 40, 1, since="2024-02-01"),
        order("ibuprofen", 400, 3, since="2026-03-01", status="draft"),
    ]
    for day in (*days, "2026-02-20"):
        chart += [
            potassium(4.4, day),
            creatinine(1.1, day),
            sodium(139, day),
            pressure(122, 74, day),
            heart_rate(68, day),
        ]
    assert len(chart) == 40
    return bundle(*({**resource, "id": f"{resource['id']}-{n}"} if n else resource for n, resource in enumerate(chart)))


def echo_app() -> Flask:
    """Parse, validate what is used, give it back."""
    app = Flask("echo")

    @app.post("/echo")
    def echo() -> Response:
        body = orjson.loads(request.get_data())
        for entry in body["entry"]:
            if entry["resource"]["resourceType"] in USED_TYPES:
                assert refusal(entry["resource"]) is None
        return Response(orjson.dumps(body), mimetype="application/json")

    @app.get("/readyz")
    def ready() -> Response:
        for kind in USED_TYPES:
            refusal({"resourceType": kind})  # the models are built at first use
        return Response(b"{}", mimetype="application/json")

    return app


def serve_echo(port: str) -> None:
    """Serve it as `gdmt-cards serve` serves the service."""
    from cds.service.serve import Server
    from cds.service.settings import read_settings
    from cds.service.wiring import open_log

    settings = read_settings({**os.environ, "GDMT_CARDS_PORT": port})
    Server(settings, open_log(settings), lambda _place: echo_app()).run()


@contextmanager
def serving(folder: Path, *command: str) -> Iterator[int]:
    """Run a server on a free port until the block ends."""
    with closing(socket.socket()) as door:
        door.bind(("127.0.0.1", 0))
        port = int(door.getsockname()[1])
    settings = {
        "PORT": port,
        "WORKERS": WORKERS,
        "STORE_URL": f"sqlite:///{folder / f'{port}.db'}",
        "REQUESTS_A_MINUTE": 1_000_000,
        "LOG_LEVEL": "error",
    }
    environ = {
        **os.environ,
        "PYTHONPATH": os.pathsep.join(path for path in sys.path if path),
        **{f"GDMT_CARDS_{name}": str(value) for name, value in settings.items()},
    }
    process = subprocess.Popen([sys.executable, *(word.format(port=port) for word in command)], env=environ)
    try:
        until = time.monotonic() + 30
        while not is_ready(port):
            assert process.poll() is None
            assert time.monotonic() < until
            time.sleep(0.05)
        yield port
    finally:
        process.terminate()
        process.wait(20)


def is_ready(port: int) -> bool:
    with suppress(OSError), closing(http.client.HTTPConnection("127.0.0.1", port, timeout=5)) as connection:
        connection.request("GET", "/readyz")
        return connection.getresponse().status == 200
    return False


def p99(seconds: list[float]) -> float:
    return sorted(seconds)[int(len(seconds) * 0.99) - 1]


def waits(port: int, path: str, body: bytes, times: int) -> list[float]:
    """A caller's waits in seconds, on one connection for each worker in turn."""
    seconds = []
    with ExitStack() as stack:
        connections = [
            stack.enter_context(closing(http.client.HTTPConnection("127.0.0.1", port, timeout=30)))
            for _ in range(WORKERS)
        ]
        for number in range(times):
            connection = connections[number % WORKERS]
            began = time.perf_counter()
            connection.request("POST", path, body, {"Content-Type": "application/fhir+json"})
            response = connection.getresponse()
            answer = response.read()
            seconds.append(time.perf_counter() - began)
            assert response.status == 200, answer
    return seconds


def test_an_order_check_over_http_costs_at_most_two_and_a_half_times_parsing_and_validating_its_body(tmp_path):
    body = forty_resources()
    with (
        serving(tmp_path, "-m", "cds", "serve") as cards,
        serving(tmp_path, __file__, "{port}") as echo,
    ):
        check = "/v1/order-checks?as_of=2026-03-01"
        waits(cards, check, body, 20)
        waits(echo, "/echo", body, 20)
        ours, bare = [], []
        for _ in range(ROUNDS):  # in short turns, so that a busy moment of the machine meets both
            ours += waits(cards, check, body, REQUESTS)
            bare += waits(echo, "/echo", body, REQUESTS)
    ratio = p99(ours) / p99(bare)
    print(
        f"\norder check over HTTP, 40 resources, {WORKERS} workers: p99 {p99(ours) * 1000:.1f} ms, "
        f"echo {p99(bare) * 1000:.1f} ms, ratio {ratio:.2f}"
    )
    assert ratio <= BAR


if __name__ == "__main__":
    serve_echo(sys.argv[1])
