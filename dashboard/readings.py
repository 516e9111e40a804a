"""The newest stored row of a unit, by series name, and since when a series has had no usable number."""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Final, Protocol

from agent.records import DerivedRow, Frame, Quality
from agent.storage.series import Columns, SeriesRange
from dashboard.wording import usable

LOOK_BACK_S: Final = 3600  # how far "since when" is searched in stored rows


class RangeReader(Protocol):
    """The part of the series store that looks back."""

    def range(self, unit: str, names: Sequence[str], start: int, stop: int) -> SeriesRange: ...


@dataclass(frozen=True, slots=True, kw_only=True)
class Row:
    """Inputs and results of one unit at one tick, in SI, NaN where there is none."""

    unit: str
    tick: int
    configuration: int
    values: Mapping[str, float]
    quality: Mapping[str, int]
    frame: Frame
    input_names: tuple[str, ...]

    def value(self, name: str) -> float:
        return self.values.get(name, math.nan)

    def code(self, name: str) -> int:
        return self.quality.get(name, int(Quality.NEVER))

    def usable(self, name: str) -> bool:
        return usable(self.code(name)) and math.isfinite(self.value(name))


def row_of(columns: Columns, frame: Frame, derived: DerivedRow) -> Row:
    inputs = tuple(c.name for c in columns.inputs)
    names = (*inputs, *(c.name for c in columns.results))
    values = (*frame.values.tolist(), *derived.values.tolist())
    quality = (*frame.quality.tolist(), *derived.quality.tolist())
    # A column registered between two reads is longer than the row: it has its number at the next tick.
    return Row(
        unit=frame.unit, tick=frame.tick, configuration=derived.configuration,
        values=dict(zip(names, values, strict=False)),
        quality=dict(zip(names, quality, strict=False)),
        frame=frame, input_names=inputs,
    )  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True)
class Onset:
    """Since when. ``exact`` is false where the search ended before the onset was met."""

    tick: int
    exact: bool


class Blindness:
    """Remembers since when each series of one unit has had no usable number."""

    def __init__(self, unit: str) -> None:
        self._unit = unit
        self.reset()

    def reset(self) -> None:
        self._onsets: dict[str, Onset] = {}
        self._last_tick: int | None = None

    def since(self, name: str) -> Onset | None:
        return self._onsets.get(name)

    def update(self, row: Row, reader: RangeReader) -> None:
        """Take in the newest row; after a start or a jump in time the stored rows are searched."""
        blind = [name for name in row.quality if not row.usable(name)]
        known = self._last_tick is not None and 0 <= row.tick - self._last_tick <= 5
        if known:
            onsets = {n: self._onsets.get(n, Onset(tick=row.tick, exact=True)) for n in blind}
        else:
            onsets = self._search(row, blind, reader)
        self._onsets = onsets
        self._last_tick = row.tick

    def _search(self, row: Row, blind: Sequence[str], reader: RangeReader) -> dict[str, Onset]:
        wanted = [n for n in blind if row.code(n) != Quality.NO_LIMIT]
        if not wanted:
            return {}
        ticks, values, quality = reader.range(self._unit, wanted, row.tick - LOOK_BACK_S, row.tick + 1)
        if len(ticks) == 0:
            return {n: Onset(tick=row.tick, exact=False) for n in wanted}
        good = (quality <= int(Quality.UNCERTAIN)) & (values == values)  # noqa: PLR0124 - false for NaN
        onsets = {}
        for column, name in enumerate(wanted):
            last_good = good[:, column].nonzero()[0]
            first_bad = int(last_good[-1]) + 1 if len(last_good) else 0
            onsets[name] = Onset(tick=int(ticks[min(first_bad, len(ticks) - 1)]), exact=len(last_good) > 0)
        return onsets
