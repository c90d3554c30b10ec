"""Processed data of raw instrument folders (`procs` and `1r`), where the FID is not there."""

from __future__ import annotations

import hashlib
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from kinetics.errors import NotYetError, UnreadableError
from kinetics.spectra.model import Axis, Raw, Stamp
from kinetics.spectra.readers.common import (
    EMPTY_END,
    EMPTY_END_BYTES,
    MOST_PARAMETER_BYTES,
    checked_finite,
    checked_nucleus,
    checked_points,
    checked_scale,
    modified,
    number,
)
from kinetics.spectra.readers.parameters import (
    is_whole,
    parameter_entries,
    parameters,
    well_formed,
)
from kinetics.spectra.readers.raw_folder import recycle_s, stamp_of

if TYPE_CHECKING:
    from kinetics.spectra.arrival import FileLayer, Source


def _paths(source: Source) -> dict[str, str]:
    return {f.name.rpartition("/")[2]: f.name for f in source.files}


def completeness(root: Path, source: Source, files: FileLayer) -> str | None:
    """Return what is still missing: the end of a parameter file, or declared points."""
    facts = {f.name.rpartition("/")[2]: f for f in source.files}
    for name in ("acqus", "procs"):
        if name not in facts or facts[name].size > MOST_PARAMETER_BYTES:
            continue
        text = files.head(root / facts[name].name, facts[name].size).decode("latin-1")
        if not is_whole(text):
            return f"the parameter file {name} is not written to its end"
        declared = number(parameter_entries(text), "SI") if name == "procs" else None
        width = 8 if parameter_entries(text).get("DTYPP") == "2" else 4
        if declared is not None and facts["1r"].size < declared * width:
            return f"{facts['1r'].size} of {declared * width:g} bytes of the spectrum are there"
    if "1r" in facts and not any(files.tail(root / facts["1r"].name, EMPTY_END_BYTES)):
        return EMPTY_END
    return None


def read(root: Path, source: Source) -> tuple[Raw, ...]:
    """Read the spectrum as the instrument's own processing left it."""
    paths = _paths(source)
    if "procs" not in paths or "1r" not in paths:
        raise NotYetError("no processed data yet")
    texts = {}
    for name in ("procs", "acqus"):
        if name not in paths:
            continue
        path = root / paths[name]
        if path.stat().st_size > MOST_PARAMETER_BYTES:
            raise UnreadableError(f"the parameter file {name} is far too large to be one")
        texts[name] = path.read_bytes().decode("latin-1")
        if not is_whole(texts[name]):
            raise NotYetError(f"the parameter file {name} is not written to its end")
        well_formed(texts[name])
    p = parameter_entries(texts["procs"])
    q = parameter_entries(texts.get("acqus", ""))
    if q.get("PARMODE", "0") not in ("0", ""):
        raise UnreadableError("the folder holds a spectrum of two or more dimensions")
    nucleus = checked_nucleus(p.get("AXNUC") or q.get("NUC1", ""))
    needed = {key: number(p, key) for key in ("SI", "SF", "SW_p", "OFFSET")}
    for key, value in needed.items():
        if value is None:
            raise UnreadableError(f"the parameter file procs has no entry {key}")
    size = checked_points(int(needed["SI"] or 0))
    frequency, width, first = needed["SF"] or 0.0, needed["SW_p"] or 0.0, needed["OFFSET"] or 0.0
    checked_scale(spectrometer_frequency=frequency, spectral_width=width)
    exponent = number(p, "NC_proc") or 0.0
    if abs(exponent) > 64:
        raise UnreadableError(f"the scaling of the data (NC_proc = {exponent:g}) makes no sense")
    kind = "f8" if p.get("DTYPP") == "2" else "i4"
    order = ">" if p.get("BYTORDP", "0").strip() == "1" else "<"
    path = root / paths["1r"]
    if path.stat().st_size != size * np.dtype(kind).itemsize:
        raise UnreadableError(
            f"the spectrum holds {path.stat().st_size} bytes, "
            f"{size * np.dtype(kind).itemsize} are declared"
        )
    content = path.read_bytes()
    values = (np.frombuffer(content, order + kind) * 2.0**exponent).astype(np.float32)
    checked_finite(values)
    td, scans = number(q, "TD"), max(int(number(q, "NS") or number(p, "NS") or 1), 1)
    sweep, kelvin = number(q, "SW_h"), number(q, "TE")
    recycle = None
    stamp = Stamp(None, None, None, modified(path), "no date is recorded")
    if "acqus" in paths and td and sweep:
        full = parameters(texts["acqus"])
        recycle = recycle_s(full, int(td), sweep)
        stamp = stamp_of(full, path, recycle, scans)
    digest = hashlib.sha256("".join(texts.values()).encode("latin-1") + content)
    return (
        Raw(
            data=values,
            domain="frequency",
            frequency_mhz=frequency,
            spectral_width_hz=0.0,
            carrier_ppm=0.0,
            # SW_p is the width in Hz; OFFSET is the shift of the first point.
            axis=Axis(first, -width / frequency / size, size),
            group_delay=0.0,
            recorded_phase=_phase(p),
            scans=scans,
            recycle_s=recycle,
            flip_angle_deg=None,
            temperature_k=kelvin if kelvin and kelvin > 100 else None,
            nucleus=nucleus,
            solvent=q.get("SOLVENT", ""),
            title="",
            stamp=stamp,
            source=source.name,
            sha256=digest.hexdigest(),
            format="processed instrument folder",
        ),
    )


def _phase(p: dict[str, str]) -> tuple[float, float] | None:
    zero, first = number(p, "PHC0"), number(p, "PHC1")
    return None if zero is None or first is None else (zero, first)
