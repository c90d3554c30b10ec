"""The model of a group of overlapping signals, and its derivatives, built in the time domain."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import scipy.fft

from kinetics.signals.lineshape import on_step
from kinetics.signals.model import Signal
from kinetics.signals.pattern import sticks
from kinetics.spectra.model import Axis, Float32, Float64


@dataclass(frozen=True, slots=True, eq=False)
class LineModel:
    """What fits start from.

    Attributes
    ----------
    shape, step_ppm
        Line shape (see `lineshape.measured_shape`) and its point distance.
    width_ppm
        Width at half height of that line.
    places_ppm
        Where each signal of the plan stood in the calibration, nan where it was not seen.
    correlation
        Autocorrelation of the noise of one point.
    """

    shape: Float32
    step_ppm: float
    width_ppm: float
    places_ppm: Float64
    correlation: Float64


@dataclass(frozen=True, slots=True, eq=False)
class Layout:
    """The points of a range and the factors all models of it share."""

    data: Float64
    size: int
    time: Float64
    line: npt.NDArray[np.complex128]
    start: int
    axis: Axis
    hz_per_point: float
    spectrum_size: int


@dataclass(frozen=True, slots=True)
class Free:
    """Which entries of the parameter vector belong to one signal: shift, width, couplings.

    Entry 0 is the phase, which all share.
    """

    shift: int
    width: int
    couplings: tuple[int, ...]
    neighbours: tuple[int, ...]


def lay_out(
    intensities: Float32,
    axis: Axis,
    frequency_mhz: float,
    chosen: Sequence[Signal],
    lines: LineModel,
) -> Layout | None:
    low = min(s.window[0] for s in chosen)
    high = max(s.window[1] for s in chosen)
    first, last = (round(v) for v in axis.span((low, high)))
    if first < 0 or last >= axis.size or last - first < 16 or lines.shape.size == 0:
        return None
    if not np.isfinite(frequency_mhz):
        return None
    shape = on_step(lines.shape, lines.step_ppm, axis.step_ppm)
    data = intensities[first : last + 1].astype(np.float64)
    size = scipy.fft.next_fast_len(data.size + shape.size, real=True)
    padded = np.zeros(size)
    padded[: shape.size] = shape
    line = scipy.fft.rfft(np.roll(padded, -(shape.size // 2)))
    return Layout(
        data,
        size,
        np.asarray(scipy.fft.rfftfreq(size)),
        np.asarray(line),
        first,
        axis,
        abs(axis.step_ppm) * frequency_mhz,
        data.size,
    )


def _transform(
    layout: Layout, free: Free, values: Float64
) -> tuple[npt.NDArray[np.complex128], list[npt.NDArray[np.complex128]]]:
    """One signal of area 1 in the time domain, and the factor of each coupling's derivative."""
    time = layout.time
    out = layout.line * np.exp(
        1j * values[0] - 2j * np.pi * time * values[free.shift] - np.pi * values[free.width] * time
    )
    factors = []
    for at, n in zip(free.couplings, free.neighbours, strict=True):
        offsets, shares = sticks([(n, 1.0)])
        # A binomial pattern is cosⁿ(πJt); its derivative by J is −n π t tan(πJt) of it.
        turns = np.exp(-2j * np.pi * np.outer(offsets, time) * values[at])
        pattern = shares @ turns
        slope = (shares * offsets) @ (turns * (-2j * np.pi * time))
        out = out * pattern
        factors.append(slope / np.where(np.abs(pattern) < 1e-9, 1e-9, pattern))
    return out, factors


def linear_columns(layout: Layout, frees: Sequence[Free], values: Float64) -> Float64:
    """Signals of area 1 and a constant, shape (points, g + 1)."""
    rows = np.array([_transform(layout, free, values)[0] for free in frees])
    model = scipy.fft.irfft(rows, layout.size, axis=1)[:, : layout.data.size]
    return np.column_stack((model.T, np.ones(layout.data.size)))


def nonlinear_slopes(
    layout: Layout, frees: Sequence[Free], values: Float64, linear: Float64
) -> Float64:
    """Derivatives of the model by the nonlinear parameters, shape (points, p)."""
    rows = np.zeros((values.size, layout.time.size), np.complex128)
    for number, free in enumerate(frees):
        one, factors = _transform(layout, free, values)
        one = one * linear[number]
        rows[free.shift] = -2j * np.pi * layout.time * one
        rows[free.width] = -np.pi * layout.time * one
        rows[0] += 1j * one
        for at, factor in zip(free.couplings, factors, strict=True):
            rows[at] = factor * one
    return np.asarray(scipy.fft.irfft(rows, layout.size, axis=1)[:, : layout.data.size].T)


def projected(layout: Layout, frees: Sequence[Free], values: Float64) -> tuple[Float64, Float64]:
    """Best areas and constant for given nonlinear parameters, and what is left."""
    columns = linear_columns(layout, frees, values)
    linear, *_ = np.linalg.lstsq(columns, layout.data, rcond=None)
    return np.asarray(linear), layout.data - columns @ linear
