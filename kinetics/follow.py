"""`watch`: the follower as a process, from the lease to the last line of its log."""

import logging
import logging.handlers
import signal
import sys
import threading
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path
from types import FrameType

from tqdm import tqdm

from kinetics.errors import InputError, LeaseLostError, LogbookError, NothingToDoError
from kinetics.logbook import lease
from kinetics.logbook.record import Record
from kinetics.sheet import read_sheet
from kinetics.watch import Cycle, Follower

log = logging.getLogger("kinetics")

LOG_NAME = "follower.log"
_LOG_BYTES = 2_000_000
_LOG_FILES = 5
ONCE_GAP_S = 2.0
_AFTER_TROUBLE_S = 5.0  # before a logbook that could not be written is tried again


def follow(folder: Path, sheet_path: Path, logbook: Path, once: bool, every_s: float) -> int:
    """Follow a run folder until told to stop, or take what is complete once.

    Returns
    -------
    Exit status.

    Raises
    ------
    InputError
        If the sheet or the call is wrong.
    LogbookError
        If another follower holds the logbook, or it cannot be written.
    NothingToDoError
        With `once`, if nothing was ever there that could be measured.
    """
    read_sheet(sheet_path)
    _check_places(folder, logbook, once)
    if not every_s > 0:
        raise InputError("--every: expected a number of seconds above 0")
    stop = threading.Event()
    with Record(logbook) as record:
        holder = lease.take(record.connection)
        try:
            with _logging_to(logbook, console=not once), _stopping(stop):
                if once:
                    return _once(folder, sheet_path, record, stop)
                return _live(folder, sheet_path, record, holder, every_s, stop)
        finally:
            with suppress(LogbookError):  # a dead holder is replaced anyway
                lease.give_back(record.connection, holder)


def _check_places(folder: Path, logbook: Path, once: bool) -> None:
    if folder.exists() and not folder.is_dir():
        raise InputError(f"{folder}: is a file; expected the run folder")
    if once and not folder.is_dir():
        raise InputError(f"{folder}: there is no such run folder")
    inside, outer = logbook.resolve(), folder.resolve()
    if inside == outer or outer in inside.parents:
        raise InputError(
            f"{logbook}: the logbook must lie outside the run folder, which is never written to"
        )


def _once(folder: Path, sheet_path: Path, record: Record, stop: threading.Event) -> int:
    bar: tqdm | None = None

    def progress(done: int, total: int) -> None:
        nonlocal bar
        if bar is None:
            bar = tqdm(total=total, unit=" spectra", disable=None, file=sys.stderr)
        bar.n = done
        bar.refresh()

    with Follower(folder, sheet_path, record, progress, stop.is_set) as follower:
        follower.cycle()
        stop.wait(ONCE_GAP_S)
        last = follower.cycle()
        follower.finish()
    if bar is not None:
        bar.close()
    for name, why in last.waiting:
        print(f"not taken: {name}: {why}", file=sys.stderr)
    if last.trouble:
        print(last.trouble, file=sys.stderr)
    counts = record.state_counts()
    if not counts:
        raise NothingToDoError(
            f"{folder}: nothing here could be measured; expected raw instrument folders, "
            "JCAMP-DX, nmrML or two-column text"
            + (f" ({len(last.waiting)} not complete yet)" if last.waiting else "")
        )
    words = ", ".join(f"{n} {state}" for state, n in counts.items())
    print(f"{record.folder}: {words}", file=sys.stderr)
    if set(counts) == {"unreadable"}:
        raise NothingToDoError(f"{folder}: none of the spectra could be measured")
    return 0


def _live(
    folder: Path,
    sheet_path: Path,
    record: Record,
    holder: str,
    every_s: float,
    stop: threading.Event,
) -> int:
    with Follower(folder, sheet_path, record, stopping=stop.is_set) as follower:
        _cycles(follower, record, holder, every_s, stop)
    with suppress(LogbookError):
        record.tell("stopped", "following was stopped")
    log.info("stopped")
    return 0


def _cycles(
    follower: Follower, record: Record, holder: str, every_s: float, stop: threading.Event
) -> None:
    record.tell("following", f"following {follower.folder} began")
    log.info("following %s into %s; stop with Ctrl-C", follower.folder, record.folder)
    trouble = ""
    while not stop.is_set():
        try:
            trouble = _cycle(follower, record, holder, trouble)
        except LeaseLostError:
            raise
        except LogbookError as error:
            log.error("%s; trying again", error)
            stop.wait(max(every_s, _AFTER_TROUBLE_S))
        stop.wait(every_s)


def _cycle(follower: Follower, record: Record, holder: str, trouble: str) -> str:
    """Do one cycle and tell of trouble that began or ended since the last; return what holds."""
    # Before anything is written: a follower that was displaced must not go on.
    lease.beat(record.connection, holder, trouble or "following")
    try:
        seen = follower.cycle()
    except InputError as error:
        # A sheet that is being edited is wrong for a while: say so and keep the last one.
        seen = Cycle(0, (), str(error))
    if seen.trouble and seen.trouble != trouble:
        log.warning("%s", seen.trouble)
        record.tell("trouble", seen.trouble)
    elif trouble and not seen.trouble:
        record.tell("trouble-over", "the run folder and the sheet can be read again")
    return seen.trouble


def _silent(record: logging.LogRecord) -> None:
    del record


@contextmanager
def _logging_to(logbook: Path, *, console: bool) -> Iterator[None]:
    """Log to a rotating file in the logbook, and to standard error while following."""
    handlers: list[logging.Handler] = [
        logging.handlers.RotatingFileHandler(
            logbook / LOG_NAME, maxBytes=_LOG_BYTES, backupCount=_LOG_FILES, encoding="utf-8"
        )
    ]
    if console:
        handlers.append(logging.StreamHandler(sys.stderr))
    form = logging.Formatter("%(asctime)s %(message)s", "%Y-%m-%d %H:%M:%S")
    # A full disk must not end in tracebacks on standard error; what matters is told there anyway.
    handlers[0].handleError = _silent  # type: ignore[method-assign]
    for handler in handlers:
        handler.setFormatter(form)
        log.addHandler(handler)
    level, log.propagate = log.level, False
    log.setLevel(logging.INFO)
    try:
        yield
    finally:
        log.setLevel(level)
        log.propagate = True
        for handler in handlers:
            log.removeHandler(handler)
            handler.close()


@contextmanager
def _stopping(stop: threading.Event) -> Iterator[None]:
    """Let Ctrl-C and SIGTERM finish the spectrum in hand; a second one ends at once."""

    def ask(_number: int, _frame: FrameType | None) -> None:
        if stop.is_set():
            raise KeyboardInterrupt
        stop.set()

    before = {s: signal.signal(s, ask) for s in (signal.SIGINT, signal.SIGTERM)}
    try:
        yield
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)
