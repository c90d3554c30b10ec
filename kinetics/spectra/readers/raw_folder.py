"""Raw instrument folders with `acqus` and `fid`, through nmrglue.

The library does not check what it is given: sizes and the end of the parameter file are checked
here first.
"""

from __future__ import annotations

import hashlib
import re
from datetime import UTC, datetime
from itertools import takewhile
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from kinetics.errors import NotYetError, UnreadableError
from kinetics.remarks import Remark
from kinetics.spectra.model import Raw, Stamp

if TYPE_CHECKING:
    from kinetics.spectra.arrival import FileLayer, Source

_MOST_PARAMETER_BYTES = 4 << 20
_MOST_POINTS = 1 << 24
_ENTRY = re.compile(r"^##\$(\w+)=\s*(.*)$", re.M)


def completeness(root: Path, source: Source, files: FileLayer) -> str | None:
    """Return what is still missing: files, the end mark of `acqus`, or declared points."""
    facts = {f.name.rpartition("/")[2]: f for f in source.files}
    if "acqus" not in facts:
        return "the parameter file acqus is not there yet"
    if "fid" not in facts:
        return "no data yet (a queued or running experiment)"
    size = facts["acqus"].size
    if size > _MOST_PARAMETER_BYTES:
        return None  # not a parameter file: reading will say so
    text = files.head(root / facts["acqus"].name, size).decode("latin-1")
    if not text.rstrip().endswith("##END="):
        return "the parameter file acqus is not written to its end"
    declared = _declared_bytes(_entries(text))
    present = facts["fid"].size
    if declared is not None and present < declared:
        return f"{present} of {declared} bytes of data are there"
    return None


def _entries(text: str) -> dict[str, str]:
    return {key: value.strip().strip("<>") for key, value in _ENTRY.findall(text)}


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
    if acqus.stat().st_size > _MOST_PARAMETER_BYTES:
        raise UnreadableError("the parameter file acqus is far too large to be one")
    text = acqus.read_bytes().decode("latin-1")
    entries = _entries(text)
    points = _checked(text, entries, fid.stat().st_size)
    parameters = ng.bruker.read_jcamp(str(acqus))
    _, data = ng.bruker.read_binary(
        str(fid),
        shape=(points,),
        cplex=True,
        big=entries.get("BYTORDA", "0").strip() == "1",
        isfloat=entries.get("DTYPA", "0").strip() == "2",
    )
    if data.shape != (points,):
        raise UnreadableError(f"{data.size} of {points} declared points could be read")
    return (_raw(source, fid, text, parameters, np.asarray(data)),)


def _checked(text: str, entries: dict[str, str], size: int) -> int:
    """Check what the parameter file declares; return the number of complex points."""
    if not text.rstrip().endswith("##END="):
        raise NotYetError("the parameter file acqus is not written to its end")
    _well_formed(text)
    missing = [k for k in ("TD", "SW_h", "SFO1", "BF1") if k not in entries]
    if missing:
        raise UnreadableError(f"the parameter file acqus has no entry {missing[0]}")
    declared = _declared_bytes(entries)
    if declared is None or not 128 <= int(entries["TD"]) <= 2 * _MOST_POINTS:
        raise UnreadableError(f"the declared number of points ({entries['TD']}) makes no sense")
    if size < declared:
        raise NotYetError(f"{size} of {declared} bytes of data are there")
    if size > declared + 4096:
        raise UnreadableError(
            f"the data file holds {size} bytes, {declared} are declared: "
            "this looks like several FIDs in one file, or two dimensions"
        )
    if entries.get("PARMODE", "0") not in ("0", ""):
        raise UnreadableError("the folder holds a spectrum of two or more dimensions")
    return int(entries["TD"]) // 2


