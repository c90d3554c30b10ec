"""Automatic phase, without a person and from the first spectrum on.

Two looks at the same lines. Close by: the FID is weighted by t·exp(−πt), in which humps,
first-point errors and the long dispersive tails that mislead most automatic phases vanish;
around each line the phase φ that maximises Σ Re(e^{iφ}S)³ has a closed form. This works down to
poor S/N, but badly shimmed or overlapping lines mislead it by several degrees. From afar: the far
field of each group of lines (`farfield`) has the phase of its area whatever its shape, but wants
good S/N. Both come with a standard error; a robust straight line through them gives zero and
first order. Along a run the first order is known from the calibration and only the zero order
is found each time.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import numpy.typing as npt
import scipy.fft
from scipy.ndimage import maximum_filter1d

from kinetics.spectra.farfield import group_phases
from kinetics.spectra.fourier import ComplexSpectrum, filled_size, pivot_scale
from kinetics.spectra.model import Axis, Complex64, Float32, Float64, Raw

# Line shape, not noise, limits what a single line tells: poor shim alone makes 4° usual.
_NEAR_FLOOR_DEG = 4.0
_FAR_FLOOR_DEG = 0.5
_MOST_LINES = 40
_DETECTION = 8.0  # times the noise of the magnitude
_P1_LIMIT_DEG = 90.0
# Holds p1 near zero where the lines say little about it: beyond 60° it is rare (common practice).
_P1_USUAL_DEG = 60.0
_ALONE = 2.0  # a line must stand this many times above the flanks of stronger ones
_END_OF_WEIGHT = 9.0  # the weight has fallen by e^−9 where the FID ends, or the cut would ripple
_ROBUST_DEG = 3.0  # residuals well beyond this lose their weight


@dataclass(frozen=True, slots=True)
class LinePhases:
    """Phases found at lines and groups of lines of one spectrum.

    Attributes
    ----------
    where
        Position as the fraction of the width from its centre, −½ … ½, shape (k,).
    correction_deg
        Phase correction asked for, in degrees modulo 360, shape (k,).
    sigma_deg
        Its standard error in degrees, shape (k,).
    """

    where: Float64
    correction_deg: Float64
    sigma_deg: Float64


@dataclass(frozen=True, slots=True)
class Phase:
    """A phase correction and how well the lines agree on it.

    Attributes
    ----------
    p0_deg, p1_deg
        To be handed to `fourier.rotate`.
    disagreement_deg
        Weighted median of how far single lines are from it, degrees.
    lines
        Number of lines it rests on.
    """

    p0_deg: float
    p1_deg: float
    disagreement_deg: float
    lines: int


def line_phases(
    raw: Raw, spectrum: ComplexSpectrum, exclude: tuple[tuple[float, float], ...] = ()
) -> LinePhases:
    """Find the phases that the lines of a FID and the groups they form ask for.

    Parameters
    ----------
    raw
        A FID.
    spectrum
        Its transform.
    exclude
        ppm ranges whose lines have no say (suppressed solvent).
    """
    axis, frequency = spectrum.axis, raw.frequency_mhz
    if frequency is None:
        raise ValueError("line_phases takes a FID whose spectrometer frequency is known")
    near, heights, width_hz = _near(raw, axis, exclude)
    if near.where.size == 0:
        return near
    span = abs(axis.step_ppm) * axis.size
    centre = axis.first_ppm - 0.5 * (span - abs(axis.step_ppm))
    groups = group_phases(
        spectrum.values,
        axis,
        centre - near.where * span,
        heights,
        width_hz / frequency,
        frequency,
        exclude,
    )
    return LinePhases(
        np.concatenate((near.where, (centre - groups.ppm) / span)),
        np.concatenate((near.correction_deg, groups.correction_deg)),
        np.concatenate((near.sigma_deg, np.hypot(groups.sigma_deg, _FAR_FLOOR_DEG))),
    )


def _near(
    raw: Raw, axis: Axis, exclude: tuple[tuple[float, float], ...]
) -> tuple[LinePhases, Float64, float]:
    """Phases at single lines, their heights, and the width (Hz) the weighting gives a line."""
    points = raw.data.size
    size = filled_size(points, 2)
    rotated = int(np.floor(raw.group_delay + 1e-9))
    fraction = raw.group_delay - rotated
    weight, width_hz = _weight(points - rotated, raw.spectral_width_hz)
    fid = np.zeros(size, np.complex64)
    fid[: points - rotated] = raw.data[rotated:] * weight
    values = scipy.fft.fftshift(scipy.fft.fft(fid, overwrite_x=True))[::-1]
    where = pivot_scale(size)
    if abs(fraction) > 1e-6:
        values = values * np.exp(-2j * np.pi * fraction * where).astype(np.complex64)
    height = np.abs(values)
    for low, high in exclude:
        start, stop = axis.span((low, high))
        scale = size / axis.size
        height[max(int(start * scale), 0) : max(int(np.ceil(stop * scale)), 0)] = 0.0
    phases, heights = _at_lines(values, height, where, width_hz / raw.spectral_width_hz * size)
    return phases, heights, width_hz


@lru_cache(maxsize=8)
def _weight(points: int, spectral_width_hz: float) -> tuple[Float32, float]:
    """t·exp(−πwt) and w in Hz."""
    time = np.arange(points) / spectral_width_hz
    width_hz = max(1.0, _END_OF_WEIGHT / (np.pi * time[-1]))
    weight = (time * np.exp(-np.pi * width_hz * time)).astype(np.float32)
    weight.flags.writeable = False
    return weight, float(width_hz)


def _at_lines(
    values: Complex64, height: Float32, where: Float32, width_points: float
) -> tuple[LinePhases, Float64]:
    # Magnitude of complex noise is Rayleigh: median = 1.177 sd.
    noise = float(np.median(height[height > 0])) / 1.177 if np.any(height > 0) else 0.0
    half = max(round(3.0 * width_points), 3)
    peaks = np.flatnonzero(
        (height == maximum_filter1d(height, 2 * half + 1)) & (height > _DETECTION * noise)
    )
    peaks = peaks[(peaks >= half) & (peaks < values.size - half)]
    peaks = _standing_alone(peaks, height, width_points)
    if peaks.size == 0:
        empty = np.zeros(0)
        return LinePhases(empty, empty, empty), empty
    region = values[peaks[:, None] + np.arange(-half, half + 1)].astype(np.complex128)
    region /= np.abs(region).max(axis=1, keepdims=True)
    first = np.sum(np.abs(region) ** 2 * region, axis=1)
    third = np.sum(region**3, axis=1)
    angle = _best_cubic_angle(first, third)
    snr = height[peaks].astype(np.float64) / max(noise, 1e-30)
    sigma = np.hypot(_NEAR_FLOOR_DEG, np.rad2deg(1.0) / snr)
    return (
        LinePhases(where[peaks].astype(np.float64), np.rad2deg(angle), sigma),
        height[peaks].astype(np.float64),
    )


def _standing_alone(
    peaks: npt.NDArray[np.intp], height: Float32, width_points: float
) -> npt.NDArray[np.intp]:
    """Leave out maxima that are but ripples on the flank of a stronger line."""
    order = peaks[np.argsort(height[peaks])[::-1][: 8 * _MOST_LINES]]
    kept: list[int] = []
    flank = np.zeros(order.size)
    for position, peak in enumerate(order):
        if height[peak] > _ALONE * flank[position]:
            kept.append(int(peak))
        # Tails of a line under this weight fall as 1/Δ²; twice the width allows for its own.
        distance = (order - peak) / (2.0 * width_points)
        flank += height[peak] / (1.0 + distance**2)
        if len(kept) == _MOST_LINES:
            break
    return np.array(kept, np.intp)


def _best_cubic_angle(first: Complex64, third: Complex64) -> Float64:
    """Return the φ that maximises Re(3 A e^{iφ} + B e^{3iφ}), element-wise.

    Σ Re(e^{iφ}S)³ = ¼ Re(3 A e^{iφ} + B e^{3iφ}) with A = Σ|S|²S and B = ΣS³.
    """
    grid = np.linspace(-np.pi, np.pi, 72, endpoint=False)
    turn = np.exp(1j * grid)
    score = (3 * first[:, None] * turn + third[:, None] * turn**3).real
    phi = grid[np.argmax(score, axis=1)]
    for _ in range(4):  # Newton on the derivative, from within 2.5° of the maximum
        one, three = first * np.exp(1j * phi), third * np.exp(3j * phi)
        slope, curvature = -3 * (one + three).imag, -3 * (one + 3 * three).real
        step = np.where(curvature < 0, -slope / np.where(curvature < 0, curvature, 1.0), 0.0)
        phi = phi + np.clip(step, -0.1, 0.1)
    return np.asarray(phi)


def fit_phase(lines: LinePhases, p1_deg: float | None = None) -> Phase | None:
    """Return the phase correction that most lines agree on; None where no line was found.

    Parameters
    ----------
    lines
        From `line_phases`.
    p1_deg
        First-order phase in degrees where it is known from the calibration; None to find it,
        within ±90° over the width.
    """
    if lines.where.size == 0:
        return None
    spread = float(np.ptp(lines.where))
    find_slope = p1_deg is None and lines.where.size >= 2 and spread > 0.02
    slopes = (
        np.arange(-_P1_LIMIT_DEG, _P1_LIMIT_DEG + 1, 3.0)
        if find_slope
        else np.array([0.0 if p1_deg is None else p1_deg])
    )
    angle = np.deg2rad(lines.correction_deg[None, :] - slopes[:, None] * lines.where)
    # Vote with a narrow kernel over the zero order, so that lines which are wrong by a lot
    # (a folded line, a suppressed solvent) do not shift the answer.
    grid = np.deg2rad(np.arange(-180.0, 180.0, 3.0))
    say = 1.0 / lines.sigma_deg
    votes = (
        np.exp((np.cos(angle[:, None, :] - grid[None, :, None]) - 1) / np.deg2rad(8.0) ** 2) @ say
    )
    # Where lines are few many slopes fit; the smallest is the likeliest.
    votes = votes * (1 - 0.1 * (slopes[:, None] / _P1_LIMIT_DEG) ** 2)
    best = np.unravel_index(int(np.argmax(votes)), votes.shape)
    p1, p0 = float(slopes[best[0]]), float(np.rad2deg(grid[best[1]]))
    return _refined(lines, p0, p1, find_slope)


def _refined(lines: LinePhases, p0: float, p1: float, find_slope: bool) -> Phase:
    """Iteratively re-weighted least squares from a start within a few degrees."""
    rest = np.zeros_like(lines.where)
    for _ in range(15):
        rest = (lines.correction_deg - p0 - p1 * lines.where + 180.0) % 360.0 - 180.0
        scale = np.hypot(lines.sigma_deg, _ROBUST_DEG)
        weight = lines.sigma_deg**-2 / (1 + (rest / scale) ** 2) ** 2
        total = weight.sum()
        centre = float((weight * lines.where).sum() / total)
        mean = float((weight * rest).sum() / total)
        slope = 0.0
        if find_slope:
            x = lines.where - centre
            ridge = _P1_USUAL_DEG**-2
            slope = float((weight * x * rest).sum() - ridge * p1)
            slope /= float((weight * x**2).sum()) + ridge
            slope = float(np.clip(p1 + slope, -1.2 * _P1_LIMIT_DEG, 1.2 * _P1_LIMIT_DEG)) - p1
        p1 += slope
        p0 += mean - slope * centre
    order = np.argsort(np.abs(rest))
    say = 1.0 / lines.sigma_deg
    heavier = np.searchsorted(np.cumsum(say[order]), 0.5 * say.sum())
    disagreement = float(np.abs(rest)[order][heavier])
    return Phase((p0 + 180.0) % 360.0 - 180.0, p1, disagreement, int(lines.where.size))


def common_slope(seen: Sequence[LinePhases]) -> float | None:
    """Return the first-order phase (degrees) that spectra of one run share; None without lines.

    The zero order of each spectrum is free. Starts from the median of what single spectra say;
    then iteratively re-weighted least squares through all lines of all spectra at once.

    Parameters
    ----------
    seen
        From `line_phases`, one a spectrum.
    """
    single = [(lines, phase) for lines in seen if (phase := fit_phase(lines)) is not None]
    if not single:
        return None
    says = np.array([(1.0 / lines.sigma_deg).sum() for lines, _ in single])
    slopes = np.array([phase.p1_deg for _, phase in single])
    order = np.argsort(slopes)
    p1 = float(slopes[order][np.searchsorted(np.cumsum(says[order]), 0.5 * says.sum())])
    zeros = [
        fitted.p0_deg if (fitted := fit_phase(lines, p1)) is not None else 0.0
        for lines, _ in single
    ]
    for _ in range(15):
        moment, information = -p1 * _P1_USUAL_DEG**-2, _P1_USUAL_DEG**-2
        for position, (lines, _phase) in enumerate(single):
            rest = lines.correction_deg - zeros[position] - p1 * lines.where
            rest = (rest + 180.0) % 360.0 - 180.0
            scale = np.hypot(lines.sigma_deg, _ROBUST_DEG)
            weight = lines.sigma_deg**-2 / (1 + (rest / scale) ** 2) ** 2
            centre = float((weight * lines.where).sum() / weight.sum())
            mean = float((weight * rest).sum() / weight.sum())
            x = lines.where - centre
            moment += float((weight * x * rest).sum())
            information += float((weight * x**2).sum())
            zeros[position] += mean
        step = moment / information
        p1 = float(np.clip(p1 + step, -1.2 * _P1_LIMIT_DEG, 1.2 * _P1_LIMIT_DEG))
    return p1
