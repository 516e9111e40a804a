"""One SQLite file of ours: how it is opened, numbered and read, and its failures in words.

StoreError
├── StoreMissingError     nobody has made it yet
├── StoreTooNewError      a newer version of this program wrote it
├── StoreForeignError     it is some other database
├── StoreBusyError        another process holds it for longer than the busy timeout
├── StoreFullError        no room on the disk
├── StoreReadOnlyError    no right to write
├── StoreDamagedError     SQLite cannot make sense of it, or the disk fails
└── UnknownSeriesError    a unit or a series that it does not hold
"""

import sqlite3
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from importlib.resources import files
from pathlib import Path
from typing import Final

# What lies in a data folder.
SERIES_FILE: Final = "series.db"
JOURNAL_FILE: Final = "journal.db"
CACHE_FOLDER: Final = "cache"  # of gas surfaces

BUSY_TIMEOUT_S: Final = 5.0
# Frames of some hundred columns waste least of a page of this size. It can only be set on an empty file.
PAGE_SIZE: Final = 8192
# The log file shrinks back to this after a checkpoint that a slow reader had held up.
_LOG_LIMIT_BYTES: Final = 64 * 1024 * 1024


class StoreError(Exception):
    """A database of ours did not do what was asked. ``words`` can be shown to a person."""

    def __init__(self, path: Path, words: str) -> None:
        super().__init__(f"{path}: {words}")
        self.path = path
        self.words = words


class StoreMissingError(StoreError):
    def __init__(self, path: Path) -> None:
        super().__init__(path, "not there; the agent makes it when it starts")


class StoreTooNewError(StoreError):
    def __init__(self, path: Path, found: int, known: int) -> None:
        super().__init__(
            path, f"has schema {found}, this program knows {known}; use the newer program or another folder"
        )
        self.found = found
        self.known = known


class StoreForeignError(StoreError):
    def __init__(self, path: Path) -> None:
        super().__init__(path, "is not the database expected here; nothing was changed")


class StoreBusyError(StoreError):
    pass


class StoreFullError(StoreError):
    pass


class StoreReadOnlyError(StoreError):
    pass


class StoreDamagedError(StoreError):
    pass


class UnknownSeriesError(StoreError):
    pass


_KINDS: Final[dict[int, tuple[type[StoreError], str]]] = {
    sqlite3.SQLITE_BUSY: (StoreBusyError, "another process holds it"),
    sqlite3.SQLITE_LOCKED: (StoreBusyError, "another connection holds it"),
    sqlite3.SQLITE_FULL: (StoreFullError, "no room left on the disk"),
    sqlite3.SQLITE_READONLY: (StoreReadOnlyError, "may not be written"),
    sqlite3.SQLITE_CANTOPEN: (StoreMissingError, ""),
    sqlite3.SQLITE_CORRUPT: (StoreDamagedError, "is damaged"),
    sqlite3.SQLITE_NOTADB: (StoreDamagedError, "is not a database"),
    sqlite3.SQLITE_IOERR: (StoreDamagedError, "the disk reports an error"),
}


def in_words(path: Path, error: sqlite3.Error) -> StoreError:
    """The error of SQLite as one of ours."""
    code = getattr(error, "sqlite_errorcode", sqlite3.SQLITE_ERROR) & 0xFF
    kind, words = _KINDS.get(code, (StoreError, "refused"))
    if kind is StoreMissingError:
        return (
            StoreMissingError(path) if not path.exists() else StoreError(path, f"cannot be opened ({error})")
        )
    return kind(path, f"{words} ({error})")


@dataclass(frozen=True, slots=True, kw_only=True)
class Schema:
    """Which database is expected: the package with its migrations/NNNN.sql, and its mark in the file."""

    package: str
    application_id: int

    def scripts(self) -> dict[int, str]:
        folder = files(self.package) / "migrations"
        return {
            int(entry.name.removesuffix(".sql")): entry.read_text(encoding="utf-8")
            for entry in sorted(folder.iterdir(), key=lambda e: e.name)
            if entry.name.endswith(".sql")
        }

    def latest(self) -> int:
        return max(self.scripts())


def _number(connection: sqlite3.Connection, pragma: str) -> int:
    return int(connection.execute(f"PRAGMA {pragma}").fetchone()[0])


def _check(connection: sqlite3.Connection, path: Path, schema: Schema) -> int:
    """Schema number of the file, 0 for an empty one; refuses what is newer or not ours."""
    version = _number(connection, "user_version")
    if version == 0 and _number(connection, "schema_version") == 0:
        return 0
    if version == 0 or _number(connection, "application_id") != schema.application_id:
        raise StoreForeignError(path)
    if version > schema.latest():
        raise StoreTooNewError(path, version, schema.latest())
    return version


