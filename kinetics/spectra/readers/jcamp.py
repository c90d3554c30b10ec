"""JCAMP-DX: FIDs and spectra, as XYDATA or NTUPLES.

Sources: JCAMP-DX 5.00 for NMR, Davies & Lampen, Appl. Spectrosc. 47 (1993) 1093; 5.01, Lampen et
al., Pure Appl. Chem. 71 (1999) 1549.
"""

from __future__ import annotations

import hashlib
import re
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta, timezone
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from kinetics.errors import NotYetError, UnreadableError
from kinetics.remarks import Remark
from kinetics.spectra.model import Axis, Float64, Raw, Stamp
from kinetics.spectra.readers.asdf import decode
from kinetics.spectra.readers.common import (
    MOST_BYTES,
    carrier_unknown,
    checked_finite,
    checked_nucleus,
    checked_points,
    checked_scale,
    clipped,
)

if TYPE_CHECKING:
    from kinetics.spectra.arrival import FileLayer, Source

_COLUMNS: tuple[str, ...] = ("SYMBOL", "VARDIM", "FACTOR", "FIRST", "LAST", "UNITS")
_LABEL = re.compile(rb"^##([^=\r\n]*)=", re.M)


@dataclass(frozen=True, slots=True)
class Record:
    """One labelled entry: normalised label, first line's value, and the lines that follow."""

    label: str
    value: str
    lines: list[bytes]


def completeness(root: Path, source: Source, files: FileLayer) -> str | None:
    """Return what is still missing: the end mark."""
    fact = source.files[0]
    if fact.size == 0:
        return "the file is empty so far"
    tail = files.tail(root / fact.name, 256).replace(b"\x00", b" ").rstrip()
    last = tail.rpartition(b"\n")[2].rpartition(b"\r")[2].strip()
    if not re.match(rb"##END\s*=", last):
        return "the file has no end mark yet"
    return None


def read(root: Path, source: Source) -> tuple[Raw, ...]:
    """Read the first block that holds NMR data."""
    path = root / source.name
    if path.stat().st_size > MOST_BYTES:
        raise UnreadableError("the file is far too large for one spectrum")
    content = path.read_bytes()
    if not re.search(rb"##END\s*=[^\n]*\s*\Z", content.rstrip(b"\x00 \r\n\t") + b"\n"):
        raise NotYetError("the file has no end mark yet")
    records = parse(content)
    table = _data_table(records)
    modified = datetime.fromtimestamp(path.stat().st_mtime, UTC)
    facts = {r.label: r.value for r in reversed(records)}
    return (_raw(source, facts, table, hashlib.sha256(content).hexdigest(), modified),)


def normal_label(label: str) -> str:
    """Return a label without spaces, dashes, slashes and underlines, in capitals."""
    return re.sub(r"[\s\-/_]", "", label).upper()


def parse(content: bytes) -> list[Record]:
    """Split a file into its labelled entries; comments after ``$$`` are dropped."""
    starts = list(_LABEL.finditer(content))
    out = []
    for match, following in zip(starts, [*starts[1:], None], strict=True):
        end = len(content) if following is None else following.start()
        body = content[match.end() : end]
        if b"$$" in body:
            body = re.sub(rb"\$\$[^\r\n]*", b"", body)
        lines = body.splitlines()
        value = lines[0].decode("latin-1").strip() if lines else ""
        label = normal_label(match.group(1).decode("latin-1"))
        text = value
        if len(lines) > 1 and label not in ("XYDATA", "DATATABLE", "XYPOINTS", "PEAKTABLE"):
            rest = b" ".join(lines[1:]).decode("latin-1").strip()
            text = f"{value} {rest}".strip()
        out.append(Record(label, text, lines[1:]))
    return out


@dataclass(frozen=True, slots=True)
class Table:
    """Decoded data: real and (or None) imaginary ordinates, first and last abscissa, its unit."""

    real: Float64
    imaginary: Float64 | None
    first: float
    last: float
    unit: str
    is_fid: bool


def _data_table(records: list[Record]) -> Table:
    """Return the data of the first block that has any."""
    block: dict[str, Record] = {}
    pages: list[Record] = []
    for record in records:
        if record.label == "TITLE":
            if pages or "XYDATA" in block:
                break
            block = {}
        elif record.label == "DATATABLE":
            pages.append(record)
        elif record.label == "END" and (pages or "XYDATA" in block):
            break
        block.setdefault(record.label, record)
    kind = block["DATATYPE"].value.upper() if "DATATYPE" in block else ""
    if "NMR" not in kind:
        raise UnreadableError(
            f"the file holds {kind.lower() or 'no NMR data'}, not an NMR spectrum"
        )
    is_fid = "FID" in kind
    if pages:
        return _ntuples(block, pages, is_fid)
    if "XYDATA" in block:
        return _xydata(block, is_fid)
    raise UnreadableError("the file holds no table of data points that can be read here")


