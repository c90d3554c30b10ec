"""The lease: one follower at a time measures into a logbook."""

import os
import socket
import sqlite3
import uuid
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta

import psutil

from kinetics.errors import LeaseLostError, LogbookError
from kinetics.logbook.connection import transaction

# A holder on another machine cannot be looked at; after this long without a sign it is dead.
SILENT = timedelta(minutes=5)


@dataclass(frozen=True, slots=True)
class Holder:
    """Who holds the lease.

    Attributes
    ----------
    holder
        Random identifier of the follower.
    host, pid, born
        Machine, process and when the process was started (Unix seconds).
    beat
        Last sign of life, UTC.
    state
        What it says it is doing.
    """

    holder: str
    host: str
    pid: int
    born: float
    beat: datetime
    state: str

    def alive(self, now: datetime) -> bool:
        """Whether the holder still runs, as far as can be told from here."""
        if self.host != socket.gethostname():
            return now - self.beat < SILENT
        try:
            return bool(abs(psutil.Process(self.pid).create_time() - self.born) < 2.0)
        except psutil.NoSuchProcess:
            return False
        except psutil.AccessDenied:
            return now - self.beat < SILENT


def holder_of(connection: sqlite3.Connection) -> Holder | None:
    """Return the holder of the lease, alive or not."""
    row = connection.execute("SELECT * FROM lease").fetchone()
    if row is None:
        return None
    return Holder(
        row["holder"],
        row["host"],
        row["pid"],
        row["born"],
        datetime.fromisoformat(row["beat"]),
        row["state"],
    )


def take(connection: sqlite3.Connection) -> str:
    """Take the lease and return the identifier of this holder.

    Raises
    ------
    LogbookError
        If another follower holds it and is alive.
    """
    now = datetime.now(UTC)
    identifier = uuid.uuid4().hex
    with transaction(connection):
        held = holder_of(connection)
        if held is not None and held.alive(now):
            raise LogbookError(
                f"another follower holds this logbook: process {held.pid} on {held.host}, "
                f"last heard of at {held.beat:%Y-%m-%d %H:%M:%S} UTC; stop it first"
            )
        connection.execute(
            "INSERT OR REPLACE INTO lease VALUES (1, ?, ?, ?, ?, ?, ?)",
            (
                identifier,
                socket.gethostname(),
                os.getpid(),
                psutil.Process().create_time(),
                now.isoformat(),
                "starting",
            ),
        )
    return identifier


def beat(connection: sqlite3.Connection, identifier: str, state: str) -> None:
    """Give a sign of life.

    Raises
    ------
    LeaseLostError
        If the lease has gone to somebody else.
    """
    with transaction(connection):
        done = connection.execute(
            "UPDATE lease SET beat = ?, state = ? WHERE holder = ?",
            (datetime.now(UTC).isoformat(), state, identifier),
        )
        if done.rowcount != 1:
            raise LeaseLostError("another follower has taken over this logbook")


def give_back(connection: sqlite3.Connection, identifier: str) -> None:
    """Give the lease back."""
    with transaction(connection):
        connection.execute("DELETE FROM lease WHERE holder = ?", (identifier,))
