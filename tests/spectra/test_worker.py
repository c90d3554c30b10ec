"""The border: files that loop, swallow memory, bring the process down or stall."""

import os
import signal
import threading
import time
from pathlib import Path

import numpy as np
import psutil
import pytest

from kinetics.errors import NotYetError, UnreadableError
from kinetics.spectra.arrival import FileFact, Source
from kinetics.spectra.readers.worker import ReadingWorker
from tests.spectra import written

# Sources of this kind are read by the module below; the worker imports it like any reader.
TROUBLE = """
import os, signal, time
from kinetics.spectra import readers

def read(root, source):
    name = source.name
    if name == "loops":
        while True:
            pass
    if name == "swallows":
        return bytearray(1 << 40)
    if name == "swallows bit by bit":
        kept = []
        while True:
            kept.append(bytearray(1 << 20))
    if name == "dies":
        os.kill(os.getpid(), signal.SIGSEGV)
    if name == "stalls":
        time.sleep(3600)
    if name == "prints":
        print("noise " * 1000)
        os.write(1, b"noise")
    raise ValueError("anything")
"""


@pytest.fixture
def trouble(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Make the worker's text reader a troublemaker, through a module it loads at its start."""
    (tmp_path / "sitecustomize.py").write_text(
        "import sys, types, importlib.abc, importlib.util\n"
        "class Finder(importlib.abc.MetaPathFinder):\n"
        "    def find_spec(self, name, path, target=None):\n"
        "        if name == 'kinetics.spectra.readers.text':\n"
        "            return importlib.util.spec_from_file_location(name, TROUBLE)\n"
        "sys.meta_path.insert(0, Finder())\n".replace("TROUBLE", repr(str(tmp_path / "trouble.py")))
    )
    (tmp_path / "trouble.py").write_text(TROUBLE)
    monkeypatch.setenv("PYTHONPATH", f"{tmp_path}{os.pathsep}{os.environ.get('PYTHONPATH', '')}")
    return tmp_path


def named(name: str) -> Source:
    return Source(name, "text", (FileFact(name, 1, 1),))


def test_trouble_of_every_kind_between_good_spectra(trouble: Path) -> None:
    name = written.raw(trouble / "run")
    good = (trouble / "run", Source.named(trouble / "run", name))
    kinds = ["loops", "swallows", "swallows bit by bit", "dies", "prints"]
    items = [good]
    for kind in kinds:
        items += [(trouble, named(kind)), good]
    begun = time.monotonic()
    with ReadingWorker(processor_s=3.0) as border:  # enough to fill the memory allowed
        outcomes = list(border.read_all(items))
    assert time.monotonic() - begun < 60
    for outcome in outcomes[::2]:
        assert isinstance(outcome, tuple)
        assert np.array_equal(outcome[0].data, written.fid())
    said = [str(outcome) for outcome in outcomes[1::2]]
    assert all(isinstance(outcome, UnreadableError) for outcome in outcomes[1::2])
    assert "far longer" in said[0]
    assert "memory" in said[1]
    assert "memory" in said[2]
    assert "brings the reading process down" in said[3]
    assert "anything" in said[4]


def test_a_share_that_stalls_loses_nothing(trouble: Path) -> None:
    with ReadingWorker(silence_s=0.3) as border:
        for _ in range(2):
            with pytest.raises(NotYetError, match="tried again"):
                border.read(trouble, named("stalls"))
        with pytest.raises(UnreadableError, match="tried 3 times"):
            border.read(trouble, named("stalls"))


def test_a_killed_worker_is_replaced(tmp_path: Path) -> None:
    """As the operating system does when memory is short: no good spectrum is lost."""
    name = written.raw(tmp_path)
    item = (tmp_path, Source.named(tmp_path, name))
    with ReadingWorker() as border:
        border.read(*item)
        first = border.process_id
        assert first is not None
        killer = threading.Timer(0.05, os.kill, (first, signal.SIGKILL))
        killer.start()
        outcomes = list(border.read_all([item] * 400))
        killer.join()
        assert border.process_id != first
    assert len(outcomes) == 400
    assert all(isinstance(outcome, tuple) for outcome in outcomes)


def test_it_ends_with_its_owner(tmp_path: Path) -> None:
    name = written.raw(tmp_path)
    border = ReadingWorker()
    border.read(tmp_path, Source.named(tmp_path, name))
    number = border.process_id
    assert number is not None
    assert psutil.pid_exists(number)
    del border
    assert not psutil.pid_exists(number)


def test_the_memory_limit_is_under_a_gibibyte(tmp_path: Path) -> None:
    name = written.raw(tmp_path)
    with ReadingWorker() as border:
        border.read(tmp_path, Source.named(tmp_path, name))
        assert border.process_id is not None
        resident = psutil.Process(border.process_id).memory_info().rss
    assert resident + (512 << 20) < 1 << 30