def _number(block: dict[str, Record], label: str) -> float | None:
    try:
        return float(block[label].value.split(",")[0])
    except (KeyError, ValueError):
        return None


def _points(declared: float | None) -> int:
    if declared is None or not np.isfinite(declared):
        raise UnreadableError("the declared number of points makes no sense")
    return checked_points(int(declared))


def _xydata(block: dict[str, Record], is_fid: bool) -> Table:
    record = block["XYDATA"]
    if "X++" not in record.value.replace(" ", "").upper():
        raise UnreadableError(f"the data form {record.value[:40]!r} is not read here")
    count = _points(_number(block, "NPOINTS"))
    ordinates, _ = decode(record.lines, count)
    _same_count(ordinates.size, count)
    factor = _number(block, "YFACTOR") or 1.0
    first, last = _number(block, "FIRSTX"), _number(block, "LASTX")
    if first is None or last is None:
        raise UnreadableError("the file does not say where its axis begins and ends")
    unit = block["XUNITS"].value.upper() if "XUNITS" in block else ""
    return Table(ordinates * factor, None, first, last, unit, is_fid)


def _ntuples(block: dict[str, Record], pages: list[Record], is_fid: bool) -> Table:
    columns: dict[str, list[str]] = {
        key: [part.strip() for part in block[key].value.split(",")]
        for key in _COLUMNS
        if key in block
    }
    symbols = columns.get("SYMBOL", [])
    if "X" not in symbols or "R" not in symbols:
        raise UnreadableError("the table of variables lacks X or R")

    def of(key: str, symbol: str) -> str:
        values = columns.get(key, [])
        place = symbols.index(symbol)
        if place >= len(values):
            raise UnreadableError(f"the table of variables has no {key} for {symbol}")
        return values[place]

    try:
        count = _points(float(of("VARDIM", "R")))
        data: dict[str, Float64] = {}
        for page in pages:
            form = re.search(r"\+\+\(([A-Z])", page.value.replace(" ", "").upper())
            if form is None:
                raise UnreadableError(f"the data form {page.value[:40]!r} is not read here")
            symbol = form.group(1)
            if symbol in data:
                raise UnreadableError("the file holds several pages of the same kind (a series)")
            ordinates, _ = decode(page.lines, count)
            _same_count(ordinates.size, count)
            data[symbol] = ordinates * float(of("FACTOR", symbol))
        first, last = float(of("FIRST", "X")), float(of("LAST", "X"))
    except ValueError:
        raise UnreadableError("the table of variables holds something that is no number") from None
    if "R" not in data:
        raise UnreadableError("the file lacks the real part")
    if is_fid and "I" not in data:
        raise UnreadableError("the file lacks the imaginary part of the FID")
    return Table(data["R"], data.get("I"), first, last, of("UNITS", "X").upper(), is_fid)


def _same_count(found: int, declared: int) -> None:
    if found != declared:
        raise UnreadableError(f"{found} of {declared} declared points are there")


def _raw(
    source: Source, facts: dict[str, str], table: Table, sha256: str, modified: datetime
) -> Raw:
    nucleus = checked_nucleus(facts.get(".OBSERVENUCLEUS", ""))
    observe = _fact(facts, ".OBSERVEFREQUENCY") or _fact(facts, "$SFO1")
    base = _fact(facts, "$BF1") or observe
    if base is None or observe is None:
        raise UnreadableError("the file does not say the spectrometer frequency")
    checked_scale(base_frequency=base, spectrometer_frequency=observe)
    remarks: list[Remark] = []
    axis, width, carrier = None, 0.0, 0.0
    values = table.real if table.imaginary is None else table.real + 1j * table.imaginary
    checked_finite(values)
    if table.is_fid:
        span = abs(table.last - table.first)
        if not span > 0:
            raise UnreadableError("the time axis of the FID has no length")
        width = _fact(facts, "$SWH") or (table.real.size - 1) / span
        carrier, known = _carrier(facts, base, observe)
        if not known:
            remarks.append(carrier_unknown())
        remarks.extend(clipped(values))
    else:
        axis, values = _axis(table, facts, base, values)
    scans = max(int(_fact(facts, ".AVERAGES") or _fact(facts, "$NS") or 1), 1)
    kelvin = _fact(facts, "$TE")
    return Raw(
        data=values.astype(np.complex64)
        if np.iscomplexobj(values)
        else np.asarray(values, np.float32),
        domain="time" if table.is_fid else "frequency",
        frequency_mhz=base,
        spectral_width_hz=width,
        carrier_ppm=carrier,
        axis=axis,
        group_delay=max(_fact(facts, "$GRPDLY") or 0.0, 0.0),
        recorded_phase=None,
        scans=scans,
        recycle_s=_fact(facts, "$RECYCLES"),
        flip_angle_deg=None,
        temperature_k=kelvin if kelvin and kelvin > 100 else None,
        nucleus=nucleus,
        solvent=facts.get(".SOLVENTNAME", ""),
        title=facts.get("TITLE", ""),
        stamp=_stamp(facts, table, scans, modified),
        source=source.name,
        sha256=sha256,
        format="JCAMP-DX FID" if table.is_fid else "JCAMP-DX spectrum",
        remarks=tuple(remarks),
    )


