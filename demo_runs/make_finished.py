"""Make the finished run that lies ready to open: ``python -m demo_runs.make_finished [FOLDER]``.

Byte for byte the same from the seed: raw folders in FOLDER/run and the sheet FOLDER/finished.toml;
FOLDER is ``finished`` beside this file by default. What is there already is not touched.
"""

import sys
from collections.abc import Collection, Sequence
from datetime import UTC, datetime, timedelta
from pathlib import Path

from demo_runs import dunmarolide
from demo_runs.sheets import DEMO_SHEET, SheetEvent, sheet_text
from demo_runs.simulate import simulate_run
from demo_runs.write import write

SEED = 20260211
STARTED = datetime(2026, 2, 11, 19, 4, 30, tzinfo=UTC)
FINISHED = Path(__file__).with_name("finished")
RUN_NAME, SHEET_NAME = "run", "finished.toml"


def make(folder: Path, *, only: Collection[int] | None = None) -> int:
    """Write the finished run into a folder.

    Parameters
    ----------
    folder
        Made where it is missing.
    only
        Numbers of the spectra to make; default: all.

    Returns
    -------
    How many spectra were written.

    Raises
    ------
    FileExistsError
        If one of them is there already.
    """
    run = folder / RUN_NAME
    run.mkdir(parents=True, exist_ok=True)
    count = 0
    for spectrum in simulate_run(dunmarolide.finished(), seed=SEED, started=STARTED, only=only):
        write(spectrum, run, "raw")
        count += 1
    (folder / SHEET_NAME).write_text(finished_sheet(), encoding="utf-8", newline="\n")
    return count


def finished_sheet() -> str:
    """Return the run sheet of the finished run."""
    schedule = dunmarolide.finished().schedule
    (after, length), *_ = schedule.pauses
    paused = STARTED + timedelta(seconds=schedule.start_s(after) - length)
    events = (
        SheetEvent("start", STARTED, "acid added, mixed and into the magnet"),
        SheetEvent(
            "note", paused, "instrument stood still for 45 min, sample stayed at 30 °C in it"
        ),
    )
    text = sheet_text(
        DEMO_SHEET.read_text(encoding="utf-8"),
        STARTED,
        events,
        title="Ring opening of dunmarolide, 30 °C (invented)",
    )
    return text.replace('"WX-0231"', '"WX-0228"').replace(
        "temperature_c = 25.0", "temperature_c = 30.0"
    )


def main(arguments: Sequence[str]) -> int:
    """Run the command; return its exit status."""
    folder = Path(arguments[0]) if arguments else FINISHED
    try:
        count = make(folder)
    except OSError as error:
        print(f"cannot write: {error}", file=sys.stderr)
        return 1
    print(f"{count} spectra and {SHEET_NAME} written")
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
