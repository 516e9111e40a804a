"""The small line of the Site page: how one margin moved over the last day, minute by minute."""

import math
from dataclasses import dataclass, field
from typing import Final

import numpy as np
from numpy.typing import NDArray

from dashboard.readings import RangeReader

MINUTE_S: Final = 60
DAY_MINUTES: Final = 24 * 60
POINTS: Final = 60
REFRESH_S: Final = 15
_SPANS: Final = ((15, "15 min"), (60, "1 h"), (240, "4 h"))
_DAY: Final = (DAY_MINUTES, "24 h")
_REMEMBERED: Final = 8  # series a unit; the smallest margin changes its name now and then


@dataclass(frozen=True, slots=True, kw_only=True)
class Line:
    """Smallest value of each step of the span, oldest first; NaN where nothing was stored."""

    span: str
    values: NDArray[np.float64]


@dataclass(slots=True)
class _Minutes:
    lowest: dict[int, float] = field(default_factory=dict)
    read_until: int | None = None  # first tick not yet read for good


class DayLines:
    """Remembers the lowest value of each minute of the series it was asked for, of one unit."""

    def __init__(self, unit: str) -> None:
        self._unit = unit
        self.reset()

    def reset(self) -> None:
        self._series: dict[str, _Minutes] = {}

    def line(self, name: str, tick: int, reader: RangeReader) -> Line | None:
        """The line that ends at ``tick``; None while less than two minutes are stored."""
        minutes = self._series.pop(name, None) or _Minutes()
        self._series[name] = minutes  # the newest last
        while len(self._series) > _REMEMBERED:
            del self._series[next(iter(self._series))]
        self._read(minutes, name, tick, reader)
        return _line(minutes.lowest, tick // MINUTE_S)

    def _read(self, minutes: _Minutes, name: str, tick: int, reader: RangeReader) -> None:
        oldest = (tick // MINUTE_S - DAY_MINUTES + 1) * MINUTE_S
        last_whole = tick // MINUTE_S * MINUTE_S
        start = minutes.read_until
        if start is None or start > tick or start < oldest:
            minutes.lowest.clear()
            start = oldest
        elif tick - start < REFRESH_S:
            return
        ticks, values, _ = reader.range(self._unit, [name], start // MINUTE_S * MINUTE_S, tick + 1)
        column = values[:, 0]
        seen = np.isfinite(column)
        at, low = ticks[seen] // MINUTE_S, column[seen]
        for minute in np.unique(at).tolist():
            minutes.lowest[minute] = float(low[at == minute].min())
        for minute in [m for m in minutes.lowest if m * MINUTE_S < oldest]:
            del minutes.lowest[minute]
        minutes.read_until = max(last_whole, tick)


def _line(lowest: dict[int, float], now_minute: int) -> Line | None:
    if not lowest or now_minute - min(lowest) < 1:
        return None
    held = now_minute - min(lowest) + 1
    length, span = next((s for s in _SPANS if s[0] >= held), _DAY)
    step = max(1, length // POINTS)
    first = now_minute - length + 1
    values = np.full(length // step, math.nan)
    for minute, low in lowest.items():
        place = (minute - first) // step
        if 0 <= place < len(values):
            values[place] = np.fmin(values[place], low)
    return Line(span=span, values=values)
