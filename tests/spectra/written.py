"""One small FID in every form that is read, written here by the formats' own rules."""

import base64
import struct
import zlib
from datetime import UTC, datetime
from functools import cache
from pathlib import Path

import numpy as np
import numpy.typing as npt

STARTED = datetime(2026, 3, 3, 19, 0, tzinfo=UTC)
POINTS, WIDTH, FREQUENCY, CARRIER = 1024, 1600.0, 80.0, 5.0
SCANS, DELAY = 4, 2.0
Complex64 = npt.NDArray[np.complex64]


@cache
def fid(row: int = 0) -> Complex64:
    """Three damped lines with noise, whole numbers, shape (POINTS,); another one a row."""
    rng = np.random.default_rng(11 + row)
    time = np.arange(POINTS) / WIDTH
    lines = sum(
        size * np.exp(2j * np.pi * (ppm - CARRIER) * FREQUENCY * time - 4.0 * time)
        for ppm, size in ((3.14, 60000.0), (1.25, 40000.0 / (1 + row)), (7.3, 15000.0))
    )
    noise = rng.normal(0, 40, POINTS) + 1j * rng.normal(0, 40, POINTS)
    return np.asarray(np.rint((lines + noise).real) + 1j * np.rint((lines + noise).imag), "c8")


def spectrum(row: int = 0) -> npt.NDArray[np.float64]:
    """The same as a spectrum, descending in ppm from CARRIER + half the width, whole numbers."""
    return np.rint(np.fft.fftshift(np.fft.fft(fid(row)))[::-1].real)


def pairs(values: Complex64, kind: str) -> bytes:
    """Real and imaginary numbers in turn."""
    return np.stack([values.real, values.imag], axis=-1).astype(kind).tobytes()


def parameters(**other: object) -> str:
    """Text of `acqus`."""
    start = int(STARTED.timestamp())
    entries: dict[str, object] = {
        "BF1": FREQUENCY,
        "BYTORDA": 0,
        "D": f"(0..3)\n0 {DELAY} 0 0",
        "DATE": start + 14,
        "DATE_START": start,
        "DTYPA": 0,
        "GRPDLY": 0,
        "NC": 0,
        "NS": SCANS,
        "NUC1": "<1H>",
        "PARMODE": 0,
        "SFO1": FREQUENCY * (1 + CARRIER * 1e-6),
        "SW_h": WIDTH,
        "TD": 2 * POINTS,
        "TE": 298.15,
    } | other
    lines = [f"##${key}= {value}" for key, value in sorted(entries.items())]
    return "\n".join(["##TITLE= x", "##JCAMPDX= 5.0", *lines, "##END=", ""])


def raw(folder: Path, name: str = "1", row: int = 0, **other: object) -> str:
    (folder / name).mkdir(parents=True)
    (folder / name / "acqus").write_text(parameters(**other))
    (folder / name / "fid").write_bytes(pairs(fid(row), "<i4"))
    return name


def series(folder: Path, name: str = "7", rows: int = 3, declared: int = 3) -> str:
    """A series of `declared` rows of which `rows` have been acquired."""
    (folder / name).mkdir(parents=True)
    (folder / name / "acqus").write_text(parameters(DATE=0, PARMODE=1))
    (folder / name / "acqu2s").write_text(f"##$TD= {declared}\n##$NUC1= <off>\n##END=\n")
    body = b"".join(pairs(fid(row), "<i4") for row in range(rows))
    (folder / name / "ser").write_bytes(body + bytes(8 * POINTS * (declared - rows)))
    return name


