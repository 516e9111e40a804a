"""How rows lie in the series database: names of tables, statements, blobs."""

import sqlite3
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from agent.database import Schema
from agent.records import Quality, SeriesDef

SCHEMA: Final = Schema(package="agent.storage", application_id=0x54685372)
INPUT: Final = "input"
DERIVED: Final = "derived"
# A column that a row does not hold: added after the row was written, or no longer in the site file.
ABSENT: Final = Quality.NEVER
VALUE_BYTES: Final = 4


@dataclass(frozen=True, slots=True)
class UnitTables:
    """Statements of the unit with number ``n``. The number is the only part of them that varies."""

    n: int

    @property
    def create(self) -> tuple[str, str]:
        columns = "t INTEGER PRIMARY KEY, b BLOB NOT NULL, q BLOB NOT NULL"
        return (
            f"CREATE TABLE IF NOT EXISTS input_{self.n} ({columns}, a BLOB NOT NULL)",
            f"CREATE TABLE IF NOT EXISTS derived_{self.n} ({columns}, c INTEGER NOT NULL)",
        )

    @property
    def put_input(self) -> str:
        return f"INSERT OR REPLACE INTO input_{self.n} (t, b, q, a) VALUES (?, ?, ?, ?)"  # noqa: S608

    @property
    def put_derived(self) -> str:
        return f"INSERT OR REPLACE INTO derived_{self.n} (t, b, q, c) VALUES (?, ?, ?, ?)"  # noqa: S608

    def drop_oldest(self, kind: str) -> str:
        table = f"{kind}_{self.n}"
        return f"DELETE FROM {table} WHERE t IN (SELECT t FROM {table} WHERE t < ? ORDER BY t LIMIT ?)"  # noqa: S608

    def one(self, kind: str) -> str:
        extra = "a" if kind == INPUT else "c"
        return f"SELECT t, b, q, {extra} FROM {kind}_{self.n} WHERE t = ?"  # noqa: S608

    @property
    def newest_tick(self) -> str:
        # The newer of the two, so that a live tick never falls on a stored one.
        return (
            f"SELECT max(t) FROM (SELECT max(t) AS t FROM input_{self.n}"  # noqa: S608
            f" UNION ALL SELECT max(t) AS t FROM derived_{self.n})"
        )

    @property
    def _both(self) -> str:
        return (
            f"SELECT i.t, i.b, i.q, i.a, d.b, d.q, d.c FROM input_{self.n} AS i"  # noqa: S608
            f" JOIN derived_{self.n} AS d ON d.t = i.t"
        )

    @property
    def newest(self) -> str:
        return f"{self._both} ORDER BY i.t DESC LIMIT 1"

    @property
    def between(self) -> str:
        return f"{self._both} WHERE i.t >= ? AND i.t < ? ORDER BY i.t"

    def columns_between(self, kind: str, indices: Sequence[int]) -> str:
        """Only the bytes of the columns asked for leave the database."""
        values = ", ".join(
            f"substr(b, {VALUE_BYTES * i + 1}, {VALUE_BYTES}), substr(q, {i + 1}, 1)" for i in indices
        )
        return f"SELECT t, {values} FROM {kind}_{self.n} WHERE t >= ? AND t < ? ORDER BY t"  # noqa: S608


def number_of(connection: sqlite3.Connection, unit: str) -> int | None:
    found = connection.execute("SELECT n FROM unit WHERE id = ?", (unit,)).fetchone()
    return None if found is None else int(found[0])


def columns_of(connection: sqlite3.Connection, unit: str, kind: str) -> tuple[SeriesDef, ...]:
    found = connection.execute(
        "SELECT idx, name, si FROM series WHERE unit = ? AND kind = ? ORDER BY idx", (unit, kind)
    ).fetchall()
    return tuple(SeriesDef(index=i, name=name, unit=si) for i, name, si in found)


def spread(values: NDArray[Any], places: NDArray[np.intp], width: int, absent: float, dtype: str) -> bytes:
    """Blob of a full row: values in the caller's order put at their stored places."""
    row = np.full(width, absent, dtype=dtype)
    row[places] = values
    return row.tobytes()


def gather(blob: bytes, places: NDArray[np.intp], absent: float, dtype: str) -> NDArray[Any]:
    """Values of the stored places, ``absent`` where the row is older than the column."""
    row = np.frombuffer(blob, dtype=dtype)
    taken = np.full(len(places), absent, dtype=row.dtype.newbyteorder("="))
    held = places < len(row)
    taken[held] = row[places[held]]
    return taken
