"""The real server under load, told to stop, killed, and fed slowly: what it acknowledged is kept, what it accepted is answered."""

from __future__ import annotations

import http.client
import json
import os
import signal
import socket
import sqlite3
import subprocess
import sys
import threading
import time
import uuid
from collections import Counter
from collections.abc import Callable, Iterator
from contextlib import closing, contextmanager, suppress
from pathlib import Path
from typing import Any

import pytest
from builders import bundle, creatinine, heart_rate, lvef, nyha, order, patient, potassium, pressure, problem
from databases import store_url
from prometheus_client.parser import text_string_to_metric_families

from cds.store import open_store

__all__ = ["store_url"]  # a fixture
SECRET = "a secret for tests, 32 bytes long"
DAY = "2026-02-26"
CHART = (
    problem("heart failure", "2025-01-15"),
    lvef(30, "2025-11-20"),
    nyha(2, DAY),
    pressure(118, 70, DAY),
    heart_rate(70, DAY),
    creatinine(1.0, DAY),
    potassium(4.4, DAY),
)
CLIENTS = 8


def chart_of(identity: str, *more: dict[str, Any]) -> bytes:
    of = {"reference": f"Patient/{identity}"}
    return bundle(patient(id=identity), *({**resource, "subject": of} for resource in (*CHART, *more)))


class Server:
    """`gdmt-cards serve` in a process of its own, on a free port."""

    def __init__(self, folder: Path, url: str, **settings: object) -> None:
        with closing(socket.socket()) as door:
            door.bind(("127.0.0.1", 0))
            self.port = door.getsockname()[1]
        self.url = url
        given = {
            "PORT": self.port,
            "STORE_URL": url,
            "STORE_SECRET": SECRET,
            "REQUESTS_A_MINUTE": 1_000_000,
            **settings,
        }
        self._log = folder / f"server-{self.port}.log"
        with self._log.open("wb") as log:
            self.process = subprocess.Popen(
                [sys.executable, "-W", "error", "-m", "cds", "serve"],
                env={**os.environ, **{f"GDMT_CARDS_{name}": str(value) for name, value in given.items()}},
                stdout=log,
                stderr=subprocess.STDOUT,
            )
        self.wait_until(self.is_ready)

    def is_ready(self) -> bool:
        assert self.process.poll() is None, self._log.read_text()
        with suppress(OSError):
            return self.ask("GET", "/readyz")[0] == 200
        return False

    def wait_until(self, is_so: Callable[[], bool], seconds: float = 60) -> None:
        until = time.monotonic() + seconds
        while not is_so():
            assert time.monotonic() < until, self._log.read_text()[-3000:]
            time.sleep(0.05)

    def ask(
        self, method: str, path: str, body: bytes | None = None, *, seconds: float = 30, **headers: str
    ) -> tuple[int, Any]:
        """Ask on a connection of its own; the status and the parsed body."""
        with closing(http.client.HTTPConnection("127.0.0.1", self.port, timeout=seconds)) as connection:
            return spoken(connection, method, path, body, Connection="close", **headers)

    def workers(self) -> tuple[int, ...]:
        """The process ids of the workers that live."""
        children = Path(f"/proc/{self.process.pid}/task/{self.process.pid}/children").read_text()
        return tuple(sorted(int(pid) for pid in children.split()))

    def lines(self) -> list[dict[str, Any]]:
        """The log so far; every line of it is JSON."""
        return [json.loads(line) for line in self._log.read_text().splitlines()]

    def text(self) -> str:
        return self._log.read_text()

    def end(self) -> None:
        """Make sure that nothing of it stays."""
        if self.process.poll() is None:
            self.process.terminate()
            try:
                self.process.wait(20)
            except subprocess.TimeoutExpired:
                self.process.kill()
                self.process.wait()


def spoken(
    connection: http.client.HTTPConnection, method: str, path: str, body: bytes | None = None, **headers: str
) -> tuple[int, Any]:
    named = {name.replace("_", "-"): value for name, value in headers.items()}
    connection.request(method, path, body, {"Content-Type": "application/json", **named})
    response = connection.getresponse()
    data = response.read()
    return response.status, json.loads(data) if response.getheader("Content-Type", "").endswith("json") else data


@contextmanager
def serving(folder: Path, url: str, **settings: object) -> Iterator[Server]:
    server = Server(folder, url, **settings)
    try:
        yield server
    finally:
        server.end()


