"""What pages and reports draw: spectra with their baseline taken off, thinned without losing peaks.

Drawn data only; nothing here is ever integrated.
"""

from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path

import numpy as np
import numpy.typing as npt

from kinetics.logbook import codec
from kinetics.logbook.connection import open_readable
from kinetics.logbook.traces import read_trace
from kinetics.logbook.view import Entry, LogbookView
from kinetics.measure import follow_plan
from kinetics.run import Run
from kinetics.signals.calibration import Calibration
from kinetics.signals.integrals import window_of
from kinetics.spectra.model import Float32, Float64
from kinetics.spectra.processing import corrected_baseline

# Above this the picture of a run is pooled row by row: more rows than a screen has lines.
MOST_PICTURE_ROWS = 360


@dataclass(frozen=True, slots=True, eq=False)
class Drawn:
    """A spectrum to be drawn.

    Attributes
    ----------
    ppm, intensities
        Shape (q,), descending ppm; intensities over the height of the reference or tallest signal.
    windows
        (name, low, high) in ppm as used, the reference first where there is one.
    """

    ppm: Float64
    intensities: Float32
    windows: tuple[tuple[str, float, float], ...]


@dataclass(frozen=True, slots=True, eq=False)
class Picture:
    """The whole run as an image.

    Attributes
    ----------
    ppm
        Shift of each column, descending, shape (c,).
    time_s
        Time of each row, shape (r,).
    shades
        uint8, shape (r, c): 0 empty, 255 at and above the height of typical signals.
    """

    ppm: Float64
    time_s: Float64
    shades: npt.NDArray[np.uint8]


@lru_cache(maxsize=8)
def _calibration(logbook: Path, identifier: int) -> Calibration:
    connection = open_readable(logbook)
    try:
        row = connection.execute(
            "SELECT data FROM calibrations WHERE id = ?", (identifier,)
        ).fetchone()
    finally:
        connection.close()
    return codec.calibration_from_bytes(row[0])


def drawn_spectrum(
    run: Run, entry: Entry, window: tuple[float, float] | None = None, points: int = 4000
) -> Drawn:
    """Return one spectrum ready to be drawn.

    Parameters
    ----------
    run
        The run.
    entry
        A measured spectrum of it.
    window
        Part of the axis in ppm; None: around the windows of the sheet.
    points
        About how many points to return; each stretch keeps its lowest and highest.
    """
    plan = follow_plan(run.sheet)
    if entry.trace is None or entry.integrals is None:
        return Drawn(np.zeros(0), np.zeros(0, np.float32), ())
    axis = entry.trace.axis
    trace = read_trace(run.logbook, entry.trace.offset, entry.trace.size)
    shared = _calibration(run.logbook, entry.calibration).shared
    corrected, _, _ = corrected_baseline(np.asarray(trace), axis, plan.settings, shared.occupied)
    windows = tuple(
        (signal.species, *window_of(signal, float(offset)))
        for signal, offset in zip(plan.all, entry.integrals.offsets_ppm, strict=True)
    )
    if window is None:
        ends = [limit for _, low, high in windows for limit in (low, high)]
        window = (min(ends) - 0.4, max(ends) + 0.4)
    start, stop = axis.span(window)
    first, last = max(int(start), 0), min(int(np.ceil(stop)) + 1, axis.size)
    height = _height(corrected, entry, plan_windows=windows)
    index, values = _thinned(corrected[first:last], points)
    ppm = axis.first_ppm + axis.step_ppm * (first + index)
    return Drawn(np.asarray(ppm, np.float64), values / np.float32(height), windows)


def _height(
    corrected: Float32, entry: Entry, plan_windows: tuple[tuple[str, float, float], ...]
) -> float:
    tops = []
    if entry.trace is not None:
        for _, low, high in plan_windows:
            start, stop = (int(v) for v in entry.trace.axis.span((low, high)))
            part = corrected[max(start, 0) : max(stop, 0)]
            if part.size:
                tops.append(float(part.max()))
    return max([*tops, 1e-30])


def _thinned(
    values: Float32, points: int
) -> tuple[np.ndarray[tuple[int], np.dtype[np.intp]], Float32]:
    """Lowest and highest of each stretch, in order: no line loses height."""
    if values.size <= points:
        return np.arange(values.size), values
    stretch = -(-2 * values.size // points)
    count = values.size // stretch
    parts = values[: count * stretch].reshape(count, stretch)
    pair = np.sort(np.stack((parts.argmin(axis=1), parts.argmax(axis=1)), axis=1), axis=1)
    index = (pair + np.arange(count)[:, None] * stretch).ravel()
    return index, values[index]


def picture(run: Run, columns: int = 1024) -> Picture:
    """Return the picture of the whole run, small enough to send."""
    entries = tuple(run.entries[i] for i in run.measured)
    with LogbookView(run.logbook) as view:
        rows = view.picture(entries)
        limits = (view.meta("picture") or "0 1").split()
    low, high = float(limits[0]), float(limits[1])
    if rows.size == 0:
        return Picture(np.zeros(0), np.zeros(0), np.zeros((0, 0), np.uint8))
    rows = rows - np.median(rows, axis=1, keepdims=True)
    pool = max(rows.shape[1] // columns, 1)
    count = rows.shape[1] // pool
    rows = rows[:, : count * pool].reshape(rows.shape[0], count, pool).max(axis=2)
    time = run.time_s[run.measured]
    if rows.shape[0] > MOST_PICTURE_ROWS:
        edges = np.linspace(0, rows.shape[0], MOST_PICTURE_ROWS + 1).astype(int)[:-1]
        rows, time = np.maximum.reduceat(rows, edges, axis=0), time[edges]
    top = float(np.quantile(rows, 0.985))
    # The square root lets small lines show beside large ones.
    shades = 255 * np.sqrt(np.clip(rows / max(top, 1e-30), 0, 1))
    step = (high - low) / count
    ppm = high - step * (np.arange(count) + 0.5)
    return Picture(ppm, time, shades.astype(np.uint8))
