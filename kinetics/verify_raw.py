"""The part of `verify` that needs the raw files: hashes, calibrations and rows, compared anew."""

import re
import sqlite3
import sys
from collections import Counter
from dataclasses import dataclass, field
from pathlib import Path

from tqdm import tqdm

from kinetics.errors import NotYetError, UnreadableError
from kinetics.logbook import traces
from kinetics.measure import Recipe, measure
from kinetics.sheet import Sheet
from kinetics.signals.calibration import calibrate
from kinetics.spectra.arrival import Source, look, natural_key
from kinetics.spectra.model import Float32, Raw
from kinetics.spectra.readers import read
from kinetics.verify_rows import (
    calibration_differences,
    fact_differences,
    file_time_counts,
    row_differences,
)

# So many differences of one kind are named one by one.
NAMED = 20


@dataclass(slots=True)
class Findings:
    """Differences, what could not be looked at, and what was."""

    differences: list[str] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)
    summary: list[str] = field(default_factory=list)
    kinds: Counter[str] = field(default_factory=Counter)

    def differs(self, kind: str, text: str) -> None:
        """Put a difference down; of each kind the first are named, all are counted."""
        self.kinds[kind] += 1
        if self.kinds[kind] <= NAMED:
            self.differences.append(f"{kind}: {text}")


@dataclass(frozen=True, slots=True, eq=False)
class Calibrated:
    """A recorded calibration with the sheet it belongs to; None where that cannot be read."""

    id: int
    sheet_version: int
    program_version: str
    recipe: Recipe | None
    complete: bool


@dataclass(frozen=True, slots=True)
class _Lies:
    """What lies at a place now: its spectra, none where it cannot be read."""

    root: Path
    source: Source
    raws: tuple[Raw, ...]

    def matching(self, sha256: str) -> Raw | None:
        return next((raw for raw in self.raws if raw.sha256 == sha256), None)

    def is_file_of(self, sha256: str) -> bool:
        """Whether the files as a whole have a hash: that is kept of what could not be read."""
        return self.source.fallback_hash(self.root) == sha256


class Archive:
    """The raw files as they lie there now, found by the names the record has for them."""

    def __init__(self, record: sqlite3.Connection, folder: Path, also: tuple[str, ...]) -> None:
        self.roots = [("", folder), *((f"{name}/", folder.parent / name) for name in also)]
        self._aliases: dict[int, list[str]] = {}
        for row in record.execute("SELECT source, spectrum FROM aliases"):
            self._aliases.setdefault(int(row["spectrum"]), []).append(str(row["source"]))

    def find(self, identifier: int, source: str) -> _Lies | None:
        """Return what a spectrum was taken from, under any name it had; None if all are gone."""
        for name in (source, *self._aliases.get(identifier, ())):
            lies = self._at(name)
            if lies is not None:
                return lies
        return None

    def _at(self, name: str) -> _Lies | None:
        prefix, root = next(p for p in reversed(self.roots) if name.startswith(p[0]))
        below = name.removeprefix(prefix)
        # A spectrum out of a file that holds several carries its number behind the name.
        for candidate in dict.fromkeys((below, re.sub(r"#\d+$", "", below))):
            try:
                source = Source.named(root, candidate)
                return _Lies(root, source, read(root, source))
            except (UnreadableError, NotYetError):
                return _Lies(root, source, ())
            except OSError:
                continue
        return None


def compare_spectra(
    logbook: Path,
    record: sqlite3.Connection,
    archive: Archive,
    calibrations: dict[int, Calibrated],
    found: Findings,
) -> None:
    """Read every raw file again, compare its hash, and measure its rows again."""
    spectra = record.execute("SELECT * FROM spectra ORDER BY id").fetchall()
    picture = _picture_range(record)
    count: Counter[str] = Counter()
    missing: list[str] = []
    for spectrum in tqdm(spectra, unit=" spectra", disable=None, file=sys.stderr, leave=False):
        source, sha256 = str(spectrum["source"]), str(spectrum["sha256"])
        rows = record.execute(
            "SELECT * FROM measured WHERE spectrum = ? ORDER BY calibration", (spectrum["id"],)
        ).fetchall()
        count["rows"] += len(rows)
        lies = archive.find(int(spectrum["id"]), source)
        if lies is None:
            missing.append(source)
            continue
        raw = lies.matching(sha256)
        if raw is None:
            if not lies.is_file_of(sha256):
                if spectrum["superseded"]:
                    count["replaced"] += 1
                else:
                    found.differs("raw file", f"{source}: its content is not what was taken")
                continue
            if spectrum["readable"]:
                found.differs("raw file", f"{source} was measured, but cannot be read now")
            elif lies.raws:
                found.differs("raw file", f"{source} is down as unreadable, but can be read")
            count["unchanged"] += 1
            continue
        count["unchanged"] += 1
        count["file times"] += file_time_counts(spectrum, raw)
        for text in fact_differences(spectrum, raw):
            found.differs("facts", f"{source}: {text}")
        for row in rows:
            made = calibrations.get(int(row["calibration"]))
            if made is None or made.recipe is None:
                continue
            texts = row_differences(row, _trace(logbook, row), raw, made.recipe, picture)
            count["same"] += not texts
            for text in texts:
                found.differs("row", f"{source} (calibration {made.id}): {text}")
        _missing_row(spectrum, rows, raw, calibrations, found)
    _summed_up(len(spectra), count, missing, found)