class Clinician(threading.Thread):
    """Has patients assessed and answers their cards, one after the other, until told to stop; remembers what was acknowledged."""

    def __init__(self, server: Server, number: int, shared: str) -> None:
        super().__init__(name=f"clinician {number}")
        self.server, self.number, self.shared = server, number, shared
        self.acknowledged: dict[str, Counter[str]] = {}  # of each patient, the texts of the replies
        self.wrong: list[str] = []
        self.refused = self.answered = 0
        self.cut: list[str] = []
        self.may_be_stopped = threading.Event()  # from then on a closed door is no error
        self.stop = threading.Event()

    def run(self) -> None:
        visit = 0
        while not self.stop.is_set():
            visit += 1
            try:
                self._visit(f"c{self.number}-p{visit}")
                if visit % 3 == 0:
                    self._visit(self.shared)
            except ConnectionRefusedError as error:
                self.refused += 1
                self._expect_stop(error)
            except (OSError, http.client.HTTPException) as error:
                self.cut.append(type(error).__name__)
                self._expect_stop(error)

    def _expect_stop(self, error: Exception) -> None:
        if not self.may_be_stopped.is_set():
            self.wrong.append(repr(error))
        time.sleep(0.01)

    def _visit(self, identity: str) -> None:
        before = self._assessed(identity)
        if not before["cards"]:
            return  # a patient shared by all: the others have answered everything
        card = before["cards"][0]
        text, key = f"{identity}: {uuid.uuid4().hex} " + "in so many words " * 20, str(uuid.uuid4())
        body = {"patient": f"Patient/{identity}", "facts": card["facts"], "code": "accepted", "text": text.strip()}
        for _again in range(1 + self.number % 2):  # every other client repeats each reply, as after a lost answer
            status, answer = self._ask("POST", f"/v1/cards/{card['card_id']}/replies", body, Idempotency_Key=key)
            if status != 201:
                self.wrong.append(f"reply: {status} {answer}")
                return
            self.acknowledged.setdefault(identity, Counter())[text.strip()] = 1
        after = self._assessed(identity)
        if card["card_id"] in {other["card_id"] for other in after["cards"]}:
            self.wrong.append("a card that was answered is shown again")

    def _assessed(self, identity: str) -> dict[str, Any]:
        status, answer = self._ask("POST", "/v1/assessments", chart_of(identity))
        if status != 200:
            raise AssertionError(f"assessment: {status} {answer}")
        (only,) = answer["assessments"]
        ids = [card["card_id"] for card in (*only["cards"], *only["held_back"])]
        if len(ids) != len(set(ids)):
            self.wrong.append("a card appears twice in one answer")
        return dict(only)

    def _ask(self, method: str, path: str, body: dict[str, Any] | bytes, **headers: str) -> tuple[int, Any]:
        data = body if isinstance(body, bytes) else json.dumps(body).encode()
        answer = self.server.ask(method, path, data, **headers)
        self.answered += 1
        return answer


@contextmanager
def clinicians(server: Server) -> Iterator[list[Clinician]]:
    """Eight of them at work until the block ends."""
    everyone = [Clinician(server, number, shared="of-all") for number in range(CLIENTS)]
    for one in everyone:
        one.start()
    try:
        yield everyone
    finally:
        for one in everyone:
            one.stop.set()
        for one in everyone:
            one.join(30)


def assert_every_acknowledged_reply_is_kept_once(url: str, everyone: list[Clinician]) -> int:
    """And that nothing is half written: what is there reads as it was sent."""
    acknowledged: dict[str, Counter[str]] = {}
    for one in everyone:
        for identity, texts in one.acknowledged.items():
            acknowledged.setdefault(identity, Counter()).update(texts)
    with closing(open_store(url, secret=SECRET.encode())) as store:
        assert store.is_ready()
        for identity, texts in acknowledged.items():
            kept = Counter(str(reply.text) for reply in store.replies_of(f"Patient/{identity}"))
            assert not texts - kept, f"lost for {identity}"
            assert set(kept.values()) == {1}, f"kept twice for {identity}"
            assert all(text.startswith(f"{identity}: ") and text.endswith("many words") for text in kept)
            ids = [card.card_id for card in store.shown_to(f"Patient/{identity}")]
            assert len(ids) == len(set(ids)), f"noted twice for {identity}"
    if url.startswith("sqlite"):
        with closing(sqlite3.connect(url.removeprefix("sqlite:///"))) as file:
            assert file.execute("PRAGMA integrity_check").fetchone() == ("ok",)
    return sum(len(texts) for texts in acknowledged.values())


