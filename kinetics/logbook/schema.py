"""Tables of `record.sqlite` and how an older record becomes a newer one.

===============  ====================================================================
table            holds
===============  ====================================================================
meta             schema and program version, frozen time zone, run folders, tick
sheets           every version of the run sheet, whole, with who and why
calibrations     what was learned from the first spectra, one row a calibration
spectra          one row a raw spectrum (content hash): what the files say
measured         one row a spectrum and recipe: integrals, remarks, where its trace is
decisions        append-only, chained by hashes: who, when, why, old, new
story            what happened, for the morning
lease            the one follower that may write measurements
===============  ====================================================================

`meta.tick` grows with every change; a reader that remembers it knows whether to look again.
"""

import sqlite3
from collections.abc import Callable

from kinetics.errors import LogbookError

SCHEMA_VERSION = 1

_TABLES = """
CREATE TABLE meta (key TEXT PRIMARY KEY, value TEXT NOT NULL) WITHOUT ROWID;
CREATE TABLE sheets (
    version INTEGER PRIMARY KEY, text TEXT NOT NULL, sha256 TEXT NOT NULL, at TEXT NOT NULL,
    who TEXT NOT NULL, why TEXT NOT NULL, origin TEXT NOT NULL);
CREATE TABLE calibrations (
    id INTEGER PRIMARY KEY, sheet_version INTEGER NOT NULL REFERENCES sheets(version),
    version INTEGER NOT NULL, program_version TEXT NOT NULL, at TEXT NOT NULL,
    complete INTEGER NOT NULL DEFAULT 0, data BLOB NOT NULL,
    UNIQUE (sheet_version, version, program_version));
CREATE TABLE spectra (
    id INTEGER PRIMARY KEY, source TEXT NOT NULL, sha256 TEXT NOT NULL UNIQUE,
    signature TEXT NOT NULL, format TEXT NOT NULL, readable INTEGER NOT NULL,
    reason TEXT NOT NULL, superseded INTEGER NOT NULL DEFAULT 0, arrived TEXT NOT NULL,
    stamp TEXT NOT NULL, facts TEXT NOT NULL, remarks TEXT NOT NULL);
CREATE INDEX spectra_source ON spectra (source);
CREATE TABLE aliases (source TEXT NOT NULL, signature TEXT NOT NULL,
    spectrum INTEGER NOT NULL REFERENCES spectra(id), PRIMARY KEY (source, signature));
CREATE TABLE measured (
    spectrum INTEGER NOT NULL REFERENCES spectra(id),
    calibration INTEGER NOT NULL REFERENCES calibrations(id),
    state TEXT NOT NULL, remarks TEXT NOT NULL, integrals BLOB NOT NULL,
    noise_sd REAL NOT NULL, line_width_hz REAL, processing TEXT NOT NULL,
    trace_offset INTEGER NOT NULL, trace_size INTEGER NOT NULL, trace_crc INTEGER NOT NULL,
    first_ppm REAL NOT NULL, step_ppm REAL NOT NULL, picture BLOB NOT NULL, at TEXT NOT NULL,
    PRIMARY KEY (spectrum, calibration)) WITHOUT ROWID;
CREATE TABLE decisions (
    id INTEGER PRIMARY KEY, at TEXT NOT NULL, who TEXT NOT NULL, kind TEXT NOT NULL,
    subject TEXT NOT NULL, old TEXT NOT NULL, new TEXT NOT NULL, why TEXT NOT NULL,
    previous TEXT NOT NULL, hash TEXT NOT NULL);
CREATE TABLE story (
    id INTEGER PRIMARY KEY, at TEXT NOT NULL, kind TEXT NOT NULL, text TEXT NOT NULL,
    spectrum INTEGER REFERENCES spectra(id));
CREATE TABLE lease (
    one INTEGER PRIMARY KEY CHECK (one = 1), holder TEXT NOT NULL, host TEXT NOT NULL,
    pid INTEGER NOT NULL, born REAL NOT NULL, beat TEXT NOT NULL, state TEXT NOT NULL);
"""

# From version n (key) to n + 1. The follower alone migrates, after a backup.
MIGRATIONS: dict[int, Callable[[sqlite3.Connection], None]] = {}


def create(connection: sqlite3.Connection) -> None:
    """Make the tables of a new record."""
    connection.executescript(
        f"BEGIN IMMEDIATE;{_TABLES}"
        f"INSERT INTO meta VALUES ('schema', '{SCHEMA_VERSION}'), ('tick', '0');COMMIT;"
    )


def schema_of(connection: sqlite3.Connection) -> int:
    """Return the schema version of a record; 0 for an empty one.

    Raises
    ------
    LogbookError
        If the file is not a record of this program.
    """
    try:
        tables = {row[0] for row in connection.execute("SELECT name FROM sqlite_master")}
        if not tables:
            return 0
        row = connection.execute("SELECT value FROM meta WHERE key = 'schema'").fetchone()
        return int(row[0])
    except (sqlite3.DatabaseError, TypeError, ValueError):
        raise LogbookError("record.sqlite is damaged or not a record of this program") from None


def check_schema(connection: sqlite3.Connection) -> None:
    """Refuse a record that a newer program wrote.

    Raises
    ------
    LogbookError
        If the record is newer than this program, or not a record.
    """
    found = schema_of(connection)
    if found > SCHEMA_VERSION:
        raise LogbookError(
            f"the record was written by a newer version of this program (record {found}, "
            f"this program knows {SCHEMA_VERSION}); update the program"
        )
