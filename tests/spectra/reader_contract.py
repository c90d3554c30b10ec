"""What every reader owes. A test class of a format inherits this and says how to write a file."""

import hashlib
import os
from collections.abc import Callable
from pathlib import Path
from typing import ClassVar, Literal

import numpy as np
import pytest

from kinetics.errors import NotYetError, UnreadableError
from kinetics.spectra.arrival import Look, OsLayer, Source, look
from kinetics.spectra.model import Raw
from kinetics.spectra.readers import completeness, read
from tests.spectra import written


def two_looks(folder: Path) -> Look:
    return look(folder, memory=look(folder).memory)


def folder_facts(folder: Path) -> dict[str, tuple[int, str]]:
    """Every file's time and hash."""
    return {
        str(path): (path.stat().st_mtime_ns, hashlib.sha256(path.read_bytes()).hexdigest())
        for path in sorted(folder.rglob("*"))
        if path.is_file()
    }


class ReaderContract:
    """Inherit, and give `kind`, `domain` and `write`."""

    kind: ClassVar[str]
    domain: ClassVar[Literal["time", "frequency"]]
    # Columns of numbers without an end mark: a cut at the end of a line cannot be known.
    cut_is_seen: ClassVar[bool] = True

    def write(self, folder: Path) -> str:
        """Write one acquisition and return the source's name."""
        raise NotImplementedError

    def data_path(self, folder: Path, name: str) -> Path:
        """The file that holds the numbers."""
        path = folder / name
        return max((p for p in path.rglob("*") if p.is_file()), key=lambda p: p.stat().st_size) if (
            path.is_dir()
        ) else path  # fmt: skip

    def one(self, folder: Path) -> Raw:
        self.write(folder)
        (source,) = two_looks(folder).complete
        return read(folder, source)[0]

    def test_recognised_and_taken_after_two_looks(self, tmp_path: Path) -> None:
        name = self.write(tmp_path / "run")
        first = look(tmp_path / "run")
        assert not first.complete
        assert [w[0] for w in first.waiting] == [name]
        (source,) = look(tmp_path / "run", memory=first.memory).complete
        assert (source.name, source.kind) == (name, self.kind)

    def test_values_and_axis(self, tmp_path: Path) -> None:
        raw = self.one(tmp_path / "run")
        assert raw.domain == self.domain
        assert raw.frequency_mhz == pytest.approx(written.FREQUENCY)
        if self.domain == "time":
            assert np.array_equal(raw.data, written.fid())
            assert raw.carrier_ppm == pytest.approx(written.CARRIER)
            assert raw.spectral_width_hz == pytest.approx(written.WIDTH)
        else:
            assert raw.axis is not None
            assert np.array_equal(raw.data, written.spectrum().astype(np.float32))
            first = written.CARRIER + written.WIDTH / written.FREQUENCY / 2
            assert raw.axis.first_ppm == pytest.approx(first, abs=1e-6)
            step = -written.WIDTH / written.FREQUENCY / written.POINTS
            assert raw.axis.step_ppm == pytest.approx(step, rel=1e-5)

    def test_facts_and_time(self, tmp_path: Path) -> None:
        raw = self.one(tmp_path / "run")
        assert raw.scans == written.SCANS
        assert raw.temperature_k in (None, pytest.approx(298.15))
        assert raw.stamp.start is not None
        assert raw.stamp.start.replace(tzinfo=written.UTC) == written.STARTED
        assert raw.stamp.meaning
        assert not [r for r in raw.remarks if r.doubtful]

    def test_same_content_same_hash_wherever_it_lies(self, tmp_path: Path) -> None:
        assert self.one(tmp_path / "a").sha256 == self.one(tmp_path / "b" / "c").sha256

    def test_nothing_is_written(self, tmp_path: Path) -> None:
        self.write(tmp_path / "run")
        before = folder_facts(tmp_path / "run")
        (source,) = two_looks(tmp_path / "run").complete
        read(tmp_path / "run", source)
        assert folder_facts(tmp_path / "run") == before

    @pytest.mark.parametrize("part", [0.0, 0.05, 0.3, 0.7, 0.98, 0.9995])
    def test_a_cut_file_is_no_spectrum(self, tmp_path: Path, part: float) -> None:
        name = self.write(tmp_path)
        path = self.data_path(tmp_path, name)
        content = path.read_bytes()
        cut = content[: int(part * len(content))]
        if not self.cut_is_seen and b"\n" in cut:
            cut = cut.rstrip(b"\n")
        path.write_bytes(cut)
        try:
            source = Source.named(tmp_path, name)
        except FileNotFoundError:
            return
        missing = completeness(tmp_path, source, OsLayer())
        assert missing, f"{len(cut)} of {len(content)} bytes were called complete"
        if self.cut_is_seen:
            with pytest.raises((NotYetError, UnreadableError)):
                read(tmp_path, source)

    def test_zeros_to_come_are_waited_for(self, tmp_path: Path) -> None:
        """A share that shows the full size before the content."""
        name = self.write(tmp_path)
        path = self.data_path(tmp_path, name)
        content = path.read_bytes()
        path.write_bytes(content[: len(content) // 3] + bytes(len(content) - len(content) // 3))
        os.utime(path, (1e9, 1e9))
        assert not [s for s in two_looks(tmp_path).complete if self.whole_rows(tmp_path, s)]
        path.write_bytes(content)
        (source,) = two_looks(tmp_path).complete
        assert read(tmp_path, source)

    def whole_rows(self, folder: Path, source: Source) -> list[Raw]:
        """What a source that is called complete gives."""
        try:
            return list(read(folder, source))
        except (NotYetError, UnreadableError):
            return []


Writer = Callable[[Path], str]
