-- The series store. Two tables a unit, input_<n> and derived_<n>, are made when the unit is registered.
--   input_<n>   (t unix second, b float32[columns], q uint8[columns], a float32[columns] age in seconds)
--   derived_<n> (t unix second, b float32[columns], q uint8[columns], c configuration that computed it)
-- Little-endian. Columns are only ever added: a short blob is an old row, and what it lacks reads as NaN.

CREATE TABLE unit (
    n  INTEGER PRIMARY KEY,
    id TEXT NOT NULL UNIQUE
);

CREATE TABLE series (
    unit TEXT    NOT NULL,
    kind TEXT    NOT NULL CHECK (kind IN ('input', 'derived')),
    idx  INTEGER NOT NULL, -- place in the blob; append-only, never reused
    name TEXT    NOT NULL,
    si   TEXT    NOT NULL, -- SI unit of the stored value
    PRIMARY KEY (unit, kind, idx),
    UNIQUE (unit, kind, name)
);

CREATE TABLE configuration (
    id     INTEGER PRIMARY KEY,
    digest TEXT NOT NULL UNIQUE,
    at     REAL NOT NULL,
    text   TEXT NOT NULL
);

CREATE TABLE source_status (
    source         TEXT PRIMARY KEY,
    state          TEXT    NOT NULL,
    since          REAL    NOT NULL,
    detail         TEXT    NOT NULL,
    received       INTEGER NOT NULL,
    rejected       INTEGER NOT NULL,
    last_rejection TEXT    NOT NULL,
    dropped        INTEGER NOT NULL,
    connections    INTEGER NOT NULL,
    clock_offset_s REAL -- NULL: not known
);
