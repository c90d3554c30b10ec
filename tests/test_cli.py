"""The commands as users use them: exit status, messages, streams."""

import json
import os
import subprocess
import sys
import time
from pathlib import Path

import pytest

from kinetics.logbook import lease
from kinetics.logbook.record import Record
from tests.command import ROOT, kinetics
from tests.recorded import drop, recorded_run


@pytest.fixture(scope="module")
def home(tmp_path_factory: pytest.TempPathFactory) -> Path:
    home = tmp_path_factory.mktemp("cli")
    recorded_run(home, 24)
    return home


def plain(done: "subprocess.CompletedProcess[str]") -> str:
    """The message on standard error, which is never a traceback."""
    assert "Traceback" not in done.stderr
    return done.stderr


def test_version() -> None:
    assert kinetics("--version").stdout.startswith("Kettlewatch ")


def test_help_is_quick() -> None:
    before = os.times()
    assert kinetics("--help").returncode == 0
    after = os.times()
    used = after.children_user + after.children_system
    used -= before.children_user + before.children_system
    assert used < 0.5


@pytest.mark.parametrize("command", ["nonsense", "watch", "fit"])
def test_a_wrong_call_ends_in_two(command: str) -> None:
    done = kinetics(command)
    assert done.returncode == 2
    assert "usage:" in plain(done)


def test_a_logbook_that_is_not_there(tmp_path: Path) -> None:
    for name in ("fit", "table", "verify"):
        done = kinetics(name, tmp_path / "no.logbook")
        assert done.returncode == 2
        assert "no.logbook" in plain(done)
        assert done.stdout == ""


def test_watch_refuses_what_is_wrong(home: Path, tmp_path: Path) -> None:
    sheet, run = home / "sheet.toml", home / "run"
    bad = tmp_path / "bad.toml"
    bad.write_text(sheet.read_text().replace("protons = 6", "proton = 6"))

    def watch(folder: Path, by: Path, logbook: Path) -> "subprocess.CompletedProcess[str]":
        return kinetics("watch", folder, "--sheet", by, "--logbook", logbook, "--once")

    done = watch(run, bad, tmp_path / "a.logbook")
    assert done.returncode == 2
    assert "bad.toml: reference.proton: unknown key; did you mean 'protons'?" in plain(done)
    done = watch(tmp_path / "gone", sheet, tmp_path / "b.logbook")
    assert done.returncode == 2
    assert "gone" in plain(done)
    done = watch(run, sheet, run / "c.logbook")
    assert done.returncode == 2
    assert "run folder" in plain(done)
    assert not (run / "c.logbook").exists()


def test_an_empty_folder_and_half_a_file(home: Path, tmp_path: Path) -> None:
    empty = tmp_path / "empty"
    empty.mkdir()
    sheet = home / "sheet.toml"
    done = kinetics("watch", empty, "--sheet", sheet, "--logbook", tmp_path / "e.logbook", "--once")
    assert done.returncode == 3
    assert "Traceback" not in done.stderr
    half = tmp_path / "half"
    drop(half, 1)
    fid = half / "1" / "fid"
    fid.write_bytes(fid.read_bytes()[:1000])
    done = kinetics("watch", half, "--sheet", sheet, "--logbook", tmp_path / "h.logbook", "--once")
    assert done.returncode == 3
    assert "1: " in plain(done)
    assert [path.name for path in half.iterdir()] == ["1"]


def test_json_alone_on_standard_output(home: Path) -> None:
    done = kinetics("fit", home / "run.logbook", "--json")
    assert done.returncode == 0
    document = json.loads(done.stdout)
    assert document["schema"] == 1
    assert document["spectra"]["measured"] == 24
    assert [fit["law"] for fit in document["fits"]] == ["first-order", "second-order"]
    k = document["fits"][0]["parameters"]["k"]
    assert k["low"] < k["value"] < k["high"]
    assert k["unit"] == "1/s"
    assert k["interval"] == "profile"
    for key in ("preferred", "verdict", "outcome", "forecast", "balance", "confidence"):
        assert key in document


def test_an_unknown_law(home: Path) -> None:
    done = kinetics("fit", home / "run.logbook", "--law", "third-order")
    assert done.returncode == 2
    assert "third-order" in plain(done)


def test_table(home: Path, tmp_path: Path) -> None:
    done = kinetics("table", home / "run.logbook")
    lines = done.stdout.splitlines()
    assert lines[0].split(",")[:5] == ["file", "state", "time_s", "clock", "temperature_c"]
    assert lines[0].endswith("unit,remarks")
    assert len(lines) == 25
    to = tmp_path / "amounts.csv"
    assert kinetics("table", home / "run.logbook", "--to", to).returncode == 0
    assert to.read_text(encoding="utf-8").splitlines() == lines


