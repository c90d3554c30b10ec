"""Where the lines of a spectrum have gone: whole-spectrum alignment, then the reference line.

Following one decaying line by itself loses it sooner or later. So the whole spectrum is first
laid over a template by correlation, and only then is the line sought, close to where the
alignment says it must be.
"""

from dataclasses import dataclass

import numpy as np
import scipy.fft

from kinetics.spectra.baseline import Ranges
from kinetics.spectra.lines import highest
from kinetics.spectra.model import Axis, Float32

GRID_PPM = 0.002
FARTHEST_PPM = 0.6
NEAR_PPM = 0.03


@dataclass(frozen=True, slots=True, eq=False)
class Template:
    """The shape of a run's spectrum, for alignment.

    Attributes
    ----------
    first_ppm
        Shift of the first cell.
    profile
        float32, shape (m,), one cell per GRID_PPM, descending in ppm.
    """

    first_ppm: float
    profile: Float32


def profile_of(
    intensities: Float32, axis: Axis, first_ppm: float, cells: int, exclude: Ranges = ()
) -> Float32:
    """Return the spectrum on the alignment grid, shape (cells,).

    The square root of the (positive) cell maximum lets small lines count beside a large solvent.
    """
    sign = intensities.copy()
    for window in exclude:
        start, stop = axis.span(window)
        sign[max(int(start), 0) : max(int(np.ceil(stop)) + 1, 0)] = 0.0
    position = (first_ppm - GRID_PPM * np.arange(cells + 1) - axis.first_ppm) / axis.step_ppm
    edges = np.clip(np.round(position), 0, axis.size - 1).astype(np.intp)
    cell = np.maximum.reduceat(sign, edges[:-1])
    cell[np.diff(edges) == 0] = sign[edges[:-1][np.diff(edges) == 0]]
    inside = (position[:-1] >= 0) & (position[:-1] <= axis.size - 1)
    profile = np.sqrt(np.where(inside, np.maximum(cell, 0.0), 0.0))
    profile -= np.median(profile)
    return np.asarray(profile, np.float32)


def make_template(
    intensities: Float32, axis: Axis, ranges: tuple[float, float], exclude: Ranges = ()
) -> Template:
    """Make a template of the part of a spectrum that lies inside `ranges` (ppm)."""
    low, high = ranges
    cells = max(int((high - low) / GRID_PPM), 16)
    return Template(high, profile_of(intensities, axis, high, cells, exclude))


def displacement(intensities: Float32, axis: Axis, template: Template, exclude: Ranges) -> float:
    """Return by how many ppm the lines of a spectrum lie above those of the template.

    Searched within ±FARTHEST_PPM; good to about one grid cell.
    """
    pad = int(FARTHEST_PPM / GRID_PPM)
    cells = template.profile.size
    profile = profile_of(
        intensities, axis, template.first_ppm + pad * GRID_PPM, cells + 2 * pad, exclude
    )
    size = scipy.fft.next_fast_len(profile.size + cells, real=True)
    score = scipy.fft.irfft(
        scipy.fft.rfft(profile, size) * np.conj(scipy.fft.rfft(template.profile, size)), size
    )[: 2 * pad + 1]
    lags = (pad - np.arange(2 * pad + 1)) * GRID_PPM
    # Among nearly equal fits the smallest displacement is the likeliest.
    likely = np.asarray(score) * (1 - 0.02 * np.abs(lags) / FARTHEST_PPM)
    return float(lags[int(np.argmax(likely))])


def line_near(
    intensities: Float32, axis: Axis, ppm: float, within_ppm: float = NEAR_PPM
) -> tuple[float, float]:
    """Return the shift (ppm) and height of the highest point near a shift."""
    start, stop = axis.span((ppm - within_ppm, ppm + within_ppm))
    line = highest(intensities, int(np.floor(start)), int(np.ceil(stop)) + 1)
    return axis.first_ppm + axis.step_ppm * line.index, line.height
