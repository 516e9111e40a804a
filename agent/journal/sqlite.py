"""The journal in one SQLite file: the agent appends events, the dashboard appends requests.

Both may write, each in its own process; a request becomes an event only through the agent.
"""

import math
import sqlite3
import threading
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any, Final

from agent.database import (
    BUSY_TIMEOUT_S,
    ReadPool,
    Schema,
    StoreError,
    open_for_writing,
    transaction,
)
from agent.records import AlarmEvent, AlarmState, EventKind, Request

SCHEMA: Final = Schema(package="agent.journal", application_id=0x5468446A)

_EVENT_COLUMNS: Final = "unit, alarm, tick, kind, state, text, value, bound, subject, actor, reason, request"
_PUT_EVENT: Final = f"INSERT OR IGNORE INTO event ({_EVENT_COLUMNS}) VALUES ({', '.join('?' * 12)})"  # noqa: S608
_GET_EVENTS: Final = f"SELECT {_EVENT_COLUMNS} FROM event"  # noqa: S608
_GET_LATEST: Final = (
    f"{_GET_EVENTS} WHERE id IN"  # noqa: S608
    " (SELECT max(id) FROM event WHERE ? IS NULL OR unit = ? GROUP BY unit, alarm, kind) ORDER BY id"
)
_GET_ANSWER: Final = f"{_GET_EVENTS} WHERE request = ? AND request <> '' ORDER BY id LIMIT 1"
_PUT_JUDGED: Final = """
INSERT INTO judged (unit, tick) VALUES (?, ?)
ON CONFLICT (unit) DO UPDATE SET tick = excluded.tick WHERE excluded.tick > judged.tick
"""
_PUT_REQUEST: Final = """
INSERT OR IGNORE INTO request (id, at, unit, alarm, kind, actor, reason) VALUES (?, ?, ?, ?, ?, ?, ?)
"""
_UNANSWERED: Final = """
SELECT seq, id, at, unit, alarm, kind, actor, reason FROM request
WHERE seq > ? AND NOT EXISTS (SELECT 1 FROM event WHERE event.request = request.id AND event.request <> '')
ORDER BY seq
"""


class JournalWriter:
    """The agent's side. Methods may be called from any thread; a `StoreError` leaves nothing half written."""

    def __init__(self, path: Path, *, busy_timeout_s: float = BUSY_TIMEOUT_S) -> None:
        self._path = path
        self._busy_timeout_s = busy_timeout_s
        self._lock = threading.Lock()
        self._connection: sqlite3.Connection | None = None
        # Requests up to this one are answered; the search for open ones starts behind it.
        self._answered_up_to = 0

    def open(self) -> None:
        """Make or migrate the file; a newer one or another database is refused and left alone."""
        with self._lock:
            if self._connection is None:
                self._connection = open_for_writing(self._path, SCHEMA, busy_timeout_s=self._busy_timeout_s)

    def close(self) -> None:
        with self._lock:
            connection, self._connection = self._connection, None
        if connection is not None:
            connection.close()

    def append(self, events: Sequence[AlarmEvent], ticks: Mapping[str, int]) -> None:
        """Write the events, and for each unit the tick up to which it is judged, in one transaction.

        Appending the same again is harmless: (unit, alarm, tick, kind) is unique and ticks only move forward.
        """
        with self._lock, transaction(self._open_connection(), self._path) as connection:
            connection.executemany(_PUT_EVENT, [_event_row(e) for e in events])
            connection.executemany(_PUT_JUDGED, [(unit, int(tick)) for unit, tick in ticks.items()])

    def pending_requests(self) -> tuple[Request, ...]:
        """Requests that no event answers yet, in the order they were asked."""
        with self._lock, transaction(self._open_connection(), self._path, write=False) as connection:
            (newest,) = connection.execute("SELECT coalesce(max(seq), 0) FROM request").fetchone()
            found = connection.execute(_UNANSWERED, (self._answered_up_to,)).fetchall()
            self._answered_up_to = found[0][0] - 1 if found else newest
        return tuple(_request(row[1:]) for row in found)

    def last_tick(self, unit: str) -> int | None:
        """The tick up to which the unit's alarms are judged; rows after it are judged again at start."""
        with self._lock, transaction(self._open_connection(), self._path, write=False) as connection:
            return _last_tick(connection, unit)

    def _open_connection(self) -> sqlite3.Connection:
        if self._connection is None:
            raise StoreError(self._path, "is not open")
        return self._connection


