"""nmrML: FIDs and spectra in XML, the numbers as base64, mostly packed with zlib.

Source: the open schema of nmrML 1.0 (Schober et al., Anal. Chem. 90 (2018) 649; element names from
memory). A document type or entity declaration is refused before the parser sees it, and unpacking
stops where more comes out than the file declares.
"""

from __future__ import annotations

import base64
import binascii
import hashlib
import re
import zlib
from collections.abc import Iterator
from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING
from xml.etree import ElementTree

import numpy as np

from kinetics.errors import NotYetError, UnreadableError
from kinetics.remarks import Remark
from kinetics.spectra.model import Axis, Raw, Stamp
from kinetics.spectra.readers.common import (
    MOST_BYTES,
    MOST_POINTS,
    carrier_unknown,
    checked_finite,
    checked_nucleus,
    checked_points,
    checked_scale,
    clipped,
    modified,
)

if TYPE_CHECKING:
    from kinetics.spectra.arrival import FileLayer, Source

_END = re.compile(rb"</(?:\w+:)?nmrML\s*>\s*\Z")
_DECLARATION = re.compile(rb"<!(?:DOCTYPE|ENTITY)", re.I)
_HZ = {"hertz": 1.0, "hz": 1.0, "kilohertz": 1e3, "megahertz": 1e6, "mhz": 1e6, "khz": 1e3}
_TYPES = {
    "complex128": "<c16",
    "complex64": "<c8",
    "float64": "<f8",
    "double": "<f8",
    "float32": "<f4",
    "integer32": "<i4",
    "int32": "<i4",
    "complex64int": "<i4",
    "integer64": "<i8",
}


def completeness(root: Path, source: Source, files: FileLayer) -> str | None:
    """Return what is still missing: the closing tag."""
    fact = source.files[0]
    tail = files.tail(root / fact.name, 256).rstrip(b"\x00 \r\n\t")
    return None if _END.search(tail) else "the closing tag of the file is not there yet"


def read(root: Path, source: Source) -> tuple[Raw, ...]:
    """Read the FID; where there is none, the first spectrum."""
    path = root / source.name
    if path.stat().st_size > MOST_BYTES:
        raise UnreadableError("the file is far too large for one spectrum")
    content = path.read_bytes()
    if not _END.search(content.rstrip(b"\x00 \r\n\t")):
        raise NotYetError("the closing tag of the file is not there yet")
    if content[:2] in (b"\xff\xfe", b"\xfe\xff") or _DECLARATION.search(content):
        raise UnreadableError("the file declares entities or a document type, which is not read")
    try:
        tree = ElementTree.fromstring(content)
    except ElementTree.ParseError as why:
        raise UnreadableError(f"the file is not well-formed XML ({why})") from None
    return (_raw(source, tree, hashlib.sha256(content).hexdigest(), path),)


def _all(element: ElementTree.Element, name: str) -> Iterator[ElementTree.Element]:
    """Elements of a local name below (and at) an element, whatever the namespace."""
    return (e for e in element.iter() if e.tag.rpartition("}")[2] == name)


def _first(element: ElementTree.Element, name: str) -> ElementTree.Element | None:
    return next(_all(element, name), None)


def _quantity(element: ElementTree.Element, name: str) -> float | None:
    """A quantity in its SI unit (Hz, s, K), or as it is where the unit is not a frequency."""
    found = _first(element, name)
    if found is None:
        return None
    try:
        value = float(found.get("value", ""))
    except ValueError:
        return None
    unit = found.get("unitName", "").lower()
    if unit in ("celsius", "degree celsius"):
        value += 273.15
    return value * _HZ.get(unit, 1.0) if np.isfinite(value) else None


def _numbers(element: ElementTree.Element, most: int) -> np.ndarray:
    """Decode a binary data element: base64, unpacked, of the declared type."""
    try:
        packed = base64.b64decode("".join((element.text or "").split()), validate=True)
    except binascii.Error:
        raise UnreadableError("the data are not valid base64: the file is damaged") from None
    kind = _TYPES.get(element.get("byteFormat", "").lower().replace(" ", "").replace("-", ""))
    if kind is None:
        raise UnreadableError(
            f"the number format {element.get('byteFormat', '')[:20]!r} is not read here"
        )
    if element.get("compressed", "").lower() in ("zlib", "true"):
        packed = _unpacked(packed, most * 16)
    if len(packed) % np.dtype(kind).itemsize:
        raise UnreadableError("the data end inside a number: the file is damaged")
    return np.frombuffer(packed, kind)


def _unpacked(packed: bytes, most: int) -> bytes:
    machine = zlib.decompressobj()
    try:
        out = machine.decompress(packed, most + 1)
    except zlib.error:
        raise UnreadableError("the packed data are damaged") from None
    if len(out) > most or machine.unconsumed_tail:
        raise UnreadableError("the packed data hold far more than is declared")
    if not machine.eof:
        raise UnreadableError("the packed data end too early: the file is damaged")
    return out


def _declared(element: ElementTree.Element | None) -> int | None:
    text = "" if element is None else element.get("numberOfDataPoints", "")
    return checked_points(int(text)) if re.fullmatch(r"\d{1,9}", text) else None