def load_then_stop(folder: Path, url: str, seconds: float) -> None:
    with serving(folder, url) as server:
        with clinicians(server) as everyone:
            time.sleep(seconds)
            for one in everyone:
                one.may_be_stopped.set()
            server.process.send_signal(signal.SIGTERM)
            began = time.monotonic()
            assert server.process.wait(20) == 0
            took = time.monotonic() - began
        problems = [problem for one in everyone for problem in one.wrong]
        assert problems == []
        assert all(one.refused for one in everyone)  # all were still at it when the door closed
        # Nobody let in was left without the answer. The system may reset whoever knocks at the very moment of closing.
        assert [error for one in everyone for error in one.cut] in ([], ["ConnectionResetError"])
        replies = assert_every_acknowledged_reply_is_kept_once(url, everyone)
        answered = sum(one.answered for one in everyone)
        print(f"\n{answered} answers, {replies} replies in {seconds:.0f} s; stopped in {took:.1f} s")
        assert replies > CLIENTS
        lines = server.lines()
        assert {line["event"] for line in lines} <= {
            *("service_starts", "server_starts", "server_listens", "worker_starts", "request_answered"),
            *("signal_received", "worker_stops", "server_stops"),
        }
        by_status = Counter(line["status"] for line in lines if line["event"] == "request_answered")
        assert set(by_status) <= {200, 201, 503}, by_status  # 503: not ready yet, at the start
        assert by_status[200] + by_status[201] >= answered
        for secret in ("-p1", "of-all", "many words", SECRET):
            assert secret not in server.text()


def test_eight_clients_at_once_see_no_error_and_lose_no_reply_also_when_the_server_is_told_to_stop(tmp_path, store_url):
    load_then_stop(tmp_path, store_url, seconds=10 if store_url.startswith("sqlite") else 4)


@pytest.mark.deep
def test_the_same_for_a_minute(tmp_path, store_url):
    load_then_stop(tmp_path, store_url, seconds=60)


def test_killing_a_worker_and_the_server_in_the_middle_of_writing_loses_nothing_acknowledged(tmp_path, store_url):
    with serving(tmp_path, store_url) as server, clinicians(server) as everyone:
        time.sleep(1)
        for one in everyone:
            one.may_be_stopped.set()
        first, second = server.workers()
        os.kill(first, signal.SIGKILL)
        server.wait_until(lambda: len(server.workers()) == 2 and first not in server.workers())
        answered = [one.answered for one in everyone]
        server.wait_until(lambda: all(one.answered > before for one, before in zip(everyone, answered, strict=True)))
        orphans = server.workers()
        assert second in orphans  # the other worker went on
        server.process.kill()
        server.process.wait()
        server.wait_until(lambda: not any(Path(f"/proc/{pid}").exists() for pid in orphans))
    problems = [problem for one in everyone for problem in one.wrong]
    assert problems == []
    assert assert_every_acknowledged_reply_is_kept_once(store_url, everyone) > 0
    with serving(tmp_path, store_url) as again:
        identity = next(identity for one in everyone for identity in one.acknowledged if identity != "of-all")
        status, answer = again.ask("GET", f"/v1/patients/{identity}/cards")
        assert status == 200
        assert [reply["code"] for card in answer["cards"] for reply in card["replies"]] == ["accepted"]


HEAD = b"POST /v1/assessments HTTP/1.1\r\nHost: a\r\nContent-Type: application/json\r\nContent-Length: 2000\r\n"
SLOW = {
    "half a line and no more": (b"POST /v1/asse", b""),
    "headers that never end": (HEAD, b"X: y\r\n"),
    "a body that stops": (HEAD + b"\r\n{", b""),
    "a body in drops": (HEAD + b"\r\n{", b" "),
    "a body in pieces that stops": (
        HEAD.replace(b"Content-Length: 2000", b"Transfer-Encoding: chunked") + b"\r\n1\r\n{",
        b"",
    ),
}


def test_slow_senders_are_let_go_and_do_not_keep_others_waiting(tmp_path):
    with serving(tmp_path, f"sqlite:///{tmp_path / 'store.db'}", REQUEST_SECONDS=3) as server:
        began = time.monotonic()
        slow = {name: socket.create_connection(("127.0.0.1", server.port), timeout=0.2) for name in SLOW}
        ended: dict[str, bytes] = {}
        for name, connection in slow.items():
            connection.sendall(SLOW[name][0])
        longest = 0.0
        while len(ended) < len(slow) and time.monotonic() < began + 10:
            for name in slow.keys() - ended.keys():
                with suppress(OSError):
                    slow[name].sendall(SLOW[name][1])
                with suppress(TimeoutError):
                    try:
                        ended[name] = slow[name].recv(4096)
                    except ConnectionResetError:
                        ended[name] = b""
            asked = time.monotonic()
            assert server.ask("POST", "/v1/assessments", chart_of("p1"))[0] == 200
            longest = max(longest, time.monotonic() - asked)
        assert ended.keys() == slow.keys(), f"still held: {slow.keys() - ended.keys()}"
        assert longest < 2.5, f"another client waited {longest:.1f} s"
        assert all(answer == b"" or answer.startswith((b"HTTP/1.1 408", b"HTTP/1.1 400")) for answer in ended.values())
        assert ended["a body that stops"].startswith(b"HTTP/1.1 408")
        for connection in slow.values():
            connection.close()


