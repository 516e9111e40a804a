"""One path for all late data: readings that arrive after the tick that should have seen them.

It serves a reading that was a second too slow as well as a broker's queue after a restart, whose ticks were
never made. Each reading goes into every tick it would have been the last reading of, had it come in time; a
tick never made is made, its other inputs empty until their own late readings fill them. The result does not
depend on the order or grouping of arrival, and repeating a reading changes nothing.

Bounds, so that a commit stays short: a reading older than `WINDOW_S` before the last tick is refused and
counted. Filling older gaps is another job (a backfill), not done here.

An input sent only on change holds until its next reading, however old. Such a reading goes into the ticks
stored since, and makes ticks only within its stale limit; a tick made later takes the word over from the
nearest stored tick before it.
"""

import dataclasses
import math
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from agent.manipulation.verdict import verdict
from agent.records import Frame, Quality, Reading
from agent.siteplan.plan import Input, UnitPlan

WINDOW_S = 900

# Stored ages are float32. Their rounding grows with age: 8e-6 s at 100 s, 0.25 s at a month.
_TIME_TOLERANCE_S = 0.002
_FLOAT32_STEP = 2.0**-23


class StoredFrames(Protocol):
    def frame(self, unit: str, tick: int) -> Frame | None:
        """The committed frame of that tick, if there is one."""
        ...


@dataclass(frozen=True, slots=True, kw_only=True)
class LateChange:
    frames: tuple[Frame, ...]  # to insert or replace, by tick
    refused: int  # readings too old for this path


def late_change(
    plan: UnitPlan, readings: Iterable[Reading], stored: StoredFrames, last_tick: int
) -> LateChange:
    """Frames of one unit that late readings change or make, up to ``last_tick``.

    ``last_tick`` is the last tick of the live path: committed, or slept through before the agent started.
    Readings of other units are passed over.
    """
    draft = _Draft(plan, stored, last_tick)
    refused = 0
    places: dict[tuple[str, str], list[int]] = {}
    for place, entry in enumerate(plan.inputs):
        places.setdefault((entry.source, entry.address), []).append(place)
    for reading in sorted(readings, key=lambda r: r.source_time):
        for place in places.get((reading.source, reading.address), ()):
            refused += not draft.apply(place, reading)
    return LateChange(frames=draft.changed(), refused=refused)


class _Draft:
    """The stored frames as the readings so far have changed them."""

    def __init__(self, plan: UnitPlan, stored: StoredFrames, last_tick: int) -> None:
        self._plan = plan
        self._stored = stored
        self._last_tick = last_tick
        self._frames: dict[int, Frame | None] = {}
        self._changed: set[int] = set()

    def changed(self) -> tuple[Frame, ...]:
        return tuple(f for t in sorted(self._changed) if (f := self._frames[t]) is not None)

    def apply(self, place: int, reading: Reading) -> bool:
        """Put a reading where it belongs; False if it is too old to be put anywhere."""
        entry = self._plan.inputs[place]
        oldest = self._last_tick - WINDOW_S
        if reading.source_time < oldest and not entry.on_change:
            return False
        value, quality = verdict(self._plan, entry, reading)
        for tick in self._ticks(entry, reading.source_time, max(math.ceil(reading.source_time), oldest)):
            frame = self._at(tick)
            if frame is not None and _is_newer(reading.source_time, frame, place):
                self._write(frame, place, value, quality, tick - reading.source_time)
        return True

    def _ticks(self, entry: Input, source_time: float, first: int) -> Iterator[int]:
        """Ticks that may see a reading; those within its stale limit are made where missing."""
        for tick in range(first, self._last_tick + 1):
            if tick - source_time <= entry.stale_after_s:
                if self._at(tick) is None:
                    self._make(tick)
            elif not entry.on_change:
                return
            yield tick

    def _at(self, tick: int) -> Frame | None:
        if tick not in self._frames:
            self._frames[tick] = self._stored.frame(self._plan.id, tick)
        return self._frames[tick]

    def _make(self, tick: int) -> None:
        count = len(self._plan.inputs)
        frame = Frame(
            unit=self._plan.id,
            tick=tick,
            values=np.full(count, np.nan, dtype=np.float32),
            quality=np.full(count, Quality.NEVER, dtype=np.uint8),
            ages=np.full(count, np.nan, dtype=np.float32),
        )
        held = [place for place, entry in enumerate(self._plan.inputs) if entry.on_change]
        before = self._nearest_before(tick) if held else None
        if before is not None:
            frame.values[held] = before.values[held]
            frame.quality[held] = before.quality[held]
            frame.ages[held] = before.ages[held] + np.float32(tick - before.tick)
        self._frames[tick] = frame
        self._changed.add(tick)

    def _nearest_before(self, tick: int) -> Frame | None:
        return next((f for t in range(tick - 1, tick - WINDOW_S, -1) if (f := self._at(t)) is not None), None)

    def _write(self, frame: Frame, place: int, value: float, quality: Quality, age: float) -> None:
        changed = dataclasses.replace(
            frame, values=frame.values.copy(), quality=frame.quality.copy(), ages=frame.ages.copy()
        )
        changed.values[place] = value
        changed.quality[place] = quality
        changed.ages[place] = age
        self._frames[frame.tick] = changed
        self._changed.add(frame.tick)


def _is_newer(source_time: float, frame: Frame, place: int) -> bool:
    """Whether a reading is strictly newer than the one the frame holds."""
    age = float(frame.ages[place])
    if math.isnan(age):
        return True
    return source_time - (frame.tick - age) > _TIME_TOLERANCE_S + age * _FLOAT32_STEP
