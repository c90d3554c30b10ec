"""Complete or not yet, over a simulated network share."""

import errno
from dataclasses import dataclass, field
from pathlib import Path

from demo_runs import dunmarolide
from demo_runs.simulate import simulate_run
from demo_runs.write import write
from kinetics.spectra.arrival import DirectoryEntry, LookMemory, look, natural_key
from tests.recorded import STARTED, drop

HERE = Path("share")


@dataclass
class Share:
    """Files in memory: path to content; what is listed may run ahead of what is there."""

    files: dict[str, bytes] = field(default_factory=dict)
    announced: dict[str, int] = field(default_factory=dict)
    away: bool = False
    clock: int = 0

    def put(self, name: str, content: bytes) -> None:
        self.clock += 1
        self.files[name] = content
        self.times[name] = self.clock

    times: dict[str, int] = field(default_factory=dict)

    def listing(self, path: Path) -> list[DirectoryEntry]:
        if self.away:
            raise OSError(errno.EHOSTDOWN, "Host is down")
        prefix = path.relative_to(HERE).as_posix() + "/" if path != HERE else ""
        out: dict[str, DirectoryEntry] = {}
        for name, content in self.files.items():
            if not name.startswith(prefix):
                continue
            first, _, rest = name[len(prefix) :].partition("/")
            size = self.announced.get(name, len(content))
            out[first] = DirectoryEntry(first, bool(rest), 0 if rest else size, self.times[name])
        return list(out.values())

    def head(self, path: Path, size: int) -> bytes:
        if self.away:
            raise OSError(errno.EHOSTDOWN, "Host is down")
        return self.files[path.relative_to(HERE).as_posix()][:size]

    def tail(self, path: Path, size: int) -> bytes:
        if self.away:
            raise OSError(errno.EHOSTDOWN, "Host is down")
        return self.files[path.relative_to(HERE).as_posix()][-size:]


def content_of(tmp_path: Path) -> dict[str, bytes]:
    (spectrum,) = simulate_run(dunmarolide.demo(), seed=1, started=STARTED, count=1)
    write(spectrum, tmp_path, "raw")
    return {p.name: p.read_bytes() for p in (tmp_path / "1").iterdir()}


def test_natural_order() -> None:
    assert sorted(["10", "9", "1b", "1a"], key=natural_key) == ["1a", "1b", "9", "10"]


def test_two_looks_and_not_before_the_data_are_there(tmp_path: Path) -> None:
    files, share = content_of(tmp_path), Share()
    share.put("1/acqus", files["acqus"])
    memory: LookMemory | None = None

    def next_look() -> tuple[list[str], list[str]]:
        nonlocal memory
        seen = look(HERE, memory=memory, layer=share)
        memory = seen.memory
        return [s.name for s in seen.complete], [f"{n}: {w}" for n, w in seen.waiting]

    assert next_look() == ([], ["1: no data yet (a queued or running experiment)"])
    share.put("1/fid", files["fid"][:100])
    complete, waiting = next_look()
    assert complete == []
    assert "100 of 32768 bytes" in waiting[0]
    share.put("1/fid", files["fid"])
    assert next_look() == ([], ["1: still changing, or seen for the first time"])
    assert next_look() == (["1"], [])
    share.put("2/acqus", files["acqus"][:-20])
    share.put("2/fid", files["fid"])
    next_look()
    complete, waiting = next_look()
    assert complete == ["1"]
    assert "not written to its end" in waiting[0]


def test_a_share_that_goes_away_and_comes_back(tmp_path: Path) -> None:
    files, share = content_of(tmp_path), Share()
    for name, content in files.items():
        share.put(f"1/{name}", content)
    first = look(HERE, layer=share)
    second = look(HERE, memory=first.memory, layer=share)
    assert [s.name for s in second.complete] == ["1"]
    share.away = True
    gone = look(HERE, memory=second.memory, layer=share)
    assert gone.complete == ()
    assert "Host is down" in gone.trouble
    share.away = False
    back = look(HERE, memory=gone.memory, layer=share)
    assert [s.signature for s in back.complete] == [s.signature for s in second.complete]


def test_full_size_before_the_content(tmp_path: Path) -> None:
    """A share may announce the final size while the bytes are still zeros or short."""
    files, share = content_of(tmp_path), Share()
    share.put("1/acqus", files["acqus"][:300])
    share.announced["1/acqus"] = len(files["acqus"])
    share.put("1/fid", files["fid"])
    memory = None
    for _ in range(3):
        seen = look(HERE, memory=memory, layer=share)
        memory = seen.memory
        assert seen.complete == ()
    del share.announced["1/acqus"]
    share.put("1/acqus", files["acqus"])
    memory = look(HERE, memory=memory, layer=share).memory
    assert [s.name for s in look(HERE, memory=memory, layer=share).complete] == ["1"]


def test_include_and_exclude_tell_runs_apart(tmp_path: Path) -> None:
    drop(tmp_path, 3)
    first = look(tmp_path, ["1", "3"], [])
    assert [s.name for s in look(tmp_path, ["1", "3"], [], first.memory).complete] == ["1", "3"]
    first = look(tmp_path, ["*"], ["2"])
    assert [s.name for s in look(tmp_path, ["*"], ["2"], first.memory).complete] == ["1", "3"]


def test_odd_things_in_a_folder(tmp_path: Path) -> None:
    """Links that dangle or loop, hidden files, other files: none is a spectrum, none stops it."""
    drop(tmp_path, 1)
    (tmp_path / "dangling").symlink_to(tmp_path / "nowhere")
    (tmp_path / "loop").symlink_to(tmp_path)
    (tmp_path / ".hidden.txt").write_text("1 2\n" * 500)
    (tmp_path / "note.pdf").write_bytes(b"%PDF-1.4\x00")
    (tmp_path / "empty").mkdir()
    memory = look(tmp_path).memory
    seen = look(tmp_path, memory=memory)
    assert "1" in [s.name for s in seen.complete]
    assert not [s.name for s in seen.complete if s.name.startswith((".", "note", "dangling"))]
    assert seen.trouble == ""
