"""A fault campaign: thousands of damaged files in one run folder, and not one that matters.

Every file is made from a good one by one mutation of a seeded generator. Wanted: no crash, no hang
over 10 s, less than 1 GiB resident, every good spectrum still read, nothing whose damage can be
known taken as a spectrum, and the run folder unchanged byte for byte.
"""

import os
import re
import sys
import time
import zlib
from collections import Counter
from collections.abc import Callable
from pathlib import Path

import numpy as np
import psutil
import pytest

from kinetics.errors import NotYetError, UnreadableError
from kinetics.spectra.arrival import Source, look
from kinetics.spectra.model import Raw
from kinetics.spectra.readers.worker import ReadingWorker
from tests.spectra import written
from tests.spectra.reader_contract import folder_facts

SEED = int(os.environ.get("KETTLEWATCH_FAULT_SEED", "20260303"))
COUNT = 2100

Writer = Callable[[Path, str], str]
FORMS: dict[str, Writer] = {
    "raw": written.raw,
    "series": written.series,
    "processed": written.processed,
    "procpar": written.procpar,
    "procpar array": lambda folder, name: written.procpar(folder, name, rows=3),
    "procpar processed": written.procpar_processed,
    "jcamp": lambda folder, name: written.jcamp(folder, f"{name}.dx"),
    "nmrml": lambda folder, name: written.nmrml(folder, f"{name}.nmrML"),
    "text": lambda folder, name: written.text(folder, f"{name}.txt"),
}
Rng = np.random.Generator


def cut(content: bytes, rng: Rng) -> bytes:
    return content[: int(rng.integers(0, len(content)))]


def cut_at_a_line(content: bytes, rng: Rng) -> bytes:
    ends = [m.end() for m in re.finditer(rb"\n", content[:-2])]
    return content[: ends[int(rng.integers(len(ends)))]] if ends else cut(content, rng)


def flip(content: bytes, rng: Rng) -> bytes:
    out = bytearray(content)
    for place in rng.integers(0, len(out), int(rng.integers(1, 9))):
        out[place] ^= 1 << int(rng.integers(8))
    return bytes(out)


def garbage_head(content: bytes, rng: Rng) -> bytes:
    size = min(len(content), int(rng.integers(1, 400)))
    return rng.bytes(size) + content[size:]


def lying_count(content: bytes, rng: Rng) -> bytes:
    numbers = list(re.finditer(rb"(?<![\w.])\d+(?![\w.])", content[:3000]))
    if not numbers:
        return content[:4] + rng.bytes(12) + content[16:]
    chosen = numbers[int(rng.integers(len(numbers)))]
    lie = [b"0", b"-1", b"1", b"99999999999999999999", b"2147483647", b"1e308", b"nan"]
    return content[: chosen.start()] + lie[int(rng.integers(len(lie)))] + content[chosen.end() :]


def bomb(content: bytes, rng: Rng) -> bytes:
    if b"XYDATA" in content:
        return content.replace(b"XYDATA\n0 ", b"XYDATA\n0 A1S%d " % 10 ** int(rng.integers(6, 15)))
    if b"fidData" in content:
        import base64

        packed = base64.b64encode(zlib.compress(bytes(64 << 20), 9))
        return re.sub(rb'">[A-Za-z0-9+/=]{1000,}<', b'">' + packed + b"<", content)
    if b"(0..3)" in content:
        return content.replace(b"(0..3)", b"(0..%d)" % 10 ** int(rng.integers(6, 15)))
    return content * int(rng.integers(2, 30))


def doubled(content: bytes, rng: Rng) -> bytes:
    place = int(rng.integers(0, len(content)))
    return content[:place] + content[max(place - 500, 0) :]


def zeros(content: bytes, rng: Rng) -> bytes:
    place = int(rng.integers(0, len(content)))
    return content[:place] + bytes(len(content) - place)


def empty(_content: bytes, _rng: Rng) -> bytes:
    return b""


def noise(content: bytes, rng: Rng) -> bytes:
    return rng.bytes(len(content))


MUTATIONS = (
    cut,
    cut_at_a_line,
    flip,
    garbage_head,
    lying_count,
    bomb,
    doubled,
    zeros,
    empty,
    noise,
)


def damaged(folder: Path, place: int, rng: Rng) -> tuple[str, str]:
    """Write a damaged file or folder; return its form and the mutation's name."""
    form = list(FORMS)[int(rng.integers(len(FORMS)))]
    mutation = MUTATIONS[int(rng.integers(len(MUTATIONS)))]
    name = FORMS[form](folder, f"bad-{place}")
    path = folder / name
    if path.is_dir():
        files = sorted(p for p in path.rglob("*") if p.is_file())
        path = files[int(rng.integers(len(files)))]
    path.write_bytes(mutation(path.read_bytes(), rng))
    return form, mutation.__name__


def odd_things(folder: Path) -> None:
    """What is no regular file."""
    os.mkfifo(folder / "pipe.dx")
    (folder / "nowhere.dx").symlink_to(folder / "gone.dx")
    (folder / "loop.dx").symlink_to(folder / "loop.dx")
    (folder / "round").symlink_to(folder, target_is_directory=True)
    (folder / "91").mkdir()
    os.mkfifo(folder / "91" / "fid")
    (folder / "91" / "acqus").write_text(written.parameters())
    (folder / "92").mkdir()
    (folder / "92" / "fid").symlink_to("/dev/zero")
    (folder / "92" / "acqus").write_text(written.parameters())
    (folder / "93").mkdir()
    (folder / "93" / "acqus").symlink_to("/dev/full")


