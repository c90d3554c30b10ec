"""A simulated spectrum as two-column text: what a processed export looks like."""

from datetime import datetime

import numpy as np
import numpy.typing as npt

from demo_runs.simulate import SimulatedSpectrum

Float64 = npt.NDArray[np.float64]


def processed(
    spectrum: SimulatedSpectrum, *, broadening_hz: float = 0.3, zero_fill: int = 2
) -> tuple[Float64, Float64]:
    """Return the correctly processed spectrum: the phase is known, not searched.

    Written apart from the processing in `kinetics.spectra`, so that the two check each other.

    Parameters
    ----------
    spectrum
        The acquisition.
    broadening_hz
        Exponential line broadening in Hz.
    zero_fill
        Times the next power of two of points.

    Returns
    -------
    ppm, intensities
        Shape (n,) each, ppm descending; intensities are the sum over the scans, real part.
    """
    instrument, truth = spectrum.instrument, spectrum.truth
    points, width = instrument.points, instrument.spectral_width_hz
    size = 2 ** int(np.ceil(np.log2(points))) * zero_fill
    whole = int(np.floor(instrument.group_delay))
    time = (np.arange(points) - whole) * instrument.dwell_s
    fid = spectrum.fid * np.exp(-np.pi * broadening_hz * np.abs(time))
    if whole == 0:
        fid[0] *= 0.5
    padded = np.zeros(size, np.complex128)
    padded[:points] = fid
    values = np.fft.fftshift(np.fft.fft(np.roll(padded, -whole)))[::-1]
    frequency = np.fft.fftshift(np.fft.fftfreq(size, instrument.dwell_s))[::-1]
    turn = np.deg2rad(truth.p0_deg + truth.p1_deg * frequency / width)
    fraction = instrument.group_delay - whole
    turn -= 2 * np.pi * fraction * frequency / width
    ppm = instrument.carrier_ppm + frequency / instrument.frequency_mhz
    return ppm, np.asarray((values * np.exp(-1j * turn)).real, np.float64)


def columns_text(
    spectrum: SimulatedSpectrum, *, broadening_hz: float = 0.3, zero_fill: int = 2
) -> str:
    """Return the whole file: comment lines, then ppm and intensity, separated by a tab."""
    ppm, values = processed(spectrum, broadening_hz=broadening_hz, zero_fill=zero_fill)
    lines = [
        f"# title = {spectrum.title}",
        f"# acquired = {_iso(spectrum.start)}",
        f"# acquisition_s = {(spectrum.end - spectrum.start).total_seconds():g}",
        f"# frequency_mhz = {spectrum.instrument.frequency_mhz!r}",
        f"# scans = {spectrum.scans}",
        f"# temperature_c = {spectrum.temperature_k - 273.15:.3f}",
        f"# solvent = {spectrum.solvent}",
    ]
    rows = [f"{x:.6f}\t{y:.8g}" for x, y in zip(ppm.tolist(), values.tolist(), strict=True)]
    return "\n".join([*lines, *rows]) + "\n"


def _iso(moment: datetime) -> str:
    return moment.isoformat(timespec="seconds")
