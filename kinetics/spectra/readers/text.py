"""Two columns of text: ppm and intensity.

Comma, semicolon, tab or spaces between the columns; a decimal comma is understood where the
columns are not divided by commas. Lines before the numbers are a header. Comment lines
``# key = value`` may say what a bare table cannot: `acquired` (start, ISO 8601), `acquisition_s`,
`frequency_mhz`, `scans`, `temperature_c`, `title`.
"""

from __future__ import annotations

import hashlib
import io
import re
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from kinetics.errors import UnreadableError
from kinetics.remarks import Remark
from kinetics.spectra.model import Axis, Float64, Raw, Stamp
from kinetics.spectra.readers.common import MOST_BYTES, checked_points

if TYPE_CHECKING:
    from kinetics.spectra.arrival import FileLayer, Source

_COMMENT = re.compile(r"^[#%!]\s*([A-Za-z_]+)\s*[=:]\s*(.*?)\s*$", re.M)
_HEADER_LINES = 200
# Spacing of the ppm column may differ by rounding, as part of a step.
_UNEVEN = 0.05


def completeness(root: Path, source: Source, files: FileLayer) -> str | None:
    """A table has no end mark: it is complete once it stands still and ends with a line."""
    fact = source.files[0]
    if fact.size == 0:
        return "the file is empty so far"
    tail = files.tail(root / fact.name, 1)
    return None if tail in (b"\n", b"\r") else "the last line is not finished"


def read(root: Path, source: Source) -> tuple[Raw, ...]:
    """Read the table as one spectrum."""
    path = root / source.name
    if path.stat().st_size > MOST_BYTES:
        raise UnreadableError("the file is far too large for one spectrum")
    content = path.read_bytes()
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError:
        text = content.decode("latin-1")
    facts = {key.lower(): value for key, value in _COMMENT.findall(text[:65536])}
    axis, values = _spectrum(*_columns(text))
    frequency = _positive(facts.get("frequency_mhz"))
    celsius = _number(facts.get("temperature_c"))
    remarks: tuple[Remark, ...] = ()
    if frequency is None:
        remarks = (
            Remark(
                "frequency-unknown",
                "The table does not say the spectrometer frequency.",
                "Coupling patterns and line widths in Hz cannot be used; integrals can.",
                "Add a line '# frequency_mhz = 80.0' when exporting.",
            ),
        )
    return (
        Raw(
            data=values.astype(np.float32),
            domain="frequency",
            frequency_mhz=frequency,
            spectral_width_hz=0.0,
            carrier_ppm=0.0,
            axis=axis,
            group_delay=0.0,
            recorded_phase=None,
            scans=max(int(_number(facts.get("scans")) or 1), 1),
            recycle_s=None,
            flip_angle_deg=None,
            temperature_k=None if celsius is None else celsius + 273.15,
            nucleus="",
            solvent="",
            title=facts.get("title", ""),
            stamp=_stamp(facts, datetime.fromtimestamp(path.stat().st_mtime, UTC)),
            source=source.name,
            sha256=hashlib.sha256(content).hexdigest(),
            format="two-column text",
            remarks=remarks,
        ),
    )


def _number(text: str | None) -> float | None:
    try:
        value = float((text or "").replace(",", "."))
    except ValueError:
        return None
    return value if np.isfinite(value) else None


def _positive(text: str | None) -> float | None:
    value = _number(text)
    return value if value is not None and value > 0 else None


def _stamp(facts: dict[str, str], modified: datetime) -> Stamp:
    duration = _positive(facts.get("acquisition_s"))
    try:
        start = datetime.fromisoformat(facts.get("acquired", ""))
    except ValueError:
        return Stamp(None, None, duration, modified, "no date is recorded")
    return Stamp(start, None, duration, modified, "'acquired' is the start")


def _columns(text: str) -> tuple[Float64, Float64]:
    lines = text.splitlines()
    first = _first_row(lines)
    sample = lines[first]
    comma_divides = not re.search(r"[;\t]", sample) and sample.count(",") in (1,)
    table = "\n".join(lines[first:])
    if comma_divides and not re.search(r"\d\s+[-+\d]", sample):
        table = table.replace(",", " ")
    else:
        table = table.replace(";", " ").replace("\t", " ")
        table = re.sub(r",(?=\s|$)", " ", table, flags=re.M).replace(",", ".")
    try:
        rows = np.loadtxt(io.StringIO(table), comments=("#", "%", "!"), ndmin=2)
    except ValueError as why:
        raise UnreadableError(f"the table is not two columns of numbers ({why})") from None
    if rows.shape[1] < 2:
        raise UnreadableError("the table has one column; expected ppm and intensity")
    checked_points(rows.shape[0])
    return rows[:, 0], rows[:, 1]


def _first_row(lines: list[str]) -> int:
    row = re.compile(r"^\s*[-+]?[\d.,]+(?:[eE][-+]?\d+)?\s*[\s,;]\s*[-+]?[\d.]")
    for place, line in enumerate(lines[:_HEADER_LINES]):
        if row.match(line):
            return place
    raise UnreadableError("the file holds no two columns of numbers")


def _spectrum(ppm: Float64, values: Float64) -> tuple[Axis, Float64]:
    if not (np.isfinite(ppm).all() and np.isfinite(values).all()):
        raise UnreadableError("the table holds values that are not numbers")
    if ppm[0] < ppm[-1]:
        ppm, values = ppm[::-1], values[::-1]
    step = (ppm[-1] - ppm[0]) / (ppm.size - 1)
    if not step < 0 or abs(ppm[0]) > 1000 or abs(ppm[-1]) > 1000:
        raise UnreadableError("the first column is not an axis in ppm")
    even = ppm[0] + step * np.arange(ppm.size)
    if np.max(np.abs(ppm - even)) > _UNEVEN * abs(step) + 1e-3:
        if np.any(np.diff(ppm) >= 0):
            raise UnreadableError("the ppm column does not run in one direction")
        values = np.interp(even[::-1], ppm[::-1], values[::-1])[::-1]
    return Axis(float(ppm[0]), float(step), ppm.size), values
