"""Integrals of one spectrum: windows that follow, sums, and their covariance."""

from collections.abc import Sequence

import numpy as np

from kinetics.signals.calibration import SHAPE_SNR, Calibration
from kinetics.signals.model import FollowPlan, Integrals, Signal
from kinetics.signals.multiplet import MultipletFit, fit_group, fitted_groups
from kinetics.signals.windows import window_weights
from kinetics.spectra.model import Axis, Float32, Float64, Spectrum

# A signal's own drift against the reference is followed this far, in ppm.
FOLLOW_PPM = 0.025
# A signal is followed only while it still looks like itself; fading, it is soon outshone by
# whatever else stands in its window.
LIKENESS = 0.85
# Sums over windows that overlap this badly cannot be told apart; each is then taken as it is (and
# remarked on), since taking them apart would only multiply noise.
MOST_CONDITION = 100.0
# An exchanging proton wanders farther.
FOLLOW_EXCHANGING_PPM = 0.05


def fit_multiplets(
    spectrum: Spectrum, plan: FollowPlan, calibration: Calibration
) -> tuple[MultipletFit, ...]:
    """Fit the groups of overlapping signals of a spectrum together."""
    if calibration.model is None:
        return ()
    extra = _width_ppm(spectrum, calibration) - calibration.response.line_width_ppm
    fits = (
        fit_group(
            spectrum.intensities,
            spectrum.axis,
            spectrum.frequency_mhz,
            plan.all,
            members,
            calibration.model,
            extra,
            spectrum.noise_sd,
        )
        for members in fitted_groups(plan)
    )
    return tuple(fit for fit in fits if fit is not None)


def integrate(
    spectrum: Spectrum,
    plan: FollowPlan,
    calibration: Calibration,
    fits: Sequence[MultipletFit] = (),
) -> Integrals:
    """Integrate the reference and all signals of a spectrum.

    Parameters
    ----------
    spectrum
        Processed and referenced.
    plan
        What is followed.
    calibration
        Of the run.
    fits
        From `fit_multiplets`: these signals are not summed, and their tails in the windows of
        the others are taken off.

    Returns
    -------
    Integrals
        Areas corrected for cut-off tails and for the tails of one another.
    """
    axis, count = spectrum.axis, len(plan.all)
    offsets, heights = np.zeros(count), np.zeros(count)
    sums = np.zeros(count + len(calibration.others))
    noise = max(spectrum.noise_sd, 1e-30)
    for index, signal in enumerate(plan.all):
        shape = calibration.shapes[index]
        offsets[index] = own_drift(spectrum, signal, shape, calibration.shape_step_ppm)
        low, high = signal.window
        window = (low + offsets[index], high + offsets[index])
        start, stop = (int(v) for v in axis.span(window))
        part = spectrum.intensities[max(start, 0) : max(stop + 1, 0)]
        heights[index] = float(part.max()) / noise if part.size else 0.0
        local = calibration.response.local_baseline[index]
        sums[index] = window_weights(axis, window, local_baseline=local).of(spectrum.intensities)
    for index, other in enumerate(calibration.others, start=count):
        weights = window_weights(axis, other.window, local_baseline=False)
        sums[index] = weights.of(spectrum.intensities)
    response = calibration.response
    mixing = response.at_width(_width_ppm(spectrum, calibration))
    # The response was prepared on the calibration's point distance; noise of a sum of points
    # scales with its square root.
    scale = abs(axis.step_ppm / calibration.shape_step_ppm)
    noise_of_sums = response.noise * spectrum.noise_sd**2 * scale
    values, covariance = _solved(mixing, sums, noise_of_sums, fits)
    for fit in fits:
        for place, index in enumerate(fit.members):
            offsets[index] = fit.shifts_ppm[place] - _usual_place(plan, calibration, index)
    return Integrals(values[:count], covariance[:count, :count], offsets, heights)


