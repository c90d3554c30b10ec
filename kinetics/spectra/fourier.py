"""From a FID to a complex spectrum: group delay, apodisation, zero filling, FFT."""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import scipy.fft

from kinetics.spectra.model import Axis, Complex64, Float32, Float64, Raw

# Lags of the noise autocorrelation that are kept; beyond them the windows of a sum see nothing
# that would change a standard deviation by one per cent.
NOISE_LAGS = 256


@dataclass(frozen=True, slots=True)
class ComplexSpectrum:
    """A spectrum before phase and baseline.

    Attributes
    ----------
    values
        complex64, shape (n,), per scan, point 0 at the highest ppm.
    axis
        Shift axis as the instrument's carrier has it.
    noise_correlation
        Autocorrelation of the noise of the real part at lags 0 … NOISE_LAGS − 1, float64.
    """

    values: Complex64
    axis: Axis
    noise_correlation: Float64


def filled_size(points: int, zero_fill: int) -> int:
    """Return the transform length: the next power of two, times `zero_fill`."""
    return int(2 ** np.ceil(np.log2(max(points, 2)))) * zero_fill


@lru_cache(maxsize=8)
def _window(points: int, rotated: int, dwell_s: float, broadening_hz: float) -> Float32:
    """Exponential weights of the FID in the order in which it is stored, shape (points,)."""
    time = (np.arange(points) - rotated) * dwell_s
    weights = np.exp(-np.pi * broadening_hz * np.abs(time))
    if rotated == 0:
        weights[0] *= 0.5  # the FFT counts t = 0 in full; the integral over t ≥ 0 wants half
    single = np.asarray(weights, np.float32)
    single.flags.writeable = False
    return single


@lru_cache(maxsize=8)
def _noise_correlation(
    points: int, rotated: int, size: int, dwell_s: float, broadening_hz: float
) -> Float64:
    """Noise autocorrelation after weighting and zero filling: transform of the squared weights."""
    weights = np.zeros(size)
    weights[:points] = _window(points, rotated, dwell_s, broadening_hz) ** 2
    correlation = np.asarray(scipy.fft.fft(np.roll(weights, -rotated)))[:NOISE_LAGS].real
    padded = np.zeros(NOISE_LAGS)
    padded[: correlation.size] = correlation / correlation[0]
    padded.flags.writeable = False
    return padded


def transform(raw: Raw, *, broadening_hz: float, zero_fill: int) -> ComplexSpectrum:
    """Return the complex spectrum of a FID, per scan.

    The whole part of the group delay is rotated to the end of the zero-filled array, where a
    negative time belongs; the fraction becomes a first-order phase. Cutting the build-up off
    instead would cost up to a third of an integral.

    Parameters
    ----------
    raw
        A FID; `raw.domain` must be ``"time"`` and the frequency known.
    broadening_hz
        Exponential line broadening in Hz.
    zero_fill
        1, 2, 4 or 8 times the next power of two.
    """
    frequency = raw.frequency_mhz
    if raw.domain != "time" or frequency is None:
        raise ValueError("transform takes a FID whose spectrometer frequency is known")
    points = raw.data.size
    size = filled_size(points, zero_fill)
    rotated = int(np.floor(raw.group_delay + 1e-9))
    fraction = raw.group_delay - rotated
    dwell = 1.0 / raw.spectral_width_hz
    fid = np.zeros(size, np.complex64)
    weighted = raw.data * (_window(points, rotated, dwell, broadening_hz) / np.float32(raw.scans))
    fid[: points - rotated] = weighted[rotated:]
    if rotated:
        fid[size - rotated :] = weighted[:rotated]
    values = np.asarray(scipy.fft.fft(fid, overwrite_x=True))
    values = np.ascontiguousarray(scipy.fft.fftshift(values)[::-1])
    offset_hz = raw.spectral_width_hz * (0.5 - (1.0 + np.arange(size)) / size)
    if abs(fraction) > 1e-6:
        values *= np.exp(2j * np.pi * fraction * dwell * offset_hz).astype(np.complex64)
    step = raw.spectral_width_hz / size / frequency
    first = raw.carrier_ppm + raw.spectral_width_hz * (0.5 - 1.0 / size) / frequency
    return ComplexSpectrum(
        values,
        Axis(first, -step, size),
        _noise_correlation(points, rotated, size, dwell, broadening_hz),
    )


@lru_cache(maxsize=8)
def pivot_scale(size: int) -> Float32:
    """Return x from −½ (point 0) to +½: first-order phase turns about the centre."""
    scale = ((np.arange(size) + 0.5) / size - 0.5).astype(np.float32)
    scale.flags.writeable = False
    return scale


@lru_cache(maxsize=8)
def _ramp(size: int, p1_deg: float) -> Complex64:
    """First-order rotation; all spectra of a run share it."""
    ramp = np.asarray(np.exp(1j * np.deg2rad(p1_deg) * pivot_scale(size)), np.complex64)
    ramp.flags.writeable = False
    return ramp


def rotated(values: Complex64, p0_deg: float, p1_deg: float) -> Complex64:
    """Return complex `values` after phase correction.

    Parameters
    ----------
    values
        complex64, shape (n,).
    p0_deg
        Zero-order phase in degrees, that of the centre of the width.
    p1_deg
        First-order phase in degrees over the whole width.
    """
    turn = np.complex64(np.exp(1j * np.deg2rad(p0_deg)))
    if p1_deg == 0.0:
        return np.asarray(values * turn, np.complex64)
    return np.asarray(values * (_ramp(values.size, p1_deg) * turn), np.complex64)


def rotate(values: Complex64, p0_deg: float, p1_deg: float) -> Float32:
    """Return the real part of `rotated`."""
    return np.ascontiguousarray(rotated(values, p0_deg, p1_deg).real)
