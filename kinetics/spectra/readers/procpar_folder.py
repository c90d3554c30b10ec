"""Raw instrument folders with `procpar` and `fid`: one FID, or an array of them, one a block.

The binary file is a header of 32 bytes (nine big-endian numbers: blocks, traces a block, numbers
a trace, bytes a number, bytes a trace, bytes a block, version, status, block headers), then blocks,
each behind headers of 28 bytes. Where only the processed spectrum is there (`datdir/phasefile`),
that is read; it has the same form. The layout is decoded here in numpy and compared with nmrglue's
in the tests: the library believes whatever the header declares.
"""

from __future__ import annotations

import hashlib
import struct
from dataclasses import dataclass
from datetime import datetime, timedelta
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from kinetics.errors import NotYetError, UnreadableError
from kinetics.remarks import Remark
from kinetics.spectra.model import Axis, Complex64, Float32, Raw, Stamp
from kinetics.spectra.readers import procpar
from kinetics.spectra.readers.common import (
    EMPTY_END,
    EMPTY_END_BYTES,
    MOST_PARAMETER_BYTES,
    MOST_ROWS,
    carrier_unknown,
    checked_finite,
    checked_nucleus,
    checked_points,
    checked_scale,
    clipped,
    holes,
    modified,
    rows_present,
)

if TYPE_CHECKING:
    from kinetics.spectra.arrival import FileLayer, Source

_HEADER, _BLOCK_HEADER = 32, 28
_HAS_DATA, _IS_SPECTRUM, _IS_32, _IS_FLOAT, _IS_COMPLEX = 0x1, 0x2, 0x4, 0x8, 0x10

Parameters = dict[str, tuple[str, ...]]


@dataclass(frozen=True, slots=True)
class Header:
    """What the first 32 bytes declare; `dtype` is that of one number."""

    blocks: int
    numbers: int
    block_bytes: int
    block_headers: int
    dtype: str
    is_spectrum: bool
    is_complex: bool

    @property
    def total_bytes(self) -> int:
        """Size of the whole file."""
        return _HEADER + self.blocks * self.block_bytes


def completeness(root: Path, source: Source, files: FileLayer) -> str | None:
    """Return what is still missing: files, the end of `procpar`, or declared blocks."""
    facts = {f.name.rpartition("/")[2]: f for f in source.files}
    if "procpar" not in facts:
        return "the parameter file procpar is not there yet"
    data = facts.get("fid") or facts.get("phasefile")
    if data is None:
        return "no data yet (a queued or running experiment)"
    if facts["procpar"].size > MOST_PARAMETER_BYTES:
        return None  # not a parameter file: reading will say so
    text = files.head(root / facts["procpar"].name, facts["procpar"].size)
    try:
        procpar.parse(text.decode("latin-1"))
        head = files.head(root / data.name, _HEADER)
        if len(head) < _HEADER:
            return f"{data.size} bytes of data are there, not even their header"
        shape = header(head)
    except NotYetError as why:
        return str(why)
    except UnreadableError:
        return None  # reading will say so
    if data.size < shape.total_bytes:
        return f"{data.size} of {shape.total_bytes} bytes of data are there"
    if shape.blocks == 1 and not any(files.tail(root / data.name, EMPTY_END_BYTES)):
        return EMPTY_END
    return None


