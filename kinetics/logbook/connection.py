"""Opening `record.sqlite`: for the one follower, for a decision, or for reading only."""

import sqlite3
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from kinetics.errors import InputError, LogbookError
from kinetics.logbook import schema

FILE_NAME = "record.sqlite"
_BUSY_S = 30.0


def record_path(folder: Path) -> Path:
    """Return the path of the record inside a logbook."""
    return folder / FILE_NAME


def open_writable(folder: Path) -> sqlite3.Connection:
    """Open the record for writing, making logbook and tables where there are none.

    Raises
    ------
    LogbookError
        If it cannot be made or written, or a newer program wrote it.
    """
    try:
        folder.mkdir(parents=True, exist_ok=True)
        connection = _connect(record_path(folder).as_posix(), uri=False)
        connection.execute("PRAGMA journal_mode = WAL")
        connection.execute("PRAGMA synchronous = FULL")
        if schema.schema_of(connection) == 0:
            schema.create(connection)
        schema.check_schema(connection)
    except (OSError, sqlite3.OperationalError) as error:
        raise LogbookError(f"{folder}: the logbook cannot be written ({error})") from None
    return connection


def open_readable(folder: Path) -> sqlite3.Connection:
    """Open the record for reading only.

    A database in WAL mode whose writer has left cannot be opened without write permission in
    the folder; it is then opened as it lies there, which is sound while nobody writes.

    Raises
    ------
    InputError
        If there is no logbook.
    LogbookError
        If it is damaged or a newer program wrote it.
    """
    path = record_path(folder)
    if not path.is_file():
        raise InputError(f"{folder}: there is no logbook here (a folder that holds {FILE_NAME})")
    uri = path.resolve().as_uri()
    try:
        connection = _connect(f"{uri}?mode=ro", uri=True)
        connection.execute("SELECT count(*) FROM sqlite_master").fetchone()
    except sqlite3.OperationalError:
        try:
            connection = _connect(f"{uri}?mode=ro&immutable=1", uri=True)
            connection.execute("SELECT count(*) FROM sqlite_master").fetchone()
        except sqlite3.OperationalError as error:
            raise LogbookError(f"{folder}: the logbook cannot be read ({error})") from None
    except sqlite3.DatabaseError as error:
        raise LogbookError(f"{folder}: the logbook is damaged ({error})") from None
    if schema.schema_of(connection) == 0:
        raise LogbookError(f"{folder}: the logbook is empty")
    schema.check_schema(connection)
    return connection


def _connect(name: str, *, uri: bool) -> sqlite3.Connection:
    # check_same_thread is off because Streamlit serves one session from several threads, one
    # after the other; SQLite itself is compiled thread-safe.
    connection = sqlite3.connect(
        name, uri=uri, timeout=_BUSY_S, isolation_level=None, check_same_thread=False
    )
    connection.row_factory = sqlite3.Row
    return connection


@contextmanager
def transaction(connection: sqlite3.Connection) -> Iterator[None]:
    """Run one short write transaction; on success the tick grows, on an error nothing happened.

    Raises
    ------
    LogbookError
        If the record cannot be written (disk full, read-only, held too long).
    """
    try:
        connection.execute("BEGIN IMMEDIATE")
    except sqlite3.OperationalError as error:
        raise LogbookError(f"the logbook cannot be written ({error})") from None
    try:
        yield
        connection.execute("UPDATE meta SET value = CAST(value AS INTEGER) + 1 WHERE key = 'tick'")
        connection.execute("COMMIT")
    except sqlite3.OperationalError as error:
        _roll_back(connection)
        raise LogbookError(f"the logbook cannot be written ({error})") from None
    except BaseException:
        _roll_back(connection)
        raise


def _roll_back(connection: sqlite3.Connection) -> None:
    if connection.in_transaction:
        connection.execute("ROLLBACK")


def tick(connection: sqlite3.Connection) -> int:
    """Return the number that grows with every change."""
    row = connection.execute("SELECT value FROM meta WHERE key = 'tick'").fetchone()
    return int(row[0])
