"""Series, agreement with nmrglue, and wrong kinds of data, in words a chemist understands."""

import re
import zlib
from datetime import timedelta
from itertools import pairwise
from pathlib import Path

import nmrglue as ng
import numpy as np
import pytest

from kinetics.errors import NotYetError, UnreadableError
from kinetics.spectra.arrival import Source, look
from kinetics.spectra.model import Raw
from kinetics.spectra.readers import parameters, procpar, read
from tests.spectra import written
from tests.spectra.reader_contract import two_looks


def all_of(folder: Path, name: str) -> tuple[Raw, ...]:
    return read(folder, Source.named(folder, name))


class TestSeries:
    def test_rows_of_a_series_have_their_own_times(self, tmp_path: Path) -> None:
        name = written.series(tmp_path)
        rows = all_of(tmp_path, name)
        assert [r.source for r in rows] == ["7#1", "7#2", "7#3"]
        for place, row in enumerate(rows):
            assert np.array_equal(row.data, written.fid(place))
            assert row.stamp.start is not None
            length = written.SCANS * (written.POINTS / written.WIDTH + written.DELAY)
            assert row.stamp.duration_s == pytest.approx(length)
            after = (row.stamp.start - written.STARTED).total_seconds()
            assert after == pytest.approx(place * length, abs=1e-3)

    def test_a_list_of_delays_is_waited_out(self, tmp_path: Path) -> None:
        name = written.series(tmp_path)
        (tmp_path / name / "vdlist").write_text("0\n500m\n2m\n")
        starts = [row.stamp.start for row in all_of(tmp_path, name)]
        length = written.SCANS * (written.POINTS / written.WIDTH + written.DELAY)
        gaps = [(b - a).total_seconds() for a, b in pairwise(starts) if a and b]
        assert gaps == pytest.approx([length + 0.5, length + 0.002], abs=1e-5)

    def test_a_growing_series_gives_its_rows_one_by_one(self, tmp_path: Path) -> None:
        name = written.series(tmp_path, rows=1)
        first = all_of(tmp_path, name)
        whole = written.series(tmp_path / "later", rows=3)
        later = all_of(tmp_path / "later", whole)
        assert len(first) == 1
        assert first[0].sha256 == later[0].sha256
        assert len({r.sha256 for r in later}) == 3

    def test_no_row_yet(self, tmp_path: Path) -> None:
        with pytest.raises(NotYetError, match="no row"):
            all_of(tmp_path, written.series(tmp_path, rows=0))

    def test_rows_of_an_array(self, tmp_path: Path) -> None:
        name = written.procpar(tmp_path, rows=3)
        rows = all_of(tmp_path, name)
        assert [r.source for r in rows] == [f"{name}#{i}" for i in (1, 2, 3)]
        length = written.SCANS * (written.POINTS / written.WIDTH + written.DELAY)
        for place, row in enumerate(rows):
            assert np.array_equal(row.data, written.fid(place))
            assert row.stamp.start is not None
            after = row.stamp.start - written.STARTED.replace(tzinfo=None)
            assert after == timedelta(seconds=place * (length + 30.0))


class TestAgainstTheLibrary:
    """nmrglue reads the same from the same files (where it reads them at all)."""

    def test_blocks(self, tmp_path: Path) -> None:
        name = written.procpar(tmp_path, rows=3)
        dic, data = ng.varian.read(str(tmp_path / name), as_2d=True)
        rows = all_of(tmp_path, name)
        assert np.array_equal(np.conj(np.asarray(data)), np.stack([r.data for r in rows]))
        own = procpar.parse((tmp_path / name / "procpar").read_text())
        for key in ("sw", "np", "pad", "tn", "temp", "time_run"):
            assert list(own[key]) == dic["procpar"][key]["values"]

    def test_parameters(self, tmp_path: Path) -> None:
        name = written.raw(tmp_path)
        theirs = ng.bruker.read_jcamp(str(tmp_path / name / "acqus"))
        own = parameters.parameters((tmp_path / name / "acqus").read_text())
        for key, value in own.items():
            assert theirs[key] == value, key

    def test_series(self, tmp_path: Path) -> None:
        name = written.series(tmp_path)
        _, data = ng.bruker.read_binary(
            str(tmp_path / name / "ser"), shape=(3, written.POINTS), big=False
        )
        assert np.array_equal(data, np.stack([r.data for r in all_of(tmp_path, name)]))


def refused(folder: Path, name: str) -> str:
    with pytest.raises(UnreadableError) as why:
        all_of(folder, name)
    words = str(why.value)
    assert "Error" not in words, "a chemist is told what is wrong, not which exception it was"
    return words


