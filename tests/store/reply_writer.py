"""A program that writes replies and says on stdout which are acknowledged: URL PATIENT COUNT [ID ...].

With ids, these are written, in this order, with COUNT ignored. It first waits for a line on stdin, so that several start at once.
"""

from __future__ import annotations

import sys
import uuid
from datetime import UTC, datetime

from cds.cards.replies import Reply
from cds.store import ShownCard, open_store

SECRET = b"a secret for tests, 32 bytes long"


def main(url: str, patient: str, count: str, *ids: str) -> None:
    store = open_store(url, secret=SECRET)
    store.migrate()
    print("ready", flush=True)
    sys.stdin.readline()
    for number, reply_id in enumerate(ids or [str(uuid.uuid4()) for _ in range(int(count))]):
        reply = Reply(
            card_id=f"card-{number}",
            rule="start-mra",
            about="mra",
            code="declined",
            reason="other",
            text="a reason written out at length " * 20,
            facts="0123456789abcdef",
            made_at=datetime(2026, 3, 1, 9, 30, tzinfo=UTC),
        )
        store.note_shown(
            patient,
            [
                ShownCard(
                    card_id=f"card-{number % 20}", rule="start-mra", about="mra", tier="act", facts=f"{number:016x}"
                )
            ],
            reply.made_at.date(),
        )
        print(store.add_reply(patient, reply, reply_id=reply_id), flush=True)
    store.close()


if __name__ == "__main__":
    main(*sys.argv[1:])
