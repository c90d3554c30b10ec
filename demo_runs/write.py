"""Writing simulated spectra as an instrument does: whole at once, or growing on the disk.

Three formats carry the same acquisition: a raw instrument folder and a JCAMP-DX FID with the
same integers, and two-column text of the processed spectrum.
"""

from collections.abc import Callable
from pathlib import Path
from typing import Literal, get_args

import numpy as np
import numpy.typing as npt

from demo_runs.columns import columns_text
from demo_runs.jcamp import Encoding, fid_text, private_labels
from demo_runs.simulate import SimulatedSpectrum

Int64 = npt.NDArray[np.int64]
Format = Literal["raw", "jcamp", "text"]
FORMATS: tuple[Format, ...] = get_args(Format)

# The stored integers are the FID divided by two to this power: 64 steps to the unit keep
# rounding far below the noise.
EXPONENT = -6
_LARGEST = 2**31 - 1
_CHUNKS = 5


def no_pause() -> None:
    """Do not wait between the pieces of a file."""


def integers(spectrum: SimulatedSpectrum) -> tuple[Int64, Int64]:
    """Return real and imaginary part as the receiver stores them, shape (n,) each.

    Raises
    ------
    ValueError
        If a point does not fit into 32 bits.
    """
    scaled = spectrum.fid * 2.0**-EXPONENT
    real, imaginary = np.rint(scaled.real), np.rint(scaled.imag)
    largest = float(max(np.abs(real).max(), np.abs(imaginary).max()))
    if largest > _LARGEST:
        raise ValueError(
            f"the strongest point is {largest:.3g} and does not fit into 32 bits; "
            "make the sensitivity or the number of scans smaller"
        )
    return real.astype(np.int64), imaginary.astype(np.int64)


def target(spectrum: SimulatedSpectrum, folder: Path, kind: Format) -> Path:
    """Return where `write` puts a spectrum inside a run folder."""
    if kind == "raw":
        return folder / str(spectrum.number)
    return folder / f"{spectrum.number:04d}.{'dx' if kind == 'jcamp' else 'txt'}"


def write(
    spectrum: SimulatedSpectrum,
    folder: Path,
    kind: Format,
    *,
    gradually: bool = False,
    pause: Callable[[], None] = no_pause,
    encoding: Encoding = "packed",
) -> Path:
    """Write one spectrum into an existing run folder.

    Parameters
    ----------
    spectrum
        What to write.
    folder
        The run folder.
    kind
        ``"raw"``: a raw instrument folder named by its number; ``"jcamp"``: NNNN.dx;
        ``"text"``: NNNN.txt.
    gradually
        As an instrument on a slow share: a raw folder appears first, then its parameter file,
        then the data in pieces; a single file grows in pieces. Otherwise nothing is seen under
        its name before it is complete.
    pause
        Called between the pieces.
    encoding
        Of a JCAMP-DX file: ``"packed"`` or ``"plain"``.

    Returns
    -------
    The file or folder that was written.

    Raises
    ------
    FileExistsError
        If there is one of that name already.
    """
    path = target(spectrum, folder, kind)
    if path.exists():
        raise FileExistsError(f"{path} is there already")
    if kind == "raw":
        files = {"acqus": parameter_bytes(spectrum), "fid": fid_bytes(spectrum)}
        _write_folder(path, files, gradually=gradually, pause=pause)
        return path
    if kind == "jcamp":
        real, imaginary = integers(spectrum)
        content = fid_text(spectrum, real, imaginary, EXPONENT, encoding).encode("ascii")
    else:
        content = columns_text(spectrum).encode("ascii")
    if gradually:
        _grow(path, content, pause)
    else:
        # A leading dot: not a spectrum for anyone who lists the folder meanwhile.
        part = path.with_name(f".{path.name}.part")
        part.write_bytes(content)
        part.rename(path)
    return path


def _write_folder(
    path: Path, files: dict[str, bytes], *, gradually: bool, pause: Callable[[], None]
) -> None:
    if gradually:
        path.mkdir()
        pause()
        *first, (last, data) = files.items()
        for name, content in first:
            (path / name).write_bytes(content)
        pause()
        _grow(path / last, data, pause)
        return
    part = path.with_name(f".{path.name}.part")
    part.mkdir()
    for name, content in files.items():
        (part / name).write_bytes(content)
    part.rename(path)


def _grow(path: Path, content: bytes, pause: Callable[[], None]) -> None:
    """Write a file in pieces, each on the disk before the next."""
    size = -(-len(content) // _CHUNKS)
    with path.open("xb") as file:
        for start in range(0, len(content), size):
            if start:
                pause()
            file.write(content[start : start + size])
            file.flush()


def fid_bytes(spectrum: SimulatedSpectrum) -> bytes:
    """Return the data file of a raw instrument folder: little-endian int32, real and imaginary
    in turn."""
    real, imaginary = integers(spectrum)
    return np.stack([real, imaginary], axis=1).astype("<i4").tobytes()


def parameter_bytes(spectrum: SimulatedSpectrum) -> bytes:
    """Return the parameter file of a raw instrument folder, times in whole Unix seconds.

    The lines are written here and not through the reader library's writer, which loses numpy
    scalars; plain Python numbers only.
    """
    lines = [
        f"##TITLE= {spectrum.title}",
        "##JCAMPDX= 5.0",
        "##DATATYPE= Parameter Values",
        f"##ORIGIN= {spectrum.site}",
        f"##OWNER= {spectrum.site}",
        f"$$ {spectrum.start:%Y-%m-%d %H:%M:%S} +0000  acquisition started",
    ]
    values = [*private_labels(spectrum), f"##$NC= {EXPONENT}"]
    return "\n".join([*lines, *_sorted_entries(values), "##END="]).encode("ascii") + b"\n"


def _sorted_entries(lines: list[str]) -> list[str]:
    """Entries in alphabetical order, each with the lines that belong to it."""
    entries: list[list[str]] = []
    for line in lines:
        if line.startswith("##"):
            entries.append([line])
        else:
            entries[-1].append(line)
    return [line for entry in sorted(entries) for line in entry]