def _raw(source: Source, tree: ElementTree.Element, digest: str, path: Path) -> Raw:
    if _first(tree, "acquisitionMultiD") is not None:
        raise UnreadableError("the file holds a spectrum of two or more dimensions")
    direct = _first(tree, "DirectDimensionParameterSet")
    scope = tree if direct is None else direct
    nucleus_element = _first(scope, "acquisitionNucleus")
    nucleus = "" if nucleus_element is None else nucleus_element.get("name", "")
    nucleus = checked_nucleus(
        {"hydrogen atom": "1H", "hydrogen": "1H"}.get(nucleus.lower(), nucleus)
    )
    frequency_hz = _quantity(scope, "irradiationFrequency") or _quantity(
        scope, "effectiveExcitationField"
    )
    if frequency_hz is None:
        raise UnreadableError("the file does not say the spectrometer frequency")
    # Some writers give MHz without saying so; no spectrometer works at a few hundred Hz.
    frequency = frequency_hz if frequency_hz < 1e5 else frequency_hz / 1e6
    checked_scale(spectrometer_frequency=frequency)
    settings = _first(tree, "acquisitionParameterSet")
    scans = int(_attribute(settings, "numberOfScans") or 1)
    data = _first(tree, "fidData")
    remarks: list[Remark] = []
    axis, width, carrier = None, 0.0, 0.0
    values: np.ndarray
    if data is not None:
        declared = _declared(scope)
        values = _complex(_numbers(data, declared or MOST_POINTS), declared)
        width = _quantity(scope, "sweepWidth") or 0.0
        checked_scale(spectral_width=width)
        offset = _quantity(scope, "irradiationFrequencyOffset")
        if offset is None:
            remarks.append(carrier_unknown())
        else:
            carrier = offset / frequency
        checked_finite(values)
        remarks.extend(clipped(values))
    else:
        values, axis = _spectrum(tree, frequency)
        checked_finite(values)
    shot = values.size / width if width else None
    delay = _quantity(tree, "relaxationDelay")
    recycle = None if shot is None else shot + (delay or 0.0)
    kelvin = _quantity(tree, "sampleAcquisitionTemperature")
    return Raw(
        data=values,
        domain="time" if axis is None else "frequency",
        frequency_mhz=frequency,
        spectral_width_hz=width,
        carrier_ppm=carrier,
        axis=axis,
        group_delay=max(_quantity(tree, "groupDelay") or 0.0, 0.0),
        recorded_phase=None,
        scans=max(scans, 1),
        recycle_s=recycle,
        flip_angle_deg=None,
        temperature_k=kelvin if kelvin and kelvin > 100 else None,
        nucleus=nucleus,
        solvent="",
        title="",
        stamp=_stamp(tree, settings, recycle, scans, path),
        source=source.name,
        sha256=digest,
        format="nmrML FID" if axis is None else "nmrML spectrum",
        remarks=tuple(remarks),
    )


def _complex(numbers: np.ndarray, declared: int | None) -> np.ndarray:
    if not np.iscomplexobj(numbers):
        if numbers.size % 2:
            raise UnreadableError("real and imaginary parts of the FID differ in length")
        numbers = numbers[::2] + 1j * numbers[1::2]
    # Some writers count real and imaginary numbers, others pairs.
    if declared is not None and declared not in (numbers.size, 2 * numbers.size):
        raise UnreadableError(f"{numbers.size} of {declared} declared points are there")
    checked_points(numbers.size)
    return numbers.astype(np.complex64)


def _spectrum(tree: ElementTree.Element, frequency: float) -> tuple[np.ndarray, Axis]:
    spectrum = _first(tree, "spectrum1D")
    data = None if spectrum is None else _first(spectrum, "spectrumDataArray")
    if spectrum is None or data is None:
        raise UnreadableError("the file holds neither a FID nor a spectrum")
    declared = _declared(spectrum)
    values = _numbers(data, declared or MOST_POINTS)
    if declared is not None and values.size != declared:
        raise UnreadableError(f"{values.size} of {declared} declared points are there")
    checked_points(values.size)
    x = _first(spectrum, "xAxis")
    try:
        assert x is not None
        first, last = float(x.get("startValue", "")), float(x.get("endValue", ""))
    except (AssertionError, ValueError):
        raise UnreadableError("the file does not say where its axis begins and ends") from None
    unit = x.get("unitName", "ppm").lower()
    if unit in _HZ:
        first, last = first * _HZ[unit] / frequency, last * _HZ[unit] / frequency
    elif unit not in ("ppm", "parts per million"):
        raise UnreadableError(f"the axis is in {unit[:20]}, not Hz or ppm")
    if not (np.isfinite([first, last]).all() and first != last):
        raise UnreadableError("the axis of the spectrum has no length")
    real = np.ascontiguousarray(values.real if np.iscomplexobj(values) else values, np.float32)
    if first < last:
        first, last, real = last, first, np.ascontiguousarray(real[::-1])
    return real, Axis(first, (last - first) / (real.size - 1), real.size)


def _attribute(element: ElementTree.Element | None, name: str) -> float | None:
    try:
        value = float("" if element is None else element.get(name, ""))
    except ValueError:
        return None
    return value if np.isfinite(value) else None


def _stamp(
    tree: ElementTree.Element,
    settings: ElementTree.Element | None,
    recycle: float | None,
    scans: int,
    path: Path,
) -> Stamp:
    dummy = _attribute(settings, "numberOfSteadyStateScans") or 0.0
    duration = None if recycle is None else recycle * (scans + dummy)
    start = end = None
    for element in tree.iter():
        start = start or _moment(element.get("startTimeStamp", ""))
        end = end or _moment(element.get("endTimeStamp", ""))
    if start is None and end is None:
        return Stamp(None, None, duration, modified(path), "no date is recorded")
    return Stamp(start, end, duration, modified(path), "startTimeStamp and endTimeStamp")


def _moment(text: str) -> datetime | None:
    try:
        return datetime.fromisoformat(text) if text else None
    except ValueError:
        return None