def _solved(
    mixing: Float64, sums: Float64, noise: Float64, fits: Sequence[MultipletFit]
) -> tuple[Float64, Float64]:
    """Areas and covariance of the summed signals, given those that were fitted."""
    fitted = np.array([index for fit in fits for index in fit.members], np.intp)
    summed = np.setdiff1d(np.arange(sums.size), fitted)
    known, known_cov = np.zeros(fitted.size), np.zeros((fitted.size, fitted.size))
    start = 0
    for fit in fits:
        stop = start + fit.areas.size
        known[start:stop] = fit.areas
        known_cov[start:stop, start:stop] = fit.covariance
        start = stop
    own = mixing[np.ix_(summed, summed)]
    if np.linalg.cond(own) > MOST_CONDITION:
        own = np.diag(np.diag(own))
    inverse = np.linalg.inv(own)
    tails = mixing[np.ix_(summed, fitted)]
    values, covariance = np.zeros(sums.size), np.zeros((sums.size, sums.size))
    values[fitted], covariance[np.ix_(fitted, fitted)] = known, known_cov
    values[summed] = inverse @ (sums[summed] - tails @ known)
    rest = noise[np.ix_(summed, summed)] + tails @ known_cov @ tails.T
    covariance[np.ix_(summed, summed)] = inverse @ rest @ inverse.T
    # The noise of windows and fitted ranges is that of different points: they only share tails.
    cross = -inverse @ tails @ known_cov
    covariance[np.ix_(summed, fitted)] = cross
    covariance[np.ix_(fitted, summed)] = cross.T
    return values, covariance


def _usual_place(plan: FollowPlan, calibration: Calibration, index: int) -> float:
    model = calibration.model
    known = float("nan") if model is None else float(model.places_ppm[index])
    return known if np.isfinite(known) else plan.all[index].centre


def _width_ppm(spectrum: Spectrum, calibration: Calibration) -> float:
    """Line width of this spectrum; that of the calibration where it cannot be measured."""
    width = spectrum.line_width_hz / spectrum.frequency_mhz
    usual = calibration.response.line_width_ppm
    return width if np.isfinite(width) and 0.3 * usual < width < 5 * usual else usual


def own_drift(spectrum: Spectrum, signal: Signal, shape: Float32, shape_step_ppm: float) -> float:
    """Return how far a signal has moved against the reference since the calibration, in ppm.

    The signal's mean shape is laid over the spectrum by correlation, to a fraction of a point.
    A signal too weak to be seen, or no longer like itself, keeps its place beside the reference:
    zero.
    """
    axis = spectrum.axis
    if not signal.follow or shape.size < 8:
        return 0.0
    reach = FOLLOW_EXCHANGING_PPM if signal.exchanging else FOLLOW_PPM
    if abs(axis.step_ppm / shape_step_ppm - 1) > 1e-6:
        length = max(round(shape.size * shape_step_ppm / axis.step_ppm), 2)
        shape = np.asarray(
            np.interp(np.linspace(0, shape.size - 1, length), np.arange(shape.size), shape),
            np.float32,
        )
    start, _ = axis.span(signal.window)  # where the first point of `shape` belongs
    first, reach_points = int(start), round(reach / abs(axis.step_ppm))
    low, high = first - reach_points, first + shape.size + reach_points
    if low < 0 or high > axis.size or reach_points < 1:
        return 0.0
    part = spectrum.intensities[low:high]
    if part.max() < SHAPE_SNR * spectrum.noise_sd:
        return 0.0
    score = np.correlate(part, shape - shape.mean(), mode="valid")
    best = int(np.argmax(score))
    if best in (0, score.size - 1):
        return 0.0  # the maximum lies outside the reach: something else stands there
    under = part[best : best + shape.size].astype(np.float64)
    if _likeness(under, shape.astype(np.float64)) < LIKENESS:
        return 0.0
    left, mid, right = (float(v) for v in score[best - 1 : best + 2])
    bend = left - 2 * mid + right
    fraction = 0.5 * (left - right) / bend if bend < 0 else 0.0
    return (first + best + fraction - reach_points - float(start)) * axis.step_ppm


def _likeness(a: Float64, b: Float64) -> float:
    """Correlation coefficient of two stretches of equal length."""
    a, b = a - a.mean(), b - b.mean()
    size = float(np.sqrt((a @ a) * (b @ b)))
    return float(a @ b) / size if size > 0 else 0.0


def window_of(signal: Signal, offset_ppm: float) -> tuple[float, float]:
    """Return the window as it was used, in ppm."""
    return signal.window[0] + offset_ppm, signal.window[1] + offset_ppm


def coverage(axis: Axis, signal: Signal) -> float:
    """Return the part of a window that lies on the axis, 0 … 1."""
    low, high = axis.span(signal.window)
    inside = min(high, axis.size - 1.0) - max(low, 0.0)
    return float(np.clip(inside / (high - low), 0.0, 1.0))


def standard_errors(integrals: Integrals) -> Float64:
    """Return the standard uncertainty of each integral, shape (k,)."""
    return np.asarray(np.sqrt(np.diag(integrals.covariance)), np.float64)
