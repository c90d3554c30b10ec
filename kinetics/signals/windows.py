"""Sums over windows as weights on the points of a spectrum."""

from dataclasses import dataclass

import numpy as np
import scipy.fft

from kinetics.spectra.model import Axis, Float32, Float64
from kinetics.spectra.processing import Window

# A local straight baseline rests on this part of the window on either side of it.
MARGIN_SHARE = 0.15


@dataclass(frozen=True, slots=True, eq=False)
class Weights:
    """Weights of consecutive points; all others are zero.

    Attributes
    ----------
    start
        Index of the first weighted point.
    values
        float64, shape (m,), in ppm: a sum of intensities with them is an integral.
    """

    start: int
    values: Float64

    def of(self, intensities: Float32) -> float:
        """Return the weighted sum."""
        part = intensities[self.start : self.start + self.values.size]
        return float(np.dot(part.astype(np.float64), self.values))

    def full(self, size: int) -> Float64:
        """Return the weights of all points, shape (size,)."""
        out = np.zeros(size)
        out[self.start : self.start + self.values.size] = self.values
        return out


def _cover(low: float, high: float, first: int, count: int) -> Float64:
    """How much of each point's cell, from index −½ to +½, lies between two indices."""
    left = first + np.arange(count) - 0.5
    inside = np.minimum(high, left + 1.0) - np.maximum(low, left)
    return np.asarray(np.clip(inside, 0.0, 1.0), np.float64)


def window_weights(axis: Axis, window: Window, *, local_baseline: bool) -> Weights:
    """Return the weights that integrate a window, with partial points at its edges.

    Parameters
    ----------
    axis
        Axis of the spectrum.
    window
        Limits in ppm; what lies beyond the axis counts nothing.
    local_baseline
        Subtract the straight line through the means of the margins on both sides.
    """
    low, high = axis.span(window)
    margin = max(MARGIN_SHARE * (high - low), 2.0) if local_baseline else 0.0
    first = max(int(np.floor(low - margin)), 0)
    last = min(int(np.ceil(high + margin)) + 1, axis.size)
    if last <= first:
        return Weights(0, np.zeros(0))
    count = last - first
    weights = _cover(low, high, first, count)
    if local_baseline:
        sides = _cover(low - margin, low, first, count) + _cover(high, high + margin, first, count)
        weights = weights - (high - low) / (2.0 * margin) * sides
    return Weights(first, weights * abs(axis.step_ppm))


def noise_covariance(weights: Float64, correlation: Float64) -> Float64:
    """Return the covariance of weighted sums over unit noise, shape (k, k).

    Parameters
    ----------
    weights
        Shape (k, n), one row a sum.
    correlation
        Autocorrelation of the noise at lags 0, 1, …, shape (lags,).
    """
    size = scipy.fft.next_fast_len(weights.shape[1] + correlation.size, real=True)
    lags = np.zeros(size)
    count = min(correlation.size, size // 2)
    lags[:count] = correlation[:count]
    lags[-count + 1 :] += correlation[1:count][::-1]
    coloured = scipy.fft.irfft(
        scipy.fft.rfft(weights, size, axis=1) * scipy.fft.rfft(lags), size, axis=1
    )[:, : weights.shape[1]]
    covariance = weights @ np.asarray(coloured).T
    return np.asarray(0.5 * (covariance + covariance.T), np.float64)
