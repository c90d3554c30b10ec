"""The logbook: lease, decision chain, traces, versions, and a reader without write permission."""

import os
import shutil
import sqlite3
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from kinetics.errors import InputError, LogbookError
from kinetics.logbook import lease
from kinetics.logbook.decisions import KINDS, decide
from kinetics.logbook.record import Record
from kinetics.logbook.view import LogbookView
from kinetics.verify import verify
from tests.command import ROOT
from tests.recorded import drop, recorded_run, take


@pytest.fixture(scope="module")
def home(tmp_path_factory: pytest.TempPathFactory) -> Path:
    home = tmp_path_factory.mktemp("logbook")
    recorded_run(home, 5)
    return home


@pytest.fixture
def logbook(home: Path, tmp_path: Path) -> Path:
    return Path(shutil.copytree(home / "run.logbook", tmp_path / "mine.logbook"))


class TestLease:
    def test_one_follower_at_a_time(self, logbook: Path) -> None:
        with Record(logbook) as mine, Record(logbook) as other:
            held = lease.take(mine.connection)
            with pytest.raises(LogbookError, match=str(os.getpid())):
                lease.take(other.connection)
            lease.give_back(mine.connection, held)
            lease.give_back(other.connection, lease.take(other.connection))

    def test_a_dead_holder_is_replaced(self, logbook: Path) -> None:
        code = (
            "import sys, os; from pathlib import Path; from kinetics.logbook import lease;"
            "from kinetics.logbook.record import Record;"
            "r = Record(Path(sys.argv[1])); lease.take(r.connection); os.kill(os.getpid(), 9)"
        )
        done = subprocess.run([sys.executable, "-c", code, logbook], cwd=ROOT, check=False)
        assert done.returncode == -9
        with Record(logbook) as record:
            dead = lease.holder_of(record.connection)
            assert dead is not None
            held = lease.take(record.connection)
            with pytest.raises(LogbookError, match="taken over"):
                lease.beat(record.connection, dead.holder, "following")
            lease.beat(record.connection, held, "following")
            lease.give_back(record.connection, held)


class TestDecisions:
    def test_appended_in_a_chain(self, logbook: Path) -> None:
        with Record(logbook) as record:
            for new, why in (("out", "bubble"), ("in", "no bubble after all")):
                decide(
                    record.connection,
                    who="A. Lund",
                    kind="set-aside",
                    subject="2",
                    new=new,
                    why=why,
                )
        with LogbookView(logbook) as view:
            chain = [d for d in view.decisions() if d.kind == "set-aside"]
        assert [d.new for d in chain] == ["out", "in"]
        assert chain[1].previous == chain[0].hash
        assert not verify(logbook).found

    @pytest.mark.parametrize(
        ("change", "said"),
        [({"who": " "}, "who"), ({"kind": "wish"}, "wish"), ({"why": ""}, "reason|why")],
    )
    def test_nothing_without_a_name_a_kind_and_a_reason(
        self, logbook: Path, change: dict[str, str], said: str
    ) -> None:
        whole = {"who": "A. Lund", "kind": "set-aside", "subject": "2", "new": "out", "why": "x"}
        with Record(logbook) as record, pytest.raises(InputError, match=said):
            decide(record.connection, **(whole | change))
        assert set(KINDS) >= {"set-aside", "law", "sheet", "reviewed"}


def test_nothing_is_taken_twice(home: Path, logbook: Path) -> None:
    take(home / "run", home / "sheet.toml", logbook)
    with LogbookView(logbook) as view:
        entries = view.entries()
    assert [e.source for e in entries] == ["1", "2", "3", "4", "5"]
    assert {e.state for e in entries} == {"measured"}


def test_the_same_content_under_two_names_counts_once(home: Path, tmp_path: Path) -> None:
    shutil.copytree(home / "run", tmp_path / "run")
    shutil.copytree(tmp_path / "run" / "3", tmp_path / "run" / "30")
    logbook = tmp_path / "x.logbook"
    take(tmp_path / "run", home / "sheet.toml", logbook)
    with LogbookView(logbook) as view:
        assert [e.source for e in view.entries()] == ["1", "2", "3", "4", "5"]


def test_a_replaced_file_is_a_new_version_and_is_told_of(home: Path, tmp_path: Path) -> None:
    shutil.copytree(home / "run", tmp_path / "run")
    logbook = tmp_path / "x.logbook"
    take(tmp_path / "run", home / "sheet.toml", logbook)
    with LogbookView(logbook) as view:
        before = {e.source: e.integrals for e in view.entries()}
    shutil.rmtree(tmp_path / "run" / "3")
    drop(tmp_path / "other", 3, seed=99)
    shutil.copytree(tmp_path / "other" / "3", tmp_path / "run" / "3")
    take(tmp_path / "run", home / "sheet.toml", logbook)
    with LogbookView(logbook) as view:
        (entry,) = [e for e in view.entries() if e.source == "3"]
        before_3 = before["3"]
        assert entry.integrals is not None
        assert before_3 is not None
        assert not np.array_equal(entry.integrals.values, before_3.values)
        assert any("3 has changed since it was measured" in line.text for line in view.story())
    connection = sqlite3.connect(logbook / "record.sqlite")
    assert connection.execute("SELECT count(*) FROM spectra").fetchone()[0] == 6
    connection.close()


def test_a_torn_tail_of_the_traces_is_overwritten(home: Path, tmp_path: Path) -> None:
    drop(tmp_path / "run", 3)
    logbook = tmp_path / "x.logbook"
    take(tmp_path / "run", home / "sheet.toml", logbook)
    traces = logbook / "traces.f32"
    whole = traces.stat().st_size
    with traces.open("ab") as file:
        file.write(b"torn" * 999)
    drop(tmp_path / "run", 5, first=3)
    take(tmp_path / "run", home / "sheet.toml", logbook)
    assert traces.stat().st_size == pytest.approx(whole * 5 / 3)
    assert not verify(logbook).found


def test_a_newer_record_is_refused_and_a_foreign_one_named(logbook: Path, tmp_path: Path) -> None:
    connection = sqlite3.connect(logbook / "record.sqlite")
    connection.execute("UPDATE meta SET value = value + 1 WHERE key = 'schema'")
    connection.commit()
    connection.close()
    with pytest.raises(LogbookError, match="newer"):
        LogbookView(logbook)
    with pytest.raises(LogbookError, match="newer"):
        Record(logbook)
    (tmp_path / "f.logbook").mkdir()
    (tmp_path / "f.logbook" / "record.sqlite").write_bytes(b"not a database" * 100)
    with pytest.raises(LogbookError, match="damaged"):
        LogbookView(tmp_path / "f.logbook")
