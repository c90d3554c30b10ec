"""`verify`: can the record be believed? Everything in it that can be recomputed is, and compared.

Looked at are the sheets and the chain of decisions (hashes), the traces (CRC), the raw files
(hashes), the calibrations (made anew from the spectra they name) and every row (measured anew
with its recorded calibration). Nothing is written, neither to the logbook nor to the run folder.
"""

import sqlite3
from contextlib import closing
from dataclasses import dataclass
from pathlib import Path
from zipfile import BadZipFile

from kinetics.errors import InputError, LogbookError, SheetError
from kinetics.logbook import codec, traces
from kinetics.logbook.connection import open_readable
from kinetics.logbook.decisions import broken_links
from kinetics.measure import Recipe, follow_plan
from kinetics.sheet import Sheet, fingerprint, parse_sheet
from kinetics.verify_raw import (
    NAMED,
    Archive,
    Calibrated,
    Findings,
    compare_calibrations,
    compare_spectra,
    name_unknown,
)
from kinetics.version import __version__


@dataclass(frozen=True, slots=True)
class Verification:
    """What `verify` found.

    Attributes
    ----------
    lines
        In plain words; differences first, then what was looked at.
    found
        Whether anything differs. What could not be compared is said, but is no difference.
    """

    lines: tuple[str, ...]
    found: bool


def verify(logbook: Path, raw: Path | None = None) -> Verification:
    """Recompute a record from its raw files and compare.

    Parameters
    ----------
    logbook
        The logbook; may be in use: one moment of it is looked at.
    raw
        The run folder; default: the one the logbook was made from. Folders that continue the
        run (`files.also` in the sheet) are looked for beside it.

    Raises
    ------
    InputError
        If there is no logbook, or no folder `raw`.
    LogbookError
        If the record cannot be read at all.
    """
    if raw is not None and not raw.is_dir():
        raise InputError(f"{raw}: there is no such run folder")
    with closing(open_readable(logbook)) as record:
        try:
            record.execute("BEGIN")  # one moment of the record, whatever is written meanwhile
            return _verified(logbook, record, raw)
        except sqlite3.DatabaseError as why:
            raise LogbookError(f"{logbook}: the record is damaged ({why})") from None


def _verified(logbook: Path, record: sqlite3.Connection, raw: Path | None) -> Verification:
    found = Findings()
    for row in record.execute("PRAGMA quick_check"):
        if row[0] != "ok":
            found.differs("record", str(row[0]))
    sheets = _sheets(record, found)
    _decisions(record, found)
    _traces(logbook, record, found)
    calibrations = _calibrations(record, sheets, found)
    newest = sheets.get(max(sheets)) if sheets else None
    folder = raw or _frozen_folder(record)
    if folder is None or not folder.is_dir():
        place = "it was made from is not known" if folder is None else f"{folder} is not there"
        found.notes.append(
            f"The run folder {place}: raw files, calibrations and rows were not compared; "
            "give it with --raw."
        )
        return _result(found)
    also = () if newest is None else newest.files.also
    archive = Archive(record, folder, also)
    compare_spectra(logbook, record, archive, calibrations, found)
    compare_calibrations(record, archive, calibrations, found)
    if newest is not None:
        name_unknown(record, archive, newest, found)
    return _result(found)


def _result(found: Findings) -> Verification:
    more = [
        f"{kind}: and {count - NAMED} more" for kind, count in found.kinds.items() if count > NAMED
    ]
    total = found.kinds.total()
    if total:
        last = f"{total} difference{'s' if total > 1 else ''} found."
    else:
        last = "No difference found"
        last += " in what could be compared." if found.notes else "."
    lines = (*found.differences, *more, *found.notes, *found.summary, last)
    return Verification(lines, total > 0)


def _frozen_folder(record: sqlite3.Connection) -> Path | None:
    row = record.execute("SELECT value FROM meta WHERE key = 'run_folder'").fetchone()
    return None if row is None else Path(str(row[0]))


# -- what needs no raw files -------------------------------------------------------------------


def _sheets(record: sqlite3.Connection, found: Findings) -> dict[int, Sheet | None]:
    """Check every sheet version against its hash and the decision that made it; parse it."""
    decided = {
        str(row["subject"]): str(row["new"])
        for row in record.execute("SELECT subject, new FROM decisions WHERE kind = 'sheet'")
    }
    out: dict[int, Sheet | None] = {}
    for row in record.execute("SELECT version, text, sha256 FROM sheets ORDER BY version"):
        version, text = int(row["version"]), str(row["text"])
        digest = fingerprint(text)
        if digest != row["sha256"]:
            found.differs("sheet", f"the text of version {version} is not that which was put down")
        elif decided.get(str(version)) != digest:
            found.differs("sheet", f"no decision put down version {version} as it stands here")
        try:
            out[version] = parse_sheet(text, f"sheet version {version}")
        except SheetError as why:
            out[version] = None
            found.notes.append(f"Sheet version {version} cannot be read by this program: {why}")
    found.summary.append(f"Sheets: {len(out)} version{'s' if len(out) != 1 else ''}.")
    return out


def _decisions(record: sqlite3.Connection, found: Findings) -> None:
    broken = broken_links(record)
    count = int(record.execute("SELECT count(*) FROM decisions").fetchone()[0])
    for number in broken:
        found.differs(
            "decision", f"number {number} was changed, or one before it was changed or taken out"
        )
    whole = f"the chain of {count} is whole" if not broken else f"{len(broken)} of {count} broken"
    found.summary.append(f"Decisions: {whole}.")


def _traces(logbook: Path, record: sqlite3.Connection, found: Findings) -> None:
    good = total = 0
    for row in record.execute(
        "SELECT source, calibration, trace_offset, trace_size, trace_crc "
        "FROM measured JOIN spectra ON spectrum = id ORDER BY trace_offset"
    ):
        total += 1
        if traces.trace_is_intact(
            logbook, row["trace_offset"], row["trace_size"], row["trace_crc"]
        ):
            good += 1
        else:
            found.differs(
                "trace", f"{row['source']} (calibration {row['calibration']}): its bytes changed"
            )
    found.summary.append(f"Traces: {good} of {total} intact.")


def _calibrations(
    record: sqlite3.Connection, sheets: dict[int, Sheet | None], found: Findings
) -> dict[int, Calibrated]:
    out = {}
    for row in record.execute("SELECT * FROM calibrations ORDER BY id"):
        sheet = sheets.get(int(row["sheet_version"]))
        recipe = None
        try:
            calibration = codec.calibration_from_bytes(row["data"])
        except (ValueError, KeyError, OSError, BadZipFile) as why:
            found.differs("calibration", f"number {row['id']} cannot be read ({why})")
        else:
            if sheet is not None:
                recipe = Recipe(int(row["sheet_version"]), follow_plan(sheet), calibration)
        out[int(row["id"])] = Calibrated(
            int(row["id"]),
            int(row["sheet_version"]),
            str(row["program_version"]),
            recipe,
            bool(row["complete"]),
        )
    others = sorted({c.program_version for c in out.values()} - {__version__})
    if others:
        found.notes.append(
            f"Rows made by program version {', '.join(others)} are recomputed with {__version__}: "
            "a difference in them may come from that."
        )
    return out
