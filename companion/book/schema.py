"""The tables of a SQLite book, and how an older book becomes one of today: step by step, in one transaction."""

from __future__ import annotations

import sqlite3

STEPS = (  # what each version adds to the one before
    """
    CREATE TABLE name (id INTEGER PRIMARY KEY, word TEXT NOT NULL UNIQUE);
    CREATE TABLE reading (
        tank INTEGER NOT NULL REFERENCES name, life INTEGER NOT NULL REFERENCES name, seq INTEGER NOT NULL,
        time_us INTEGER NOT NULL, raw REAL, temperature_c REAL, barometer_pa REAL, headspace_pa REAL, battery_v REAL,
        arrived_us INTEGER NOT NULL,
        PRIMARY KEY (tank, life, seq)) WITHOUT ROWID;
    CREATE INDEX reading_by_time ON reading (tank, time_us);
    """,
    """
    CREATE TABLE quarantine (
        id INTEGER PRIMARY KEY, arrived_us INTEGER NOT NULL, topic TEXT NOT NULL, payload BLOB NOT NULL, digest BLOB NOT NULL,
        reason TEXT NOT NULL, times INTEGER NOT NULL DEFAULT 1, UNIQUE (topic, digest));
    CREATE TABLE refused (
        tank INTEGER NOT NULL REFERENCES name, life INTEGER NOT NULL REFERENCES name, seq INTEGER NOT NULL,
        PRIMARY KEY (tank, life, seq)) WITHOUT ROWID;
    CREATE TABLE logger (
        tank INTEGER NOT NULL REFERENCES name, life INTEGER NOT NULL REFERENCES name, oldest INTEGER, said TEXT NOT NULL,
        heard_us INTEGER NOT NULL, PRIMARY KEY (tank, life)) WITHOUT ROWID;
    """,
)
VERSION = len(STEPS)
INCOMING = """
CREATE TEMP TABLE IF NOT EXISTS incoming (life INTEGER, seq INTEGER, time_us INTEGER, raw REAL, temperature_c REAL,
    barometer_pa REAL, headspace_pa REAL, battery_v REAL, row INTEGER);
"""


def upgrade(db: sqlite3.Connection) -> int:
    """Bring a book to VERSION; returns the version it has then: a newer book stays as it is."""
    if _version(db) < VERSION:
        db.execute("BEGIN IMMEDIATE")
        try:
            for step in STEPS[_version(db) :]:  # another process may have been first
                for statement in step.split(";"):
                    db.execute(statement)
            db.execute(f"PRAGMA user_version = {max(VERSION, _version(db))}")
            db.execute("COMMIT")
        except BaseException:
            db.execute("ROLLBACK")
            raise
    db.execute(INCOMING)
    return _version(db)


def _version(db: sqlite3.Connection) -> int:
    return int(db.execute("PRAGMA user_version").fetchone()[0])
