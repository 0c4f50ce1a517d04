"""How often one caller may ask: a bucket of tokens for each caller, kept by each worker for itself."""

from __future__ import annotations

import math
from collections import OrderedDict
from collections.abc import Callable
from dataclasses import dataclass
from threading import Lock

# Far more callers than a health system has systems that ask; each takes some 200 bytes.
MOST_CALLERS = 10_000


@dataclass(slots=True)
class _Bucket:
    tokens: float
    filled_at: float


class Rate:
    """Allows each caller `a_minute` requests at once, and as many again with every minute that passes.

    Workers do not share their counts, so a service of several workers allows up to that many times as much: a limit
    against a caller gone wild, not a quota. `clock` gives seconds that never go back. Safe to share between threads.
    """

    def __init__(self, a_minute: int, *, clock: Callable[[], float], most_callers: int = MOST_CALLERS) -> None:
        if a_minute < 1 or most_callers < 1:
            raise ValueError("a rate needs at least one request a minute and one caller")
        self._full = float(a_minute)
        self._a_second = a_minute / 60
        self._clock, self._most_callers = clock, most_callers
        self._buckets: OrderedDict[str, _Bucket] = OrderedDict()  # the longest unheard of first
        self._lock = Lock()

    def wait(self, caller: str) -> float | None:
        """Count a request. None: go on; else the whole seconds, at least one, after which the caller may ask again.

        A request that has to wait is not counted.
        """
        with self._lock:
            bucket = self._filled(caller)
            if bucket.tokens >= 1:
                bucket.tokens -= 1
                return None
            return float(max(1, math.ceil((1 - bucket.tokens) / self._a_second)))

    def __len__(self) -> int:
        """How many callers are remembered."""
        return len(self._buckets)

    def _filled(self, caller: str) -> _Bucket:
        now = self._clock()
        bucket = self._buckets.get(caller)
        if bucket is None:
            if len(self._buckets) >= self._most_callers:
                self._buckets.popitem(last=False)  # the fullest, or nearly: it had the longest time to fill
            bucket = self._buckets[caller] = _Bucket(self._full, now)
            return bucket
        self._buckets.move_to_end(caller)
        bucket.tokens = min(self._full, bucket.tokens + (now - bucket.filled_at) * self._a_second)
        bucket.filled_at = now
        return bucket
