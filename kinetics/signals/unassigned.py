"""Lines outside all windows that grow or fade along a run: an impurity, an intermediate.

Works on the picture of a run: the highest value in each of some two thousand cells a spectrum.
Means of ten rows are compared with the mean of the first ones, so that a line of three times the
noise of one spectrum is seen within ten. Nothing is integrated here: sizes are heights against
the reference's and said to be rough.
"""

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.ndimage import maximum_filter1d, median_filter, minimum_filter1d

from kinetics.spectra.model import Float32, Float64
from kinetics.spectra.processing import Window

BLOCK = 10  # spectra whose mean is looked at
_FIRST = 10  # rows (or a quarter of the run) that say what was there from the start
# Two thousand cells are looked at: 5.5 standard deviations appear by chance in one look of some
# ten thousand, and the noise of a maximum is not quite normal.
_SIGMA = 5.5
_FLOOR_CELLS = 101
# Shim and phase move the flanks of a strong line; a change below this part of it is no line.
_FLANK, _FLANK_PPM = 0.03, 0.05
# What grows here while something fades close by has only moved (water, as acid is set free).
_MOVED_PPM, _SAME_PPM = 0.25, 0.05
# 13C satellites stand 57–105 Hz from their line and have 0.55 % of it each (common practice:
# one-bond couplings of 115 to 210 Hz, 1.1 % 13C); narrowness lets them seem somewhat higher.
_SATELLITE_HZ, _SATELLITE_SHARE = (50.0, 115.0), 0.012
_MARGIN = 0.2  # of a window, to either side, that is left alone
_MOST = 3


@dataclass(frozen=True, slots=True)
class Unassigned:
    """A line that no window names and that changes along the run.

    Attributes
    ----------
    ppm
        Where.
    first_row
        First row of the block of spectra in which it was seen.
    change
        Height gained (negative: lost) since the start of the run, over the reference's height.
    sigma
        That over its standard deviation.
    """

    ppm: float
    first_row: int
    change: float
    sigma: float


def unassigned(
    picture: Float32,
    limits: Window,
    windows: tuple[Window, ...],
    excluded: tuple[Window, ...],
    reference: Window | None,
    frequency_mhz: float,
) -> tuple[Unassigned, ...]:
    """Find them, the strongest first.

    Parameters
    ----------
    picture
        Highest value in each cell, one row a spectrum in order of time, shape (n, cells), the
        first cell at the upper limit.
    limits
        ppm range of the picture, ascending.
    windows, excluded
        Windows of all signals (reference among them), and ranges never used.
    reference
        Whose height sizes are compared with; None: the highest of the windows.
    frequency_mhz
        For the distance of 13C satellites; nan: they are not looked for.
    """
    rows, cells = picture.shape
    if rows < _FIRST + BLOCK or cells < 2 * _FLOOR_CELLS:
        return ()
    low, high = limits
    step = (high - low) / cells
    ppm = np.asarray(high - step * (np.arange(cells) + 0.5), np.float64)
    first = max(_FIRST, rows // 4)
    before = _levelled(picture[:first])
    # Blocks end at the last spectrum, so that news is seen as soon as it is there.
    starts = np.arange(rows - BLOCK, first - 1, -BLOCK)[::-1]
    means = np.array([_levelled(picture[start : start + BLOCK]) for start in starts])
    change = means - before
    free = _free(ppm, windows, excluded)
    if free.sum() < _FLOOR_CELLS:
        return ()
    # Both sides of the noise: it is a maximum in a cell, and its upper side is the longer.
    spread = np.quantile(change[:, free], [0.159, 0.841], axis=1)
    noise = np.maximum(0.5 * (spread[1] - spread[0]), 1e-30)
    score = change / noise[:, None]
    unit = _height(means[-1], ppm, (reference,) if reference else windows)
    last = change[-1]
    flank = maximum_filter1d(np.maximum(means[-1], before), _odd(_FLANK_PPM / step))
    around = _odd(_MOVED_PPM / step)
    real = np.where(np.abs(score[-1]) > _SIGMA, last, 0.0)
    opposite = np.where(last > 0, -minimum_filter1d(real, around), maximum_filter1d(real, around))
    strong = np.abs(score[-1]) > _SIGMA
    good = free & strong & (np.abs(last) > _FLANK * flank) & (opposite < 0.3 * np.abs(last))
    out: list[Unassigned] = []
    for cell in np.argsort(-np.abs(last)):
        if not good[cell] or any(abs(ppm[cell] - one.ppm) < _SAME_PPM for one in out):
            continue
        if _satellite(float(ppm[cell]), float(last[cell]), ppm, last, windows, frequency_mhz):
            continue
        same = np.sign(last[cell]) * score[:, cell] > _SIGMA
        seen = int(starts[int(np.argmax(same))])
        out.append(
            Unassigned(
                float(ppm[cell]),
                seen,
                float(last[cell]) / max(unit, 1e-30),
                float(score[-1, cell]),
            )
        )
        if len(out) == _MOST:
            break
    return tuple(out)


def _levelled(rows: Float32) -> Float64:
    """Mean of rows less its floor, shape (cells,)."""
    mean = rows.mean(axis=0, dtype=np.float64)
    return np.asarray(mean - median_filter(mean, _FLOOR_CELLS, mode="nearest"))


def _odd(cells: float) -> int:
    return 2 * max(round(cells), 1) + 1


def _free(
    ppm: Float64, windows: tuple[Window, ...], excluded: tuple[Window, ...]
) -> npt.NDArray[np.bool_]:
    free = np.ones(ppm.size, bool)
    for low, high in windows:
        margin = _MARGIN * (high - low)
        free &= (ppm < low - margin) | (ppm > high + margin)
    for low, high in excluded:
        free &= (ppm < low) | (ppm > high)
    return free


def _height(level: Float64, ppm: Float64, windows: tuple[Window, ...]) -> float:
    inside = np.zeros(ppm.size, bool)
    for low, high in windows:
        inside |= (ppm >= low) & (ppm <= high)
    return float(level[inside].max()) if inside.any() else 0.0


def _satellite(
    place: float,
    size: float,
    ppm: Float64,
    change: Float64,
    windows: tuple[Window, ...],
    frequency_mhz: float,
) -> bool:
    """Whether a change is what the 13C satellite of a followed line's change would be."""
    if not np.isfinite(frequency_mhz):
        return False
    near, far = (hz / frequency_mhz for hz in _SATELLITE_HZ)
    for low, high in windows:
        inside = (ppm >= low) & (ppm <= high)
        reachable = (np.abs(ppm - place) >= near) & (np.abs(ppm - place) <= far)
        parents = change[inside & reachable]
        if parents.size and np.max(np.sign(size) * parents) * _SATELLITE_SHARE > abs(size):
            return True
    return False