NO_HTTP = [
    (b"GET /v1/patients/mrn-4711/cards\r\n\r\n", 400),
    (b"GET /healthz HTTP/1.1\r\nmrn-4711 header\r\n\r\n", 400),
    (b"GET /" + b"mrn-4711/" * 300 + b" HTTP/1.1\r\n\r\n", 414),
    (b"GET /healthz HTTP/1.1\r\nX: " + b"mrn-4711" * 2000 + b"\r\n\r\n", 431),
    (b"GET /healthz HTTP/1.1\r\nTransfer-Encoding: mrn-4711\r\n\r\n", 501),
]


def test_memory_does_not_grow_counts_add_up_and_what_is_no_http_is_answered_and_not_repeated(tmp_path):
    several_thousand_requests(tmp_path, 2_000)


@pytest.mark.deep
def test_memory_does_not_grow_over_ten_thousand_requests(tmp_path):
    several_thousand_requests(tmp_path, 10_000)


def several_thousand_requests(folder: Path, times: int) -> None:
    with serving(folder, f"sqlite:///{folder / 'store.db'}") as server:
        draft = order("ibuprofen", 400, 3, since="2026-02-28", status="draft")
        data = bundle(patient(), problem("heart failure", "2025-01-15"), lvef(30, "2025-11-20"), draft)

        def ask_often(count: int) -> None:
            for _ in range(count // 2):  # on connections of their own, so that each worker gets its share
                assert server.ask("POST", "/v1/order-checks", data)[0] == 200
                assert server.ask("POST", "/v1/records", data)[0] == 200

        def ask_at_once(count: int) -> None:
            threads = [threading.Thread(target=ask_often, args=(count // CLIENTS,)) for _ in range(CLIENTS)]
            for thread in threads:
                thread.start()
            for thread in threads:
                thread.join()

        ask_at_once(400)  # what every worker comes to need once
        before = {pid: own_mib(pid) for pid in server.workers()}
        ask_at_once(times)
        grown = {pid: own_mib(pid) - before[pid] for pid in server.workers()}
        print(f"\nworkers grew by {', '.join(f'{mib:.1f}' for mib in grown.values())} MiB over {times} requests")
        assert max(grown.values()) < 4
        for sent, status in NO_HTTP:
            with closing(socket.create_connection(("127.0.0.1", server.port), timeout=5)) as connection:
                connection.sendall(sent)
                with closing(http.client.HTTPResponse(connection)) as response:
                    response.begin()
                    told = response.read()
                    assert (response.status, response.getheader("Content-Type")) == (status, "application/problem+json")
                    assert b"mrn-4711" not in told
        assert "mrn-4711" not in server.text()
        _, metrics = server.ask("GET", "/metrics")
        counted = {
            tuple(sample.labels.values()): sample.value
            for family in text_string_to_metric_families(metrics.decode())
            for sample in family.samples
            if sample.name == "gdmt_cards_requests_total"
        }
        assert counted[("/v1/order-checks", "200")] == counted[("/v1/records", "200")] == (400 + times) // 2


def own_mib(pid: int) -> float:
    """The memory of a process that is no file's, in MiB."""
    rows = Path(f"/proc/{pid}/smaps_rollup").read_text().splitlines()
    return next(int(row.split()[1]) for row in rows if row.startswith("Anonymous:")) / 1024


def test_a_wrong_site_profile_keeps_the_server_from_starting_and_the_message_says_where(tmp_path):
    profile = tmp_path / "ward.toml"
    profile.write_text('[tiers]\n"start-mra.stat" = "danger"\n')
    environ = {
        **os.environ,
        "GDMT_CARDS_SITE": str(profile),
        "GDMT_CARDS_STORE_URL": f"sqlite:///{tmp_path / 'store.db'}",
    }
    done = subprocess.run(
        [sys.executable, "-m", "cds", "serve"], env=environ, capture_output=True, text=True, timeout=60
    )
    assert done.returncode != 0
    assert done.stderr.startswith("gdmt-cards: ward.toml: site: is missing")
    assert "Traceback" not in done.stderr
    assert "server_listens" not in done.stdout
    assert not (tmp_path / "store.db").exists()