def _fact(facts: dict[str, str], label: str) -> float | None:
    try:
        value = float(facts[label].strip("<> "))
    except (KeyError, ValueError):
        return None
    return value if np.isfinite(value) else None


def _carrier(facts: dict[str, str], base: float, observe: float) -> tuple[float, bool]:
    """Shift of the centre of a FID's width, and whether the file says it."""
    offset = _fact(facts, "$O1")
    if offset is not None:
        return offset / base, True
    if "$BF1" in facts:
        return (observe - base) / base * 1e6, True
    return 0.0, False


def _axis(
    table: Table, facts: dict[str, str], base: float, values: Float64
) -> tuple[Axis, Float64]:
    """Axis of a spectrum in ppm, descending; Hz are divided by the frequency."""
    unit = table.unit.strip()
    if unit not in ("PPM", "HZ"):
        raise UnreadableError(f"the axis is in {unit.lower() or 'an unknown unit'}, not Hz or ppm")
    scale = 1.0 if unit == "PPM" else 1.0 / base
    first, last, size = table.first * scale, table.last * scale, table.real.size
    shift = _shift_reference(facts)
    if shift is not None and 1 <= shift[0] <= size:
        # (point, ppm): what the file says stands at that point, counted from 1.
        at = first + (last - first) * (shift[0] - 1) / (size - 1)
        first, last = first + shift[1] - at, last + shift[1] - at
    if first < last:
        first, last, values = last, first, values[::-1]
    return Axis(first, (last - first) / (size - 1), size), np.ascontiguousarray(values)


def _shift_reference(facts: dict[str, str]) -> tuple[float, float] | None:
    text = facts.get(".SHIFTREFERENCE", "").strip("() ")
    parts = [part.strip() for part in text.split(",")]
    try:
        return float(parts[2]), float(parts[3])
    except (IndexError, ValueError):
        return None


def _stamp(facts: dict[str, str], table: Table, scans: int, modified: datetime) -> Stamp:
    start_s, end_s = _fact(facts, "$DATESTART"), _fact(facts, "$DATE")
    if start_s and end_s and 86400 < start_s <= end_s:
        return Stamp(
            datetime.fromtimestamp(start_s, UTC),
            datetime.fromtimestamp(end_s, UTC),
            None,
            modified,
            "$DATE_START is the start, $DATE the end of the acquisition (UTC)",
        )
    recycle = _fact(facts, "$RECYCLES")
    shot = abs(table.last - table.first) if table.is_fid else _fact(facts, ".ACQUISITIONTIME")
    one = recycle or shot
    duration = None if one is None else one * scans
    if end_s and end_s > 86400:
        end = datetime.fromtimestamp(end_s, UTC)
        return Stamp(None, end, duration, modified, "$DATE is the end of the acquisition (UTC)")
    long_date = _long_date(facts.get("LONGDATE", ""))
    if long_date is not None:
        return Stamp(long_date, None, duration, modified, "LONG DATE is the start")
    short = _short_date(facts.get("DATE", ""), facts.get("TIME", ""))
    if short is not None:
        return Stamp(short, None, duration, modified, "DATE and TIME are the start")
    return Stamp(None, None, duration, modified, "no date is recorded")


_LONG = re.compile(
    r"(\d{4})[/-](\d\d)[/-](\d\d)(?:[ T]+(\d\d):(\d\d)(?::(\d\d)(\.\d+)?)?\s*([-+]\d\d:?\d\d)?)?"
)


def _long_date(text: str) -> datetime | None:
    """Read ``YYYY/MM/DD HH:MM:SS.SSSS ±UUUU``; without a time of day it is of no use here."""
    match = _LONG.search(text)
    if match is None or match.group(4) is None:
        return None
    year, month, day, hour, minute = (int(match.group(i)) for i in range(1, 6))
    second = int(match.group(6) or 0)
    micro = round(float(match.group(7) or 0) * 1e6)
    zone = None
    if match.group(8):
        digits = match.group(8).replace(":", "")
        offset = timedelta(hours=int(digits[1:3]), minutes=int(digits[3:5]))
        zone = timezone(-offset if digits[0] == "-" else offset)
    try:
        return datetime(year, month, day, hour, minute, second, min(micro, 999999), zone)
    except ValueError:
        return None


def _short_date(date: str, clock: str) -> datetime | None:
    """Read the two-digit ``YY/MM/DD`` and ``HH:MM:SS`` of JCAMP-DX 4.24."""
    for form in ("%y/%m/%d %H:%M:%S", "%Y/%m/%d %H:%M:%S", "%d/%m/%Y %H:%M:%S"):
        try:
            return datetime.strptime(f"{date.strip()} {clock.strip()}", form)
        except ValueError:
            continue
    return None