def processed(folder: Path, name: str = "4") -> str:
    place = folder / name / "pdata" / "1"
    place.mkdir(parents=True)
    (folder / name / "acqus").write_text(parameters())
    first = CARRIER + WIDTH / FREQUENCY / 2
    entries = {
        "AXNUC": "<1H>", "BYTORDP": 0, "DTYPP": 0, "NC_proc": 0, "OFFSET": first, "PHC0": 10.0,
        "PHC1": 0.0, "SF": FREQUENCY, "SI": POINTS, "SW_p": WIDTH,
    }  # fmt: skip
    lines = [f"##${key}= {value}" for key, value in entries.items()]
    (place / "procs").write_text("\n".join(["##TITLE= x", *lines, "##END=", ""]))
    (place / "1r").write_bytes(spectrum().astype("<i4").tobytes())
    return name


def procpar_text(arrayed: dict[str, list[float]] | None = None, tn: str = "H1") -> str:
    """Text of a `procpar` file; `arrayed` parameters have a value a row."""
    numbers: dict[str, list[float]] = {
        "at": [POINTS / WIDTH], "ct": [SCANS], "d1": [DELAY], "np": [2 * POINTS], "nt": [SCANS],
        "rfl": [WIDTH / 2 - CARRIER * FREQUENCY], "rfp": [0.0], "sfrq": [FREQUENCY],
        "sw": [WIDTH], "temp": [25.0],
    }  # fmt: skip
    texts = {"tn": tn, "solvent": "d2o", "time_run": "20260303T190000", "samplename": 'a "b" c'}
    out = []
    for key, values in (numbers | (arrayed or {})).items():
        out += [
            f"{key} 1 1 1e+18 -1e+18 0 2 1 0 1 64",
            f"{len(values)} " + " ".join(map(str, values)),
        ]
        out += ["0 "]
    for key, text in texts.items():
        escaped = text.replace('"', r"\"")
        out += [f"{key} 2 2 8 0 0 2 1 0 1 64", f'1 "{escaped}"', '2 "a" "b" ']
    return "\n".join(out) + "\n"


