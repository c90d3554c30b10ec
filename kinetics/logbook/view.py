"""Reading the record: everything the pages, the fits and the reports are made of."""

import json
import sqlite3
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np

from kinetics.logbook import codec, lease
from kinetics.logbook.connection import open_readable, tick
from kinetics.logbook.decisions import Decision, all_decisions
from kinetics.remarks import Remark
from kinetics.signals.model import Integrals
from kinetics.spectra.model import Axis, Float32, ProcessingRecord, Stamp


@dataclass(frozen=True, slots=True)
class TracePlace:
    """Where a trace lies in `traces.f32` (in values), its CRC-32 and its axis."""

    offset: int
    size: int
    crc: int
    axis: Axis


@dataclass(frozen=True, slots=True, eq=False)
class Entry:
    """One spectrum as the record has it.

    Attributes
    ----------
    id, source, sha256, format
        Number in the record, path in the run folder, content hash, format in plain words.
    state
        ``"measured"``, ``"doubtful"`` or ``"unreadable"``.
    reason
        Why it is unreadable; empty otherwise.
    arrived
        When it was taken, UTC.
    stamp
        What the files say about its time; None where unreadable.
    facts
        Frequency, scans, temperature, … as recorded.
    remarks
        What was noticed.
    integrals, noise_sd, line_width_hz, processing, trace
        What was measured; None or nan where unreadable.
    calibration
        Id of the calibration it was measured with, 0 where unreadable.
    """

    id: int
    source: str
    sha256: str
    format: str
    state: str
    reason: str
    arrived: datetime
    stamp: Stamp | None
    facts: dict[str, Any]
    remarks: tuple[Remark, ...]
    integrals: Integrals | None
    noise_sd: float
    line_width_hz: float
    processing: ProcessingRecord | None
    trace: TracePlace | None
    calibration: int


@dataclass(frozen=True, slots=True)
class StoryLine:
    """One line of the story of a run; `at` is UTC."""

    at: datetime
    kind: str
    text: str
    spectrum: int | None


@dataclass(frozen=True, slots=True)
class SheetVersion:
    """One version of the run sheet; `at` is UTC."""

    version: int
    text: str
    sha256: str
    at: datetime
    who: str
    why: str
    origin: str


@dataclass(frozen=True, slots=True)
class Following:
    """Whether somebody follows the run now.

    Attributes
    ----------
    alive
        True while a follower runs.
    holder
        Who holds, or last held and never gave back, the lease; None if it was given back.
    """

    alive: bool
    holder: lease.Holder | None


class LogbookView:
    """The readable side of a logbook. Use as a context manager.

    Raises
    ------
    InputError, LogbookError
        If there is no logbook, or it cannot be read.
    """

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.connection: sqlite3.Connection = open_readable(folder)

    def __enter__(self) -> "LogbookView":
        return self

    def __exit__(self, *_: object) -> None:
        self.connection.close()

    def tick(self) -> int:
        """Return the number that grows with every change."""
        return tick(self.connection)

    def meta(self, key: str) -> str | None:
        """Return a frozen value."""
        row = self.connection.execute("SELECT value FROM meta WHERE key = ?", (key,)).fetchone()
        return None if row is None else str(row[0])

    def sheets(self) -> tuple[SheetVersion, ...]:
        """Return all versions of the sheet, oldest first."""
        rows = self.connection.execute("SELECT * FROM sheets ORDER BY version")
        return tuple(
            SheetVersion(**{**dict(row), "at": datetime.fromisoformat(row["at"])}) for row in rows
        )

    def active_calibration(self) -> tuple[int, int] | None:
        """Return (id, sheet version) of the calibration whose results rule now.

        The newest one with which every spectrum has been measured: while a changed sheet or a
        second calibration is being worked through, the earlier results stand.
        """
        row = self.connection.execute(
            "SELECT id, sheet_version FROM calibrations "
            "ORDER BY complete DESC, sheet_version DESC, version DESC, id DESC LIMIT 1"
        ).fetchone()
        return None if row is None else (int(row[0]), int(row[1]))

    def entries(self) -> tuple[Entry, ...]:
        """Return every spectrum that was not replaced by a later content, in order of arrival.

        A spectrum whose raw files were gone when the rest was measured again keeps its latest
        earlier row.
        """
        active = self.active_calibration()
        rows = self.connection.execute(
            "SELECT s.*, m.calibration, m.state, m.remarks AS remarks_m, m.integrals, m.noise_sd, "
            "m.line_width_hz, m.processing, m.trace_offset, m.trace_size, m.trace_crc, "
            "m.first_ppm, m.step_ppm FROM spectra s LEFT JOIN measured m ON m.spectrum = s.id "
            "AND m.calibration = (SELECT calibration FROM measured WHERE spectrum = s.id "
            "ORDER BY calibration = ? DESC, calibration DESC LIMIT 1) "
            "WHERE s.superseded = 0 ORDER BY s.id",
            (0 if active is None else active[0],),
        )
        return tuple(_entry(row) for row in rows if row["calibration"] or row["reason"])

    def decisions(self) -> tuple[Decision, ...]:
        """Return every decision, oldest first."""
        return all_decisions(self.connection)

    def story(self) -> tuple[StoryLine, ...]:
        """Return the story, oldest first."""
        rows = self.connection.execute("SELECT at, kind, text, spectrum FROM story ORDER BY id")
        return tuple(
            StoryLine(datetime.fromisoformat(row["at"]), row["kind"], row["text"], row["spectrum"])
            for row in rows
        )

    def picture(self, entries: tuple[Entry, ...]) -> Float32:
        """Return the picture rows of spectra, float32, shape (n, cells)."""
        if not entries:
            return np.zeros((0, 0), np.float32)
        wanted = {(e.id, e.calibration): place for place, e in enumerate(entries)}
        out: Float32 | None = None
        for row in self.connection.execute("SELECT spectrum, calibration, picture FROM measured"):
            place = wanted.get((row["spectrum"], row["calibration"]))
            if place is not None:
                cells = np.frombuffer(row["picture"], "<f4")
                if out is None:
                    out = np.zeros((len(entries), cells.size), np.float32)
                out[place] = cells
        return np.zeros((len(entries), 0), np.float32) if out is None else out

    def following(self) -> Following:
        """Return whether somebody follows the run now."""
        holder = lease.holder_of(self.connection)
        return Following(holder is not None and holder.alive(datetime.now(UTC)), holder)


def _entry(row: sqlite3.Row) -> Entry:
    measured = row["calibration"] is not None
    trace = None
    if measured:
        axis = Axis(row["first_ppm"], row["step_ppm"], row["trace_size"])
        trace = TracePlace(row["trace_offset"], row["trace_size"], row["trace_crc"], axis)
    width = row["line_width_hz"]
    return Entry(
        id=row["id"],
        source=row["source"],
        sha256=row["sha256"],
        format=row["format"],
        state=row["state"] if measured else "unreadable",
        reason=row["reason"],
        arrived=datetime.fromisoformat(row["arrived"]),
        stamp=codec.stamp_from_json(row["stamp"]) if row["stamp"] else None,
        facts=json.loads(row["facts"]),
        remarks=codec.remarks_from_json(row["remarks_m"] if measured else row["remarks"]),
        integrals=codec.integrals_from_bytes(row["integrals"]) if measured else None,
        noise_sd=row["noise_sd"] if measured else float("nan"),
        line_width_hz=float("nan") if width is None else width,
        processing=codec.processing_from_json(row["processing"]) if measured else None,
        trace=trace,
        calibration=row["calibration"] or 0,
    )
