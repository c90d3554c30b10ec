"""Raw instrument folders whose file `ser` holds a whole series of FIDs, one a row.

Rows are padded to blocks of 1,024 bytes and filled one after the other; those to come are zero.
A row is therefore identified by its own bytes: the parameter file changes when the series ends.
"""

from __future__ import annotations

import hashlib
from datetime import timedelta
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from kinetics.errors import NotYetError, UnreadableError
from kinetics.remarks import Remark
from kinetics.spectra.model import Raw, Stamp
from kinetics.spectra.readers.common import (
    MOST_BYTES,
    MOST_PARAMETER_BYTES,
    MOST_ROWS,
    checked_nucleus,
    checked_points,
    checked_scale,
    clipped,
    holes,
    modified,
    moment,
    rows_present,
)
from kinetics.spectra.readers.parameters import (
    is_whole,
    parameter_entries,
    parameters,
    well_formed,
)
from kinetics.spectra.readers.raw_folder import (
    exponent_of,
    group_delay,
    recycle_s,
)

if TYPE_CHECKING:
    from kinetics.spectra.arrival import FileLayer, Source

_ROW_BLOCK = 1024


def completeness(root: Path, source: Source, files: FileLayer) -> str | None:
    """Return what is still missing: parameter files to their end, at least one whole row."""
    facts = {f.name.rpartition("/")[2]: f for f in source.files}
    texts = {}
    for name in ("acqus", "acqu2s"):
        if name not in facts:
            return f"the parameter file {name} is not there yet"
        if facts[name].size > MOST_PARAMETER_BYTES:
            return None  # not a parameter file: reading will say so
        texts[name] = files.head(root / facts[name].name, facts[name].size).decode("latin-1")
        if not is_whole(texts[name]):
            return f"the parameter file {name} is not written to its end"
    try:
        row = _row_bytes(parameter_entries(texts["acqus"]))
    except UnreadableError:
        return None
    if facts["ser"].size < row:
        return f"{facts['ser'].size} of {row} bytes of the first row are there"
    return None


