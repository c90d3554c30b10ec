"""The same simulated run gives the same rate constant in whatever form it arrives, and when."""

import json
import signal
import subprocess
import sys
import time
from datetime import UTC, datetime
from pathlib import Path

import pytest

from demo_runs import dunmarolide
from demo_runs.player import play
from demo_runs.sheets import write_sheet
from demo_runs.simulate import simulate_run
from demo_runs.write import write
from kinetics.logbook.view import LogbookView
from tests.command import ROOT, kinetics

COUNT = 36
STARTED = datetime(2026, 3, 3, 19, 0, tzinfo=UTC)


def k_of(logbook: Path) -> dict[str, float]:
    fitted = json.loads(kinetics("fit", logbook, "--law", "first-order", "--json").stdout)
    found: dict[str, float] = fitted["fits"][0]["parameters"]["k"]
    return found


def written(folder: Path, kind: str) -> Path:
    folder.mkdir()
    for spectrum in simulate_run(dunmarolide.demo(), seed=5, started=STARTED, count=COUNT):
        write(spectrum, folder, kind)  # type: ignore[arg-type]
    return folder


@pytest.fixture(scope="module")
def once(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Path]:
    """Logbooks of the run by format, each taken with --once."""
    home = tmp_path_factory.mktemp("formats")
    write_sheet(home / "sheet.toml", STARTED)
    out = {}
    for kind in ("raw", "jcamp", "text"):
        folder, logbook = written(home / kind, kind), home / f"{kind}.logbook"
        done = kinetics(
            "watch", folder, "--sheet", home / "sheet.toml", "--logbook", logbook, "--once"
        )
        assert done.returncode == 0, done.stderr
        out[kind] = logbook
    return out


@pytest.mark.parametrize("kind", ["jcamp", "text"])
def test_formats(once: dict[str, Path], kind: str) -> None:
    raw, other = k_of(once["raw"]), k_of(once[kind])
    assert abs(other["value"] - raw["value"]) < 0.1 * raw["standard_error"]


def test_live_equals_once(once: dict[str, Path], tmp_path: Path) -> None:
    """Followed while files grow, the record is that of --once: rows, states and numbers."""
    folder, logbook, sheet = tmp_path / "run", tmp_path / "live.logbook", tmp_path / "sheet.toml"
    folder.mkdir()
    write_sheet(sheet, STARTED)
    command = [sys.executable, "-m", "kinetics", "watch", folder, "--sheet", sheet]
    follower = subprocess.Popen(
        [*map(str, command), "--logbook", str(logbook), "--every", "0.1"],
        cwd=ROOT,
        stderr=subprocess.DEVNULL,
    )
    try:
        import threading

        spectra = simulate_run(dunmarolide.demo(), seed=5, started=STARTED, count=COUNT)
        play(
            spectra,
            folder,
            pace_s=0.15,
            kind="raw",
            gradually=True,
            stop=threading.Event(),
            told=lambda _path: None,
        )
        end = time.monotonic() + 60
        while time.monotonic() < end and entries(logbook) < COUNT:
            time.sleep(0.2)
    finally:
        follower.send_signal(signal.SIGTERM)
        assert follower.wait(timeout=30) == 0
    live, whole = table(logbook), table(once["raw"])
    assert [row[:2] for row in live] == [row[:2] for row in whole]
    for mine, theirs in zip(live, whole, strict=True):
        assert [float(v) for v in mine[5:9]] == pytest.approx(
            [float(v) for v in theirs[5:9]], rel=1e-6, abs=1e-9
        )
    raw, followed = k_of(once["raw"]), k_of(logbook)
    assert abs(followed["value"] - raw["value"]) < 0.1 * raw["standard_error"]


def entries(logbook: Path) -> int:
    if not (logbook / "record.sqlite").is_file():
        return 0
    with LogbookView(logbook) as view:
        return len(view.entries())


def table(logbook: Path) -> list[list[str]]:
    import csv
    import io

    return list(csv.reader(io.StringIO(kinetics("table", logbook).stdout)))[1:]
