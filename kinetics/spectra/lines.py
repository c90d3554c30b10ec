"""Lines of a spectrum: where they are, how wide, and how noisy the rest is."""

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.ndimage import binary_dilation, uniform_filter1d
from scipy.signal import find_peaks

from kinetics.spectra.model import Axis, Float32, Float64

# 1.4826 × median absolute deviation estimates the sd of a normal distribution.
_MAD_TO_SD = 1.4826


def noise_sd(residual: Float32 | Float64, free: npt.NDArray[np.bool_] | None = None) -> float:
    """Return the noise of one point from what is left after baseline correction.

    Parameters
    ----------
    residual
        Baseline-corrected intensities, shape (n,).
    free
        True where no line is known, shape (n,); None for all points.

    Notes
    -----
    The median of local robust standard deviations: small lines nobody declared fill a few
    blocks and do not count, nor does a slow rest of the baseline.
    """
    points = residual if free is None else residual[free]
    if points.size < 64:
        points = residual
    blocks = int(min(64, max(points.size // 256, 1)))
    parts = points[: points.size // blocks * blocks].reshape(blocks, -1).astype(np.float64)
    centred = parts - np.median(parts, axis=1, keepdims=True)
    spreads = _MAD_TO_SD * np.median(np.abs(centred), axis=1)
    return float(np.median(spreads))


@dataclass(frozen=True, slots=True)
class LinePosition:
    """A line's maximum.

    Attributes
    ----------
    index
        Fractional index of the maximum (parabola through three points).
    height
        Height there, unit of the intensities.
    """

    index: float
    height: float


def highest(intensities: Float32, start: int, stop: int) -> LinePosition:
    """Return the highest maximum in points start … stop − 1.

    A parabola through the three highest points reaches the Cramér–Rao bound for its position.
    """
    start, stop = max(start, 0), min(stop, intensities.size)
    if stop - start < 3:
        middle = min(max((start + stop) // 2, 0), intensities.size - 1)
        return LinePosition(float(middle), float(intensities[middle]))
    top = start + int(np.argmax(intensities[start:stop]))
    top = min(max(top, 1), intensities.size - 2)
    left, mid, right = (float(v) for v in intensities[top - 1 : top + 2])
    bend = left - 2 * mid + right
    offset = 0.0 if bend >= 0 else float(np.clip(0.5 * (left - right) / bend, -1, 1))
    return LinePosition(top + offset, mid - 0.25 * (left - right) * offset)


def width_at_half(intensities: Float32, line: LinePosition, limit: int) -> float:
    """Return the full width at half height in points; nan if it is not reached within `limit`."""
    half, top = 0.5 * line.height, round(line.index)
    if not line.height > 0:
        return float("nan")
    sides: list[float] = []
    for direction in (-1, 1):
        previous = float(intensities[top])
        for distance in range(1, limit + 1):
            at = top + direction * distance
            if not 0 <= at < intensities.size:
                return float("nan")
            value = float(intensities[at])
            if value < half:
                part = (previous - half) / (previous - value) if previous > value else 0.0
                crossing = top + direction * (distance - 1 + part)
                sides.append(abs(crossing - line.index))
                break
            previous = value
        else:
            return float("nan")
    return sides[0] + sides[1]


def find_lines(
    intensities: Float32, sd: float, *, times_noise: float = 6.0, smooth: int = 1
) -> npt.NDArray[np.intp]:
    """Return the indices of maxima that stand out of the noise, shape (k,), ascending.

    Parameters
    ----------
    intensities
        Baseline-corrected, shape (n,).
    sd
        Noise of one point.
    times_noise
        Prominence a maximum must have, in units of the noise after smoothing.
    smooth
        Width of a running mean in points.
    """
    y = uniform_filter1d(intensities, smooth) if smooth > 1 else intensities
    level = times_noise * sd / np.sqrt(max(smooth, 1) / 2 if smooth > 1 else 1)
    peaks, _ = find_peaks(y, height=level, prominence=level)
    return np.asarray(peaks, np.intp)


def occupied_ranges(
    intensities: Float32, axis: Axis, sd: float, width_points: float
) -> tuple[tuple[float, float], ...]:
    """Return the ppm ranges in which lines stand, generously.

    A running mean as wide as a line must exceed three of its own standard deviations; each such
    stretch is widened by twelve line-widths, where a Lorentzian has fallen to 0.2 % of its height.
    """
    smooth = max(round(width_points), 1)
    y = uniform_filter1d(intensities, smooth)
    # Zero filling correlates neighbours: count two points as one.
    level = 5.0 * sd / np.sqrt(max(smooth / 2, 1))
    high = np.abs(y) > level
    high = binary_dilation(high, iterations=max(round(12 * width_points), 2))
    change = np.flatnonzero(np.diff(np.concatenate(([0], high.view(np.int8), [0]))))
    ppm = axis.first_ppm + axis.step_ppm * change
    return tuple((float(b), float(a)) for a, b in zip(ppm[::2], ppm[1::2], strict=True))
