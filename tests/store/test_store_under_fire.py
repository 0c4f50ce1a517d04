"""Many writers, killed writers, forked writers: nothing acknowledged is lost, nothing is kept twice or by half."""

from __future__ import annotations

import os
import subprocess
import sys
import threading
import uuid
from collections import Counter
from contextlib import closing
from datetime import UTC, date, datetime
from pathlib import Path

import pytest
from sqlalchemy import create_engine, text

from cds.cards.replies import Reply
from cds.store import ShownCard, Store, open_store

SECRET = b"a secret for tests, 32 bytes long"
WRITER = Path(__file__).parent / "reply_writer.py"
PATIENT = "Patient/one"


def writer(url: str, count: int, *ids: str) -> subprocess.Popen[str]:
    return subprocess.Popen(
        [sys.executable, str(WRITER), url, PATIENT, str(count), *ids],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )


def kept_ids(url: str) -> list[str]:
    engine = create_engine(url)
    try:
        with engine.connect() as connection:
            return list(connection.scalars(text("SELECT id FROM replies")))
    finally:
        engine.dispose()


def test_two_processes_writing_200_replies_at_once_lose_none_and_double_none(store: Store, store_url: str):
    shared = [str(uuid.uuid4()) for _ in range(100)]  # both send these: a client that tries again elsewhere
    writers = [writer(store_url, 0, *shared, *(str(uuid.uuid4()) for _ in range(100))) for _ in range(2)]
    said = [process.communicate("go\n", timeout=100) for process in writers]
    assert [err for _, err in said] == ["", ""]
    acknowledged = [out.split()[1:] for out, _ in said]
    assert [len(ids) for ids in acknowledged] == [200, 200]
    assert Counter(kept_ids(store_url)) == Counter(set(acknowledged[0]) | set(acknowledged[1]))
    assert len(store.replies_of(PATIENT)) == 300
    assert len(store.shown_to(PATIENT)) == 20


def test_a_writer_killed_in_the_middle_loses_nothing_acknowledged_and_leaves_nothing_by_half(store_url: str):
    acknowledged: list[str] = []
    for stop_after in (1, 7, 40):
        process = writer(store_url, 10_000)
        assert process.stdin is not None
        assert process.stdout is not None
        assert process.stderr is not None
        assert process.stdout.readline() == "ready\n"
        process.stdin.write("go\n")
        process.stdin.flush()
        acknowledged += [process.stdout.readline().strip() for _ in range(stop_after)]
        process.kill()
        rest, _ = process.communicate(timeout=30)
        acknowledged += rest.splitlines()  # said before the kill; a line without its end counts only if whole
    whole = {reply_id for reply_id in acknowledged if len(reply_id) == 36}
    assert len(whole) >= 48
    kept = kept_ids(store_url)
    assert whole <= set(kept)
    assert len(kept) == len(set(kept))
    assert len(kept) <= len(whole) + 3  # at most the one under way at each kill
    with closing(open_store(store_url, secret=SECRET)) as store:
        assert store.is_ready()
        replies = store.replies_of(PATIENT)  # every row opens whole
        assert len(replies) == len(kept)
        assert {reply.text for reply in replies} == {"a reason written out at length " * 20}
        store.add_reply(PATIENT, replies[0])
        assert len(store.replies_of(PATIENT)) == len(kept) + 1


def test_threads_of_one_store_may_repeat_one_call_and_it_is_kept_once(store: Store):
    reply_id = str(uuid.uuid4())
    answers: list[str] = []

    def send() -> None:
        answers.append(store.add_reply(PATIENT, _reply(1), reply_id=reply_id))
        store.note_shown(PATIENT, _cards(), date(2026, 3, 1))

    threads = [threading.Thread(target=send) for _ in range(16)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(timeout=30)
    assert answers == [reply_id] * 16
    assert store.replies_of(PATIENT) == (_reply(1),)
    assert len(store.shown_to(PATIENT)) == 5


FORKING = """
import os, sys
from datetime import UTC, datetime
from cds.cards.replies import Reply
from cds.store import open_store

def reply(name):
    return Reply(card_id=name, rule="start-mra", about=None, code="accepted", facts="0", made_at=datetime(2026, 3, 1, tzinfo=UTC))

store = open_store(sys.argv[1], secret=b"a secret for tests, 32 bytes long")
store.migrate()
store.add_reply("Patient/one", reply("before"))
children = []
for child in range(3):
    pid = os.fork()
    if pid == 0:
        for number in range(20):
            store.add_reply("Patient/one", reply(f"child-{child}-{number}"))
        store.close()
        sys.exit(0)
    children.append(pid)
for number in range(20):
    store.add_reply("Patient/one", reply(f"parent-{number}"))
assert [os.waitpid(pid, 0)[1] for pid in children] == [0, 0, 0]
assert len(store.replies_of("Patient/one")) == 81, len(store.replies_of("Patient/one"))
store.close()
"""


@pytest.mark.skipif(not hasattr(os, "fork"), reason="needs fork")
def test_a_store_in_use_before_a_fork_works_in_the_parent_and_in_every_child(store_url: str):
    done = subprocess.run(
        [sys.executable, "-X", "dev", "-c", FORKING, store_url], capture_output=True, text=True, timeout=60, check=False
    )
    assert (done.returncode, done.stderr) == (0, "")


def test_a_server_that_dropped_our_connections_is_reached_again(store: Store, store_url: str):
    if store_url.startswith("sqlite"):
        pytest.skip("a file has no connections to drop")
    name = uuid.uuid4().hex
    with closing(open_store(f"{store_url}&application_name={name}", secret=SECRET)) as named:
        named.add_reply(PATIENT, _reply(1))
        engine = create_engine(store_url)
        with engine.begin() as connection:
            drop = text("SELECT pg_terminate_backend(pid) FROM pg_stat_activity WHERE application_name = :name")
            dropped = connection.scalars(drop, {"name": name}).all()
        engine.dispose()
        assert dropped == [True]
        assert named.replies_of(PATIENT) == (_reply(1),)


def _reply(number: int) -> Reply:
    return Reply(
        card_id=f"c{number}",
        rule="start-mra",
        about="mra",
        code="accepted",
        facts="0123",
        made_at=datetime(2026, 3, 1, tzinfo=UTC),
    )


def _cards() -> list[ShownCard]:
    return [
        ShownCard(card_id=f"c{number}", rule="start-mra", about="mra", tier="act", facts="0123") for number in range(5)
    ]
