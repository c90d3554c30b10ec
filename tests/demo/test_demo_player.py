"""The player and the finished run, as a user and a follower meet them."""

import math
import os
import re
import signal
import subprocess
import sys
import threading
import time
from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest

from demo_runs import dunmarolide, make_finished
from demo_runs.player import first_moment, main, play
from demo_runs.sheets import DEMO_SHEET, write_sheet
from demo_runs.simulate import simulate_run
from kinetics.sheet import read_sheet

ROOT = Path(__file__).parents[2]
STARTED = datetime(2026, 3, 3, 18, 0, tzinfo=UTC)


def stamps(run: Path) -> list[tuple[int, int]]:
    found = []
    for folder in sorted(run.iterdir(), key=lambda p: int(p.name)):
        text = (folder / "acqus").read_text()
        entries = dict(re.findall(r"##\$(DATE\w*)= (\d+)", text))
        found.append((int(entries["DATE_START"]), int(entries["DATE"])))
    return found


@pytest.mark.parametrize("kind", ["raw", "jcamp", "text"])
def test_plays_into_a_folder(tmp_path: Path, kind: str, capsys: pytest.CaptureFixture) -> None:
    run = tmp_path / "run"
    call = [str(run), "--pace", "0", "--count", "3", "--format", kind, "--start", "now"]
    assert main(call) == 0
    assert len(list(run.iterdir())) == 3
    assert "3 spectra written" in capsys.readouterr().out


def test_stamps_run_in_the_time_of_the_reaction(tmp_path: Path) -> None:
    run = tmp_path / "run"
    call = [str(run), "--pace", "0", "--count", "3", "--start", "2026-03-03T19:00:00+01:00"]
    assert main(call) == 0
    first = int(STARTED.timestamp()) + 60
    assert stamps(run) == [(first + 240 * i, first + 240 * i + 192) for i in range(3)]


def test_earlier_ends_about_now_and_nothing_lies_in_the_future() -> None:
    began = first_moment("earlier", 0.5, 120)
    schedule = dunmarolide.demo().schedule
    last = began + timedelta(seconds=schedule.end_s)
    played = datetime.now(UTC) + timedelta(seconds=0.5 * 119)
    assert abs((last - played).total_seconds()) < 5
    # Every spectrum is played after its recorded end, give or take a second.
    for index in range(120):
        end = began + timedelta(seconds=schedule.start_s(index) + schedule.duration_s)
        assert end <= datetime.now(UTC) + timedelta(seconds=0.5 * index + 2)


def test_keeps_its_pace_and_stops_when_asked(tmp_path: Path) -> None:
    stop = threading.Event()
    written: list[Path] = []

    def told(path: Path) -> None:
        written.append(path)
        if len(written) == 4:
            stop.set()

    spectra = simulate_run(dunmarolide.demo(), seed=1, started=STARTED)
    begun = time.monotonic()
    count = play(spectra, tmp_path, pace_s=0.1, kind="raw", gradually=True, stop=stop, told=told)
    took = time.monotonic() - begun
    assert count == len(written) == 4
    assert 0.3 <= took < 2.0
    assert all((path / "fid").stat().st_size == 8 * 4096 for path in written)


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
def test_a_signal_ends_it_cleanly(tmp_path: Path, number: signal.Signals) -> None:
    run = tmp_path / "run"
    player = subprocess.Popen(
        [sys.executable, "-m", "demo_runs.player", str(run), "--pace", "0.4"],
        cwd=ROOT,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        env={**os.environ, "OMP_NUM_THREADS": "1"},
    )
    try:
        deadline = time.monotonic() + 60
        while not (run / "2").exists():
            assert time.monotonic() < deadline, "the player wrote nothing"
            assert player.poll() is None
            time.sleep(0.02)
        player.send_signal(number)
        out, err = player.communicate(timeout=30)
    finally:
        if player.poll() is None:
            player.kill()
            player.communicate()
    assert player.returncode == 0
    assert err == ""
    folders = list(run.iterdir())
    # Whatever was begun is complete.
    assert all((p / "fid").stat().st_size == 8 * 4096 for p in folders)
    assert f"{len(folders)} spectra written" in out


