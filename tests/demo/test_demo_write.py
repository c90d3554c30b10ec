"""What the writers put on disk, read back through the reader library."""

from dataclasses import replace
from datetime import UTC, datetime
from pathlib import Path

import nmrglue as ng
import numpy as np
import pytest

from demo_runs import dunmarolide
from demo_runs.columns import processed
from demo_runs.jcamp import packed
from demo_runs.lines import Multiplet
from demo_runs.simulate import SimulatedSpectrum, simulate_fid, simulate_run
from demo_runs.write import EXPONENT, integers, target, write

STARTED = datetime(2026, 3, 3, 18, 0, tzinfo=UTC)


@pytest.fixture(scope="module")
def spectrum() -> SimulatedSpectrum:
    return next(simulate_run(dunmarolide.demo(), seed=2, started=STARTED, only={12}))


def stored(spectrum: SimulatedSpectrum) -> np.ndarray:
    real, imaginary = integers(spectrum)
    return real + 1j * imaginary


def read_folder(path: Path) -> tuple[dict, np.ndarray]:
    parameters = ng.bruker.read_jcamp(str(path / "acqus"))
    _, data = ng.bruker.read_binary(
        str(path / "fid"), shape=(parameters["TD"] // 2,), cplex=True, big=False
    )
    return parameters, data


def test_raw_folder_reads_back(spectrum: SimulatedSpectrum, tmp_path: Path) -> None:
    path = write(spectrum, tmp_path, "raw")
    assert path == tmp_path / "12"
    assert sorted(p.name for p in path.iterdir()) == ["acqus", "fid"]
    parameters, data = read_folder(path)
    np.testing.assert_array_equal(data, stored(spectrum))
    # Rounding to integers stays far below the noise.
    assert np.abs(data * 2.0 ** parameters["NC"] - spectrum.fid).max() < 0.02
    assert parameters["NC"] == EXPONENT
    assert parameters["DATE_START"] == spectrum.start.timestamp()
    assert parameters["DATE"] == spectrum.end.timestamp()
    assert parameters["DATE"] - parameters["DATE_START"] == 16 * 12
    assert parameters["NS"] == 16
    assert parameters["GRPDLY"] == pytest.approx(67.984)
    assert parameters["SW_h"] == 1600.0
    assert parameters["BF1"] == 80.0
    assert parameters["SFO1"] == pytest.approx(80.0 + parameters["O1"] / 1e6, abs=1e-12)
    assert parameters["O1"] / parameters["BF1"] == 5.0
    assert parameters["SW"] == pytest.approx(1600.0 / parameters["SFO1"])
    assert parameters["TE"] == spectrum.temperature_k
    assert parameters["D"][1] == pytest.approx(12.0 - 4096 / 1600)
    assert parameters["NUC1"] == "1H"
    assert parameters["SOLVENT"] == "D2O"
    text = (path / "acqus").read_text()
    assert "np." not in text
    assert text.endswith("##END=\n")


def test_the_library_removes_the_group_delay(spectrum: SimulatedSpectrum, tmp_path: Path) -> None:
    """The library's own removal gives the spectrum of an instrument without a filter."""
    filtered = replace(spectrum.instrument, noise_sd=0.0)
    plain = replace(filtered, group_delay=0.0)
    lines = [(Multiplet(s, 1, width_hz=3.0), 1.0) for s in (-2.0, 1.25, 5.62, 9.62)]
    quiet = replace(spectrum, fid=simulate_fid(filtered, lines, p0_deg=35.0, p1_deg=14.0))
    parameters, data = read_folder(write(quiet, tmp_path, "raw"))
    values = np.fft.fftshift(np.fft.fft(data)) * 2.0**EXPONENT
    found = ng.bruker.remove_digital_filter(
        {"acqus": parameters}, values, truncate=False, post_proc=True
    )
    # The library counts its phase ramp from the left edge, not from the centre.
    found = found * np.exp(-1j * np.pi * filtered.group_delay)
    direct = simulate_fid(plain, lines, p0_deg=35.0, p1_deg=14.0)
    direct[0] *= 0.5
    expected = np.fft.fftshift(np.fft.fft(direct))
    inner = slice(205, -205)  # nine tenths of the width
    assert np.abs(found - expected)[inner].max() < 2e-4 * np.abs(expected).max()


@pytest.mark.parametrize("encoding", ["packed", "plain"])
def test_jcamp_holds_the_same_integers(
    spectrum: SimulatedSpectrum, tmp_path: Path, encoding: str
) -> None:
    path = write(spectrum, tmp_path, "jcamp", encoding=encoding)
    facts, data = ng.jcampdx.read(str(path))
    values = (data[0] + 1j * data[1]) / 2.0**EXPONENT
    np.testing.assert_array_equal(values, stored(spectrum))
    assert facts["LONGDATE"] == ["2026/03/03 18:45:00 +0000"]
    assert facts[".OBSERVEFREQUENCY"] == ["80.0"]
    assert facts[".AVERAGES"] == ["16"]
    _, width = ng.jcampdx._find_firstx_lastx(facts)[:2]
    assert width == pytest.approx(4095 / 1600.0)
    assert path.name == "0012.dx"
    assert path.read_bytes().isascii()
    assert max(map(len, path.read_text().splitlines())) <= 100
    assert spectrum.start == datetime(2026, 3, 3, 18, 45, tzinfo=UTC)


@pytest.mark.parametrize(
    "numbers",
    [
        [5],
        [5, 5],
        [0, 0, 0, 0, 7],
        [-3, 4, -5, 1000, 1000, 1000],
        [1, 2, 3, 4, 5, 6] * 30,
        [0] * 500,
    ],
)
def test_packing_unpacks(numbers: list[int], tmp_path: Path) -> None:
    lines = packed(np.array(numbers))
    path = tmp_path / "x.dx"
    header = [
        "##TITLE= x",
        "##JCAMP-DX= 5.01",
        "##DATA TYPE= NMR SPECTRUM",
        "##DATA CLASS= XYDATA",
        "##YFACTOR= 1.0",
        "##XYDATA= (X++(Y..Y))",
    ]
    path.write_text("\n".join([*header, *lines, "##END="]) + "\n")
    _, data = ng.jcampdx.read(str(path))
    np.testing.assert_array_equal(data, numbers)
    assert all(len(line) < 100 for line in lines)


def test_text_is_the_same_spectrum(spectrum: SimulatedSpectrum, tmp_path: Path) -> None:
    path = write(spectrum, tmp_path, "text")
    table = np.loadtxt(path)
    facts = dict(
        line[2:].split(" = ", 1) for line in path.read_text().splitlines() if line.startswith("#")
    )
    assert facts["acquired"] == "2026-03-03T18:45:00+00:00"
    assert float(facts["acquisition_s"]) == 192
    assert float(facts["frequency_mhz"]) == 80
    assert int(facts["scans"]) == 16
    assert float(facts["temperature_c"]) == pytest.approx(spectrum.temperature_k - 273.15, abs=1e-3)
    assert facts["title"].endswith("spectrum 12")
    ppm, values = processed(spectrum)
    assert table.shape == (8192, 2)
    assert np.all(np.diff(table[:, 0]) < 0)
    np.testing.assert_allclose(table[:, 0], ppm, atol=1e-6)
    np.testing.assert_allclose(table[:, 1], values, rtol=1e-7)


def test_text_integrals_are_the_amounts(spectrum: SimulatedSpectrum, tmp_path: Path) -> None:
    table = np.loadtxt(write(spectrum, tmp_path, "text"))
    ppm, values = table[:, 0], table[:, 1]
    values = values - np.median(values)

    def area(label: str, half: float) -> float:
        inside = np.abs(ppm - spectrum.truth.positions_ppm[label]) < half
        return float(values[inside].sum())

    areas = spectrum.truth.areas
    found = area("ring CH3", 0.25) / area("reference", 0.25)
    # Tails beyond the windows and the satellites inside them: two per cent.
    assert found == pytest.approx(areas["ring CH3"] / areas["reference"], rel=0.03)


@pytest.mark.parametrize("kind", ["raw", "jcamp", "text"])
def test_gradual_writing_ends_in_the_same_bytes(
    spectrum: SimulatedSpectrum, tmp_path: Path, kind: str
) -> None:
    whole, growing = tmp_path / "whole", tmp_path / "growing"
    whole.mkdir()
    growing.mkdir()
    at_once = write(spectrum, whole, kind)
    place = target(spectrum, growing, kind)
    seen: list[tuple[str, ...]] = []
    sizes: list[int] = []

    def look() -> None:
        files = sorted(p for p in growing.rglob("*") if p.is_file())
        seen.append(tuple(p.name for p in files))
        sizes.append(sum(p.stat().st_size for p in files))

    assert write(spectrum, growing, kind, gradually=True, pause=look) == place
    if kind == "raw":
        # The folder first, then its parameter file, then the data in pieces.
        assert seen[0] == ()
        assert seen[1] == ("acqus",)
        assert seen[2] == ("acqus", "fid")
        for name in ("acqus", "fid"):
            assert (place / name).read_bytes() == (at_once / name).read_bytes()
    else:
        assert place.read_bytes() == at_once.read_bytes()
    assert sizes == sorted(set(sizes))
    assert len(sizes) >= 4
    assert not [p for p in whole.rglob("*") if p.name.startswith(".")]


def test_nothing_is_overwritten(spectrum: SimulatedSpectrum, tmp_path: Path) -> None:
    write(spectrum, tmp_path, "raw")
    before = (tmp_path / "12" / "fid").read_bytes()
    with pytest.raises(FileExistsError, match="is there already"):
        write(spectrum, tmp_path, "raw", gradually=True)
    assert (tmp_path / "12" / "fid").read_bytes() == before


def test_too_strong_a_signal_is_refused(spectrum: SimulatedSpectrum, tmp_path: Path) -> None:
    with pytest.raises(ValueError, match="32 bits"):
        write(replace(spectrum, fid=spectrum.fid * 1e6), tmp_path, "raw")
    assert not list(tmp_path.iterdir())
