"""Baseline: a smooth curve through the points that belong to no line.

Block means of the unprotected points are smoothed by the Whittaker smoother (penalised second
differences; Whittaker 1923, Eilers, Anal. Chem. 75 (2003) 3631) and interpolated. For a given
set of protected ranges this is a *linear* operation on the spectrum. That is used twice: the
noise that the baseline brings into an integral is computed exactly, and so is the share of a
line's tails that the baseline takes away.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.linalg import cho_solve_banded, cholesky_banded
from scipy.ndimage import binary_dilation, binary_opening

from kinetics.spectra.model import Axis, Float32, Float64

Ranges = Sequence[tuple[float, float]]

MOST_BLOCKS = 1024
# Waves longer than this are followed by half or more. Humps of suppressed solvents and of
# first-point errors are wider; an exchanging proton's line must be declared to be protected.
HALF_RESPONSE_PPM = 1.5
# Blocks that stand out by so many of their standard deviations, in groups narrower than this and
# not more than this part of all, are lines rather than baseline.
_STRAY_SD = 5.0
_WIDEST_STRAY_PPM = 0.3
_MOST_STRAY = 0.15
_FOOT_BLOCKS = 4
_ROUNDS = 5


def merged(ranges: Ranges) -> tuple[tuple[float, float], ...]:
    """Return overlapping ranges as one, in ascending order."""
    out: list[tuple[float, float]] = []
    for low, high in sorted((min(r), max(r)) for r in ranges):
        if out and low <= out[-1][1]:
            out[-1] = (out[-1][0], max(high, out[-1][1]))
        else:
            out.append((low, high))
    return tuple(out)


def free_points(axis: Axis, protected: Ranges) -> np.ndarray[tuple[int], np.dtype[np.bool_]]:
    """Return True for each point outside all protected ranges, shape (n,)."""
    free = np.ones(axis.size, bool)
    for window in protected:
        start, stop = axis.span(window)
        free[max(int(np.floor(start)), 0) : max(int(np.ceil(stop)) + 1, 0)] = False
    return free


@dataclass(frozen=True, slots=True, eq=False)
class BaselineOperator:
    """The baseline of one axis and one set of protected ranges, as a linear operator.

    Build it with `baseline_operator`; it is cheap to keep and to apply.
    """

    free: np.ndarray[tuple[int], np.dtype[np.bool_]]
    edges: np.ndarray[tuple[int], np.dtype[np.intp]]
    counts: Float64
    factor: Float64
    left: np.ndarray[tuple[int], np.dtype[np.intp]]
    share: Float32
    widest_stray: int

    def blocks(self, intensities: Float32 | Float64) -> Float64:
        """Return the mean of the free points of each block (0 where none), shape (blocks,)."""
        sums = np.add.reduceat(np.where(self.free, intensities, 0), self.edges[:-1])
        return np.asarray(sums / np.maximum(self.counts, 1.0), np.float64)

    def smooth(self, means: Float64) -> Float64:
        """Return the smooth curve through block means, shape (blocks,)."""
        return np.asarray(cho_solve_banded((self.factor, True), self.counts * means))

    def spread(self, curve: Float64) -> Float32:
        """Interpolate a curve over blocks to every point, shape (n,)."""
        low = curve[self.left].astype(np.float32)
        high = curve[self.left + 1].astype(np.float32)
        return np.asarray(low + (high - low) * self.share, np.float32)

    def apply(self, intensities: Float32 | Float64) -> Float32:
        """Return the baseline of a spectrum, shape (n,).

        Linear but for lines that stand outside the protected ranges, as an impurity does that
        was not there when the run began: their blocks count as if they lay on the curve.
        """
        means = self.blocks(intensities)
        curve = self.smooth(means)
        for _ in range(_ROUNDS):
            stray = self._stray(means - curve)
            if not stray.any():
                break
            curve = self.smooth(np.where(stray, curve, means))
        return self.spread(curve)

    def _stray(self, rest: Float64) -> np.ndarray[tuple[int], np.dtype[np.bool_]]:
        """Blocks that stand far above the curve in narrow groups, shape (blocks,)."""
        known = self.counts > 0
        scaled = rest * np.sqrt(self.counts)
        sd = 1.4826 * float(np.median(np.abs(scaled[known]))) if known.any() else 0.0
        high = known & (scaled > _STRAY_SD * sd)
        if sd == 0.0 or high.sum() > _MOST_STRAY * known.sum():
            return np.zeros_like(high)
        # What is broad is baseline, whatever its height.
        broad = binary_opening(high, np.ones(self.widest_stray + 1, bool))
        narrow = np.logical_and(high, np.logical_not(broad))
        # The feet of a line lie below the threshold.
        return np.logical_and(known, binary_dilation(narrow, iterations=_FOOT_BLOCKS))

    def transposed(self, weights: Float64) -> Float64:
        """Return W'c for weights c: a sum c·(y − Wy) equals (c − W'c)·y. Shape (n,)."""
        onto = np.zeros(self.counts.size)
        np.add.at(onto, self.left, weights * (1.0 - self.share))
        np.add.at(onto, self.left + 1, weights * self.share)
        per_point = np.asarray(cho_solve_banded((self.factor, True), onto))
        # counts · mean is the plain sum of the free points: each enters with weight one.
        return np.where(self.free, np.repeat(per_point, np.diff(self.edges)), 0.0)


def baseline_operator(
    axis: Axis, protected: Ranges, half_response_ppm: float = HALF_RESPONSE_PPM
) -> BaselineOperator:
    """Prepare the baseline for an axis and ranges that must not pull it."""
    free = free_points(axis, protected)
    blocks = int(min(MOST_BLOCKS, max(axis.size // 8, 4)))
    edges = np.linspace(0, axis.size, blocks + 1).astype(np.intp)
    counts = np.add.reduceat(free.astype(np.float64), edges[:-1])
    if not counts.any():
        counts = counts + 1e-9  # everything is protected: the baseline is zero
    block_ppm = abs(axis.step_ppm) * axis.size / blocks
    stiffness = (half_response_ppm / block_ppm / (2 * np.pi)) ** 4 * (axis.size / blocks)
    band = np.zeros((3, blocks))
    difference = np.array([1.0, -2.0, 1.0])
    for offset in range(3):
        products = difference[: 3 - offset] * difference[offset:]
        for start, product in enumerate(products):
            band[offset, start : blocks - offset - (2 - offset - start)] += product
    band *= stiffness
    band[0] += counts + 1e-9 * stiffness
    centres = (edges[:-1] + edges[1:] - 1) / 2.0
    position = np.interp(np.arange(axis.size), centres, np.arange(blocks))
    left = np.minimum(position.astype(np.intp), blocks - 2)
    share = (position - left).astype(np.float32)
    return BaselineOperator(
        free,
        edges,
        counts,
        cholesky_banded(band, lower=True),
        left,
        share,
        max(round(_WIDEST_STRAY_PPM / block_ppm), 1),
    )
