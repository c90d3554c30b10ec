"""The reference line's measured shape: what every other line of the spectrum looks like too.

Shim gives all lines of a spectrum the same shape. It is taken from the mean spectrum of the
calibration: a Voigt line for core and tails, and what that line leaves over (lop-sided shim)
as far as noise lets it be seen.
"""

import numpy as np
from scipy.interpolate import CubicSpline
from scipy.ndimage import gaussian_filter1d, map_coordinates

from kinetics.signals.pattern import voigt_lines
from kinetics.spectra.lines import highest
from kinetics.spectra.model import Axis, Float32, Float64

# The shape reaches so many widths to either side: beyond lie 0.5 % of a Lorentzian, and they
# are as good as constant over a fitted range, which has a constant of its own.
_REACH_WIDTHS = 60.0
_MOST_POINTS = 4096
# What the Voigt line leaves over is looked at this far out, and smoothed by this part of a width.
_CORE_WIDTHS = 15.0
_SMOOTH = 0.15


def measured_shape(
    corrected: Float32,
    axis: Axis,
    centre_ppm: float,
    width_ppm: float,
    lorentz_share: float,
    sd: float,
    *,
    singlet: bool,
) -> Float32:
    """Return the shape of a line, of area 1 with the tails beyond it.

    Parameters
    ----------
    corrected, axis
        The calibration's mean spectrum without baseline.
    centre_ppm, width_ppm, lorentz_share
        Of the line whose shape it is (see `pattern.voigt_lines`).
    sd
        Noise of one point.
    singlet
        Whether that line stands alone; if not, the Voigt line is all that is taken.

    Returns
    -------
    float32, shape (2 m + 1,), per ppm, the centre in the middle, descending ppm.
    """
    step = abs(axis.step_ppm)
    half = int(np.clip(round(_REACH_WIDTHS * width_ppm / step), 32, _MOST_POINTS))
    grid = Axis(half * step, -step, 2 * half + 1)
    shape = voigt_lines(grid, np.zeros(1), np.ones(1), width_ppm, lorentz_share)
    if not singlet:
        return np.asarray(shape, np.float32)
    place = highest(corrected, *_about(axis, centre_ppm, width_ppm)).index
    core = int(np.clip(round(_CORE_WIDTHS * width_ppm / step), 4, half))
    at = place + np.arange(-core, core + 1)
    if at[0] < 0 or at[-1] > axis.size - 1:
        return np.asarray(shape, np.float32)
    # Linear interpolation would widen a line of five points by three per cent.
    seen = map_coordinates(corrected.astype(np.float64), at[None, :], order=5)
    mine = shape[half - core : half + core + 1]
    area = float(seen @ mine) / float(mine @ mine)
    if not area > 0:
        return np.asarray(shape, np.float32)
    rest = seen - area * mine
    # Wiener's weight: what is but noise is left out.
    power = float(rest @ rest)
    trust = max(0.0, 1.0 - 2.0 * sd**2 * rest.size / power) if power > 0 else 0.0
    smooth = gaussian_filter1d(rest, _SMOOTH * width_ppm / step)
    fade = 0.5 * (1 + np.cos(np.pi * np.clip(np.abs(np.arange(-core, core + 1)) / core, 0, 1)))
    out = shape.copy()
    out[half - core : half + core + 1] += trust * fade * smooth / area
    beyond = 1.0 - float(shape.sum() * step)
    return np.asarray(out / (float(out.sum() * step) + beyond), np.float32)


def _about(axis: Axis, ppm: float, reach: float) -> tuple[int, int]:
    low, high = axis.span((ppm - reach, ppm + reach))
    return int(np.floor(low)), int(np.ceil(high)) + 1


def on_step(shape: Float32, from_step_ppm: float, to_step_ppm: float) -> Float64:
    """Return a shape on another point distance, its centre kept in the middle."""
    if abs(to_step_ppm / from_step_ppm - 1) < 1e-6:
        return shape.astype(np.float64)
    half = shape.size // 2
    places = np.arange(-half, half + 1) * abs(from_step_ppm)
    count = int(half * abs(from_step_ppm / to_step_ppm))
    wanted = np.arange(-count, count + 1) * abs(to_step_ppm)
    return np.asarray(CubicSpline(places, shape)(wanted), np.float64)