def _trace(logbook: Path, row: sqlite3.Row) -> Float32 | None:
    """The recorded trace; None where its bytes changed, which is named already."""
    place = (row["trace_offset"], row["trace_size"])
    if not traces.trace_is_intact(logbook, *place, row["trace_crc"]):
        return None
    return traces.read_trace(logbook, *place)


def _picture_range(record: sqlite3.Connection) -> tuple[float, float] | None:
    row = record.execute("SELECT value FROM meta WHERE key = 'picture'").fetchone()
    if row is None:
        return None
    low, high = str(row[0]).split()
    return float(low), float(high)


def _missing_row(
    spectrum: sqlite3.Row,
    rows: list[sqlite3.Row],
    raw: Raw,
    calibrations: dict[int, Calibrated],
    found: Findings,
) -> None:
    """Every readable spectrum has a row of the newest calibration that is said to be complete."""
    complete = [c for c in calibrations.values() if c.complete and c.recipe is not None]
    if not complete or spectrum["superseded"] or not spectrum["readable"]:
        return
    ruling = max(complete, key=lambda c: (c.sheet_version, c.id))
    if ruling.recipe is None or ruling.id in {int(row["calibration"]) for row in rows}:
        return
    try:
        measure(raw, ruling.recipe)
    except UnreadableError:
        return  # it never had one
    found.differs("row", f"{spectrum['source']} (calibration {ruling.id}): is missing")


def _summed_up(total: int, count: Counter[str], missing: list[str], found: Findings) -> None:
    found.summary.append(f"Raw files: {count['unchanged']} of {total} unchanged.")
    found.summary.append(
        f"Rows: {count['same']} of {count['rows']} recomputed with the same result (states and "
        "remarks exactly, numbers to 1e-6)."
    )
    if missing:
        found.notes.append(f"Raw files no longer there, not compared: {_listed(missing)}.")
    if count["replaced"]:
        found.notes.append(
            f"{count['replaced']} spectra were replaced by a later content, as the record says: "
            "the earlier content is gone, and its rows cannot be recomputed."
        )
    if count["file times"]:
        found.notes.append(
            f"{count['file times']} spectra take their time from when their file was written, and "
            "that is not what is recorded any more (copied?): those times cannot be checked."
        )


def compare_calibrations(
    record: sqlite3.Connection,
    archive: Archive,
    calibrations: dict[int, Calibrated],
    found: Findings,
) -> None:
    """Make every calibration anew from the spectra that it names."""
    good = 0
    for made in calibrations.values():
        if made.recipe is None:
            continue
        recorded = made.recipe.calibration
        raws = []
        for sha256 in recorded.learned_from:
            row = record.execute(
                "SELECT id, source FROM spectra WHERE sha256 = ?", (sha256,)
            ).fetchone()
            if row is None:
                found.differs(
                    "calibration", f"number {made.id} names a spectrum that is not in the record"
                )
                continue
            lies = archive.find(int(row["id"]), str(row["source"]))
            raw = None if lies is None else lies.matching(sha256)
            if raw is not None:
                raws.append(raw)
        if len(raws) < len(recorded.learned_from):
            found.notes.append(
                f"Calibration {made.id} was not made anew: {len(recorded.learned_from) - len(raws)}"
                f" of the {len(recorded.learned_from)} spectra it was learned from are gone or "
                "changed."
            )
            continue
        try:
            now = calibrate(raws, made.recipe.plan, recorded.version)
        except UnreadableError as why:
            found.differs("calibration", f"number {made.id} cannot be made anew: {why}")
            continue
        texts = calibration_differences(recorded, now)
        good += not texts
        for text in texts:
            found.differs("calibration", f"number {made.id}: {text}")
    found.summary.append(f"Calibrations: {good} of {len(calibrations)} reproduced.")


def name_unknown(
    record: sqlite3.Connection, archive: Archive, sheet: Sheet, found: Findings
) -> None:
    """Name spectra in the run folder that the record does not know."""
    known = {
        re.sub(r"#\d+$", "", str(row[0]))
        for row in record.execute("SELECT source FROM spectra UNION SELECT source FROM aliases")
    }
    known |= {str(row[0]) for row in record.execute("SELECT source FROM spectra")}
    new = [
        prefix + name
        for prefix, root in archive.roots
        for name in look(root, sheet.files.include, sheet.files.exclude).memory.seen
        if prefix + name not in known
    ]
    if new:
        found.notes.append(
            f"In the run folder, but not in the record: {_listed(sorted(new, key=natural_key))} "
            "(not complete, not taken yet, or taken out of the record)."
        )


def _listed(names: list[str]) -> str:
    if len(names) <= 5:
        return ", ".join(names)
    return f"{', '.join(names[:4])} and {len(names) - 4} more"
