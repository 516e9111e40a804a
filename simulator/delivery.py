"""What a source's link does between sampling and sending: late, out of order, by a wrong clock, or lost.

Pure: samples and the state of the link in, samples to send out; ``now`` is an argument. Whoever owns the wire
cuts it while the link is lost and restores it before sending what comes afterwards.
"""

import heapq
import random
from collections import deque
from collections.abc import Sequence
from dataclasses import replace
from typing import Final

from simulator.instrument_faults import LinkState
from simulator.sample import Sample

SHUFFLE_S: Final = 3.0  # by so much at most samples of a shuffled link change places
KEPT: Final = 100_000  # samples waiting at one link, some 10 MB; the oldest give way
CATCH_UP: Final = 10  # what a link carries of its past beside each lot of the present, in lots


class Delivery:
    """The link of one source.

    Parameters
    ----------
    seed : str
        Of the disorder.
    catch_up : int or None
        How many past lots go beside each present one once a lost link is back; None for all at once.
    kept : int
        Samples that may wait; what is older is lost.
    """

    def __init__(self, seed: str, *, catch_up: int | None = CATCH_UP, kept: int = KEPT) -> None:
        if kept < 1 or (catch_up is not None and catch_up < 1):
            raise ValueError("a link keeps and catches up at least one")
        self._seed = seed
        self._catch_up = catch_up
        self._room = kept
        self.reset()

    def reset(self) -> None:
        self._chance = random.Random(self._seed)
        self._under_way: list[tuple[float, int, Sample]] = []  # a heap: due, number, sample
        self._number = 0
        self._kept: deque[Sample] = deque(maxlen=self._room)
        self.dropped = 0  # lost for good

    @property
    def waiting(self) -> int:
        return len(self._under_way) + len(self._kept)

    def update(self, now: float, samples: Sequence[Sample], link: LinkState) -> Sequence[Sample]:
        """Take in what is sampled now; return what goes on the wire now, in the order of sending.

        Parameters
        ----------
        now : float
            The instant [s].
        samples : Sequence[Sample]
            One lot: what was sampled at this instant.
        link : LinkState
            What the link does at this instant.

        Returns
        -------
        Sequence[Sample]
            Nothing while the link is lost. What was kept meanwhile comes marked as historical, with the times
            it always had, before the present samples.
        """
        for sample in samples:
            dated = replace(sample, time=sample.time + link.skew_s) if link.skew_s else sample
            disorder = self._chance.uniform(0.0, SHUFFLE_S) if link.shuffled else 0.0
            self._number += 1
            heapq.heappush(self._under_way, (now + link.delay_s + disorder, self._number, dated))
        while len(self._under_way) > self._room:
            heapq.heappop(self._under_way)
            self.dropped += 1
        arrived = []
        while self._under_way and self._under_way[0][0] <= now:
            arrived.append(heapq.heappop(self._under_way)[2])
        if not link.lost:
            return [*self._past(len(samples)), *arrived]
        if link.buffered:
            self.dropped += max(0, len(self._kept) + len(arrived) - self._room)
            self._kept.extend(replace(sample, historical=True) for sample in arrived)
        else:
            self.dropped += len(arrived)
        return []

    def _past(self, lot: int) -> list[Sample]:
        count = len(self._kept)
        if self._catch_up is not None:
            count = min(count, self._catch_up * max(lot, 1))
        return [self._kept.popleft() for _ in range(count)]
