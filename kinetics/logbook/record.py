"""Writing the record: what the follower knows is put down here, each thing once.

Nothing is ever overwritten. A spectrum is identified by the hash of its raw files; a
measurement by spectrum and calibration (which belongs to one sheet version and one program
version). Writing either twice changes nothing, whatever was killed when.
"""

import json
import sqlite3
from collections.abc import Sequence
from contextlib import nullcontext
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path

import numpy as np

from kinetics.errors import LogbookError
from kinetics.logbook import codec, decisions
from kinetics.logbook.connection import FILE_NAME as RECORD_NAME
from kinetics.logbook.connection import open_writable, transaction
from kinetics.logbook.traces import FILE_NAME as TRACES_NAME
from kinetics.logbook.traces import TraceWriter
from kinetics.measure import Measurement, picture_row
from kinetics.sheet import fingerprint
from kinetics.signals.calibration import Calibration
from kinetics.spectra.model import Raw
from kinetics.version import __version__


@dataclass(frozen=True, slots=True, eq=False)
class Taken:
    """One raw spectrum on its way into the record; `measurement` None where unreadable.

    Attributes
    ----------
    raw
        The spectrum; None where it could not be read.
    source, sha256, signature
        Path in the run folder, content hash, and size and time of the files when read.
    measurement
        What was measured.
    reason
        Why it is unreadable, in words; empty if it is not.
    """

    raw: Raw | None
    source: str
    sha256: str
    signature: str
    measurement: Measurement | None
    reason: str = ""