class TestWrongKinds:
    def test_other_nucleus(self, tmp_path: Path) -> None:
        said = "the spectrum is of 13C, not of 1H"
        assert refused(tmp_path, written.raw(tmp_path, NUC1="<13C>")) == said
        assert refused(tmp_path, written.jcamp(tmp_path, nucleus="^13C")) == said
        name = written.procpar(tmp_path)
        (tmp_path / name / "procpar").write_text(written.procpar_text(tn="C13"))
        assert refused(tmp_path, name) == "the spectrum is of C13, not of 1H"

    def test_two_dimensions(self, tmp_path: Path) -> None:
        assert "two or more dimensions" in refused(tmp_path, written.raw(tmp_path, PARMODE=1))
        name = written.series(tmp_path)
        (tmp_path / name / "acqu2s").write_text("##$TD= 3\n##$NUC1= <13C>\n##END=\n")
        assert "two dimensions" in refused(tmp_path, name)
        name = written.procpar(tmp_path, "b.fid", rows=3)
        text = written.procpar_text({"ni": [64.0], "pad": [0.0] * 3})
        (tmp_path / name / "procpar").write_text(text)
        assert "two or more dimensions" in refused(tmp_path, name)

    def test_no_frequency(self, tmp_path: Path) -> None:
        name = written.jcamp(tmp_path)
        path = tmp_path / name
        path.write_text(re.sub(r"##(\.OBSERVE FREQUENCY|\$BF1)=.*\n", "", path.read_text()))
        assert refused(tmp_path, name) == "the file does not say the spectrometer frequency"
        assert "frequency (0)" in refused(tmp_path, written.raw(tmp_path, BF1=0))
        plain = tmp_path / written.text(tmp_path)
        plain.write_text(plain.read_text().replace("# frequency_mhz", "# no_frequency"))
        (row,) = all_of(tmp_path, plain.name)
        assert [r.code for r in row.remarks] == ["frequency-unknown"]

    def test_one_point(self, tmp_path: Path) -> None:
        assert refused(tmp_path, written.raw(tmp_path, TD=2)) == "the spectrum has only 1 point"
        name = written.jcamp(tmp_path)
        path = tmp_path / name
        path.write_text(
            path.read_text().replace("##VAR_DIM= 1024, 1024, 1024", "##VAR_DIM= 1, 1, 1")
        )
        assert refused(tmp_path, name) == "the spectrum has only 1 point"

    @pytest.mark.parametrize("value", [np.nan, np.inf])
    def test_not_a_number(self, tmp_path: Path, value: float) -> None:
        said = "the data contain values that are not numbers"
        data = written.fid().copy()
        data[7] = value
        name = written.raw(tmp_path, DTYPA=2)
        (tmp_path / name / "fid").write_bytes(written.pairs(data, "<f8"))
        assert refused(tmp_path, name) == said
        packed = zlib.compress(written.pairs(data, "<f8"))
        assert refused(tmp_path, written.nmrml(tmp_path, packed=packed)) == said

    def test_all_zero(self, tmp_path: Path) -> None:
        name = written.raw(tmp_path)
        (tmp_path / name / "fid").write_bytes(bytes(8 * written.POINTS))
        assert "nothing was acquired" in refused(tmp_path, name)

    def test_clipped_receiver(self, tmp_path: Path) -> None:
        name = written.raw(tmp_path)
        data = written.fid()
        flat = np.clip(data.real, -30000, 30000) + 1j * np.clip(data.imag, -30000, 30000)
        (tmp_path / name / "fid").write_bytes(written.pairs(flat.astype(np.complex64), "<i4"))
        (row,) = all_of(tmp_path, name)
        (remark,) = row.remarks
        assert (remark.code, remark.doubtful) == ("receiver-clipped", True)
        assert "receiver" in remark.seen

    def test_a_hole_in_the_data(self, tmp_path: Path) -> None:
        name = written.raw(tmp_path)
        content = bytearray((tmp_path / name / "fid").read_bytes())
        content[2048:6144] = bytes(4096)
        (tmp_path / name / "fid").write_bytes(bytes(content))
        (row,) = all_of(tmp_path, name)
        assert [(r.code, r.doubtful) for r in row.remarks] == [("data-hole", True)]


class TestBombs:
    def test_entities_are_not_expanded(self, tmp_path: Path) -> None:
        head = '<!DOCTYPE x [<!ENTITY a "aaaa"><!ENTITY b "&a;&a;&a;&a;">]>\n'
        assert "entities" in refused(tmp_path, written.nmrml(tmp_path, head=head))

    def test_packed_data_stop_at_what_is_declared(self, tmp_path: Path) -> None:
        bomb = zlib.compress(bytes(200 << 20), 9)
        assert "more than is declared" in refused(tmp_path, written.nmrml(tmp_path, packed=bomb))

    def test_cut_and_damaged_packing(self, tmp_path: Path) -> None:
        whole = zlib.compress(written.pairs(written.fid(), "<f8"))
        assert "too early" in refused(tmp_path, written.nmrml(tmp_path, packed=whole[:-40]))
        assert "damaged" in refused(tmp_path, written.nmrml(tmp_path, packed=whole[9:]))

    def test_repeats_without_end(self, tmp_path: Path) -> None:
        name = written.jcamp(tmp_path)
        text = (tmp_path / name).read_text().splitlines()
        at = next(i for i, line in enumerate(text) if line.startswith("##DATA TABLE")) + 1
        text[at] = "0 A1 S999999999"
        (tmp_path / name).write_text("\n".join(text) + "\n")
        assert "far more values" in refused(tmp_path, name)


def test_a_raw_fid_comes_before_its_spectrum(tmp_path: Path) -> None:
    name = written.processed(tmp_path)
    (tmp_path / name / "fid").write_bytes(written.pairs(written.fid(), "<i4"))
    (source,) = two_looks(tmp_path).complete
    assert source.kind == "raw folder"


def test_other_files_are_no_spectra(tmp_path: Path) -> None:
    for name, content in {
        "notes.txt": b"we dosed at 7\n", "bath.csv": b"time,celsius\n", "a.bin": bytes(4096),
        "x.xml": b"<html></html>", "sheet.toml": b"title = 'x'\n",
    }.items():  # fmt: skip
        (tmp_path / name).write_bytes(content)
    (tmp_path / "empty").mkdir()
    seen = look(tmp_path, memory=look(tmp_path).memory)
    assert not seen.complete
    assert not seen.waiting
