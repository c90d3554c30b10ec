"""Files that grow, are replaced, renamed or removed, content that comes twice, a share that goes.

The real follower and a real record; the run folder is changed between its cycles.
"""

import shutil
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest

from demo_runs.sheets import write_sheet
from kinetics.logbook.record import Record
from kinetics.logbook.view import LogbookView
from kinetics.run import load_run
from kinetics.watch import Cycle, Follower
from tests.recorded import STARTED, drop

COUNT = 5


class Night:
    """A follower at work, and the folder it follows."""

    def __init__(self, home: Path, record: Record) -> None:
        self.folder = home / "run"
        self.logbook = home / "x.logbook"
        self.follower = Follower(self.folder, home / "sheet.toml", record)

    def looks(self, count: int = 2) -> Cycle:
        for _ in range(count):
            last = self.follower.cycle()
        return last

    def states(self) -> dict[str, str]:
        run = load_run(self.logbook)
        return {e.source: s for e, s in zip(run.entries, run.states, strict=True)}

    def told(self) -> list[str]:
        """Codes of what the record was told."""
        with LogbookView(self.logbook) as view:
            rows = view.connection.execute("SELECT kind FROM story ORDER BY id").fetchall()
        return [str(row[0]) for row in rows]


@pytest.fixture
def night(tmp_path: Path) -> Iterator[Night]:
    drop(tmp_path / "run", COUNT)
    write_sheet(tmp_path / "sheet.toml", STARTED)
    with Record(tmp_path / "x.logbook") as record:
        begun = Night(tmp_path, record)
        with begun.follower:
            begun.looks()
            yield begun


def test_nothing_is_taken_twice(night: Night) -> None:
    assert len(night.states()) == COUNT
    assert night.looks(3).taken == 0


def test_the_same_content_under_two_names(night: Night) -> None:
    shutil.copytree(night.folder / "2", night.folder / "copy of 2")
    night.looks()
    assert len(night.states()) == COUNT
    assert night.told().count("same-content") == 1
    assert night.looks(3).taken == 0


def test_a_renamed_spectrum_is_not_a_new_one(night: Night) -> None:
    (night.folder / "2").rename(night.folder / "2-old")
    night.looks()
    assert len(night.states()) == COUNT


def test_a_removed_spectrum_keeps_its_row(night: Night) -> None:
    before = night.states()
    shutil.rmtree(night.folder / "3")
    night.looks(3)
    assert night.states() == before


def test_a_replaced_spectrum_is_a_new_version_and_told(night: Night) -> None:
    before = load_run(night.logbook)
    path = night.folder / "3" / "fid"
    values = np.frombuffer(path.read_bytes(), "<i4").copy()
    path.unlink()
    path.write_bytes((values * 2).astype("<i4").tobytes())
    night.looks(3)
    assert night.told().count("changed") == 1
    after = load_run(night.logbook)
    assert len(after.entries) == COUNT
    old = next(e for e in before.entries if e.source == "3")
    new = next(e for e in after.entries if e.source == "3")
    assert new.sha256 != old.sha256
    with LogbookView(night.logbook) as view:
        kept = view.connection.execute("SELECT sha256 FROM spectra WHERE superseded = 1")
        assert [row[0] for row in kept.fetchall()] == [old.sha256]


def test_a_file_that_still_grows_is_not_taken(night: Night, tmp_path: Path) -> None:
    drop(tmp_path / "later", COUNT + 1, first=COUNT)
    (name,) = [p.name for p in (tmp_path / "later").iterdir()]
    (night.folder / name).mkdir()
    shutil.copy(tmp_path / "later" / name / "acqus", night.folder / name)
    content = (tmp_path / "later" / name / "fid").read_bytes()
    for part in (0.3, 0.6, 0.99):
        (night.folder / name / "fid").write_bytes(content[: int(part * len(content))])
        last = night.looks()
        assert last.taken == 0
        assert [w[0] for w in last.waiting] == [name]
    (night.folder / name / "fid").write_bytes(content)
    night.looks()
    assert night.states()[name] == "measured"


def test_a_share_that_goes_for_a_while(night: Night, tmp_path: Path) -> None:
    before = night.states()
    night.folder.rename(tmp_path / "away")
    seen = night.looks(3)
    assert seen.trouble
    assert night.states() == before
    drop(tmp_path / "away", COUNT + 2, first=COUNT)  # the instrument went on
    (tmp_path / "away").rename(night.folder)
    night.looks(3)
    assert set(night.states()) == {str(i + 1) for i in range(COUNT + 2)}
    assert "changed" not in night.told()
    assert "same-content" not in night.told()


def test_an_empty_mount_point_instead_of_the_share(night: Night, tmp_path: Path) -> None:
    before = night.states()
    night.folder.rename(tmp_path / "away")
    night.folder.mkdir()
    assert night.looks(3).taken == 0
    night.folder.rmdir()
    (tmp_path / "away").rename(night.folder)
    assert night.looks(3).taken == 0
    assert night.states() == before


def test_an_unreadable_spectrum_does_not_stop_the_night(night: Night, tmp_path: Path) -> None:
    drop(tmp_path / "later", COUNT + 3, first=COUNT)
    six, seven, eight = sorted((tmp_path / "later").iterdir())
    acqus = (six / "acqus").read_text().replace("##$NUC1= <1H>", "##$NUC1= <19F>")
    (six / "acqus").write_text(acqus)
    for path in (six, seven, eight):
        shutil.copytree(path, night.folder / path.name)
    night.looks()
    states = night.states()
    assert states[six.name] == "unreadable"
    assert states[seven.name] == states[eight.name] == "measured"
    run = load_run(night.logbook)
    (entry,) = [e for e in run.entries if e.source == six.name]
    assert entry.reason == "the spectrum is of 19F, not of 1H"