class RequestWriter:
    """The dashboard's side: it can only ask.

    The file is opened at the first request and must be there: the agent makes it.
    """

    def __init__(self, path: Path, *, busy_timeout_s: float = BUSY_TIMEOUT_S) -> None:
        self._path = path
        self._busy_timeout_s = busy_timeout_s
        self._lock = threading.Lock()
        self._connection: sqlite3.Connection | None = None

    def ask(self, request: Request) -> bool:
        """Append the request; False if one of that id is there already, which then stands."""
        row = (
            request.id, request.at, request.unit, request.alarm, str(request.kind), request.actor,
            request.reason,
        )  # fmt: skip
        if not request.id:
            raise ValueError("a request needs an id")
        with self._lock:
            if self._connection is None:
                self._connection = open_for_writing(
                    self._path, SCHEMA, create=False, busy_timeout_s=self._busy_timeout_s
                )
            with transaction(self._connection, self._path) as connection:
                return connection.execute(_PUT_REQUEST, row).rowcount == 1

    def close(self) -> None:
        with self._lock:
            connection, self._connection = self._connection, None
        if connection is not None:
            connection.close()


class JournalReader:
    """What the journal holds: any process, any thread, read-only."""

    def __init__(self, path: Path, *, busy_timeout_s: float = BUSY_TIMEOUT_S) -> None:
        self._pool = ReadPool(path, SCHEMA, busy_timeout_s=busy_timeout_s)

    def close(self) -> None:
        self._pool.close()

    def events(self, limit: int | None = None, unit: str | None = None) -> tuple[AlarmEvent, ...]:
        """Events oldest first; with ``limit`` the newest so many of them."""
        statement = f"{_GET_EVENTS} WHERE ? IS NULL OR unit = ? ORDER BY id DESC LIMIT ?"
        with self._pool.snapshot() as connection:
            found = connection.execute(statement, (unit, unit, -1 if limit is None else limit)).fetchall()
        return tuple(_event(row) for row in reversed(found))

    def latest(self, unit: str | None = None) -> tuple[AlarmEvent, ...]:
        """The newest event of each unit, alarm and kind, oldest first: all that `fold.states` needs."""
        with self._pool.snapshot() as connection:
            found = connection.execute(_GET_LATEST, (unit, unit)).fetchall()
        return tuple(_event(row) for row in found)

    def length(self) -> int:
        """Number of the newest event; unchanged as long as nothing was appended."""
        with self._pool.snapshot() as connection:
            (newest,) = connection.execute("SELECT coalesce(max(id), 0) FROM event").fetchone()
        return int(newest)

    def requests(self, limit: int | None = None) -> tuple[Request, ...]:
        """Requests oldest first; with ``limit`` the newest so many of them."""
        with self._pool.snapshot() as connection:
            found = connection.execute(
                "SELECT id, at, unit, alarm, kind, actor, reason FROM request ORDER BY seq DESC LIMIT ?",
                (-1 if limit is None else limit,),
            ).fetchall()
        return tuple(_request(row) for row in reversed(found))

    def answer(self, request: str) -> AlarmEvent | None:
        """The event that answers the request of this id; None while it is open."""
        with self._pool.snapshot() as connection:
            found = connection.execute(_GET_ANSWER, (request,)).fetchone()
        return None if found is None else _event(found)

    def last_tick(self, unit: str) -> int | None:
        with self._pool.snapshot() as connection:
            return _last_tick(connection, unit)


def _last_tick(connection: sqlite3.Connection, unit: str) -> int | None:
    found = connection.execute("SELECT tick FROM judged WHERE unit = ?", (unit,)).fetchone()
    return None if found is None else int(found[0])


def _event_row(event: AlarmEvent) -> tuple[Any, ...]:
    return (
        event.unit, event.alarm, int(event.tick), str(event.kind), str(event.state), event.text,
        float(event.value), float(event.limit), event.subject, event.actor, event.reason, event.request,
    )  # fmt: skip


def _event(row: Sequence[Any]) -> AlarmEvent:
    # SQLite keeps NaN as NULL.
    value, limit = (math.nan if number is None else number for number in row[6:8])
    return AlarmEvent(
        unit=row[0], alarm=row[1], tick=row[2], kind=EventKind(row[3]), state=AlarmState(row[4]), text=row[5],
        value=value, limit=limit, subject=row[8], actor=row[9], reason=row[10], request=row[11],
    )  # fmt: skip


def _request(row: Sequence[Any]) -> Request:
    return Request(
        id=row[0], at=row[1], unit=row[2], alarm=row[3], kind=EventKind(row[4]), actor=row[5], reason=row[6]
    )