def _well_formed(text: str) -> None:
    """Refuse what would set the library's parser looking for an end that never comes."""
    lines = text.splitlines()
    for place, line in enumerate(lines):
        key, _, value = line.partition("=")
        value = value.strip()
        if not key.startswith("##"):
            continue
        body = [value, *takewhile(lambda row: not row.startswith(("##", "$$")), lines[place + 1 :])]
        if value.startswith("<") and not any(">" in row for row in body):
            raise UnreadableError(f"the parameter file acqus is damaged at {key[2:40]}: open text")
        array = re.match(r"\(0\.\.(\d+)\)(.*)", value)
        if array is not None:
            items = " ".join([array.group(2), *body[1:]]).split()
            quoted = sum(item.startswith("<") for item in items)
            if max(len(items), quoted) < int(array.group(1)) + 1:
                raise UnreadableError(
                    f"the parameter file acqus is damaged at {key[2:40]}: "
                    f"{len(items)} of {int(array.group(1)) + 1} values"
                )


def _raw(source: Source, fid: Path, text: str, p: dict[str, Any], data: Any) -> Raw:
    nucleus = str(p.get("NUC1", ""))
    if nucleus not in ("1H", "off", ""):
        raise UnreadableError(f"the spectrum is of {nucleus}, not of 1H")
    base, observe = float(p["BF1"]), float(p["SFO1"])
    width = float(p["SW_h"])
    if not (base > 0 and width > 0 and np.isfinite([base, observe, width]).all()):
        raise UnreadableError("spectrometer frequency or spectral width make no sense")
    scans = max(int(p.get("NS", 1)), 1)
    # Stored integers stand for value · 2^NC.
    values = np.asarray(data * 2.0 ** float(p.get("NC", 0)), np.complex64)
    digest = hashlib.sha256(text.encode("latin-1"))
    digest.update(fid.read_bytes())
    recycle = _recycle_s(p, int(p["TD"]), width)
    return Raw(
        data=values,
        domain="time",
        frequency_mhz=base,
        spectral_width_hz=width,
        carrier_ppm=(observe - base) / base * 1e6,
        axis=None,
        group_delay=_group_delay(p),
        recorded_phase=None,
        scans=scans,
        recycle_s=recycle,
        flip_angle_deg=None,
        temperature_k=float(p["TE"]) if float(p.get("TE", 0)) > 100 else None,
        nucleus=nucleus,
        solvent=str(p.get("SOLVENT", "")),
        title="",
        stamp=_stamp(p, fid, recycle, scans),
        source=source.name,
        sha256=digest.hexdigest(),
        format="raw instrument folder",
        remarks=clipped(values),
    )


def _group_delay(p: dict[str, Any]) -> float:
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


def _recycle_s(p: dict[str, Any], td: int, width: float) -> float | None:
    acquisition = td / 2 / width
    delays = p.get("D")
    if isinstance(delays, list) and len(delays) > 1:
        return acquisition + float(delays[1])
    return None


def _stamp(p: dict[str, Any], fid: Path, recycle: float | None, scans: int) -> Stamp:
    modified = datetime.fromtimestamp(fid.stat().st_mtime, UTC)
    duration = None if recycle is None else recycle * (scans + int(p.get("DS", 0)))
    end = _moment(p.get("DATE"))
    start = _moment(p.get("DATE_START"))
    if start is not None and end is not None and start <= end:
        return Stamp(start, end, None, modified, "DATE_START is the start, DATE the end (UTC)")
    if end is not None:
        return Stamp(None, end, duration, modified, "DATE is the end of the acquisition (UTC)")
    return Stamp(None, None, duration, modified, "no date is recorded")


def _moment(value: Any) -> datetime | None:
    try:
        seconds = float(value)
        return datetime.fromtimestamp(seconds, UTC) if seconds > 86400 else None
    except (TypeError, ValueError, OSError, OverflowError):
        return None


def clipped(values: Any) -> tuple[Remark, ...]:
    """Remark on a receiver that was driven into its limit: flat tops at the largest value."""
    parts = np.concatenate((values.real, values.imag))
    top = np.abs(parts).max()
    # An FID reaches its largest value once; a clipped one stays there.
    if top > 0 and np.count_nonzero(np.abs(parts) >= 0.9999 * top) > 8:
        return (
            Remark(
                "receiver-clipped",
                "The FID stays at its largest value for several points: the receiver clipped.",
                "Line shapes and integrals are distorted.",
                "Lower the receiver gain or the pulse angle.",
                doubtful=True,
            ),
        )
    return ()
