"""Readers: one acquisition in every form, ten encodings of one spectrum, and what is damaged."""

import re
import shutil
import subprocess
import sys
import tarfile
import time
from collections.abc import Callable
from contextlib import suppress
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from demo_runs import dunmarolide
from demo_runs.simulate import simulate_run
from demo_runs.write import Format, write
from kinetics.errors import NotYetError, UnreadableError
from kinetics.spectra.arrival import OsLayer, Source
from kinetics.spectra.model import Raw
from kinetics.spectra.readers import completeness, read, sniff
from tests.recorded import STARTED

KINDS: tuple[Format, ...] = ("raw", "jcamp", "text")


def written(folder: Path, kind: Format, count: int = 1) -> list[Source]:
    folder.mkdir(parents=True, exist_ok=True)
    for spectrum in simulate_run(dunmarolide.demo(), seed=7, started=STARTED, count=count):
        write(spectrum, folder, kind)
    return [Source.named(folder, path.name) for path in sorted(folder.iterdir())]


def one(folder: Path, source: Source) -> Raw:
    (found,) = read(folder, source)
    return found


def data_file(folder: Path, source: Source) -> Path:
    path = folder / source.name
    return path / "fid" if path.is_dir() else path


class TestSameAcquisition:
    def test_raw_folder_and_jcamp_hold_the_same_samples(self, tmp_path: Path) -> None:
        (raw,), (jcamp,) = written(tmp_path / "a", "raw"), written(tmp_path / "b", "jcamp")
        a, b = one(tmp_path / "a", raw), one(tmp_path / "b", jcamp)
        assert a.data.shape == b.data.shape
        assert np.array_equal(a.data, b.data)
        assert (a.frequency_mhz, a.scans) == (b.frequency_mhz, b.scans)
        assert a.spectral_width_hz == pytest.approx(b.spectral_width_hz, rel=1e-9)
        assert a.carrier_ppm == pytest.approx(b.carrier_ppm, abs=1e-6)
        assert a.group_delay == pytest.approx(b.group_delay, abs=1e-6)

    @pytest.mark.parametrize("kind", KINDS)
    def test_times_and_nucleus(self, tmp_path: Path, kind: Format) -> None:
        (source,) = written(tmp_path, kind)
        (true,) = simulate_run(dunmarolide.demo(), seed=7, started=STARTED, count=1)
        found = one(tmp_path, source)
        stamp = found.stamp
        begun = stamp.start or (stamp.end and stamp.end - (true.end - true.start))
        assert begun is not None
        assert abs((begun - true.start).total_seconds()) <= 1.0
        assert found.nucleus in ("1H", "")
        assert found.temperature_k == pytest.approx(true.temperature_k, abs=0.01)


@pytest.mark.parametrize("kind", KINDS)
class TestEveryReader:
    """What every reader owes."""

    def test_recognised_by_content_not_name(self, tmp_path: Path, kind: Format) -> None:
        (source,) = written(tmp_path, kind)
        if kind == "raw":
            assert source.kind == "raw folder"
            return
        bytes_ = (tmp_path / source.name).read_bytes()
        assert sniff("measurement", len(bytes_), bytes_[:4096]) == source.kind

    def test_the_hash_is_that_of_the_content(self, tmp_path: Path, kind: Format) -> None:
        (source,) = written(tmp_path / "a", kind)
        first = one(tmp_path / "a", source)
        shutil.copytree(tmp_path / "a", tmp_path / "b")
        assert one(tmp_path / "b", source).sha256 == first.sha256
        path = data_file(tmp_path / "b", source)
        content = bytearray(path.read_bytes())
        content[len(content) // 2] ^= 1
        path.write_bytes(bytes(content))
        with suppress(UnreadableError):  # the flipped bit may hit something that can be seen
            assert one(tmp_path / "b", source).sha256 != first.sha256

    @pytest.mark.parametrize("part", [0.0, 0.03, 0.5, 0.97])
    def test_half_a_file_is_never_a_spectrum(
        self, tmp_path: Path, kind: Format, part: float
    ) -> None:
        (source,) = written(tmp_path, kind)
        path = data_file(tmp_path, source)
        content = path.read_bytes()
        path.write_bytes(content[: int(part * len(content))])
        try:
            now = Source.named(tmp_path, source.name)
        except FileNotFoundError:
            return  # not even recognised
        missing = completeness(tmp_path, now, OsLayer())
        assert missing
        if kind != "text":  # a table cut inside a line reads as a shorter one; hence `completeness`
            with pytest.raises((NotYetError, UnreadableError)):
                read(tmp_path, now)

    def test_garbage_is_told_in_words(self, tmp_path: Path, kind: Format) -> None:
        (source,) = written(tmp_path, kind)
        path = data_file(tmp_path, source)
        if kind == "raw":
            path = path.parent / "acqus"
        content = path.read_bytes()
        rng = np.random.default_rng(0)
        for _ in range(40):
            damaged = bytearray(content)
            for place in rng.integers(0, len(damaged), 20):
                damaged[place] = int(rng.integers(0, 256))
            path.write_bytes(bytes(damaged))
            with suppress(UnreadableError, NotYetError):  # anything else fails the test
                found = read(tmp_path, source)
                assert all(np.isfinite(raw.data).all() or raw.remarks for raw in found)


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ("##$NUC1= <1H>", "##$NUC1= <13C>", "13C"),
        ("##$TD= 8192", "##$TD= 819200000", "points"),
        ("##$SW_h= 1600", "##$SW_h= 0", "makes no sense"),
        ("##$BF1=", "##$XX1=", "no entry BF1"),
        ("##$NUC1= <1H>", "##$NUC1= <1H", "open text"),
    ],
)
def test_wrong_kinds_of_raw_folder(tmp_path: Path, old: str, new: str, said: str) -> None:
    (source,) = written(tmp_path, "raw")
    acqus = tmp_path / source.name / "acqus"
    text = acqus.read_text(encoding="latin-1")
    assert old in text
    acqus.write_text(text.replace(old, new, 1), encoding="latin-1")
    with pytest.raises((UnreadableError, NotYetError), match=said):
        read(tmp_path, source)


