"""Receipts of readings whose tick is not committed yet."""

import heapq
import itertools
from collections.abc import Iterable

from agent.records import Reading, Receipt


class HeldReceipts:
    """Holds each receipt until the tick that holds its reading is committed.

    A reading is held by the first whole second at or after its source time. A late reading is not held here:
    it is committed at once by the late-data path, and its receipt acknowledged after that commit.
    """

    def __init__(self) -> None:
        self.reset()

    def reset(self) -> None:
        self._heap: list[tuple[float, int, Receipt]] = []
        self._order = itertools.count()

    def __len__(self) -> int:
        return len(self._heap)

    def hold(self, readings: Iterable[Reading]) -> None:
        for reading in readings:
            if reading.receipt is not None:
                heapq.heappush(self._heap, (reading.source_time, next(self._order), reading.receipt))

    def release(self, committed_tick: int) -> tuple[Receipt, ...]:
        """Receipts of readings up to the committed tick, oldest first; call it after the commit."""
        released = []
        while self._heap and self._heap[0][0] <= committed_tick:
            released.append(heapq.heappop(self._heap)[2])
        return tuple(released)
