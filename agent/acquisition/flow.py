"""Small parts every source is built from: its queue, its waits between attempts, its clock offset."""

import asyncio
import math
import random
from collections import deque

from agent.records import Reading

# Larger than the 5,000 messages that may wait for acknowledgement, so that an MQTT 5 source never overflows.
QUEUE_SIZE = 10_000
BATCH_SIZE = 1_000


class ReadingQueue:
    """Readings between a source and the pipeline. Overflow policy: the OLDEST reading is dropped, counted.

    A dropped reading's message stays unacknowledged, so a broker with a session delivers it once more
    after the next reconnect. All calls come from the event loop.
    """

    def __init__(self, size: int = QUEUE_SIZE) -> None:
        if size < 1:
            raise ValueError("a queue holds at least one reading")
        self._readings: deque[Reading] = deque()
        self._size = size
        self._ready = asyncio.Event()
        self._closed = False
        self.dropped = 0

    def put(self, reading: Reading) -> None:
        if len(self._readings) >= self._size:
            self._readings.popleft()
            self.dropped += 1
        self._readings.append(reading)
        self._ready.set()

    def close(self) -> None:
        """No more readings come; what is left can still be taken."""
        self._closed = True
        self._ready.set()

    async def take(self) -> tuple[Reading, ...]:
        """Wait for readings and take what is there; empty only when the queue is closed and drained."""
        await self._ready.wait()
        batch = tuple(self._readings.popleft() for _ in range(min(BATCH_SIZE, len(self._readings))))
        if not self._readings and not self._closed:
            self._ready.clear()
        return batch


class Backoff:
    """Waits between attempts: double up to a cap, with jitter; start over after a connection that held."""

    def __init__(self, *, first_s: float = 0.5, cap_s: float = 10.0, held_s: float = 10.0) -> None:
        if not 0 < first_s <= cap_s:
            raise ValueError("the first wait is above zero and not above the cap")
        self._first_s = first_s
        self._cap_s = cap_s
        self._held_s = held_s
        self._jitter = random.Random()  # noqa: S311 - spreads attempts in time, keeps no secret
        self.reset()

    def reset(self) -> None:
        self._attempts = 0

    def wait_s(self, *, connected_s: float) -> float:
        """Seconds to wait after a connection that held for ``connected_s`` (0 if none came about)."""
        if connected_s >= self._held_s:
            self.reset()
        full = min(self._cap_s, self._first_s * 2.0 ** min(self._attempts, 30))
        self._attempts += 1
        return full * self._jitter.uniform(0.5, 1.0)


class ClockOffset:
    """Received less source time of a source: the smallest of the last one to two windows.

    The smallest, not the mean: messages that waited in a broker's queue are late for another reason.
    """

    def __init__(self, *, window_s: float = 30.0) -> None:
        self._window_s = window_s
        self.reset()

    def reset(self) -> None:
        self._start = -math.inf
        self._current = math.inf
        self._previous = math.inf

    def update(self, received_time: float, source_time: float) -> None:
        if not 0 <= received_time - self._start < self._window_s:
            self._previous, self._current = self._current, math.inf
            self._start = received_time
        self._current = min(self._current, received_time - source_time)

    @property
    def value_s(self) -> float:
        smallest = min(self._current, self._previous)
        return smallest if math.isfinite(smallest) else math.nan
