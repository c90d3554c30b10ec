"""A whole run in one file that grows row by row: followed, restarted, verified, fitted."""

from pathlib import Path

import numpy as np
import pytest

from demo_runs import dunmarolide
from demo_runs.sheets import write_sheet
from demo_runs.simulate import simulate_run
from demo_runs.write import fid_bytes, parameter_bytes, write
from kinetics.logbook.record import Record
from kinetics.run import load_run, study_run
from kinetics.watch import Follower
from tests.command import kinetics
from tests.recorded import STARTED, take

COUNT = 24


def write_series(folder: Path, rows: int) -> None:
    """The run as one series of which so many rows have been acquired; starts as scheduled."""
    spectra = list(simulate_run(dunmarolide.demo(), seed=5, started=STARTED, count=COUNT))
    folder.mkdir(parents=True, exist_ok=True)
    gaps = np.diff([s.start.timestamp() for s in spectra])
    length = [(s.end - s.start).total_seconds() for s in spectra]
    waits = [0.0, *(gap - took for gap, took in zip(gaps, length, strict=False))]
    text = parameter_bytes(spectra[0]).decode().replace("##$DATE= ", "##$DATE_OLD= ")
    (folder / "acqus").write_text(text)
    (folder / "acqu2s").write_text(f"##$TD= {COUNT}\n##$NUC1= <off>\n##END=\n")
    (folder / "vdlist").write_text("\n".join(f"{wait:.6f}s" for wait in waits) + "\n")
    body = [fid_bytes(s) for s in spectra]
    size = len(body[0])
    assert size % 1024 == 0
    (folder / "ser").write_bytes(b"".join(body[:rows]) + bytes(size * (COUNT - rows)))


def test_a_growing_series(tmp_path: Path) -> None:
    write_sheet(tmp_path / "sheet.toml", STARTED)
    series, logbook = tmp_path / "run" / "8", tmp_path / "x.logbook"
    seen = []
    for rows in (0, 3, 11, COUNT):  # each time a new follower: as after a restart
        write_series(series, rows)
        with (
            Record(logbook) as record,
            Follower(tmp_path / "run", tmp_path / "sheet.toml", record) as follower,
        ):
            for _ in range(3):
                follower.cycle()
            seen.append(sum(record.state_counts().values()))
    assert seen == [0, 3, 11, COUNT]
    run = load_run(logbook)
    assert [e.source for e in run.entries] == [f"8#{i + 1}" for i in range(COUNT)]

    for spectrum in simulate_run(dunmarolide.demo(), seed=5, started=STARTED, count=COUNT):
        (tmp_path / "single").mkdir(exist_ok=True)
        write(spectrum, tmp_path / "single", "raw")
    take(tmp_path / "single", tmp_path / "sheet.toml", tmp_path / "y.logbook")
    other = load_run(tmp_path / "y.logbook")
    assert run.time_s == pytest.approx(other.time_s, abs=1.5)
    k, expected = (study_run(r, ("first-order",)).fits[0].parameters[0] for r in (run, other))
    assert k.value == pytest.approx(expected.value, rel=1e-3)

    done = kinetics("verify", logbook, "--raw", tmp_path / "run")
    assert done.returncode == 0, done.stdout + done.stderr
