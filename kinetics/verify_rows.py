"""A recorded row against the same row measured anew: what differs, in words.

States, remark codes and identities must be equal; numbers to 1e-6. A number near zero (the integral
of a product before it is there) is compared on the scale of its own uncertainty, an angle on that
of a degree, a shift on that of a point: that is where their rounding happens.
"""

import json
import sqlite3
from collections.abc import Mapping
from dataclasses import asdict
from typing import Any

import numpy as np
import numpy.typing as npt

from kinetics.errors import UnreadableError
from kinetics.logbook import codec
from kinetics.measure import Measurement, Recipe, measure, picture_row
from kinetics.remarks import Remark
from kinetics.signals.calibration import Calibration
from kinetics.signals.integrals import standard_errors
from kinetics.signals.model import FollowPlan, Integrals
from kinetics.spectra.model import Float32, ProcessingRecord, Raw

TOLERANCE = 1e-6
# Traces and pictures are kept in single precision: eight digits of their highest point.
_SINGLE = 1e-6
# What the codec raises where somebody wrote into the record by hand.
_UNDECODABLE = (ValueError, KeyError, TypeError, IndexError, AttributeError)


def fact_differences(spectrum: sqlite3.Row, raw: Raw) -> list[str]:
    """Return what the record says of a raw file beside what the file says now.

    When the file was last written is left out: that is no part of its content.
    """
    try:
        stamp = codec.stamp_from_json(spectrum["stamp"])
        facts: dict[str, Any] = json.loads(spectrum["facts"])
        remarks = codec.remarks_from_json(spectrum["remarks"])
    except _UNDECODABLE as why:
        return [f"what the record says of the file cannot be read ({why})"]
    out = []
    for name in ("start", "end", "duration_s", "meaning"):
        recorded, now = getattr(stamp, name), getattr(raw.stamp, name)
        if recorded != now:
            out.append(f"{name} is recorded as {recorded}, the file says {now}")
    for name, recorded in facts.items():
        now = int(raw.data.size) if name == "points" else getattr(raw, name, None)
        if recorded != now:
            out.append(f"{name} is recorded as {recorded}, the file says {now}")
    return out + _remark_differences(remarks, raw.remarks)


def file_time_counts(spectrum: sqlite3.Row, raw: Raw) -> bool:
    """Whether the time of a spectrum rests on when its file was written, and that has changed."""
    try:
        stamp = codec.stamp_from_json(spectrum["stamp"])
    except _UNDECODABLE:
        return False  # named by fact_differences
    return stamp.start is None and stamp.end is None and stamp.modified != raw.stamp.modified


def row_differences(
    row: sqlite3.Row,
    trace: Float32 | None,
    raw: Raw,
    recipe: Recipe,
    picture: tuple[float, float] | None,
) -> list[str]:
    """Measure a spectrum anew and return what differs from its recorded row.

    Parameters
    ----------
    row
        Of the table `measured`.
    trace
        The recorded trace; None where it is known to be damaged.
    raw, recipe
        The spectrum and what it was measured with.
    picture
        ppm range of the picture's rows; None where it is not recorded.
    """
    try:
        now = measure(raw, recipe)
    except UnreadableError as why:
        return [f"was measured, but cannot be now: {why}"]
    try:
        remarks = codec.remarks_from_json(row["remarks"])
        integrals = codec.integrals_from_bytes(row["integrals"])
        processing = codec.processing_from_json(row["processing"])
        cells = np.frombuffer(row["picture"], "<f4")
    except _UNDECODABLE as why:
        return [f"cannot be read ({why})"]
    out = []
    if row["state"] != now.state:
        out.append(f"state is recorded as {row['state']}, found {now.state}")
    out += _remark_differences(remarks, now.remarks)
    out += _integral_differences(integrals, now.integrals, recipe.plan, now.axis.step_ppm)
    out += _numbers(row, now)
    step = abs(now.axis.step_ppm)
    out += _processing(processing, now.record, step)
    if trace is not None:
        out += _single("trace", trace, now.trace)
    if picture is not None:
        out += _single("picture", cells, picture_row(now, *picture))
    return out


def calibration_differences(recorded: Calibration, now: Calibration) -> list[str]:
    """Return which parts of a calibration differ from the same one made anew."""
    return array_differences(
        codec.unpack(codec.calibration_to_bytes(recorded)),
        codec.unpack(codec.calibration_to_bytes(now)),
    )


def array_differences(recorded: Mapping[str, Any], now: Mapping[str, Any]) -> list[str]:
    """Compare named arrays: words and flags exactly, numbers on the scale of their largest."""
    out = [f"{name} is there only once" for name in sorted(set(recorded) ^ set(now))]
    for name in sorted(set(recorded) & set(now)):
        a, b = np.asarray(recorded[name]), np.asarray(now[name])
        if a.shape != b.shape:
            out.append(f"{name} has the shape {a.shape}, found {b.shape}")
        elif a.dtype.kind not in "fc":
            if not np.array_equal(a, b):
                out.append(f"{name} differs")
        elif a.size:
            out += _off(name, a, b, np.nanmax(np.abs(b), initial=1e-300))
    return out