def _row_bytes(entries: dict[str, str]) -> int:
    try:
        numbers = int(entries["TD"])
    except (KeyError, ValueError):
        raise UnreadableError(
            "the parameter file acqus does not say the number of points"
        ) from None
    checked_points(numbers // 2)
    size = numbers * (8 if entries.get("DTYPA") == "2" else 4)
    return -(-size // _ROW_BLOCK) * _ROW_BLOCK


def read(root: Path, source: Source) -> tuple[Raw, ...]:
    """Read the rows that have been acquired so far."""
    folder = root / source.name
    texts = {}
    for name in ("acqus", "acqu2s"):
        if not (folder / name).is_file():
            raise NotYetError(f"the parameter file {name} is not there yet")
        if (folder / name).stat().st_size > MOST_PARAMETER_BYTES:
            raise UnreadableError(f"the parameter file {name} is far too large to be one")
        texts[name] = (folder / name).read_bytes().decode("latin-1")
        if not is_whole(texts[name]):
            raise NotYetError(f"the parameter file {name} is not written to its end")
        well_formed(texts[name])
    entries, second = parameter_entries(texts["acqus"]), parameter_entries(texts["acqu2s"])
    # A second axis with a width of its own belongs to a two-dimensional spectrum.
    if second.get("NUC1", "off").strip() not in ("off", "", "1H"):
        raise UnreadableError("the folder holds a spectrum of two dimensions, not a series")
    if entries.get("FnMODE", second.get("FnMODE", "0")).strip() not in ("0", "1", ""):
        raise UnreadableError("the folder holds a spectrum of two dimensions, not a series")
    row_bytes = _row_bytes(entries)
    ser = folder / "ser"
    content = _content(ser, row_bytes)
    numbers = int(entries["TD"])
    kind = "f8" if entries.get("DTYPA") == "2" else "i4"
    order = ">" if entries.get("BYTORDA", "0").strip() == "1" else "<"
    blocks = np.frombuffer(content, np.uint8).reshape(-1, row_bytes)
    size = numbers * np.dtype(kind).itemsize
    facts = parameters(texts["acqus"])
    scale = 2.0 ** exponent_of(facts)
    stored = np.ascontiguousarray(blocks[:, :size]).view(order + kind) * scale
    rows = (stored[:, 0 : numbers - 1 : 2] + 1j * stored[:, 1::2]).astype(np.complex64)
    declared = _declared_rows(second)
    there = rows_present(rows)
    if there == 0:
        raise NotYetError("no row of the series has been acquired yet")
    if there > declared:
        raise UnreadableError(f"{there} rows are there, {declared} are declared")
    return tuple(
        _raw(source, ser, facts, rows[i], i, blocks[i].tobytes(), declared, _waits(folder))
        for i in range(there)
        if rows[i].any()
    )


def _content(path: Path, row_bytes: int) -> bytes:
    size = path.stat().st_size
    if size > MOST_BYTES:
        raise UnreadableError("the series is too large to be read at once")
    content = path.read_bytes()[: size // row_bytes * row_bytes]
    if not content:
        raise NotYetError("the first row is not complete yet")
    return content


def _declared_rows(second: dict[str, str]) -> int:
    try:
        rows = int(second["TD"])
    except (KeyError, ValueError):
        raise UnreadableError("acqu2s does not say the number of rows") from None
    if not 1 <= rows <= MOST_ROWS:
        raise UnreadableError(f"the declared number of rows ({rows}) makes no sense")
    return rows


def _waits(folder: Path) -> list[float]:
    """Waits before the rows in s, from the list of variable delays; empty where there is none."""
    path = folder / "vdlist"
    if not path.is_file() or path.stat().st_size > MOST_PARAMETER_BYTES:
        return []
    units = {"s": 1.0, "m": 1e-3, "u": 1e-6, "n": 1e-9}
    out = []
    for word in path.read_bytes().decode("latin-1").split():
        unit = units.get(word[-1].lower(), 0.0)
        try:
            out.append(float(word[:-1]) * unit if unit else float(word))
        except ValueError:
            return []
    return out


def _raw(
    source: Source,
    ser: Path,
    p: dict[str, Any],
    values: np.ndarray,
    row: int,
    content: bytes,
    declared: int,
    waits: list[float],
) -> Raw:
    nucleus = checked_nucleus(str(p.get("NUC1", "")))
    base, observe, width = (float(p.get(key, 0.0)) for key in ("BF1", "SFO1", "SW_h"))
    checked_scale(base_frequency=base, spectrometer_frequency=observe, spectral_width=width)
    recycle = recycle_s(p, int(p["TD"]), width)
    scans = max(int(p.get("NS", 1)), 1)
    stamp, remarks = _stamp(p, ser, recycle, scans, row, declared, waits)
    return Raw(
        data=values,
        domain="time",
        frequency_mhz=base,
        spectral_width_hz=width,
        carrier_ppm=(observe - base) / base * 1e6,
        axis=None,
        group_delay=group_delay(p),
        recorded_phase=None,
        scans=scans,
        recycle_s=recycle,
        flip_angle_deg=None,
        temperature_k=float(p["TE"]) if float(p.get("TE", 0)) > 100 else None,
        nucleus=nucleus,
        solvent=str(p.get("SOLVENT", "")),
        title="",
        stamp=stamp,
        source=f"{source.name}#{row + 1}",
        sha256=hashlib.sha256(content + b"#%d" % (row + 1)).hexdigest(),
        format="raw instrument folder, series",
        remarks=(*remarks, *clipped(values), *holes(values)),
    )


def _stamp(
    p: dict[str, Any],
    ser: Path,
    recycle: float | None,
    scans: int,
    row: int,
    declared: int,
    waits: list[float],
) -> tuple[Stamp, tuple[Remark, ...]]:
    """Time of a row: from the start, by length and wait of each row before it."""
    length = None if recycle is None else recycle * scans
    dummy = 0.0 if recycle is None else recycle * int(p.get("DS", 0))
    start, end = moment(p.get("DATE_START")), moment(p.get("DATE"))
    if start is None and end is None:
        return Stamp(None, None, length, modified(ser), "no date is recorded"), ()
    if length is None:
        if start is None or end is None or end <= start:
            return Stamp(None, None, None, modified(ser), "no length of a row is recorded"), ()
        each = (end - start) / declared
        return (
            Stamp(start + row * each, None, each.total_seconds(), modified(ser),
                  "the rows are taken as evenly spread between DATE_START and DATE (UTC)"),
            (),
        )  # fmt: skip
    pauses = [waits[i % len(waits)] for i in range(declared)] if waits else [0.0] * declared
    total = dummy + declared * length + sum(pauses)
    if start is None and end is not None:
        start = end - timedelta(seconds=total)
    assert start is not None
    before = dummy + row * length + sum(pauses[: row + 1])
    stamp = Stamp(
        start + timedelta(seconds=before),
        None,
        length,
        modified(ser),
        "the start of the series (UTC) plus waits and lengths of the rows before",
    )
    return stamp, _disagreement(start, end, total)


def _disagreement(start: Any, end: Any, total: float) -> tuple[Remark, ...]:
    """Remark where the rows by their lengths do not fill the time from start to end."""
    if end is None or end <= start:
        return ()
    recorded = (end - start).total_seconds()
    if abs(recorded - total) <= max(0.02 * recorded, 5.0):
        return ()
    return (
        Remark(
            "row-times-disagree",
            f"The rows' lengths and waits add up to {total:.0f} s, the series took "
            f"{recorded:.0f} s by its own start and end.",
            "Something in the pulse program waits that the parameters read here do not show; "
            "times of rows, and with them k, are off.",
            'Give [time] source = "interval" and interval_s.',
            doubtful=True,
        ),
    )
