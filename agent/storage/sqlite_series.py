"""The series store in one SQLite file. One process writes, any number read."""

import sqlite3
import threading
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from agent.database import BUSY_TIMEOUT_S, StoreError, UnknownSeriesError, open_for_writing, transaction
from agent.records import Commit, DerivedRow, Frame, SourceStatus
from agent.storage.layout import ABSENT, DERIVED, INPUT, SCHEMA, UnitTables, columns_of, number_of, spread
from agent.storage.series import KEEP_DERIVED_S, KEEP_INPUTS_S, PRUNE_ROWS
from agent.storage.sqlite_reader import SeriesReader

__all__ = ["SeriesReader", "SeriesWriter"]

_PUT_STATUS = """
INSERT OR REPLACE INTO source_status
(source, state, since, detail, received, rejected, last_rejection, dropped, connections, clock_offset_s)
VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?)
"""


@dataclass(frozen=True, slots=True, kw_only=True)
class _Registered:
    """Where each value of a frame and of a row goes: stored place by caller's place."""

    tables: UnitTables
    input_places: NDArray[np.intp]
    input_width: int
    result_places: NDArray[np.intp]
    result_width: int


class SeriesWriter:
    """Writes what each tick brings, in one transaction a tick. Only the agent has one.

    Its methods may be called from any thread. After a `StoreError` of `commit` nothing of that commit is
    stored and the next one may be tried.
    """

    def __init__(self, path: Path, *, busy_timeout_s: float = BUSY_TIMEOUT_S) -> None:
        self._path = path
        self._busy_timeout_s = busy_timeout_s
        self._lock = threading.Lock()
        self._connection: sqlite3.Connection | None = None
        self._units: dict[str, _Registered] = {}

    def open(self) -> None:
        """Make or migrate the file.

        Raises
        ------
        StoreTooNewError, StoreForeignError
            The file is left as it was found.
        """
        with self._lock:
            if self._connection is None:
                self._connection = open_for_writing(self._path, SCHEMA, busy_timeout_s=self._busy_timeout_s)

    def close(self) -> None:
        with self._lock:
            connection, self._connection = self._connection, None
            self._units.clear()
        if connection is not None:
            connection.close()

    def register(
        self, unit: str, inputs: Sequence[tuple[str, str]], results: Sequence[tuple[str, str]]
    ) -> None:
        """Say which series (name, SI unit) the frames and rows of ``unit`` will carry, and in which order.

        Series are found by name: an order that changed, a series dropped and one added since the last start
        all keep their stored places, so that old rows stay readable.
        """
        with self._lock, transaction(self._open_connection(), self._path) as connection:
            connection.execute("INSERT OR IGNORE INTO unit (id) VALUES (?)", (unit,))
            number = number_of(connection, unit)
            assert number is not None
            tables = UnitTables(number)
            for statement in tables.create:
                connection.execute(statement)
            input_places, input_width = self._places(connection, unit, INPUT, inputs)
            result_places, result_width = self._places(connection, unit, DERIVED, results)
            registered = _Registered(
                tables=tables,
                input_places=input_places, input_width=input_width,
                result_places=result_places, result_width=result_width,
            )  # fmt: skip
        self._units[unit] = registered

    def configuration(self, digest: str, text: str, at: float) -> int:
        """Number of this configuration, which derived rows carry; the same digest has the same number."""
        with self._lock, transaction(self._open_connection(), self._path) as connection:
            connection.execute(
                "INSERT OR IGNORE INTO configuration (digest, at, text) VALUES (?, ?, ?)", (digest, at, text)
            )
            found = connection.execute("SELECT id FROM configuration WHERE digest = ?", (digest,)).fetchone()
        return int(found[0])

    def commit(self, commit: Commit) -> None:
        """Write all of it or nothing. A row of a tick already stored takes its place.

        Raises
        ------
        StoreError
            Full, locked, read-only or damaged, in words.
        """
        frames = [(self._unit(f.unit), f) for f in commit.frames]
        derived = [(self._unit(r.unit), r) for r in commit.derived]
        with self._lock, transaction(self._open_connection(), self._path) as connection:
            for unit, frame in frames:
                connection.execute(unit.tables.put_input, _input_row(unit, frame))
            for unit, row in derived:
                connection.execute(unit.tables.put_derived, _derived_row(unit, row))
            connection.executemany(_PUT_STATUS, [_status_row(s) for s in commit.sources])

    def prune(self, now: float) -> int:
        """Take away the oldest rows past their keeping time, a few from each table; call it each minute."""
        removed = 0
        with self._lock, transaction(self._open_connection(), self._path) as connection:
            for (n,) in connection.execute("SELECT n FROM unit").fetchall():
                tables = UnitTables(n)
                for kind, keep_s in ((INPUT, KEEP_INPUTS_S), (DERIVED, KEEP_DERIVED_S)):
                    oldest = int(now) - keep_s
                    removed += connection.execute(tables.drop_oldest(kind), (oldest, PRUNE_ROWS)).rowcount
        return removed

    def _open_connection(self) -> sqlite3.Connection:
        if self._connection is None:
            raise StoreError(self._path, "is not open")
        return self._connection

    def _unit(self, unit: str) -> _Registered:
        try:
            return self._units[unit]
        except KeyError:
            raise UnknownSeriesError(self._path, f"unit {unit} was not registered") from None

    def _places(
        self, connection: sqlite3.Connection, unit: str, kind: str, series: Sequence[tuple[str, str]]
    ) -> tuple[NDArray[np.intp], int]:
        stored = {c.name: c for c in columns_of(connection, unit, kind)}
        if len({name for name, _ in series}) != len(series):
            raise ValueError(f"{unit}: a series name stands twice")
        places = []
        width = len(stored)
        for name, si in series:
            column = stored.get(name)
            if column is None:
                connection.execute(
                    "INSERT INTO series (unit, kind, idx, name, si) VALUES (?, ?, ?, ?, ?)",
                    (unit, kind, width, name, si),
                )
                places.append(width)
                width += 1
            elif column.unit != si:
                raise StoreError(self._path, f"holds {unit} {name} in {column.unit}, now asked for in {si}")
            else:
                places.append(column.index)
        return np.array(places, dtype=np.intp), width


def _input_row(unit: _Registered, frame: Frame) -> tuple[Any, ...]:
    where, width = unit.input_places, unit.input_width
    _same_length(frame.unit, len(where), frame.values, frame.quality, frame.ages)
    return (
        int(frame.tick),
        spread(frame.values, where, width, np.nan, "<f4"),
        spread(frame.quality, where, width, ABSENT, "u1"),
        spread(frame.ages, where, width, np.nan, "<f4"),
    )


def _derived_row(unit: _Registered, row: DerivedRow) -> tuple[Any, ...]:
    where, width = unit.result_places, unit.result_width
    _same_length(row.unit, len(where), row.values, row.quality)
    return (
        int(row.tick),
        spread(row.values, where, width, np.nan, "<f4"),
        spread(row.quality, where, width, ABSENT, "u1"),
        int(row.configuration),
    )


def _same_length(unit: str, expected: int, *arrays: NDArray[Any]) -> None:
    # numpy would stretch a single value over the whole row.
    for array in arrays:
        if array.shape != (expected,):
            raise ValueError(f"{unit}: {expected} series registered, a row of shape {array.shape} given")


def _status_row(status: SourceStatus) -> tuple[Any, ...]:
    return (
        status.source, str(status.state), status.since, status.detail, status.received, status.rejected,
        status.last_rejection, status.dropped, status.connections, status.clock_offset_s,
    )  # fmt: skip