def _remark_differences(recorded: tuple[Remark, ...], now: tuple[Remark, ...]) -> list[str]:
    before, after = (sorted((r.code, r.subject) for r in remarks) for remarks in (recorded, now))
    if before == after:
        return []
    return [f"remarks are recorded as {_codes(before)}, found {_codes(after)}"]


def _codes(pairs: list[tuple[str, str]]) -> str:
    words = [f"{code} ({subject})" if subject else code for code, subject in pairs]
    return ", ".join(words) or "none"


def _integral_differences(
    recorded: Integrals, now: Integrals, plan: FollowPlan, step_ppm: float
) -> list[str]:
    if recorded.values.shape != now.values.shape:
        return [f"holds {recorded.values.size} integrals, found {now.values.size}"]
    errors = standard_errors(now)
    points = np.full_like(errors, abs(step_ppm))
    names = [signal.species for signal in plan.all]
    out = []
    for what, a, b, floor in (
        ("integral", recorded.values, now.values, errors),
        ("place of the window", recorded.offsets_ppm, now.offsets_ppm, points),
        ("height over noise", recorded.heights, now.heights, np.ones_like(errors)),
    ):
        for i, name in enumerate(names):
            scale = max(abs(float(b[i])), float(floor[i]))
            out += _off(f"{what} of {name}", a[i : i + 1], b[i : i + 1], scale)
    out += _off(
        "covariance of the integrals", recorded.covariance, now.covariance, np.outer(errors, errors)
    )
    return out


def _numbers(row: sqlite3.Row, now: Measurement) -> list[str]:
    width = np.nan if row["line_width_hz"] is None else row["line_width_hz"]
    step = abs(now.axis.step_ppm)
    out = []
    for name, recorded, found, scale in (
        ("noise", row["noise_sd"], now.noise_sd, abs(now.noise_sd)),
        ("line width", width, now.line_width_hz, abs(now.line_width_hz)),
        ("axis", row["first_ppm"], now.axis.first_ppm, step),
        ("point distance", row["step_ppm"], now.axis.step_ppm, step),
    ):
        out += _off(name, np.array([recorded]), np.array([found]), scale if scale > 0 else 1e-300)
    if row["trace_size"] != now.trace.size:
        out.append(f"the trace has {row['trace_size']} points, found {now.trace.size}")
    return out


def _processing(recorded: ProcessingRecord, now: ProcessingRecord, step_ppm: float) -> list[str]:
    """Phases on the scale of a degree, the shift on that of a point, the rest as it is."""
    floors = {"p0_deg": 1.0, "p1_deg": 1.0, "phase_disagreement_deg": 1.0, "shift_ppm": step_ppm}
    before, after = asdict(recorded), asdict(now)
    out = []
    for name, value in after.items():
        if name in floors:
            scale = max(abs(value), floors[name])
            out += _off(name, np.array([before[name]]), np.array([value]), scale)
        elif before[name] != value:
            out.append(f"{name} is recorded as {before[name]}, found {value}")
    return out


def _single(name: str, recorded: npt.NDArray[Any], now: npt.NDArray[Any]) -> list[str]:
    if recorded.shape != now.shape:
        return [f"the {name} has {recorded.size} points, found {now.size}"]
    top = float(np.max(np.abs(now), initial=0.0))
    return _off(name, recorded, now, max(top, 1e-30), _SINGLE)


def _off(
    name: str,
    recorded: npt.NDArray[Any],
    now: npt.NDArray[Any],
    scale: npt.ArrayLike,
    tolerance: float = TOLERANCE,
) -> list[str]:
    """One line if an array is off by more than the tolerance anywhere; nan equals nan."""
    a, b = np.asarray(recorded), np.asarray(now)
    if a.dtype.kind == "c" or b.dtype.kind == "c":  # compared part by part
        a, b = (np.asarray(v, np.complex128).ravel().view(np.float64) for v in (a, b))
        return _off(name, a, b, float(np.max(scale)), tolerance)
    a, b = a.astype(np.float64), b.astype(np.float64)
    size = np.broadcast_to(np.asarray(scale, np.float64), b.shape)
    close = (np.abs(a - b) <= tolerance * size) | (a == b) | (np.isnan(a) & np.isnan(b))
    if np.all(close):
        return []
    worst = np.unravel_index(int(np.argmax(~close)), b.shape)
    return [f"{name} is recorded as {a[worst]:.9g}, found {b[worst]:.9g}"]