class Record:
    """The writable side of a logbook. Use as a context manager."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.connection: sqlite3.Connection = open_writable(folder)
        row = self.connection.execute(
            "SELECT COALESCE(MAX(trace_offset + trace_size), 0) FROM measured"
        ).fetchone()
        self._traces = TraceWriter(folder, int(row[0]))
        self._place = _place_of(folder)

    def __enter__(self) -> "Record":
        return self

    def __exit__(self, *_: object) -> None:
        self._traces.close()
        self.connection.close()

    # -- what the run is about ---------------------------------------------------------------

    def remember(self, key: str, value: str) -> str:
        """Freeze a value at its first use and return what is frozen."""
        known = self.meta(key)
        if known is not None:
            return known
        with transaction(self.connection):
            self.connection.execute("INSERT OR IGNORE INTO meta VALUES (?, ?)", (key, value))
        return value

    def meta(self, key: str) -> str | None:
        """Return what is noted under a key."""
        row = self.connection.execute("SELECT value FROM meta WHERE key = ?", (key,)).fetchone()
        return None if row is None else str(row[0])

    def set_meta(self, key: str, value: str) -> None:
        """Note a value that may change."""
        with transaction(self.connection):
            self.connection.execute("INSERT OR REPLACE INTO meta VALUES (?, ?)", (key, value))

    def picture_range(self, low: float, high: float) -> tuple[float, float]:
        """Freeze the ppm range of the picture at its first use and return what is frozen."""
        frozen = self.remember("picture", f"{low:.6f} {high:.6f}").split()
        return float(frozen[0]), float(frozen[1])

    def newest_sheet(self) -> tuple[int, str, str] | None:
        """Return version, text and origin of the newest sheet."""
        row = self.connection.execute(
            "SELECT version, text, origin FROM sheets ORDER BY version DESC LIMIT 1"
        ).fetchone()
        return None if row is None else (int(row[0]), str(row[1]), str(row[2]))

    def add_sheet(self, text: str, *, who: str, why: str, origin: str) -> int:
        """Add a version of the sheet, unless the newest is the same; return its number."""
        digest, newest = fingerprint(text), self.newest_sheet()
        if newest is not None and fingerprint(newest[1]) == digest:
            return newest[0]
        version = 1 if newest is None else newest[0] + 1
        with transaction(self.connection):
            self.connection.execute(
                "INSERT INTO sheets VALUES (?, ?, ?, ?, ?, ?, ?)",
                (version, text, digest, _now(), who, why, origin),
            )
            decisions.append(
                self.connection,
                who=who,
                kind="sheet",
                subject=str(version),
                old="" if newest is None else fingerprint(newest[1]),
                new=digest,
                why=why,
            )
        return version

    # -- calibrations ------------------------------------------------------------------------

    def calibrations(self, sheet_version: int) -> dict[int, tuple[int, Calibration, bool]]:
        """Return version → (id, calibration, complete) of a sheet version and this program."""
        rows = self.connection.execute(
            "SELECT id, version, data, complete FROM calibrations "
            "WHERE sheet_version = ? AND program_version = ?",
            (sheet_version, __version__),
        )
        return {
            int(row["version"]): (
                int(row["id"]),
                codec.calibration_from_bytes(row["data"]),
                bool(row["complete"]),
            )
            for row in rows
        }

    def add_calibration(self, sheet_version: int, calibration: Calibration) -> int:
        """Put a calibration down and return its id; the one that is there if it is there."""
        with transaction(self.connection):
            self.connection.execute(
                "INSERT OR IGNORE INTO calibrations "
                "(sheet_version, version, program_version, at, data) VALUES (?, ?, ?, ?, ?)",
                (
                    sheet_version,
                    calibration.version,
                    __version__,
                    _now(),
                    codec.calibration_to_bytes(calibration),
                ),
            )
        row = self.connection.execute(
            "SELECT id FROM calibrations "
            "WHERE sheet_version = ? AND version = ? AND program_version = ?",
            (sheet_version, calibration.version, __version__),
        ).fetchone()
        return int(row[0])

    def complete_calibration(self, identifier: int) -> None:
        """Say that every spectrum has been measured with it: results are read from it now."""
        with transaction(self.connection):
            self.connection.execute(
                "UPDATE calibrations SET complete = 1 WHERE id = ?", (identifier,)
            )

    # -- spectra -----------------------------------------------------------------------------

    def known_signatures(self) -> dict[str, str]:
        """Return source → signature of everything taken so far."""
        rows = self.connection.execute(
            "SELECT source, signature FROM spectra WHERE superseded = 0 "
            "UNION ALL SELECT source, signature FROM aliases"
        )
        return {str(row[0]): str(row[1]) for row in rows}

    def spectrum_id(self, sha256: str) -> int | None:
        """Return the id of a raw spectrum by its hash, None if it is new."""
        row = self.connection.execute(
            "SELECT id FROM spectra WHERE sha256 = ?", (sha256,)
        ).fetchone()
        return None if row is None else int(row[0])

    def unmeasured(self, calibration: int) -> list[tuple[int, str, str]]:
        """Return (id, source, sha256) of readable spectra without a row of a calibration."""
        rows = self.connection.execute(
            "SELECT id, source, sha256 FROM spectra WHERE readable = 1 AND superseded = 0 "
            "AND id NOT IN (SELECT spectrum FROM measured WHERE calibration = ?) ORDER BY id",
            (calibration,),
        )
        return [(int(row[0]), str(row[1]), str(row[2])) for row in rows]

    def count_measured(self, calibration: int) -> int:
        """Return how many spectra have a row of a calibration."""
        row = self.connection.execute(
            "SELECT count(*) FROM measured WHERE calibration = ?", (calibration,)
        ).fetchone()
        return int(row[0])

    def has_measurements(self) -> bool:
        """Whether anything has been measured, with any calibration."""
        return self.connection.execute("SELECT 1 FROM measured LIMIT 1").fetchone() is not None

    def is_complete(self, calibration: int) -> bool:
        """Whether `complete_calibration` was called."""
        row = self.connection.execute(
            "SELECT complete FROM calibrations WHERE id = ?", (calibration,)
        ).fetchone()
        return bool(row and row[0])

    def readable(self) -> list[tuple[str, str]]:
        """Return (source, sha256) of all readable spectra that were not replaced."""
        rows = self.connection.execute(
            "SELECT source, sha256 FROM spectra WHERE readable = 1 AND superseded = 0 ORDER BY id"
        )
        return [(str(row[0]), str(row[1])) for row in rows]

    def state_counts(self) -> dict[str, int]:
        """Return how many spectra ended in each state, by their latest measurement."""
        rows = self.connection.execute(
            "SELECT COALESCE((SELECT state FROM measured WHERE spectrum = id "
            "ORDER BY calibration DESC LIMIT 1), 'unreadable') AS state, count(*) "
            "FROM spectra WHERE superseded = 0 GROUP BY 1 ORDER BY 1"
        )
        return {str(row[0]): int(row[1]) for row in rows}

    def first_measured(self, calibration: int, count: int) -> list[tuple[str, str]]:
        """Return (source, sha256) of the first spectra that were measured."""
        rows = self.connection.execute(
            "SELECT source, sha256 FROM spectra JOIN measured ON spectrum = id "
            "WHERE calibration = ? ORDER BY id LIMIT ?",
            (calibration, count),
        )
        return [(str(row[0]), str(row[1])) for row in rows]

    def take(
        self, batch: Sequence[Taken], calibration: int | None, picture: tuple[float, float]
    ) -> None:
        """Put a batch of spectra down: traces first, then all rows in one transaction.

        Raises
        ------
        LogbookError
            If it cannot be written; then nothing of the batch is in the record.
        """
        self.check_place()
        end = self._traces.end
        try:
            self._take(batch, calibration, picture)
        except BaseException:
            self._traces.back_to(end)
            raise

    def check_place(self) -> None:
        """Make sure that what is written still reaches the logbook.

        A file that was deleted or moved away while open takes writes without a murmur.

        Raises
        ------
        LogbookError
            If the logbook no longer stands where it was opened.
        """
        if _place_of(self.folder) != self._place:
            raise LogbookError(
                f"{self.folder}: the logbook has gone from its place or was replaced; put it back, "
                "or start the follower again"
            )

    def _take(
        self, batch: Sequence[Taken], calibration: int | None, picture: tuple[float, float]
    ) -> None:
        written = [
            (item, self._traces.append(item.measurement.trace))
            for item in batch
            if item.measurement is not None
        ]
        if written:
            self._traces.flush()
        places = {item.sha256: place for item, place in written}
        with transaction(self.connection):
            for item in batch:
                identifier = self._put_spectrum(item)
                if item.measurement is not None and calibration is not None:
                    self._put_measurement(
                        identifier, calibration, item.measurement, places[item.sha256], picture
                    )

    def _put_spectrum(self, item: Taken) -> int:
        found = self.spectrum_id(item.sha256)
        if found is not None:
            known = self.connection.execute(
                "SELECT source, signature FROM spectra WHERE id = ?", (found,)
            ).fetchone()
            if (known["source"], known["signature"]) != (item.source, item.signature):
                self._put_alias(item, found, str(known["source"]))
            return found
        earlier = self.connection.execute(
            "SELECT id FROM spectra WHERE source = ? AND superseded = 0", (item.source,)
        ).fetchone()
        raw = item.raw
        facts = {} if raw is None else _facts(raw)
        cursor = self.connection.execute(
            "INSERT INTO spectra (source, sha256, signature, format, readable, reason, arrived, "
            "stamp, facts, remarks) VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
            (
                item.source,
                item.sha256,
                item.signature,
                "" if raw is None else raw.format,
                int(not item.reason),
                item.reason,
                _now(),
                "" if raw is None else codec.stamp_to_json(raw.stamp),
                json.dumps(facts, ensure_ascii=False),
                codec.remarks_to_json(() if raw is None else raw.remarks),
            ),
        )
        identifier = int(cursor.lastrowid or 0)
        if earlier is not None:
            self.connection.execute(
                "UPDATE spectra SET superseded = 1 WHERE id = ?", (earlier["id"],)
            )
            self.tell(
                "changed",
                f"{item.source} has changed since it was measured; it was "
                "measured again, the earlier result is kept",
                identifier,
            )
        if item.reason:
            self.tell("unreadable", f"{item.source}: {item.reason}", identifier)
        return identifier

    def _put_alias(self, item: Taken, spectrum: int, known: str) -> None:
        done = self.connection.execute(
            "INSERT OR IGNORE INTO aliases VALUES (?, ?, ?)",
            (item.source, item.signature, spectrum),
        )
        if done.rowcount and item.source != known:
            self.tell(
                "same-content",
                f"{item.source} has the same content as {known}; it was not taken twice",
                spectrum,
            )

    def _put_measurement(
        self,
        spectrum: int,
        calibration: int,
        m: Measurement,
        place: tuple[int, int, int],
        picture: tuple[float, float],
    ) -> None:
        row = picture_row(m, *picture)
        self.connection.execute(
            "INSERT OR IGNORE INTO measured VALUES (?,?,?,?,?,?,?,?,?,?,?,?,?,?,?)",
            (
                spectrum,
                calibration,
                m.state,
                codec.remarks_to_json(m.remarks),
                codec.integrals_to_bytes(m.integrals),
                m.noise_sd,
                codec.finite_or_none(m.line_width_hz),
                codec.processing_to_json(m.record),
                *place,
                m.axis.first_ppm,
                m.axis.step_ppm,
                np.ascontiguousarray(row, "<f4").tobytes(),
                _now(),
            ),
        )

    # -- story -------------------------------------------------------------------------------

    def tell(self, kind: str, text: str, spectrum: int | None = None) -> None:
        """Add a line to the story (inside a transaction, or in one of its own).

        Raises
        ------
        LogbookError
            If it cannot be written.
        """
        with nullcontext() if self.connection.in_transaction else transaction(self.connection):
            self.connection.execute(
                "INSERT INTO story (at, kind, text, spectrum) VALUES (?, ?, ?, ?)",
                (_now(), kind, text, spectrum),
            )


def _place_of(folder: Path) -> tuple[tuple[int, int], ...]:
    """Device and inode of the files that are held open; empty where they are not there."""
    try:
        stats = [(folder / name).stat() for name in (RECORD_NAME, TRACES_NAME)]
    except OSError:
        return ()
    return tuple((stat.st_dev, stat.st_ino) for stat in stats)


def _facts(raw: Raw) -> dict[str, object]:
    return {
        "frequency_mhz": raw.frequency_mhz,
        "spectral_width_hz": raw.spectral_width_hz,
        "points": int(raw.data.size),
        "scans": raw.scans,
        "recycle_s": raw.recycle_s,
        "flip_angle_deg": raw.flip_angle_deg,
        "temperature_k": raw.temperature_k,
        "nucleus": raw.nucleus,
        "solvent": raw.solvent,
        "title": raw.title,
    }


def _now() -> str:
    return datetime.now(UTC).isoformat()
