"""A copy of a logbook: whole, consistent, also while somebody writes; and never by half."""

import shutil
import sqlite3
import subprocess
import sys
import textwrap
from pathlib import Path

import numpy as np
import pytest

from kinetics.errors import InputError, LogbookError
from kinetics.logbook import copying, lease
from kinetics.logbook.copying import copy_logbook
from kinetics.logbook.record import Record
from kinetics.logbook.traces import trace_is_intact
from kinetics.logbook.view import LogbookView
from kinetics.run import load_run
from tests.command import ROOT, kinetics
from tests.recorded import drop, recorded_run, take

COUNT = 4


@pytest.fixture(scope="module")
def home(tmp_path_factory: pytest.TempPathFactory) -> Path:
    home = tmp_path_factory.mktemp("copy")
    recorded_run(home, COUNT)
    (home / "run.logbook" / "follower.log").write_text("one line\n")
    (home / "run.logbook" / "follower.log.1").write_text("an older line\n")
    return home


@pytest.fixture
def logbook(home: Path, tmp_path: Path) -> Path:
    """A logbook of its own, so that a test may damage it."""
    return Path(shutil.copytree(home / "run.logbook", tmp_path / "mine.logbook"))


def test_a_copy_tells_the_same_and_holds_the_logs(home: Path, tmp_path: Path) -> None:
    to = tmp_path / "copy.logbook"
    done = kinetics("copy", home / "run.logbook", to)
    assert (done.returncode, done.stdout) == (0, "")
    assert str(to) in done.stderr
    before, after = load_run(home / "run.logbook"), load_run(to)
    assert after.states == before.states
    assert np.array_equal(after.amounts.values, before.amounts.values)
    assert after.decisions == before.decisions
    assert (to / "follower.log").read_text() == "one line\n"
    assert (to / "follower.log.1").read_text() == "an older line\n"
    assert sorted(p.name for p in to.iterdir()) == [
        "follower.log", "follower.log.1", "record.sqlite", "traces.f32"]  # fmt: skip
    assert [p.name for p in tmp_path.iterdir()] == ["copy.logbook"]


def test_the_lease_stays_with_the_original(logbook: Path, tmp_path: Path) -> None:
    with Record(logbook) as record:
        holder = lease.take(record.connection)
        copy_logbook(logbook, tmp_path / "copy.logbook")
        with LogbookView(logbook) as view:
            assert view.following().alive
        lease.give_back(record.connection, holder)
    with LogbookView(tmp_path / "copy.logbook") as view:
        assert view.following().holder is None


def test_a_copy_can_be_followed_on(home: Path, tmp_path: Path) -> None:
    shutil.copytree(home / "run", tmp_path / "run")
    copy_logbook(home / "run.logbook", tmp_path / "copy.logbook")
    drop(tmp_path / "run", COUNT + 2, first=COUNT)
    take(tmp_path / "run", home / "sheet.toml", tmp_path / "copy.logbook")
    assert len(load_run(tmp_path / "copy.logbook").entries) == COUNT + 2
    assert len(load_run(home / "run.logbook").entries) == COUNT


def test_a_torn_tail_of_the_traces_is_left_behind(logbook: Path, tmp_path: Path) -> None:
    whole = (logbook / "traces.f32").stat().st_size
    with (logbook / "traces.f32").open("ab") as file:
        file.write(b"\x01" * 1001)
    copy_logbook(logbook, tmp_path / "copy.logbook")
    assert (tmp_path / "copy.logbook" / "traces.f32").stat().st_size == whole


def test_copies_of_a_record_in_use_are_each_consistent(home: Path, tmp_path: Path) -> None:
    """A follower in another process commits spectra all the while."""
    logbook = tmp_path / "busy.logbook"
    (tmp_path / "run").mkdir()
    script = textwrap.dedent(
        """
        import sys
        from pathlib import Path
        from kinetics.logbook.record import Record
        from kinetics.watch import Follower
        from tests.recorded import drop
        home, sheet = Path(sys.argv[1]), Path(sys.argv[2])
        with Record(home / "busy.logbook") as record:
            follower = Follower(home / "run", sheet, record)
            for number in range(12):
                drop(home / "run", number + 1, first=number)
                follower.cycle()
                follower.cycle()
                print(number, flush=True)
        """
    )
    writer = subprocess.Popen(
        [sys.executable, "-c", script, str(tmp_path), str(home / "sheet.toml")],
        cwd=ROOT,
        stdout=subprocess.PIPE,
    )
    assert writer.stdout is not None
    seen = []
    with writer:
        for line in writer.stdout:
            to = tmp_path / f"copy{line.strip().decode()}.logbook"
            copy_logbook(logbook, to)
            seen.append(load_run(to))
    assert writer.returncode == 0
    assert len(seen) == 12
    for number, run in enumerate(seen):
        assert len(run.entries) >= number + 1
        for entry in run.entries:
            place = entry.trace
            assert place is not None
            assert trace_is_intact(run.logbook, place.offset, place.size, place.crc)
    assert len(seen[-1].entries) == 12


