"""Readings of one unit to one frame per tick.

The tick rule: at tick t (a whole UTC second) an input is its last reading with source time at or before t,
no older than its stale limit. An input sent only when it changes has no such limit while its source is up.
Readings newer than t are not looked at, so a frame for a second already past comes out as it would have then.
"""

import bisect
import math
from collections.abc import Collection, Iterable
from dataclasses import dataclass

import numpy as np

from agent.manipulation.verdict import verdict
from agent.records import Frame, Quality, Reading
from agent.siteplan.plan import Input, UnitPlan

HISTORY_S = 120  # how far back a frame can still be built exactly


@dataclass(frozen=True, slots=True, kw_only=True)
class _Sample:
    source_time: float
    value: float  # SI, float32 precision
    quality: Quality


class _Track:
    """The last reading of one input in each whole second, for the last `HISTORY_S` seconds.

    A frame sees nothing of what lies between two ticks but the last reading, so no more is kept. The newest
    reading before that span stays as well: an input sent on change may be valid for days.
    """

    __slots__ = ("_samples", "_ticks")

    def __init__(self) -> None:
        self._ticks: list[int] = []  # ascending; first tick that sees the sample of the same place
        self._samples: list[_Sample] = []

    def put(self, sample: _Sample) -> None:
        tick = math.ceil(sample.source_time)
        place = bisect.bisect_left(self._ticks, tick)
        if place < len(self._ticks) and self._ticks[place] == tick:
            # Of two with the same source time the first stays: a repeat changes nothing.
            if sample.source_time > self._samples[place].source_time:
                self._samples[place] = sample
            return
        self._ticks.insert(place, tick)
        self._samples.insert(place, sample)
        self._prune()

    def _prune(self) -> None:
        keep_from = bisect.bisect_right(self._ticks, self._ticks[-1] - HISTORY_S) - 1
        if keep_from > 0:
            del self._ticks[:keep_from]
            del self._samples[:keep_from]

    def at(self, tick: int) -> _Sample | None:
        place = bisect.bisect_right(self._ticks, tick)
        return self._samples[place - 1] if place else None


class FrameBuilder:
    """Remembers recent readings of one unit and builds its frames."""

    def __init__(self, plan: UnitPlan) -> None:
        self._plan = plan
        self._places: dict[tuple[str, str], list[int]] = {}
        for place, entry in enumerate(plan.inputs):
            self._places.setdefault((entry.source, entry.address), []).append(place)
        self.reset()

    def reset(self) -> None:
        self._tracks = [_Track() for _ in self._plan.inputs]

    def accept(self, readings: Iterable[Reading], last_committed_tick: int | None) -> tuple[Reading, ...]:
        """Take in readings; those of other units are passed over.

        Returns
        -------
        tuple of Reading
            The late ones: a committed tick (or one that the agent slept through) should have seen them. They
            count for the frames to come all the same.
        """
        late = []
        for reading in readings:
            places = self._places.get((reading.source, reading.address))
            if places is None:
                continue
            for place in places:
                value, quality = verdict(self._plan, self._plan.inputs[place], reading)
                sample = _Sample(source_time=reading.source_time, value=value, quality=quality)
                self._tracks[place].put(sample)
            if last_committed_tick is not None and reading.source_time <= last_committed_tick:
                late.append(reading)
        return tuple(late)

    def frame(self, tick: int, sources_up: Collection[str]) -> Frame:
        """All inputs at ``tick``; ``sources_up`` names the sources whose connection is up."""
        count = len(self._plan.inputs)
        values = np.full(count, np.nan, dtype=np.float32)
        quality = np.zeros(count, dtype=np.uint8)
        ages = np.full(count, np.nan, dtype=np.float32)
        for place, (entry, track) in enumerate(zip(self._plan.inputs, self._tracks, strict=True)):
            sample = track.at(tick)
            is_up = entry.source in sources_up
            quality[place] = _quality(entry, sample, tick, source_is_up=is_up)
            if sample is None:
                continue
            ages[place] = tick - sample.source_time
            if quality[place] <= Quality.UNCERTAIN:
                values[place] = sample.value
        return Frame(unit=self._plan.id, tick=tick, values=values, quality=quality, ages=ages)


def _quality(entry: Input, sample: _Sample | None, tick: int, *, source_is_up: bool) -> Quality:
    if sample is None:
        return Quality.NEVER if source_is_up else Quality.SOURCE_LOST
    if entry.on_change:
        return sample.quality if source_is_up else Quality.SOURCE_LOST
    if tick - sample.source_time <= entry.stale_after_s:
        return sample.quality
    return Quality.STALE if source_is_up else Quality.SOURCE_LOST