@pytest.mark.parametrize(
    ("content", "count"),
    [
        ("ppm;intensity\n" + "".join(f"{9 - i / 100:.2f};{i}\n" for i in range(900)), 900),
        ("".join(f"{9 - i / 100:.2f}\t{i}\n".replace(".", ",") for i in range(900)), 900),
        ("# a comment\n" + "".join(f"{i / 100:.2f}, {i}\n" for i in range(900)), 900),
        ("".join(f"{9 - i / 100:.2f}   {i}e-3\n" for i in range(900)), 900),
    ],
)
def test_dialects_of_text(tmp_path: Path, content: str, count: int) -> None:
    (tmp_path / "x.txt").write_text(content)
    found = one(tmp_path, Source.named(tmp_path, "x.txt"))
    assert found.axis is not None
    assert found.data.size == count
    ppm = found.axis.ppm()
    assert ppm[0] > ppm[-1]  # descending, as the trade draws it
    assert ppm[0] == pytest.approx(9.0 if content[0] != "#" else 8.99, abs=1e-6)


@pytest.mark.parametrize(
    ("rows", "said"),
    [
        (["1.0 2.0"] * 3, "points"),
        ([f"{9 - i / 100} {i if i < 200 else 'nan'}" for i in range(300)], "not numbers"),
        ([f"{(i * 7919) % 300} 1" for i in range(300)], "direction|axis"),
    ],
)
def test_text_that_is_no_spectrum(tmp_path: Path, rows: list[str], said: str) -> None:
    (tmp_path / "x.txt").write_text("\n".join(rows) + "\n")
    with pytest.raises(UnreadableError, match=said):
        read(tmp_path, Source("x.txt", "text", Source.named(tmp_path, "x.txt").files))


@pytest.fixture(scope="session")
def encodings(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The test files in the source distribution of PyPI's jcamp 1.3.2, fetched by pip."""
    home = tmp_path_factory.mktemp("jcamp")
    pip = [sys.executable, "-m", "pip", "download", "--quiet", "--no-deps"]
    wanted = ["--no-binary", "jcamp", "jcamp==1.3.2", "-d", str(home)]
    subprocess.run([*pip, *wanted], check=True)
    (archive,) = home.glob("jcamp-1.3.2.tar.gz")
    with tarfile.open(archive) as packed:
        # Older patch releases of Python do not know the filter yet; newer ones insist on it.
        packed.extractall(home, **({"filter": "data"} if hasattr(tarfile, "data_filter") else {}))
    return home


def of_folder(encodings: Path, pattern: str) -> dict[str, Raw]:
    found = {}
    for path in sorted(encodings.rglob("*.jdx")):
        if re.fullmatch(pattern, path.name):
            found[path.name] = one(path.parent, Source.named(path.parent, path.name))
    return found


@pytest.mark.timeout(300)
def test_ten_encodings_of_one_spectrum(encodings: Path) -> None:
    """Source: jcamp 1.3.2 on PyPI, o01 to o10: AFFN, PAC, SQZ, DIF, DIFDUP; XYDATA, NTUPLES."""
    spectra = of_folder(encodings, r"o\d\d\.jdx")
    assert len(spectra) == 10
    first = next(iter(spectra.values()))
    assert first.data.size > 1000
    for name, found in spectra.items():
        assert np.array_equal(found.data.real, first.data.real), name
        assert found.frequency_mhz == pytest.approx(200.0, abs=1.0), name


@pytest.mark.timeout(300)
def test_four_encodings_of_one_fid(encodings: Path) -> None:
    """Source: jcamp 1.3.2 on PyPI (ofid1 to ofid4)."""
    fids = of_folder(encodings, r"ofid\d\.jdx")
    assert len(fids) == 4
    first = next(iter(fids.values()))
    assert first.domain == "time"
    for name, found in fids.items():
        assert np.array_equal(found.data, first.data), name


def test_packed_jcamp_is_read_much_faster_than_by_the_library(tmp_path: Path) -> None:
    """64k complex points against nmrglue's own reader in the same run, with the same values."""
    import nmrglue as ng

    scenario = dunmarolide.demo()
    scenario = replace(scenario, instrument=replace(scenario.instrument, points=65536))
    (spectrum,) = simulate_run(scenario, seed=7, started=STARTED, count=1)
    write(spectrum, tmp_path, "jcamp")
    (path,) = tmp_path.iterdir()
    source = Source.named(tmp_path, path.name)

    def timed(reading: Callable[[], object]) -> tuple[float, object]:
        begun = time.process_time()
        found = reading()
        return time.process_time() - begun, found

    one(tmp_path, source)  # imports
    own, ours = min((timed(lambda: one(tmp_path, source)) for _ in range(3)), key=lambda t: t[0])
    library, theirs = timed(lambda: ng.jcampdx.read(str(path)))
    assert isinstance(ours, Raw)
    assert isinstance(theirs, tuple)
    parts = theirs[1]
    values = np.asarray(parts[0]) + 1j * np.asarray(parts[1]) if isinstance(parts, list) else parts
    assert np.allclose(np.abs(ours.data), np.abs(values), rtol=1e-5, atol=0.0)
    assert library > 3.0 * own  # about 5 on a quiet machine
