"""The receiving side of a simulated spectrometer: its width, filter, shim and noise.

Conventions, the same as those of `kinetics.spectra.model.Raw`: a line at an offset of +f Hz from
the carrier lies at higher ppm and turns as exp(+2πi f t), so ``fftshift(fft(fid))[::-1]`` runs
from high to low ppm.
"""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import numpy.typing as npt
from scipy.signal import fftconvolve

Float64 = npt.NDArray[np.float64]
Complex128 = npt.NDArray[np.complex128]

# Kaiser parameter of the digital filter: 1e-5 ripple, flat over the inner 90 % of the width for
# the usual delay of some 68 points.
_KAISER_BETA = 10.0
_SHORTEST_DELAY = 8.0


@dataclass(frozen=True, slots=True)
class Instrument:
    """What the receiver makes of the magnetisation.

    Attributes
    ----------
    frequency_mhz
        1H frequency at 0 ppm in MHz.
    spectral_width_hz
        Spectral width in Hz; the dwell time of a complex point is its reciprocal.
    carrier_ppm
        Shift at the centre of the width in ppm.
    points
        Complex points of a FID.
    group_delay
        Points of digital filter build-up before the FID proper starts; 0, or at least 8.
    sensitivity
        Amplitude at time zero that one scan gets from 1 mol/L of protons.
    noise_sd
        Standard deviation of the noise of one scan, in the real and in the imaginary part each.
    """

    frequency_mhz: float = 80.0
    spectral_width_hz: float = 1600.0
    carrier_ppm: float = 5.0
    points: int = 4096
    group_delay: float = 0.0
    sensitivity: float = 1000.0
    noise_sd: float = 0.0

    def __post_init__(self) -> None:
        if 0 < self.group_delay < _SHORTEST_DELAY:
            raise ValueError(
                f"group_delay is {self.group_delay:g} points; expected 0 or at least "
                f"{_SHORTEST_DELAY:g}, a shorter filter cannot be flat"
            )
        if self.points < 2 * self.group_delay + 16:
            raise ValueError(f"{self.points} points cannot hold a delay of {self.group_delay:g}")

    @property
    def dwell_s(self) -> float:
        """Time from one complex point to the next in s."""
        return 1.0 / self.spectral_width_hz

    @property
    def acquisition_s(self) -> float:
        """Length of one FID in s."""
        return self.points / self.spectral_width_hz

    def offset_hz(self, shift_ppm: float) -> float:
        """Return how far a shift lies above the carrier in Hz."""
        return (shift_ppm - self.carrier_ppm) * self.frequency_mhz


@dataclass(frozen=True, slots=True)
class Shim:
    """Field inhomogeneity, the same for all lines and in Hz; it never changes an area.

    Attributes
    ----------
    lorentz_hz, gauss_hz
        Extra full widths at half height of Lorentzian and of Gaussian shape, Hz.
    tail_share, tail_hz
        Part of the sample whose field is off towards one side: its offsets are distributed
        exponentially with this mean in Hz (negative: towards low ppm). Makes lines lop-sided.
    """

    lorentz_hz: float = 0.0
    gauss_hz: float = 0.0
    tail_share: float = 0.0
    tail_hz: float = 0.0

    def envelope(self, time_s: Float64) -> Complex128:
        """Return the factor on the FID at times in s; 1 at time zero."""
        decay = np.exp(
            -np.pi * self.lorentz_hz * time_s
            - (np.pi * self.gauss_hz * time_s) ** 2 / (4 * np.log(2))
        )
        tail = self.tail_share / (1 - 2j * np.pi * self.tail_hz * time_s)
        return np.asarray(decay * (1 - self.tail_share + tail), np.complex128)


@lru_cache(maxsize=8)
def filter_taps(delay: float) -> Float64:
    """Return the impulse response of the digital filter, a windowed sinc about `delay` points.

    Its build-up is finite (twice the delay) as that of a real decimation filter is, so a reader
    that keeps it as negative time and turns the fraction by a first-order phase gets the spectrum
    back exactly, to the filter's ripple, whatever the zero filling.
    """
    places = np.arange(int(np.floor(2 * delay)) + 1) - delay
    window = np.i0(_KAISER_BETA * np.sqrt(np.clip(1 - (places / delay) ** 2, 0, None)))
    taps = np.asarray(np.sinc(places) * window / np.i0(_KAISER_BETA), np.float64)
    taps.flags.writeable = False
    return taps


def delayed(fid: Complex128, delay: float) -> Complex128:
    """Return the FID as it leaves the digital filter, of the same length.

    The receiver samples faster than the points that are kept, and the jump at time zero passes
    the filter: the first point counts by half, as the integral over t ≥ 0 wants. A reader must
    not halve it again.
    """
    if delay == 0:
        return fid
    start = fid.copy()
    start[0] *= 0.5
    return np.asarray(fftconvolve(start, filter_taps(delay))[: fid.size], np.complex128)


def noise_sd_for(
    instrument: Instrument,
    *,
    protons_mol_l: float,
    width_hz: float,
    snr: float,
    scans: int = 1,
    broadening_hz: float = 0.3,
) -> float:
    """Return the noise of one scan at which a line has a wanted signal-to-noise ratio.

    The ratio is peak height over the standard deviation of the noise of one point, both in the
    spectrum after exponential broadening.

    Parameters
    ----------
    instrument
        Its points, width and sensitivity count.
    protons_mol_l
        Amount times protons of the line (of the strongest line of a multiplet), mol/L.
    width_hz
        Full width at half height before broadening, Hz.
    snr
        Wanted height over noise.
    scans
        Scans that are added up.
    broadening_hz
        Exponential line broadening of the processing, Hz.
    """
    time = np.arange(instrument.points) * instrument.dwell_s
    weights = np.exp(-np.pi * broadening_hz * time)
    decay = weights * np.exp(-np.pi * width_hz * time)
    height = protons_mol_l * instrument.sensitivity * (decay.sum() - decay[0] / 2)
    noise = np.sqrt(np.sum(weights**2))
    return float(height * np.sqrt(scans) / (snr * noise))
