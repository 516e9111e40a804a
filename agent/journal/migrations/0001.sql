-- The journal: what people asked and what the alarm system did. Rows are added, never changed.

CREATE TABLE event (
    id      INTEGER PRIMARY KEY,
    unit    TEXT    NOT NULL,
    alarm   TEXT    NOT NULL,
    tick    INTEGER NOT NULL, -- unix second
    kind    TEXT    NOT NULL,
    state   TEXT    NOT NULL, -- of the alarm, after the event
    text    TEXT    NOT NULL,
    value   REAL, -- SI; NULL: none
    bound   REAL, -- SI, the limit; NULL: none
    subject TEXT    NOT NULL,
    actor   TEXT    NOT NULL,
    reason  TEXT    NOT NULL,
    request TEXT    NOT NULL, -- id of the request it answers, '' for none
    UNIQUE (unit, alarm, tick, kind)
);

CREATE INDEX event_request ON event (request) WHERE request <> '';

CREATE TABLE request (
    seq    INTEGER PRIMARY KEY,
    id     TEXT NOT NULL UNIQUE,
    at     REAL NOT NULL,
    unit   TEXT NOT NULL,
    alarm  TEXT NOT NULL,
    kind   TEXT NOT NULL,
    actor  TEXT NOT NULL,
    reason TEXT NOT NULL
);

-- How far each unit's alarms were judged; moves forward only.
CREATE TABLE judged (
    unit TEXT PRIMARY KEY,
    tick INTEGER NOT NULL
);

CREATE TRIGGER event_stays BEFORE UPDATE ON event
BEGIN SELECT RAISE(ABORT, 'the journal is append-only'); END;

CREATE TRIGGER event_remains BEFORE DELETE ON event
BEGIN SELECT RAISE(ABORT, 'the journal is append-only'); END;

CREATE TRIGGER request_stays BEFORE UPDATE ON request
BEGIN SELECT RAISE(ABORT, 'the journal is append-only'); END;

CREATE TRIGGER request_remains BEFORE DELETE ON request
BEGIN SELECT RAISE(ABORT, 'the journal is append-only'); END;

-- INSERT OR REPLACE deletes without a delete trigger: a row of a key that is there already is passed over.
CREATE TRIGGER event_once BEFORE INSERT ON event
WHEN EXISTS (
    SELECT 1 FROM event
    WHERE id = NEW.id OR (unit = NEW.unit AND alarm = NEW.alarm AND tick = NEW.tick AND kind = NEW.kind)
)
BEGIN SELECT RAISE(IGNORE); END;

CREATE TRIGGER request_once BEFORE INSERT ON request
WHEN EXISTS (SELECT 1 FROM request WHERE seq = NEW.seq OR id = NEW.id)
BEGIN SELECT RAISE(IGNORE); END;