def _migrate(connection: sqlite3.Connection, path: Path, schema: Schema) -> None:
    version = _check(connection, path, schema)
    for number, script in schema.scripts().items():
        if number <= version:
            continue
        try:
            connection.executescript(
                f"BEGIN IMMEDIATE;\n{script}\n"
                f"PRAGMA application_id = {schema.application_id};\nPRAGMA user_version = {number};\nCOMMIT;"
            )
        except sqlite3.Error:
            if connection.in_transaction:
                connection.execute("ROLLBACK")
            raise


def open_for_writing(
    path: Path, schema: Schema, *, create: bool = True, busy_timeout_s: float = BUSY_TIMEOUT_S
) -> sqlite3.Connection:
    """Open for reading and writing; makes and migrates the file where ``create``.

    The connection may be used from any thread, by one thread at a time.
    """
    if not create and not path.exists():
        raise StoreMissingError(path)
    mode = "rwc" if create else "rw"
    connection: sqlite3.Connection | None = None
    try:
        connection = sqlite3.connect(
            f"{path.absolute().as_uri()}?mode={mode}", uri=True, isolation_level=None,
            timeout=busy_timeout_s, check_same_thread=False,
        )  # fmt: skip
        if create:
            connection.execute(f"PRAGMA page_size = {PAGE_SIZE}")
            _check(connection, path, schema)
            connection.execute("PRAGMA journal_mode = WAL")
            _migrate(connection, path, schema)
        elif _check(connection, path, schema) == 0:
            raise StoreMissingError(path)
        # FULL: a commit that was acknowledged is on the disk, through a power cut too.
        connection.execute("PRAGMA synchronous = FULL")
        connection.execute(f"PRAGMA journal_size_limit = {_LOG_LIMIT_BYTES}")
    except BaseException as error:
        if connection is not None:
            connection.close()
        if isinstance(error, sqlite3.Error):
            raise in_words(path, error) from error
        raise
    return connection


def _open_for_reading(path: Path, schema: Schema, busy_timeout_s: float) -> sqlite3.Connection:
    if not path.exists():
        raise StoreMissingError(path)
    try:
        connection = sqlite3.connect(
            f"{path.absolute().as_uri()}?mode=ro", uri=True, isolation_level=None,
            timeout=busy_timeout_s, check_same_thread=False,
        )  # fmt: skip
    except sqlite3.Error as error:
        raise in_words(path, error) from error
    try:
        if _check(connection, path, schema) == 0:
            raise StoreMissingError(path)
    except BaseException as error:
        connection.close()
        if isinstance(error, sqlite3.Error):
            raise in_words(path, error) from error
        raise
    return connection


@contextmanager
def transaction(
    connection: sqlite3.Connection, path: Path, *, write: bool = True
) -> Iterator[sqlite3.Connection]:
    """All or nothing. After a failure the connection is free of any transaction and can be used again."""
    try:
        connection.execute("BEGIN IMMEDIATE" if write else "BEGIN")
        yield connection
        connection.execute("COMMIT")
    except BaseException as error:
        if connection.in_transaction:
            connection.execute("ROLLBACK")
        if isinstance(error, sqlite3.Error):
            raise in_words(path, error) from error
        raise


class ReadPool:
    """Read-only connections to one file, handed to whichever thread reads.

    Connections are opened when first needed, so a reader may exist before the file does.
    """

    def __init__(self, path: Path, schema: Schema, *, busy_timeout_s: float = BUSY_TIMEOUT_S) -> None:
        self.path = path
        self._schema = schema
        self._busy_timeout_s = busy_timeout_s
        self._lock = threading.Lock()
        self._idle: list[sqlite3.Connection] = []
        self._closed = False

    @contextmanager
    def snapshot(self) -> Iterator[sqlite3.Connection]:
        """One short read transaction. Fetch all inside it: an open one lets the writer's log grow."""
        connection = self._borrow()
        try:
            with transaction(connection, self.path, write=False):
                yield connection
        finally:
            self._give_back(connection)

    def close(self) -> None:
        with self._lock:
            self._closed = True
            idle, self._idle = self._idle, []
        for connection in idle:
            connection.close()

    def _borrow(self) -> sqlite3.Connection:
        with self._lock:
            if self._closed:
                raise StoreError(self.path, "this reader is closed")
            if self._idle:
                return self._idle.pop()
        return _open_for_reading(self.path, self._schema, self._busy_timeout_s)

    def _give_back(self, connection: sqlite3.Connection) -> None:
        with self._lock:
            if not self._closed:
                self._idle.append(connection)
                return
        connection.close()
