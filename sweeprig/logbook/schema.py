"""The logbook's tables, format 1: SQL text and nothing else. Who writes is `logbook`, who reads is `read`.

A released format never changes. A change of the tables is a new `FORMAT` with its own reader, and the tests keep one
small run of every format.
"""

from __future__ import annotations

FORMAT = 1
"""`PRAGMA user_version`. 0 is what SQLite gives to a file that nobody has marked."""

APPLICATION = 0x53575247
"""`PRAGMA application_id`: tells a logbook from any other database ("SWRG")."""

BUSY_MS = 500
"""Longest wait for a lock: below every heartbeat a drive may have, so that a waiting writer never lets one lapse."""

PAGE_ROWS = 10_000
"""Rows a reader takes in one transaction: about 20 ms, so that it never holds up a checkpoint for longer."""

TABLES = f"""
CREATE TABLE run (
    key   TEXT PRIMARY KEY,   -- job_text, job_hash, software
    value TEXT NOT NULL
);
CREATE TABLE sessions (
    number    INTEGER PRIMARY KEY,
    began     REAL NOT NULL,  -- run clock, s
    began_utc REAL NOT NULL,  -- s since 1970
    info      TEXT NOT NULL   -- JSON
);
CREATE TABLE holds (          -- intents: committed before the drive moves
    number    INTEGER PRIMARY KEY,
    session   INTEGER NOT NULL REFERENCES sessions (number),
    began     REAL NOT NULL,
    began_utc REAL NOT NULL,
    hold      TEXT NOT NULL   -- JSON, see values.py
);
CREATE TABLE outcomes (       -- exactly one for every hold, in the end
    number    INTEGER PRIMARY KEY REFERENCES holds (number),
    ended     REAL NOT NULL,
    ended_utc REAL NOT NULL,
    outcome   TEXT NOT NULL   -- JSON without the hold
);
CREATE TABLE channels (
    number  INTEGER PRIMARY KEY,
    channel TEXT NOT NULL,    -- instrument.quantity
    unit    TEXT NOT NULL,
    UNIQUE (channel, unit)
);
CREATE TABLE readings (
    number  INTEGER PRIMARY KEY,
    hold    INTEGER NOT NULL REFERENCES outcomes (number),
    session INTEGER NOT NULL REFERENCES sessions (number),
    channel INTEGER NOT NULL REFERENCES channels (number),
    value   REAL,             -- NULL: no data, the flags say why
    u       REAL NOT NULL,
    at      REAL NOT NULL,
    flags   TEXT NOT NULL,    -- JSON list, or '' for none
    raw     TEXT NOT NULL     -- the instrument's own text
);
CREATE INDEX readings_of_hold ON readings (hold);
CREATE TABLE events (
    number  INTEGER PRIMARY KEY,
    session INTEGER NOT NULL, -- 0: before the first
    kind    TEXT NOT NULL,
    at      REAL NOT NULL,
    utc     REAL NOT NULL,
    data    TEXT NOT NULL     -- JSON
);
CREATE TABLE instruments (
    number   INTEGER PRIMARY KEY,
    session  INTEGER NOT NULL REFERENCES sessions (number),
    name     TEXT NOT NULL,
    maker    TEXT NOT NULL,
    model    TEXT NOT NULL,
    serial   TEXT NOT NULL,
    firmware TEXT NOT NULL,
    settings TEXT NOT NULL,   -- JSON
    at       REAL NOT NULL
);
PRAGMA application_id = {APPLICATION};
PRAGMA user_version = {FORMAT};
"""

HEAD = "SELECT key, value FROM run"
SESSIONS = "SELECT number, began, began_utc, info FROM sessions WHERE number > ? ORDER BY number LIMIT ?"
INTENTS = "SELECT number, session, began, began_utc, hold FROM holds WHERE number > ? ORDER BY number LIMIT ?"
UNFINISHED = """
SELECT number, session, began, began_utc, hold FROM holds
WHERE number > ? AND number NOT IN (SELECT number FROM outcomes) ORDER BY number LIMIT ?"""
OUTCOMES = """
SELECT outcomes.number, holds.hold, outcomes.outcome FROM outcomes JOIN holds USING (number)
WHERE outcomes.number > ? ORDER BY outcomes.number LIMIT ?"""
READINGS = """
SELECT readings.number, hold, session, channels.channel, unit, value, u, at, flags, raw
FROM readings JOIN channels ON channels.number = readings.channel
WHERE readings.number > ? ORDER BY readings.number LIMIT ?"""
READINGS_OF_HOLD = """
SELECT readings.number, hold, session, channels.channel, unit, value, u, at, flags, raw
FROM readings JOIN channels ON channels.number = readings.channel
WHERE readings.number > ? AND hold = ? ORDER BY readings.number LIMIT ?"""
EVENTS = "SELECT number, session, kind, at, utc, data FROM events WHERE number > ? ORDER BY number LIMIT ?"
INSTRUMENTS = """
SELECT number, session, name, maker, model, serial, firmware, settings, at FROM instruments
WHERE number > ? ORDER BY number LIMIT ?"""
LAST_TIMES = """
SELECT at, utc FROM (
    SELECT began AS at, began_utc AS utc FROM sessions
    UNION ALL SELECT began, began_utc FROM holds
    UNION ALL SELECT ended, ended_utc FROM outcomes
    UNION ALL SELECT at, utc FROM events
) ORDER BY at DESC, utc DESC LIMIT 1"""