def header(head: bytes) -> Header:
    """Decode and check the file header.

    Raises
    ------
    UnreadableError
        If what it declares makes no sense.
    """
    blocks, traces, numbers, number_bytes, trace_bytes, block_bytes, _, status, headers = (
        struct.unpack(">6ihhi", head[:_HEADER])
    )
    if traces != 1:
        raise UnreadableError("the folder holds a spectrum of two or more dimensions")
    if not status & _HAS_DATA:
        raise UnreadableError("the data file says that it holds no data")
    dtype = ">f4" if status & _IS_FLOAT else ">i4" if status & _IS_32 else ">i2"
    # FIDs are always pairs; older software did not set the mark.
    pairs = bool(status & _IS_COMPLEX) or not status & _IS_SPECTRUM
    if (
        not 1 <= blocks <= MOST_ROWS
        or not 0 <= headers <= 16
        or number_bytes != np.dtype(dtype).itemsize
        or trace_bytes != numbers * number_bytes
        or block_bytes != trace_bytes + headers * _BLOCK_HEADER
        or (pairs and numbers % 2)
    ):
        raise UnreadableError("the header of the data file contradicts itself: it is damaged")
    checked_points(numbers // 2 if pairs else numbers)
    return Header(blocks, numbers, block_bytes, headers, dtype, bool(status & _IS_SPECTRUM), pairs)


def read(root: Path, source: Source) -> tuple[Raw, ...]:
    """Read the folder as one FID (or spectrum), or as one a block."""
    folder = root / source.name
    path = folder / "fid"
    if not path.is_file():
        path = folder / "datdir" / "phasefile"
    if not path.is_file() or not (folder / "procpar").is_file():
        raise NotYetError("no data yet")
    if (folder / "procpar").stat().st_size > MOST_PARAMETER_BYTES:
        raise UnreadableError("the parameter file procpar is far too large to be one")
    text = (folder / "procpar").read_bytes()
    entries = procpar.parse(text.decode("latin-1"))
    size = path.stat().st_size
    with path.open("rb") as file:
        head = file.read(_HEADER)
        if len(head) < _HEADER:
            raise NotYetError("not even the header of the data is there")
        facts = header(head)
        if size < facts.total_bytes:
            raise NotYetError(f"{size} of {facts.total_bytes} bytes of data are there")
        if size > facts.total_bytes + 4096:
            raise UnreadableError(
                f"the data file holds {size} bytes, {facts.total_bytes} are declared"
            )
        body = file.read(facts.total_bytes - _HEADER)
    _check_agreement(entries, facts)
    blocks = np.frombuffer(body, np.uint8).reshape(facts.blocks, facts.block_bytes)
    numbers = np.ascontiguousarray(blocks[:, facts.block_headers * _BLOCK_HEADER :])
    values = numbers.view(facts.dtype).astype(np.float32)
    pairs = values[:, ::2] + 1j * values[:, 1::2] if facts.is_complex else values + 0j
    rows = pairs.astype(np.complex64)
    if facts.blocks == 1:
        digest = hashlib.sha256(text + head + body).hexdigest()
        return (_raw(entries, path, facts, rows[0], 0, 1, digest, source.name),)
    there = rows_present(rows)
    if there == 0:
        raise NotYetError("no row of the array has been acquired yet")
    return tuple(
        _raw(
            entries, path, facts, rows[i], i, facts.blocks,
            hashlib.sha256(blocks[i].tobytes() + b"#%d" % (i + 1)).hexdigest(),
            f"{source.name}#{i + 1}",
        )
        for i in range(there)
        if rows[i].any()
    )  # fmt: skip


def _check_agreement(entries: Parameters, facts: Header) -> None:
    if (_number(entries, "ni") or 0) > 1 or (_number(entries, "ni2") or 0) > 1:
        raise UnreadableError("the folder holds a spectrum of two or more dimensions")
    declared = _number(entries, "np")
    if not facts.is_spectrum and declared is not None and declared != facts.numbers:
        raise UnreadableError(
            f"procpar declares {declared:g} numbers a FID, the data file {facts.numbers}"
        )


def _number(entries: Parameters, key: str, row: int = 0) -> float | None:
    values = entries.get(key, ())
    if not values:
        return None
    try:
        value = float(values[row] if row < len(values) else values[-1])
    except ValueError:
        return None
    return value if np.isfinite(value) else None


def _text(entries: Parameters, key: str) -> str:
    return (entries.get(key) or ("",))[0]


def _raw(
    entries: Parameters,
    path: Path,
    facts: Header,
    values: Complex64,
    row: int,
    rows: int,
    digest: str,
    name: str,
) -> Raw:
    nucleus = checked_nucleus(_text(entries, "tn"))
    frequency = _number(entries, "reffrq") or _number(entries, "sfrq")
    width = _number(entries, "sw")
    if frequency is None or width is None:
        raise UnreadableError("procpar does not say the spectrometer frequency and width")
    checked_scale(spectrometer_frequency=frequency, spectral_width=width)
    if rows == 1:
        checked_finite(values)
    rfl, rfp = _number(entries, "rfl"), _number(entries, "rfp")
    # Right-hand end in Hz from 0 ppm: rfp is the shift (Hz) of the line that lies rfl from it.
    right = None if rfl is None else (rfp or 0.0) - rfl
    remarks: list[Remark] = []
    axis, carrier = None, 0.0
    data: Complex64 | Float32 = np.conj(values).astype(
        np.complex64
    )  # here positive frequencies lie at lower ppm (memory)
    if facts.is_spectrum:
        step = -width / frequency / values.size
        axis = Axis(((right or 0.0) + width) / frequency, step, values.size)
        data = values if facts.is_complex else values.real.astype(np.float32)
        if right is None:
            raise UnreadableError("procpar does not say where the axis of the spectrum lies")
    elif right is None:
        remarks.append(carrier_unknown())
    else:
        carrier = (right + width / 2) / frequency
    if axis is None:
        remarks.extend((*clipped(values), *holes(values)))
    shot, delay = _number(entries, "at"), _number(entries, "d1", row)
    scans = max(int(_number(entries, "ct") or _number(entries, "nt") or 1), 1)
    recycle = None if shot is None else shot + (delay or 0.0)
    celsius = _number(entries, "temp", row)
    return Raw(
        data=data,
        domain="frequency" if axis is not None else "time",
        frequency_mhz=frequency,
        spectral_width_hz=0.0 if axis is not None else width,
        carrier_ppm=carrier,
        axis=axis,
        group_delay=0.0,
        recorded_phase=None,
        scans=scans,
        recycle_s=recycle,
        flip_angle_deg=None,
        temperature_k=celsius + 273.15 if celsius is not None and -150 < celsius < 250 else None,
        nucleus=nucleus,
        solvent=_text(entries, "solvent"),
        title=_text(entries, "samplename"),
        stamp=_stamp(entries, path, recycle, row, rows),
        source=name,
        sha256=digest,
        format="processed instrument folder" if axis is not None else "raw instrument folder",
        remarks=tuple(remarks),
    )


def _stamp(entries: Parameters, path: Path, recycle: float | None, row: int, rows: int) -> Stamp:
    started = _moment(_text(entries, "time_run"))
    ended = _moment(_text(entries, "time_complete"))
    written = modified(path)
    if rows == 1:
        length = _length(entries, recycle, 0)
        if started is None and ended is None:
            return Stamp(None, None, length, written, "no date is recorded")
        return Stamp(
            started, ended, length, written, "time_run is the start, time_complete the end (local)"
        )
    lengths = [_length(entries, recycle, i) for i in range(rows)]
    waits = [_number(entries, "pad", i) or 0.0 for i in range(rows)]
    if started is None or None in lengths:
        return Stamp(None, None, lengths[row], written, "no date is recorded")
    before = sum(waits[: row + 1]) + sum(x or 0.0 for x in lengths[:row])
    return Stamp(
        started + timedelta(seconds=before),
        None,
        lengths[row],
        written,
        "the start is time_run plus the waits (pad) and lengths of the rows before",
    )


def _length(entries: Parameters, recycle: float | None, row: int) -> float | None:
    scans = _number(entries, "nt", row)
    if recycle is None or scans is None:
        return None
    # Steady-state scans: before the first row, or before every one where negative.
    dummy = _number(entries, "ss") or 0.0
    return recycle * (scans + (abs(dummy) if dummy < 0 or row == 0 else 0.0))


def _moment(text: str) -> datetime | None:
    for form in ("%Y%m%dT%H%M%S", "%Y-%m-%dT%H:%M:%S"):
        try:
            return datetime.strptime(text.strip(), form)
        except ValueError:
            continue
    return None