def test_a_held_logbook_ends_in_four(home: Path, tmp_path: Path) -> None:
    logbook = tmp_path / "held.logbook"
    with Record(logbook) as record:
        holder = lease.take(record.connection)
        done = kinetics(
            "watch", home / "run", "--sheet", home / "sheet.toml", "--logbook", logbook, "--once"
        )
        lease.give_back(record.connection, holder)
    assert done.returncode == 4
    assert str(os.getpid()) in plain(done)


class TestCheck:
    def test_a_folder_that_fits(self, home: Path) -> None:
        before = os.times()
        done = kinetics("check", home / "sheet.toml", home / "run")
        after = os.times()
        assert done.returncode == 0, done.stderr
        for part in ("the sheet is right", "24 complete", "80.00 MHz", "one every 240 s", "S/N"):
            assert part in done.stdout
        assert "!" not in done.stdout
        used = after.children_user + after.children_system
        assert used - before.children_user - before.children_system < 4.0  # 2 s on a quiet machine

    def test_windows_that_hold_nothing_or_overlap(self, home: Path, tmp_path: Path) -> None:
        sheet = tmp_path / "s.toml"
        text = (home / "sheet.toml").read_text()
        assert "window = [9.48, 9.76]" in text
        sheet.write_text(text.replace("window = [9.48, 9.76]", "window = [7.40, 7.80]"))
        done = kinetics("check", sheet, home / "run")
        assert "no signal stands in 7.4 to 7.8 ppm" in done.stdout
        sheet.write_text(text.replace("window = [9.48, 9.76]", "window = [2.20, 2.40]"))
        assert "overlap by 0.070 ppm" in kinetics("check", sheet).stdout

    def test_gaps_and_what_cannot_be_read(self, home: Path, tmp_path: Path) -> None:
        drop(tmp_path / "run", 12)
        for number in ("5", "6", "7", "8"):
            (tmp_path / "run" / number).rename(tmp_path / f"away{number}")
        (tmp_path / "run" / "note.jdx").write_text(
            "##TITLE= x\n##DATA TYPE= INFRARED SPECTRUM\n##END=\n"
        )
        done = kinetics("check", home / "sheet.toml", tmp_path / "run")
        assert done.returncode == 0
        assert "gap        1200 s" in done.stdout
        assert "note.jdx" in done.stdout

    def test_nothing_there(self, home: Path, tmp_path: Path) -> None:
        (tmp_path / "e").mkdir()
        assert kinetics("check", home / "sheet.toml", tmp_path / "e").returncode == 3
        assert kinetics("check", home / "sheet.toml", tmp_path / "no").returncode == 2


class TestPlan:
    def test_more_spectra_tell_more(self, home: Path) -> None:
        widths = []
        for spectra in ("20", "80"):
            done = kinetics(
                "plan", home / "sheet.toml", "--half-life", "6600", "--spectra", spectra, "--json"
            )
            assert done.returncode == 0, done.stderr
            outlook = json.loads(done.stdout)["outlooks"][0]
            assert outlook["law"] == "first-order"
            widths.append(outlook["half_width"])
        assert widths[1] == pytest.approx(widths[0] / 2, rel=0.15)

    def test_k_is_that_of_the_half_life(self, home: Path) -> None:
        done = kinetics("plan", home / "sheet.toml", "--half-life", "1000", "--json")
        first, second = json.loads(done.stdout)["outlooks"]
        assert first["k"] == pytest.approx(0.693147 / 1000, rel=1e-4)
        # Second order, 2 A ->: half-life 1/(a k A0) with a = 1 as in the sheet.
        assert second["k"] == pytest.approx(1 / (1000 * 0.4), rel=1e-4)

    def test_words_and_wrong_numbers(self, home: Path) -> None:
        done = kinetics("plan", home / "sheet.toml", "--half-life", "1000", "--acquisition", "500")
        assert "more than a tenth of the half-life" in done.stdout
        done = kinetics("plan", home / "sheet.toml", "--half-life", "-3")
        assert done.returncode == 2
        assert "half-life" in plain(done)


def test_a_follower_goes_on_until_told_to_stop(home: Path, tmp_path: Path) -> None:
    """SIGTERM: the spectrum in hand is finished, the lease is given back, the status is 0."""
    drop(tmp_path / "run", 3)
    command = [sys.executable, "-m", "kinetics", "watch", tmp_path / "run", "--every", "0.1"]
    command += ["--sheet", home / "sheet.toml", "--logbook", tmp_path / "x.logbook"]
    follower = subprocess.Popen(
        list(map(str, command)), cwd=ROOT, stderr=subprocess.PIPE, text=True
    )
    end = time.monotonic() + 60
    while time.monotonic() < end:
        done = kinetics("table", tmp_path / "x.logbook")
        if len(done.stdout.splitlines()) == 4:
            break
        time.sleep(0.3)
    follower.terminate()
    _, errors = follower.communicate(timeout=30)
    assert follower.returncode == 0, errors
    assert "Traceback" not in errors
    with Record(tmp_path / "x.logbook") as record:
        assert record.has_measurements()
