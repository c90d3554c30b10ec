"""Drop simulated spectra into a folder as an instrument would, faster than life.

    python -m demo_runs.player FOLDER --pace SECONDS --count N
        [--seed N] [--format raw|jcamp|text] [--start earlier|now|ISO] [--sheet FILE] [--at-once]

One spectrum every `--pace` seconds of real time stands for four minutes of the reaction; the
recorded stamps run in the reaction's time. Files grow on the disk as on a slow share, unless
`--at-once`. The player ends by itself after `--count` spectra, and on Ctrl-C or SIGTERM after
finishing the spectrum it is writing.
"""

import argparse
import signal
import sys
import threading
import time
from collections.abc import Callable, Iterable, Sequence
from datetime import UTC, datetime, timedelta
from pathlib import Path
from types import FrameType

from demo_runs import dunmarolide
from demo_runs.sheets import write_sheet
from demo_runs.simulate import SimulatedSpectrum, simulate_run
from demo_runs.write import FORMATS, Format, write

DEFAULT_PACE_S = 1.0
DEFAULT_SEED = 20260303
# Share of the pace over which a growing file takes shape.
_WRITING_SHARE = 0.5
_PAUSES_A_FILE = 6


def play(
    spectra: Iterable[SimulatedSpectrum],
    folder: Path,
    *,
    pace_s: float,
    kind: Format,
    gradually: bool,
    stop: threading.Event,
    told: Callable[[Path], None],
) -> int:
    """Write spectra one by one at a pace until they end or `stop` is set.

    The pace is kept on average: time lost in one spectrum is made up in the next. A spectrum
    that was begun is always finished, without further waiting once `stop` is set.

    Returns
    -------
    How many were written.
    """
    written = 0
    begun = time.monotonic()
    piece_s = pace_s * _WRITING_SHARE / _PAUSES_A_FILE

    def pause() -> None:
        stop.wait(piece_s)

    for spectrum in spectra:
        if stop.is_set():
            break
        told(write(spectrum, folder, kind, gradually=gradually, pause=pause))
        written += 1
        left = begun + written * pace_s - time.monotonic()
        if left > 0:
            stop.wait(left)
    return written


def first_moment(start: str, pace_s: float, count: int) -> datetime:
    """Return when the simulated reaction began.

    Parameters
    ----------
    start
        ``"earlier"``: so that the last spectrum's recorded end is about the moment at which it
        is played, and no stamp lies in the future; ``"now"``; or an ISO date and time (UTC
        where it has no offset).
    pace_s, count
        As played.

    Raises
    ------
    ValueError
        If `start` is none of these.
    """
    now = datetime.now(UTC).replace(microsecond=0)
    if start == "now":
        return now
    if start == "earlier":
        schedule = dunmarolide.demo().schedule
        length = schedule.start_s(count - 1) + schedule.duration_s
        return now + timedelta(seconds=int(pace_s * (count - 1)) - int(length))
    try:
        given = datetime.fromisoformat(start)
    except ValueError:
        raise ValueError(
            f"--start {start!r}: expected earlier, now, or e.g. 2026-03-03T19:00:00+01:00"
        ) from None
    return given if given.tzinfo is not None else given.replace(tzinfo=UTC)


def parser() -> argparse.ArgumentParser:
    """Return the command line."""
    line = argparse.ArgumentParser(
        prog="python -m demo_runs.player",
        description="Drop simulated spectra into a folder as an instrument would.",
    )
    line.add_argument("folder", type=Path, help="run folder; made where it is missing")
    line.add_argument(
        "--pace", type=float, default=DEFAULT_PACE_S, help="seconds a spectrum (default 1)"
    )
    line.add_argument("--count", type=int, default=dunmarolide.demo().schedule.count)
    line.add_argument("--seed", type=int, default=DEFAULT_SEED)
    line.add_argument("--format", choices=FORMATS, default="raw")
    line.add_argument("--start", default="earlier", help="earlier (default), now, or ISO time")
    line.add_argument("--sheet", type=Path, help="also write the run sheet there")
    line.add_argument("--at-once", action="store_true", help="files appear whole")
    return line


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the player; return its exit status (0 played or stopped, 2 wrong call)."""
    line = parser()
    asked = line.parse_args(arguments)
    if asked.pace < 0 or asked.count < 1:
        line.error("--pace must not be negative and --count at least 1")
    try:
        started = first_moment(asked.start, asked.pace, asked.count)
        asked.folder.mkdir(parents=True, exist_ok=True)
        if any(asked.folder.iterdir()):
            line.error(f"{asked.folder} is not empty; give a folder without spectra")
        if asked.sheet is not None and asked.sheet.parent.resolve() == asked.folder.resolve():
            line.error(f"{asked.sheet} would lie in the run folder; it belongs beside it")
        if asked.sheet is not None:
            write_sheet(asked.sheet, started)
    except ValueError as error:
        line.error(str(error))
    except OSError as error:
        line.error(f"{error.filename}: {error.strerror}")

    stop = threading.Event()

    def asked_to_stop(_number: int, _frame: FrameType | None) -> None:
        stop.set()

    before = {each: signal.signal(each, asked_to_stop) for each in (signal.SIGINT, signal.SIGTERM)}
    spectra = simulate_run(dunmarolide.demo(), seed=asked.seed, started=started, count=asked.count)
    try:
        count = play(
            spectra,
            asked.folder,
            pace_s=asked.pace,
            kind=asked.format,
            gradually=not asked.at_once,
            stop=stop,
            told=lambda path: print(path.name, flush=True),
        )
    except OSError as error:
        print(f"cannot write: {error}", file=sys.stderr)
        return 1
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)
    print(f"{count} spectra written; reaction began {started.isoformat()}", flush=True)
    return 0


if __name__ == "__main__":
    sys.exit(main())