def block_file(rows: list[npt.NDArray[np.generic]], status: int, kind: str) -> bytes:
    """A binary file of blocks, one a row."""
    bodies = [np.ascontiguousarray(row).astype(kind).tobytes() for row in rows]
    size = len(bodies[0])
    width = np.dtype(kind).itemsize
    head = struct.pack(">6ihhi", len(rows), 1, size // width, width, size, size + 28, 0, status, 1)
    block = struct.pack(">4hi4f", 0, status, 1, 0, SCANS, 0, 0, 0, 0)
    return head + b"".join(block + body for body in bodies)


def interleaved(values: Complex64) -> npt.NDArray[np.generic]:
    """As this layout stores it: the other sign of the imaginary part."""
    return np.stack([values.real, -values.imag], axis=-1).ravel()


def procpar(folder: Path, name: str = "a.fid", rows: int = 1) -> str:
    (folder / name).mkdir(parents=True)
    arrayed: dict[str, list[float]] | None = None
    if rows > 1:
        arrayed = {"pad": [0.0, *[30.0] * (rows - 1)]}
    (folder / name / "procpar").write_text(procpar_text(arrayed))
    body = block_file([interleaved(fid(row)) for row in range(rows)], 0x1 | 0x4 | 0x10, ">i4")
    (folder / name / "fid").write_bytes(body)
    return name


def procpar_processed(folder: Path, name: str = "p.fid") -> str:
    (folder / name / "datdir").mkdir(parents=True)
    (folder / name / "procpar").write_text(procpar_text())
    body = block_file([spectrum()], 0x1 | 0x2 | 0x8, ">f4")
    (folder / name / "datdir" / "phasefile").write_bytes(body)
    return name


def jcamp_lines(values: npt.NDArray[np.float64]) -> str:
    numbers = [int(v) for v in values]
    return "\n".join(
        f"{at} " + " ".join(map(str, numbers[at : at + 8])) for at in range(0, len(numbers), 8)
    )


def jcamp(folder: Path, name: str = "1.dx", row: int = 0, nucleus: str = "^1H") -> str:
    folder.mkdir(parents=True, exist_ok=True)
    data = fid(row)
    last = (POINTS - 1) / WIDTH
    (folder / name).write_text(
        "##TITLE= x\n##JCAMP-DX= 5.01\n##DATA TYPE= NMR FID\n##DATA CLASS= NTUPLES\n"
        f"##.OBSERVE FREQUENCY= {FREQUENCY}\n##.OBSERVE NUCLEUS= {nucleus}\n"
        f"##LONG DATE= 2026/03/03 19:00:00 +0000\n##.AVERAGES= {SCANS}\n"
        f"##$BF1= {FREQUENCY}\n##$O1= {CARRIER * FREQUENCY}\n##NTUPLES= NMR FID\n"
        "##SYMBOL= X, R, I, N\n"
        f"##VAR_DIM= {POINTS}, {POINTS}, {POINTS}, 2\n##UNITS= SECONDS, A, A,\n"
        f"##FIRST= 0.0, 0, 0, 1\n##LAST= {last!r}, 0, 0, 2\n##FACTOR= 1, 1, 1, 1\n"
        f"##PAGE= N=1\n##DATA TABLE= (X++(R..R)), XYDATA\n{jcamp_lines(data.real)}\n"
        f"##PAGE= N=2\n##DATA TABLE= (X++(I..I)), XYDATA\n{jcamp_lines(data.imag)}\n"
        "##END NTUPLES= NMR FID\n##END=\n"
    )
    return name


def nmrml(
    folder: Path, name: str = "1.nmrML", *, packed: bytes | None = None, head: str = ""
) -> str:
    folder.mkdir(parents=True, exist_ok=True)
    body = packed if packed is not None else zlib.compress(pairs(fid(), "<f8"))
    text = base64.b64encode(body).decode()
    (folder / name).write_text(
        f'<?xml version="1.0" encoding="UTF-8"?>\n{head}'
        '<nmrML xmlns="http://nmrml.org/schema" version="v1.0.rc1">\n<acquisition><acquisition1D>'
        f'<acquisitionParameterSet numberOfScans="{SCANS}" numberOfSteadyStateScans="0" '
        'startTimeStamp="2026-03-03T19:00:00+00:00">'
        '<sampleAcquisitionTemperature value="298.15" unitName="kelvin"/>'
        f'<relaxationDelay value="{DELAY}" unitName="second"/>'
        f'<DirectDimensionParameterSet numberOfDataPoints="{POINTS}">'
        '<acquisitionNucleus name="1H"/>'
        f'<irradiationFrequency value="{FREQUENCY}" unitName="megahertz"/>'
        f'<irradiationFrequencyOffset value="{CARRIER * FREQUENCY}" unitName="hertz"/>'
        f'<sweepWidth value="{WIDTH}" unitName="hertz"/></DirectDimensionParameterSet>'
        "</acquisitionParameterSet>"
        f'<fidData byteFormat="Complex128" compressed="zlib" encodedLength="{len(text)}">{text}'
        "</fidData></acquisition1D></acquisition></nmrML>\n"
    )
    return name


def text(folder: Path, name: str = "1.txt", separator: str = "\t", comma: bool = False) -> str:
    folder.mkdir(parents=True, exist_ok=True)
    first = CARRIER + WIDTH / FREQUENCY / 2
    ppm = first - np.arange(POINTS) * WIDTH / FREQUENCY / POINTS
    rows = [f"{p:.7f}{separator}{v:.1f}" for p, v in zip(ppm, spectrum(), strict=True)]
    body = "\n".join(rows).replace(".", ",") if comma else "\n".join(rows)
    facts = (
        f"# acquired = 2026-03-03T19:00:00+00:00\n# acquisition_s = 10.56\n# scans = {SCANS}\n"
        f"# frequency_mhz = {FREQUENCY}\n# temperature_c = 25.0\nppm{separator}intensity\n"
    )
    (folder / name).write_text(facts + body + "\n")
    return name
