"""Reading the series store: from any process and any thread, in short read-only transactions."""

import math
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from agent.database import BUSY_TIMEOUT_S, ReadPool, UnknownSeriesError
from agent.records import DerivedRow, Frame, LinkState, SeriesDef, SourceStatus
from agent.storage.layout import ABSENT, DERIVED, INPUT, SCHEMA, UnitTables, columns_of, gather, number_of
from agent.storage.reduction import keep_extremes
from agent.storage.series import Columns, Configuration, SeriesRange

_NAN = np.array(np.nan, dtype="<f4").tobytes()
_ABSENT = bytes([ABSENT])


class SeriesReader:
    """What the store holds.

    Where no names are given, values come in stored order, which `columns` tells. It need not exist yet when
    a reader is made: every call before that raises `StoreMissingError`.
    """

    def __init__(self, path: Path, *, busy_timeout_s: float = BUSY_TIMEOUT_S) -> None:
        self._path = path
        self._pool = ReadPool(path, SCHEMA, busy_timeout_s=busy_timeout_s)

    def close(self) -> None:
        self._pool.close()

    def units(self) -> tuple[str, ...]:
        with self._pool.snapshot() as connection:
            return tuple(u for (u,) in connection.execute("SELECT id FROM unit ORDER BY n").fetchall())

    def columns(self, unit: str) -> Columns:
        """Stored columns of the unit; none for a unit that was never registered."""
        with self._pool.snapshot() as connection:
            return Columns(
                inputs=columns_of(connection, unit, INPUT), results=columns_of(connection, unit, DERIVED)
            )

    def last_tick(self, unit: str) -> int | None:
        with self._pool.snapshot() as connection:
            number = number_of(connection, unit)
            if number is None:
                return None
            (tick,) = connection.execute(UnitTables(number).newest_tick).fetchone()
        return None if tick is None else int(tick)

    def last(self, unit: str) -> tuple[Frame, DerivedRow] | None:
        """The newest tick that has both inputs and results."""
        with self._pool.snapshot() as connection:
            number = number_of(connection, unit)
            if number is None:
                return None
            inputs, results = columns_of(connection, unit, INPUT), columns_of(connection, unit, DERIVED)
            found = connection.execute(UnitTables(number).newest).fetchone()
        return None if found is None else _pair(unit, found, _all(inputs), _all(results))

    def frame(self, unit: str, tick: int) -> Frame | None:
        """The inputs of one tick, in stored order."""
        found, places = self._one(unit, tick, INPUT)
        return None if found is None else _frame(unit, found, places)

    def row(self, unit: str, tick: int) -> DerivedRow | None:
        """The results of one tick, in stored order. Inputs are kept longer: a frame may have none."""
        found, places = self._one(unit, tick, DERIVED)
        return None if found is None else _derived(unit, found, places)

    def rows(
        self, unit: str, start: int, stop: int, *, inputs: Sequence[str], results: Sequence[str]
    ) -> list[tuple[Frame, DerivedRow]]:
        """Ticks ``start <= t < stop`` that have both, values in the order of the names given."""
        with self._pool.snapshot() as connection:
            number = number_of(connection, unit)
            if number is None:
                raise UnknownSeriesError(self._path, f"holds no unit {unit}")
            input_places = self._places(unit, columns_of(connection, unit, INPUT), inputs)
            result_places = self._places(unit, columns_of(connection, unit, DERIVED), results)
            found = connection.execute(UnitTables(number).between, (start, stop)).fetchall()
        return [_pair(unit, row, input_places, result_places) for row in found]

    def range(
        self, unit: str, names: Sequence[str], start: int, stop: int, max_points: int | None = None
    ) -> SeriesRange:
        """Ticks (m,), values (m, names) with NaN for none and quality (m, names) of ``start <= t < stop``.

        With ``max_points`` only ticks that hold an extreme or the start of a gap of some series are returned,
        at most that many (or three for each series, if that is more).
        """
        with self._pool.snapshot() as connection:
            number = number_of(connection, unit)
            if number is None:
                raise UnknownSeriesError(self._path, f"holds no unit {unit}")
            columns = {
                kind: {c.name: c.index for c in columns_of(connection, unit, kind)}
                for kind in (INPUT, DERIVED)
            }
            parts = []
            for kind, held in columns.items():
                wanted = [i for i, name in enumerate(names) if _kind_of(name, columns) == kind]
                if wanted:
                    statement = UnitTables(number).columns_between(kind, [held[names[i]] for i in wanted])
                    parts.append((wanted, connection.execute(statement, (start, stop)).fetchall()))
        unknown = [name for name in names if _kind_of(name, columns) is None]
        if unknown:
            raise UnknownSeriesError(self._path, f"{unit} has no series {', '.join(unknown)}")
        ticks, values, quality = _merge(parts, len(names))
        if max_points is not None:
            kept = keep_extremes(ticks, values, max_points)
            return ticks[kept], values[kept], quality[kept]
        return ticks, values, quality

    def sources(self) -> tuple[SourceStatus, ...]:
        with self._pool.snapshot() as connection:
            found = connection.execute(
                "SELECT source, state, since, detail, received, rejected, last_rejection, dropped,"
                " connections, clock_offset_s FROM source_status ORDER BY source"
            ).fetchall()
        return tuple(
            SourceStatus(
                source=s[0], state=LinkState(s[1]), since=s[2], detail=s[3], received=s[4], rejected=s[5],
                last_rejection=s[6], dropped=s[7], connections=s[8],
                clock_offset_s=math.nan if s[9] is None else s[9],
            )
            for s in found
        )  # fmt: skip

    def configuration(self, number: int) -> Configuration | None:
        with self._pool.snapshot() as connection:
            found = connection.execute(
                "SELECT id, digest, at, text FROM configuration WHERE id = ?", (number,)
            ).fetchone()
        if found is None:
            return None
        return Configuration(id=found[0], digest=found[1], at=found[2], text=found[3])

    def _one(self, unit: str, tick: int, kind: str) -> tuple[tuple[Any, ...] | None, NDArray[np.intp]]:
        with self._pool.snapshot() as connection:
            number = number_of(connection, unit)
            if number is None:
                return None, _all(())
            found = connection.execute(UnitTables(number).one(kind), (tick,)).fetchone()
            return found, _all(columns_of(connection, unit, kind))

    def _places(self, unit: str, columns: Sequence[SeriesDef], names: Sequence[str]) -> NDArray[np.intp]:
        index = {c.name: c.index for c in columns}
        unknown = [name for name in names if name not in index]
        if unknown:
            raise UnknownSeriesError(self._path, f"{unit} has no series {', '.join(unknown)}")
        return np.array([index[name] for name in names], dtype=np.intp)


