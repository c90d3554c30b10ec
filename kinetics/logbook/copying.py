"""A safe copy of a logbook, also while a follower writes into it.

SQLite's own backup gives one consistent moment of the record. Traces are flushed to the disk
before the rows that name them are committed, so the traces up to what the *copied* record names
are complete whatever is appended meanwhile. The copy is built beside its place and renamed in one
step: it is there whole, or not at all.
"""

import os
import shutil
import sqlite3
import tempfile
from pathlib import Path

from kinetics.errors import InputError, LogbookError, SheetError
from kinetics.logbook import traces
from kinetics.logbook.connection import open_readable, record_path
from kinetics.sheet import parse_sheet

_CHUNK = 1 << 20


def copy_logbook(source: Path, to: Path) -> None:
    """Copy a logbook to a place where nothing is yet.

    The copy holds the record as it stood at one moment, the traces it names, and the log files.
    Nobody follows into it: the lease stays with the original.

    Parameters
    ----------
    source
        The logbook; may be in use.
    to
        The folder that the copy shall be.

    Raises
    ------
    InputError
        If there is no logbook, something is at `to` already, or `to` lies where no logbook may.
    LogbookError
        If the record or the traces are damaged, or the copy cannot be written.
    """
    record = open_readable(source)
    try:
        _check_place(source, to, record)
        try:
            beside = Path(tempfile.mkdtemp(prefix=f".{to.name}.", suffix=".part", dir=to.parent))
        except OSError as why:
            raise LogbookError(f"{to}: cannot be written ({why.strerror or why})") from None
        try:
            beside.chmod(0o777 & ~_umask())  # a temporary folder is private; a logbook is not
            end = _copy_record(record, beside)
            _copy_traces(source, beside, end)
            _copy_logs(source, beside)
            _sync(beside)
            if os.path.lexists(to):  # somebody else was faster
                raise InputError(f"{to}: is there already; nothing was copied")
            beside.rename(to)
            _sync(to.parent)
        except (OSError, sqlite3.Error) as why:
            raise LogbookError(f"{to}: the copy cannot be written ({why})") from None
        finally:
            shutil.rmtree(beside, ignore_errors=True)  # gone already where all went well
    finally:
        record.close()


def _check_place(source: Path, to: Path, record: sqlite3.Connection) -> None:
    if os.path.lexists(to):
        raise InputError(f"{to}: is there already; nothing was copied")
    if not to.parent.is_dir():
        raise InputError(f"{to}: there is no folder {to.parent} to put it into")
    place = to.resolve()
    if source.resolve() in place.parents:
        raise InputError(f"{to}: lies inside the logbook itself")
    for folder in _run_folders(record):
        if folder == place or folder in place.parents:
            raise InputError(
                f"{to}: lies inside the run folder {folder}, which is never written to"
            )


def _run_folders(record: sqlite3.Connection) -> list[Path]:
    """The run folder the record has frozen, and those that continue it by its newest sheet."""
    row = record.execute("SELECT value FROM meta WHERE key = 'run_folder'").fetchone()
    if row is None:
        return []
    first = Path(str(row[0])).resolve()
    sheet = record.execute("SELECT text FROM sheets ORDER BY version DESC LIMIT 1").fetchone()
    try:
        more = () if sheet is None else parse_sheet(str(sheet[0]), "sheet").files.also
    except SheetError:
        more = ()  # a sheet of another version of this program is no reason to refuse a copy
    return [first, *((first.parent / name).resolve() for name in more)]


def _copy_record(record: sqlite3.Connection, beside: Path) -> int:
    """Copy the record at one moment; return the number of trace values that it names."""
    copy = sqlite3.connect(record_path(beside), isolation_level=None)
    try:
        # All pages in one step: a reader does not hold up the writer of a WAL database.
        record.backup(copy, pages=-1)
        # One plain file, so that the copy can be read from a disk that cannot be written to; the
        # next follower turns it back.
        copy.execute("PRAGMA journal_mode = DELETE")
        copy.execute("PRAGMA synchronous = FULL")
        copy.execute("DELETE FROM lease")
        said = [str(row[0]) for row in copy.execute("PRAGMA quick_check")]
        if said != ["ok"]:
            raise LogbookError(f"the record is damaged ({said[0]}); run verify on the original")
        row = copy.execute(
            "SELECT COALESCE(MAX(trace_offset + trace_size), 0) FROM measured"
        ).fetchone()
        return int(row[0])
    except sqlite3.DatabaseError as why:
        if "malformed" in str(why):
            raise LogbookError(f"the record is damaged ({why})") from None
        raise
    finally:
        copy.close()


def _copy_traces(source: Path, beside: Path, end: int) -> None:
    """Copy the traces up to what the record names; a tail beyond it belongs to rows to come."""
    left = 4 * end
    path = source / traces.FILE_NAME
    with (beside / traces.FILE_NAME).open("wb") as out:
        if left == 0:
            return
        if not path.is_file():
            raise LogbookError(f"{path}: is missing; run verify on the original")
        with path.open("rb") as file:
            while left:
                block = file.read(min(_CHUNK, left))
                if not block:
                    raise LogbookError(
                        f"{path}: ends {left} bytes before what the record names; run verify on "
                        "the original"
                    )
                out.write(block)
                left -= len(block)
        out.flush()
        os.fsync(out.fileno())


def _copy_logs(source: Path, beside: Path) -> None:
    for path in sorted(source.glob("*.log*")):
        try:
            shutil.copy2(path, beside / path.name)
        except FileNotFoundError:
            continue  # it was just rotated away


def _sync(folder: Path) -> None:
    """Force the entries of a folder onto the disk, where the system can."""
    if os.name != "posix":
        return
    descriptor = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def _umask() -> int:
    now = os.umask(0o022)
    os.umask(now)
    return now