def test_what_is_there_is_never_overwritten(home: Path, tmp_path: Path) -> None:
    to = tmp_path / "copy.logbook"
    to.mkdir()
    done = kinetics("copy", home / "run.logbook", to)
    assert done.returncode == 2
    assert "is there already" in done.stderr
    assert list(to.iterdir()) == []
    dangling = tmp_path / "link.logbook"
    dangling.symlink_to(tmp_path / "nowhere")
    with pytest.raises(InputError, match="is there already"):
        copy_logbook(home / "run.logbook", dangling)


def test_places_where_no_logbook_may_be(home: Path, tmp_path: Path) -> None:
    logbook = home / "run.logbook"
    with pytest.raises(InputError, match="never written to"):
        copy_logbook(logbook, home / "run" / "copy.logbook")
    with pytest.raises(InputError, match="inside the logbook itself"):
        copy_logbook(logbook, logbook / "copy.logbook")
    with pytest.raises(InputError, match="there is no folder"):
        copy_logbook(logbook, tmp_path / "missing" / "copy.logbook")
    with pytest.raises(InputError, match="there is no logbook"):
        copy_logbook(tmp_path, tmp_path / "copy.logbook")
    link = tmp_path / "by_another_way"
    link.symlink_to(home / "run")
    with pytest.raises(InputError, match="never written to"):
        copy_logbook(logbook, link / "copy.logbook")
    assert sorted(p.name for p in (home / "run").iterdir()) == [str(i + 1) for i in range(COUNT)]


def test_a_folder_that_continues_the_run_is_not_written_to(home: Path, tmp_path: Path) -> None:
    shutil.copytree(home / "run", tmp_path / "run")
    (tmp_path / "night2").mkdir()
    text = (home / "sheet.toml").read_text().replace("[time]", '[files]\nalso = ["night2"]\n[time]')
    (tmp_path / "sheet.toml").write_text(text)
    take(tmp_path / "run", tmp_path / "sheet.toml", tmp_path / "run.logbook")
    with pytest.raises(InputError, match="night2, which is never written to"):
        copy_logbook(tmp_path / "run.logbook", tmp_path / "night2" / "copy.logbook")


def test_a_damaged_original_is_said_and_nothing_is_left(logbook: Path, tmp_path: Path) -> None:
    traces = logbook / "traces.f32"
    with traces.open("r+b") as file:
        file.truncate(traces.stat().st_size - 4)
    to = tmp_path / "copy.logbook"
    with pytest.raises(LogbookError, match="ends 4 bytes before"):
        copy_logbook(logbook, to)
    traces.unlink()
    with pytest.raises(LogbookError, match="is missing"):
        copy_logbook(logbook, to)
    assert [p.name for p in tmp_path.iterdir()] == ["mine.logbook"]


def test_a_full_disk_leaves_nothing(
    home: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def full(_source: Path, _beside: Path, _end: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(copying, "_copy_traces", full)
    with pytest.raises(LogbookError, match="No space left"):
        copy_logbook(home / "run.logbook", tmp_path / "copy.logbook")
    assert list(tmp_path.iterdir()) == []


def test_the_copy_is_one_plain_file(home: Path, tmp_path: Path) -> None:
    """It can be read from a disk that cannot be written to: it is not in WAL mode."""
    copy_logbook(home / "run.logbook", tmp_path / "copy.logbook")
    connection = sqlite3.connect(tmp_path / "copy.logbook" / "record.sqlite")
    assert connection.execute("PRAGMA journal_mode").fetchone()[0] == "delete"
    connection.close()
