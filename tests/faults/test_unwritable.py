"""A logbook that cannot be written for a while, a follower that ends half-way: nothing is lost."""

import errno
from pathlib import Path

import numpy as np
import pytest

from demo_runs.sheets import write_sheet
from kinetics.errors import LeaseLostError, LogbookError
from kinetics.follow import _cycle
from kinetics.logbook import lease
from kinetics.logbook.record import Record
from kinetics.logbook.traces import TraceWriter
from kinetics.logbook.view import LogbookView
from kinetics.verify import verify
from kinetics.watch import CALIBRATION_SPECTRA, Follower
from tests.recorded import STARTED, drop, take

COUNT = 24  # past the second calibration


@pytest.fixture(scope="module")
def home(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A run, its sheet, and its undisturbed logbook."""
    return made(tmp_path_factory.mktemp("unwritable"), COUNT)


@pytest.fixture(scope="module")
def home_of_twenty(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A run that ends with the spectrum on which the second calibration falls."""
    return made(tmp_path_factory.mktemp("twenty"), CALIBRATION_SPECTRA)


def made(home: Path, count: int) -> Path:
    drop(home / "run", count)
    write_sheet(home / "sheet.toml", STARTED)
    take(home / "run", home / "sheet.toml", home / "undisturbed.logbook")
    return home


def rows(logbook: Path) -> dict[str, tuple[str, list[float]]]:
    with LogbookView(logbook) as view:
        return {
            entry.source: (
                entry.state,
                [] if entry.integrals is None else list(entry.integrals.values),
            )
            for entry in view.entries()
        }


def assert_undisturbed(home: Path, logbook: Path) -> None:
    found, expected = rows(logbook), rows(home / "undisturbed.logbook")
    assert list(found) == list(expected)
    for source, (state, values) in expected.items():
        assert found[source][0] == state
        assert found[source][1] == pytest.approx(values, rel=1e-6)
    assert not verify(logbook).found


def full(*_: object) -> int:
    raise OSError(errno.ENOSPC, "No space left on device")


@pytest.mark.parametrize("fails", [1, 2, 3])
def test_a_failed_commit_loses_nothing(
    home: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, fails: int
) -> None:
    """Whichever batch fails, a later cycle of the same follower takes all of it."""
    logbook = tmp_path / "x.logbook"
    with Record(logbook) as record, Follower(home / "run", home / "sheet.toml", record) as follower:
        follower.cycle()
        put, calls = Record._take, []

        def sometimes(self: Record, *given: object) -> None:
            calls.append(given)
            if len(calls) == fails:
                raise LogbookError("the logbook cannot be written (disk full)")
            put(self, *given)  # type: ignore[arg-type]

        monkeypatch.setattr(Record, "_take", sometimes)
        with pytest.raises(LogbookError):
            follower.cycle()
        follower.cycle()
    assert len(calls) > fails
    assert_undisturbed(home, logbook)


def test_a_full_disk_is_a_logbook_error_and_is_got_over(home: Path, tmp_path: Path) -> None:
    logbook = tmp_path / "x.logbook"
    with Record(logbook) as record, Follower(home / "run", home / "sheet.toml", record) as follower:
        follower.cycle()
        file = record._traces._file

        class Full:
            def __getattr__(self, name: str) -> object:
                return full if name == "write" else getattr(file, name)

        record._traces._file = Full()  # type: ignore[assignment]
        with pytest.raises(LogbookError, match="No space left on device"):
            follower.cycle()
        record._traces._file = file
        follower.cycle()
    assert_undisturbed(home, logbook)


def test_short_writes_are_carried_on(tmp_path: Path) -> None:
    writer = TraceWriter(tmp_path, 0)
    file = writer._file

    class Bit:
        def __getattr__(self, name: str) -> object:
            return self.short if name == "write" else getattr(file, name)

        @staticmethod
        def short(data: memoryview) -> int:
            return int(file.write(data[:7]))

    writer._file = Bit()  # type: ignore[assignment]
    trace = np.arange(100, dtype=np.float32)
    writer.append(trace)
    writer.close()
    assert (tmp_path / "traces.f32").read_bytes() == trace.tobytes()


def test_a_logbook_that_goes_away_is_noticed_and_taken_up_when_it_is_back(
    home: Path, tmp_path: Path
) -> None:
    logbook, away = tmp_path / "x.logbook", tmp_path / "away"
    with Record(logbook) as record, Follower(home / "run", home / "sheet.toml", record) as follower:
        follower.cycle()
        logbook.rename(away)
        with pytest.raises(LogbookError, match="gone from its place"):
            follower.cycle()
        logbook.mkdir()
        with pytest.raises(LogbookError, match="gone from its place"):
            follower.cycle()
        logbook.rmdir()
        away.rename(logbook)
        follower.cycle()
    assert_undisturbed(home, logbook)


@pytest.mark.parametrize("step", ["calibrate", "_catch_up"])
def test_ended_about_the_second_calibration_and_no_spectrum_comes_after(
    home_of_twenty: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, step: str
) -> None:
    """The next follower finishes it without a new spectrum to wake it."""
    import kinetics.watch

    home, logbook = home_of_twenty, tmp_path / "x.logbook"
    real = getattr(kinetics.watch, step, None) or getattr(Follower, step)

    def ends(*given: object, **named: object) -> object:
        second = named.get("version") == 2
        if step == "_catch_up":
            work = given[0]._work  # type: ignore[attr-defined]
            second = work.calibration is not None and work.calibration.version == 2
        if second:
            raise KeyboardInterrupt
        return real(*given, **named)

    monkeypatch.setattr(kinetics.watch if step == "calibrate" else Follower, step, ends)
    with pytest.raises(KeyboardInterrupt):
        take(home / "run", home / "sheet.toml", logbook)
    monkeypatch.undo()
    take(home / "run", home / "sheet.toml", logbook)
    assert_undisturbed(home, logbook)


def test_told_to_stop_it_does_not_finish_the_backlog(home: Path, tmp_path: Path) -> None:
    logbook, asked = tmp_path / "x.logbook", []
    with (
        Record(logbook) as record,
        Follower(
            home / "run", home / "sheet.toml", record, stopping=lambda: bool(asked)
        ) as follower,
    ):
        follower._progress = lambda done, _total: asked.append(done)
        follower.cycle()
        assert follower.cycle().taken < COUNT
    take(home / "run", home / "sheet.toml", logbook)
    assert_undisturbed(home, logbook)


def test_a_displaced_follower_stops_before_it_writes(home: Path, tmp_path: Path) -> None:
    with (
        Record(tmp_path / "x.logbook") as record,
        Follower(home / "run", home / "sheet.toml", record) as follower,
    ):
        holder = lease.take(record.connection)
        lease.give_back(record.connection, holder)
        lease.take(record.connection)
        with pytest.raises(LeaseLostError):
            _cycle(follower, record, holder, "")
        assert record.state_counts() == {}


def test_telling_what_cannot_be_written_is_a_logbook_error(tmp_path: Path) -> None:
    with Record(tmp_path / "x.logbook") as record:
        record.connection.execute("PRAGMA query_only = ON")
        with pytest.raises(LogbookError):
            record.tell("trouble", "x")