def _all(columns: Sequence[SeriesDef]) -> NDArray[np.intp]:
    return np.arange(len(columns), dtype=np.intp)


def _kind_of(name: str, columns: dict[str, dict[str, int]]) -> str | None:
    return next((kind for kind, held in columns.items() if name in held), None)


def _frame(unit: str, found: Sequence[Any], places: NDArray[np.intp]) -> Frame:
    tick, values, quality, ages = found
    return Frame(
        unit=unit, tick=tick,
        values=gather(values, places, np.nan, "<f4"),
        quality=gather(quality, places, ABSENT, "u1"),
        ages=gather(ages, places, np.nan, "<f4"),
    )  # fmt: skip


def _derived(unit: str, found: Sequence[Any], places: NDArray[np.intp]) -> DerivedRow:
    tick, values, quality, configuration = found
    return DerivedRow(
        unit=unit, tick=tick, configuration=configuration,
        values=gather(values, places, np.nan, "<f4"),
        quality=gather(quality, places, ABSENT, "u1"),
    )  # fmt: skip


def _pair(
    unit: str, found: Sequence[Any], inputs: NDArray[np.intp], results: NDArray[np.intp]
) -> tuple[Frame, DerivedRow]:
    return _frame(unit, found[:4], inputs), _derived(unit, (found[0], *found[4:]), results)


def _merge(parts: Sequence[tuple[list[int], list[tuple[Any, ...]]]], width: int) -> SeriesRange:
    """Columns of inputs and of results side by side; a tick that only one of them has is NaN in the other."""
    stamps = [np.array([row[0] for row in rows], dtype=np.int64) for _, rows in parts]
    ticks = np.unique(np.concatenate(stamps)) if stamps else np.empty(0, dtype=np.int64)
    values = np.full((len(ticks), width), np.nan)
    quality = np.full((len(ticks), width), ABSENT, dtype=np.uint8)
    for (wanted, rows), stamp in zip(parts, stamps, strict=True):
        at = np.searchsorted(ticks, stamp)
        for k, column in enumerate(wanted):
            # substr past the end of an older, shorter blob gives no bytes.
            raw = b"".join([row[1 + 2 * k] or _NAN for row in rows])
            marks = b"".join([row[2 + 2 * k] or _ABSENT for row in rows])
            values[at, column] = np.frombuffer(raw, dtype="<f4")
            quality[at, column] = np.frombuffer(marks, dtype=np.uint8)
    return ticks, values, quality