@pytest.mark.parametrize(
    ("more", "message"),
    [
        (["--count", "0"], "at least 1"),
        (["--pace", "-1"], "negative"),
        (["--start", "yesterday"], "expected earlier, now"),
        (["--format", "paper"], "invalid choice"),
    ],
)
def test_a_wrong_call_says_so(
    tmp_path: Path, more: list[str], message: str, capsys: pytest.CaptureFixture
) -> None:
    with pytest.raises(SystemExit) as ended:
        main([str(tmp_path / "run"), *more])
    assert ended.value.code == 2
    assert message in capsys.readouterr().err


def test_a_folder_in_use_is_refused(tmp_path: Path, capsys: pytest.CaptureFixture) -> None:
    (tmp_path / "notes.txt").write_text("x")
    with pytest.raises(SystemExit):
        main([str(tmp_path), "--pace", "0", "--count", "1"])
    assert "is not empty" in capsys.readouterr().err
    assert [p.name for p in tmp_path.iterdir()] == ["notes.txt"]


def test_the_sheet_goes_beside_the_run_folder(
    tmp_path: Path, capsys: pytest.CaptureFixture
) -> None:
    call = [str(tmp_path / "run"), "--pace", "0", "--count", "1", "--sheet"]
    with pytest.raises(SystemExit):
        main([*call, str(tmp_path / "run" / "run.toml")])
    assert "beside" in capsys.readouterr().err
    assert main([*call, str(tmp_path / "run.toml")]) == 0
    sheet, _ = read_sheet(tmp_path / "run.toml")
    (first,) = stamps(tmp_path / "run")
    assert sheet.started is not None
    assert first[0] - sheet.started.timestamp() == 60


def test_the_readme_tells_the_truth() -> None:
    text = (ROOT / "demo_runs" / "README.md").read_text(encoding="utf-8")
    for run in (dunmarolide.demo(), dunmarolide.finished()):
        k = dunmarolide.rate_constant(run.habits.temperature_k)
        conversion = 1 - math.exp(-k * run.schedule.end_s)
        assert f"{1e4 * k:.4g}e-4 1/s" in text
        assert f"| {math.log(2) / k:.0f} s |" in text
        assert f"{run.schedule.count}, every {run.schedule.interval_s:.0f} s" in text
        assert f" {100 * conversion:.3g} % |" in text
        for species in run.species:
            for line in species.signals:
                assert f"{species.name}, {line.label} | {line.shift_ppm} |" in text


def test_the_sheets_are_right_and_agree_with_the_scenario(tmp_path: Path) -> None:
    sheet, _ = read_sheet(DEMO_SHEET)
    assert sheet.started is None
    run = dunmarolide.demo()
    assert sheet.temperature_c == pytest.approx(run.habits.temperature_k - 273.15)
    assert sheet.reference.name == run.reference
    assert sheet.reference.concentration == dunmarolide.REFERENCE_AMOUNT
    assert sheet.kinetics.charged == {"dunmarolide": dunmarolide.CHARGED}
    everything = {s.name: s.signals for s in run.species}
    everything |= {s.name: s.signals for s, _ in run.standing}
    windows = [(entry.species, entry) for entry in sheet.signals]
    windows.append((run.reference, sheet.reference))
    for species, entry in windows:
        low, high = entry.window
        (line,) = [s for s in everything[species] if low < s.shift_ppm < high]
        assert line.protons == entry.protons
        pairs = tuple((c.n, c.hz) for c in getattr(entry, "couplings", ()))
        assert pairs == line.couplings
    path = tmp_path / "run.toml"
    write_sheet(path, STARTED)
    dated, _ = read_sheet(path)
    assert dated.started == STARTED
    assert [event.kind for event in dated.events] == ["start", "note"]
    assert dated.signals == sheet.signals


def test_the_finished_run_is_made_again_byte_for_byte(tmp_path: Path) -> None:
    numbers = {1, 2, 17, 34, 35, 60}
    assert make_finished.make(tmp_path, only=numbers) == len(numbers)
    committed = make_finished.FINISHED
    assert len(list((committed / "run").iterdir())) == 60
    for number in numbers:
        for name in ("acqus", "fid"):
            again = (tmp_path / "run" / str(number) / name).read_bytes()
            assert again == (committed / "run" / str(number) / name).read_bytes()
    sheet = (committed / "finished.toml").read_text(encoding="utf-8")
    assert sheet == make_finished.finished_sheet()
    checked, _ = read_sheet(committed / "finished.toml")
    assert checked.started == make_finished.STARTED


def test_the_finished_run_is_small_enough_to_commit() -> None:
    size = sum(p.stat().st_size for p in make_finished.FINISHED.rglob("*") if p.is_file())
    assert size < 3_000_000
