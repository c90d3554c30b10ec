"""The colour of the noise of a spectrum that arrived processed.

Apodisation and zero filling make the noise of neighbouring points alike. A FID is processed here
and the colour is known; of a spectrum that comes as a spectrum it is found from the noise: the
power of its quiet stretches along the time axis of the FID it once was is A·exp(−2αt) up to where
the FID ended, and nothing beyond. Exponential weighting and zero filling, which is what
instruments write as a rule (common practice), are exactly that.
"""

from collections.abc import Sequence
from itertools import pairwise

import numpy as np
import scipy.fft

from kinetics.spectra.fourier import NOISE_LAGS
from kinetics.spectra.model import Float32, Float64

_BLOCKS = 32  # the spectrum is cut into so many, of which the quietest quarter is used
_LONG_BLOCKS = 8  # of differences of spectra, to see the slowest part of the noise
_SMALLEST_BLOCK = 64
_LOWEST_BINS = 3  # of the power, which the baseline spoils
_FLOOR = 1e-4  # leakage beyond the end of the FID, as a part of the power at its start
_GRID = 4096


def noise_correlation(spectra: Sequence[Float32]) -> Float64:
    """Estimate the noise autocorrelation of spectra that were processed alike.

    Parameters
    ----------
    spectra
        Real intensities, shape (n,) each, all of one size, in order of time.

    Returns
    -------
    ndarray
        Shape (NOISE_LAGS,), 1 at lag 0. White where the spectra are too short to tell.
    """
    white = np.zeros(NOISE_LAGS)
    white[0] = 1.0
    if spectra[0].size // _BLOCKS < _SMALLEST_BLOCK:
        return white
    power = _power([_detrended(_cut(values, _BLOCKS)) for values in spectra])
    if not np.all(np.isfinite(power)) or power.max() <= 0:
        return white
    rate, end = _decay_and_end(power)
    # Time in units in which the FID of a real spectrum lasts from 0 to 1: lag m turns by πm.
    time = (np.arange(_GRID) + 0.5) / _GRID
    weight = np.where(time < end, np.exp(-2.0 * rate * time), 0.0)
    if len(spectra) >= 4:
        weight *= _beginning(spectra, rate, time, _LOWEST_BINS / (power.size - 1))
    turns = np.cos(np.pi * np.outer(np.arange(NOISE_LAGS), time))
    return np.asarray(turns @ weight / weight.sum())


def _cut(values: Float32 | Float64, count: int) -> Float64:
    block = values.size // count
    return values[: block * count].reshape(count, block).astype(np.float64)


def _detrended(blocks: Float64) -> Float64:
    place = np.linspace(-1, 1, blocks.shape[1])
    trend = np.polynomial.polynomial.polyvander(place, 3)
    return np.asarray(blocks - (trend @ np.linalg.lstsq(trend, blocks.T, rcond=None)[0]).T)


def _power(spectra: Sequence[Float64]) -> Float64:
    """Mean periodogram of the quietest quarter of the blocks, shape (block // 2 + 1,).

    Quiet in the mean over the spectra, so that the choice does not favour low noise.
    """
    blocks = np.array(spectra)
    spread = np.mean(blocks**2, axis=(0, 2))
    quiet = blocks[:, np.argsort(spread)[: max(blocks.shape[1] // 4, 1)]]
    found = np.asarray(scipy.fft.rfft(quiet * np.hanning(blocks.shape[2]), axis=2))
    return np.asarray((found.real**2 + found.imag**2).mean(axis=(0, 1)))


def _beginning(spectra: Sequence[Float32], rate: float, time: Float64, until: float) -> Float64:
    """How much stronger the noise before `until` is than the fitted decay, at `time`, shape (t,).

    Points before the zero of time (group delay) fold onto the first ones after it and double
    their noise. One spectrum cannot tell this from its baseline; the difference of two that
    follow each other can, since the baseline and the quiet parts of lines cancel.
    """
    pairs = [
        _cut((later.astype(np.float64) - earlier) / np.sqrt(2.0), _LONG_BLOCKS)
        for earlier, later in pairwise(spectra)
    ]
    power = _power([blocks - blocks.mean(axis=1, keepdims=True) for blocks in pairs])
    place = np.arange(power.size) / (power.size - 1)
    level = power / np.exp(-2.0 * rate * place)
    usual = float(np.median(level[power.size // 8 : power.size // 2]))
    # The taper and the mean that was taken away spoil the first two bins.
    ratio = np.clip(level / max(usual, 1e-300), 0.25, 16.0)
    ratio[:2] = ratio[2]
    return np.where(time < until, np.interp(time, place, ratio), 1.0)


def _decay_and_end(power: Float64) -> tuple[float, float]:
    """Fit A·exp(−2αt) on (0, end) to a periodogram over t in (0, 1): (α, end).

    For each end the decay is a straight line through the logarithms (prefix sums make all ends
    one pass); the end is then chosen by Whittle's likelihood.
    """
    first = _LOWEST_BINS
    time = np.arange(power.size)[first:] / (power.size - 1)
    log_power = np.log(np.maximum(power[first:], power.max() * 1e-12))
    count = np.arange(1, time.size + 1)
    sum_t, sum_tt = np.cumsum(time), np.cumsum(time**2)
    sum_p, sum_tp = np.cumsum(log_power), np.cumsum(time * log_power)
    variance = sum_tt - sum_t**2 / count
    slope = np.where(
        variance > 0, (sum_tp - sum_t * sum_p / count) / np.where(variance > 0, variance, 1.0), 0.0
    )
    slope = np.minimum(slope, 0.0)
    best, chosen = np.inf, (0.0, 1.0)
    for last in range(7, time.size):
        level = (sum_p[last] - slope[last] * sum_t[last]) / count[last]
        model = np.exp(level + slope[last] * time)
        model[last + 1 :] = _FLOOR * model[0]
        model = np.maximum(model, _FLOOR * model[0])
        # The scale that suits the part before the end best; the logarithm is biased low.
        model *= np.mean(power[first : first + last + 1] / model[: last + 1])
        cost = float(np.sum(np.log(model) + power[first:] / model))
        if cost < best:
            best, chosen = cost, (-0.5 * float(slope[last]), float(time[last]))
    rate, end = chosen
    # The taper smears the edge by about one bin on either side.
    return rate, 1.0 if end > 1 - 2.5 / power.size else end
