"""What a reader delivers (`Raw`) and what processing makes of it (`Spectrum`)."""

from dataclasses import dataclass, field
from datetime import datetime
from typing import Literal

import numpy as np
import numpy.typing as npt

from kinetics.remarks import Remark

Complex64 = npt.NDArray[np.complex64]
Float32 = npt.NDArray[np.float32]
Float64 = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Stamp:
    """What the files of one acquisition say about when it took place.

    Stamps are kept as recorded; `kinetics.spectra.clock` turns those of a whole run into
    times (zone, daylight change, missing stamps), so a corrected zone re-measures nothing.

    Attributes
    ----------
    start, end
        Start and end of the acquisition. With a UTC offset where the file records one, naive
        where it does not, None where it is not recorded.
    duration_s
        Length of the acquisition in seconds from its parameters (scans × recycle time, dummy
        scans included), or None.
    modified
        When the data file was last written, timezone-aware UTC: a fall-back for `end`.
    meaning
        One sentence: which entry was read and whether it means start or end.
    """

    start: datetime | None
    end: datetime | None
    duration_s: float | None
    modified: datetime | None
    meaning: str


@dataclass(frozen=True, slots=True)
class Axis:
    """A linear chemical-shift axis, descending as the trade draws it.

    Attributes
    ----------
    first_ppm
        Shift of point 0 in ppm (the high-shift, left-hand end).
    step_ppm
        Distance from one point to the next in ppm; negative.
    size
        Number of points.
    """

    first_ppm: float
    step_ppm: float
    size: int

    def ppm(self) -> Float64:
        """Return the shift of every point, ppm, shape (size,)."""
        return np.asarray(self.first_ppm + self.step_ppm * np.arange(self.size), np.float64)

    def position(self, ppm: float) -> float:
        """Return the fractional index of a shift."""
        return (ppm - self.first_ppm) / self.step_ppm

    def span(self, window: tuple[float, float]) -> tuple[float, float]:
        """Return a window in ppm as ascending fractional indices (may lie outside the axis)."""
        a, b = self.position(window[0]), self.position(window[1])
        return (a, b) if a <= b else (b, a)

    def shifted(self, by_ppm: float) -> "Axis":
        """Return the axis moved by `by_ppm`."""
        return Axis(self.first_ppm + by_ppm, self.step_ppm, self.size)


@dataclass(frozen=True, slots=True)
class Raw:
    """One acquisition as the instrument wrote it, before any processing.

    Attributes
    ----------
    data
        FID: complex64, shape (n,), normalised so that positive frequencies lie at higher ppm
        after ``fftshift(fft(data))`` reversed onto a descending axis. Spectrum: float32 (real)
        or complex64, shape (n,), point 0 at the highest ppm.
    domain
        ``"time"`` for a FID, ``"frequency"`` for a spectrum.
    frequency_mhz
        1H frequency of the spectrometer in MHz; None where a text file does not say.
    spectral_width_hz
        Spectral width in Hz (FID); 0.0 for a spectrum.
    carrier_ppm
        Shift at the centre of the spectral width in ppm (FID).
    axis
        Axis of a spectrum; None for a FID.
    group_delay
        Points of digital filter build-up before the FID proper starts (may be fractional).
    recorded_phase
        Zero- and first-order phase in degrees that the instrument's own processing used, or None.
    scans
        Number of scans added up in `data`.
    recycle_s, flip_angle_deg
        Recycle time in s (acquisition plus delay) and pulse angle in degrees, None if unknown.
    temperature_k
        Probe temperature recorded with the acquisition in K, or None.
    nucleus, solvent, title
        As recorded (untrusted text), empty if unknown.
    stamp
        What the files say about when it took place.
    source
        Path of file or folder relative to the run folder, with ``/``; ``#3`` is appended to the
        third row of a file that holds several.
    sha256
        Hash (hexadecimal) of the bytes of the raw files, and of the row number in such a file.
    format
        Plain words for the format, naming no maker: "raw instrument folder", "JCAMP-DX FID", …
    remarks
        What the reader noticed (clipped receiver, missing entry, …).
    """

    data: Complex64 | Float32
    domain: Literal["time", "frequency"]
    frequency_mhz: float | None
    spectral_width_hz: float
    carrier_ppm: float
    axis: Axis | None
    group_delay: float
    recorded_phase: tuple[float, float] | None
    scans: int
    recycle_s: float | None
    flip_angle_deg: float | None
    temperature_k: float | None
    nucleus: str
    solvent: str
    title: str
    stamp: Stamp
    source: str
    sha256: str
    format: str
    remarks: tuple[Remark, ...] = ()


@dataclass(frozen=True, slots=True)
class ProcessingRecord:
    """What was done to one spectrum.

    Attributes
    ----------
    p0_deg, p1_deg
        Zero- and first-order phase that was applied, degrees; p1 over the whole width.
    phase_disagreement_deg
        How far the lines are from agreeing on it (weighted median), degrees; 0 if not found here.
    line_broadening_hz, zero_fill
        As in the sheet; 0 and 1 for a spectrum that arrived processed.
    baseline
        ``"automatic"`` or ``"none"``.
    shift_ppm
        What was added to the axis so that the shift reference stands where it should.
    """

    p0_deg: float
    p1_deg: float
    phase_disagreement_deg: float
    line_broadening_hz: float
    zero_fill: int
    baseline: str
    shift_ppm: float


@dataclass(frozen=True, slots=True)
class Spectrum:
    """A processed spectrum.

    Attributes
    ----------
    intensities
        float32, shape (n,), per scan, baseline removed.
    baseline
        float32, shape (n,), what was removed; `intensities + baseline` is before correction.
    axis
        Shift axis after referencing.
    noise_sd
        Standard deviation of the noise of one point, in the unit of `intensities`.
    line_width_hz
        Full width at half height of the reference line in Hz (nan without frequency or line).
    frequency_mhz
        1H frequency in MHz; nan if unknown.
    record
        Processing that was applied.
    remarks
        What processing noticed.
    """

    intensities: Float32
    baseline: Float32
    axis: Axis
    noise_sd: float
    line_width_hz: float
    frequency_mhz: float
    record: ProcessingRecord
    remarks: tuple[Remark, ...] = field(default=())
