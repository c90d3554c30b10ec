"""Raw instrument folders with `acqus` and `fid`, through nmrglue.

The library does not check what it is given: sizes and the end of the parameter file are checked
here first.
"""

from __future__ import annotations

import hashlib
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from kinetics.errors import NotYetError, UnreadableError
from kinetics.spectra.model import Raw, Stamp
from kinetics.spectra.readers.common import (
    EMPTY_END,
    EMPTY_END_BYTES,
    MOST_PARAMETER_BYTES,
    checked_finite,
    checked_nucleus,
    checked_points,
    checked_scale,
    clipped,
    holes,
    modified,
    moment,
)
from kinetics.spectra.readers.parameters import (
    is_whole,
    parameter_entries,
    parameters,
    well_formed,
)

if TYPE_CHECKING:
    from kinetics.spectra.arrival import FileLayer, Source


def completeness(root: Path, source: Source, files: FileLayer) -> str | None:
    """Return what is still missing: files, the end mark of `acqus`, or declared points."""
    facts = {f.name.rpartition("/")[2]: f for f in source.files}
    if "acqus" not in facts:
        return "the parameter file acqus is not there yet"
    if "fid" not in facts:
        return "no data yet (a queued or running experiment)"
    size = facts["acqus"].size
    if size > MOST_PARAMETER_BYTES:
        return None  # not a parameter file: reading will say so
    text = files.head(root / facts["acqus"].name, size).decode("latin-1")
    if not is_whole(text):
        return "the parameter file acqus is not written to its end"
    declared = _declared_bytes(parameter_entries(text))
    present = facts["fid"].size
    if declared is not None and present < declared:
        return f"{present} of {declared} bytes of data are there"
    if present and not any(files.tail(root / facts["fid"].name, EMPTY_END_BYTES)):
        return EMPTY_END
    return None


def _declared_bytes(entries: dict[str, str]) -> int | None:
    try:
        return int(entries["TD"]) * (8 if entries.get("DTYPA") == "2" else 4)
    except (KeyError, ValueError):
        return None


def read(root: Path, source: Source) -> tuple[Raw, ...]:
    """Read the folder as one FID."""
    import nmrglue as ng

    folder = root / source.name
    acqus, fid = folder / "acqus", folder / "fid"
    if not acqus.is_file() or not fid.is_file():
        raise NotYetError("no data yet")
    if acqus.stat().st_size > MOST_PARAMETER_BYTES:
        raise UnreadableError("the parameter file acqus is far too large to be one")
    text = acqus.read_bytes().decode("latin-1")
    entries = parameter_entries(text)
    points = _checked(text, entries, fid.stat().st_size)
    _, data = ng.bruker.read_binary(
        str(fid),
        shape=(points,),
        cplex=True,
        big=entries.get("BYTORDA", "0").strip() == "1",
        isfloat=entries.get("DTYPA", "0").strip() == "2",
    )
    if data.shape != (points,):
        raise UnreadableError(f"{data.size} of {points} declared points could be read")
    return (_raw(source, fid, text, parameters(text), np.asarray(data)),)


def _checked(text: str, entries: dict[str, str], size: int) -> int:
    """Check what the parameter file declares; return the number of complex points."""
    if not is_whole(text):
        raise NotYetError("the parameter file acqus is not written to its end")
    if entries.get("PARMODE", "0") not in ("0", ""):
        raise UnreadableError("the folder holds a spectrum of two or more dimensions")
    well_formed(text)
    missing = [k for k in ("TD", "SW_h", "SFO1", "BF1") if k not in entries]
    if missing:
        raise UnreadableError(f"the parameter file acqus has no entry {missing[0]}")
    declared = _declared_bytes(entries)
    if declared is None:
        raise UnreadableError(f"the declared number of points ({entries['TD']}) makes no sense")
    checked_points(int(entries["TD"]) // 2)
    if size < declared:
        raise NotYetError(f"{size} of {declared} bytes of data are there")
    if size > declared + 4096:
        raise UnreadableError(
            f"the data file holds {size} bytes, {declared} are declared: "
            "this looks like several FIDs in one file, or two dimensions"
        )
    return int(entries["TD"]) // 2


def _raw(source: Source, fid: Path, text: str, p: dict[str, Any], data: Any) -> Raw:
    nucleus = checked_nucleus(str(p.get("NUC1", "")))
    base, observe = float(p["BF1"]), float(p["SFO1"])
    width = float(p["SW_h"])
    checked_scale(base_frequency=base, spectrometer_frequency=observe, spectral_width=width)
    scans = max(int(p.get("NS", 1)), 1)
    # Stored integers stand for value · 2^NC.
    values = np.asarray(data * 2.0 ** exponent_of(p), np.complex64)
    checked_finite(values)
    digest = hashlib.sha256(text.encode("latin-1"))
    digest.update(fid.read_bytes())
    recycle = recycle_s(p, int(p["TD"]), width)
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
        stamp=stamp_of(p, fid, recycle, scans),
        source=source.name,
        sha256=digest.hexdigest(),
        format="raw instrument folder",
        remarks=(*clipped(values), *holes(values)),
    )


def exponent_of(p: dict[str, Any]) -> float:
    exponent = float(p.get("NC", 0))
    if not abs(exponent) <= 64:
        raise UnreadableError(f"the scaling of the data (NC = {exponent:g}) makes no sense")
    return exponent


def group_delay(p: dict[str, Any]) -> float:
    """Return the digital filter's build-up in points.

    Recorded as GRPDLY by recent instruments; otherwise from the table nmrglue carries for
    (DSPFVS, DECIM); none for analogue filters.
    """
    import nmrglue as ng

    recorded = float(p.get("GRPDLY", -1))
    if recorded > 0:
        return recorded
    table = ng.bruker.bruker_dsp_table
    firmware, decimation = int(p.get("DSPFVS", 0)), int(float(p.get("DECIM", 0)))
    return float(table.get(firmware, {}).get(decimation, 0.0))


def recycle_s(p: dict[str, Any], td: int, width: float) -> float | None:
    acquisition = td / 2 / width
    delays = p.get("D")
    if isinstance(delays, list) and len(delays) > 1:
        return acquisition + float(delays[1])
    return None


def stamp_of(p: dict[str, Any], fid: Path, recycle: float | None, scans: int) -> Stamp:
    written = modified(fid)
    duration = None if recycle is None else recycle * (scans + int(p.get("DS", 0)))
    end = moment(p.get("DATE"))
    start = moment(p.get("DATE_START"))
    if start is not None and end is not None and start <= end:
        return Stamp(start, end, None, written, "DATE_START is the start, DATE the end (UTC)")
    if end is not None:
        return Stamp(None, end, duration, written, "DATE is the end of the acquisition (UTC)")
    return Stamp(None, None, duration, written, "no date is recorded")