@pytest.mark.timeout(240)
def test_campaign(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    with capsys.disabled():
        sys.stdout.write(f"\nfault campaign: {COUNT} files, KETTLEWATCH_FAULT_SEED={SEED}\n")
    rng = np.random.default_rng(SEED)
    folder = tmp_path / "run"
    folder.mkdir()
    good = {write(folder, f"good-{place}") for place, write in enumerate(FORMS.values())}
    made = {f"bad-{place}": damaged(folder, place, rng) for place in range(COUNT)}
    odd_things(folder)
    before = folder_facts_of_regular(folder)

    first = look(folder)
    seen = look(folder, memory=first.memory)
    waiting = dict(seen.waiting)
    assert not good & set(waiting)
    slowest = highest = 0.0
    taken: dict[str, tuple[Raw, ...]] = {}
    refused: dict[str, str] = {}
    with ReadingWorker() as border:
        for source in seen.complete:
            begun = time.monotonic()
            try:
                taken[source.name] = border.read(folder, source)
            except (UnreadableError, NotYetError) as why:
                refused[source.name] = str(why)
            slowest = max(slowest, time.monotonic() - begun)
            if border.process_id is not None and psutil.pid_exists(border.process_id):
                highest = max(highest, psutil.Process(border.process_id).memory_info().rss)
        assert good <= set(taken), "a good spectrum was lost"

    assert slowest < 10
    assert highest < 1 << 30
    assert psutil.Process().memory_info().rss < 1 << 30
    for name, why in refused.items():
        assert len(why) < 300, (name, why)
    for name, raws in taken.items():
        for raw in raws:
            assert np.isfinite(raw.data).all(), name
            assert 64 <= raw.data.size <= 1 << 21, name
    wrongly = [
        (name, made[stem])
        for name, raws in taken.items()
        if (stem := name.partition(".")[0]) in made and known_damage(folder, name, made[stem], raws)
    ]
    assert not wrongly
    assert folder_facts_of_regular(folder) == before
    counts = Counter(mutation for _, mutation in made.values())
    assert min(counts.values()) > 100, counts
    assert len(refused) + len(waiting) > COUNT // 2, "most of the damage is seen"


def known_damage(folder: Path, name: str, made: tuple[str, str], raws: tuple[Raw, ...]) -> bool:
    """Whether numbers were taken whose damage could have been known.

    Where the numbers are all as they were, the damage lay in text that is not needed. What cannot
    be known: flipped bits, garbage, noise and lies inside numbers; whole lines cut off a table.
    """
    form, mutation = made
    changed = False
    for raw in raws:
        row = int(raw.source.partition("#")[2] or 1) - 1
        true = written.fid(row) if raw.domain == "time" else written.spectrum().astype(np.float32)
        changed |= not np.array_equal(raw.data, true)
    if mutation == "empty":
        return True
    if form == "text":
        return mutation == "cut" and not (folder / name).read_bytes().endswith(b"\n")
    if mutation == "zeros":
        empty = max(np.count_nonzero(raw.data == 0) for raw in raws)
        return changed and empty > 300 and not any(raw.remarks for raw in raws)
    return changed and mutation in ("cut", "cut_at_a_line", "bomb", "doubled")


def folder_facts_of_regular(folder: Path) -> dict[str, tuple[int, str]]:
    """As `folder_facts`, without following links (one of them leads round and round)."""
    out = {}
    for path in sorted(folder.iterdir()):
        if path.is_symlink() or path.name in ("91", "92", "93"):
            continue
        if path.is_dir():
            out.update(folder_facts(path))
        elif path.is_file():
            out[str(path)] = (path.stat().st_mtime_ns, str(zlib.crc32(path.read_bytes())))
    return out


def test_no_permission(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A spectrum that may not be read waits, with the reason, and keeps no other from it."""
    good, closed = written.jcamp(tmp_path, "1.dx"), written.jcamp(tmp_path, "2.dx")
    shut = tmp_path / closed
    shut.chmod(0)
    if os.geteuid() == 0:  # to whom no door is closed: close it here
        opened = Path.open

        def open_(path: Path, *rest: object, **more: object) -> object:
            if path == shut:
                raise PermissionError(13, "Permission denied", str(path))
            return opened(path, *rest, **more)  # type: ignore[call-overload]

        monkeypatch.setattr(Path, "open", open_)
    seen = look(tmp_path, memory=look(tmp_path).memory)
    assert [source.name for source in seen.complete] == [good]
    assert dict(seen.waiting) == {closed: "cannot be read now (Permission denied)"}
    monkeypatch.undo()
    shut.chmod(0o600)
    memory = look(tmp_path, memory=seen.memory).memory
    assert [s.name for s in look(tmp_path, memory=memory).complete] == [good, closed]


def test_a_source_that_vanishes_before_it_is_read(tmp_path: Path) -> None:
    name = written.raw(tmp_path)
    source = Source.named(tmp_path, name)
    (tmp_path / name / "fid").unlink()
    with ReadingWorker() as border, pytest.raises(NotYetError):
        border.read(tmp_path, source)
