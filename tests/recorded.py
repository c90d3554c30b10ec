"""Small real runs: simulated spectra in a folder, followed into a logbook by the real follower."""

from datetime import UTC, datetime
from pathlib import Path

from demo_runs import dunmarolide
from demo_runs.sheets import write_sheet
from demo_runs.simulate import simulate_run
from demo_runs.write import Format, write
from kinetics.logbook.record import Record
from kinetics.watch import Follower

STARTED = datetime(2026, 3, 3, 19, 0, tzinfo=UTC)


def drop(folder: Path, count: int, *, seed: int = 5, kind: Format = "raw", first: int = 0) -> None:
    """Write simulated spectra into a run folder, those from number `first` on."""
    folder.mkdir(parents=True, exist_ok=True)
    spectra = simulate_run(dunmarolide.demo(), seed=seed, started=STARTED, count=count)
    for number, spectrum in enumerate(spectra):
        if number >= first:
            write(spectrum, folder, kind)


def take(folder: Path, sheet: Path, logbook: Path) -> None:
    """Follow what lies in the folder into the logbook: two looks, without the pause between."""
    with Record(logbook) as record:
        follower = Follower(folder, sheet, record)
        follower.cycle()
        follower.cycle()
        follower.finish()


def recorded_run(home: Path, count: int, *, seed: int = 5, kind: Format = "raw") -> Path:
    """Make ``home/run``, ``home/sheet.toml`` and ``home/run.logbook``; return the last."""
    drop(home / "run", count, seed=seed, kind=kind)
    write_sheet(home / "sheet.toml", STARTED)
    take(home / "run", home / "sheet.toml", home / "run.logbook")
    return home / "run.logbook"
