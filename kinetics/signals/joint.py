"""What a calibration teaches the joint fits: the line's shape, and where the signals stand."""

import numpy as np

from kinetics.signals.lineshape import measured_shape
from kinetics.signals.model import FollowPlan
from kinetics.signals.multiplet import SEEN, fit_group, fitted_groups
from kinetics.signals.multiplet_model import LineModel
from kinetics.spectra.align import line_near
from kinetics.spectra.model import Axis, Float32, Float64

_SHAPE_SNR = 10.0  # a reference line below this has no shape of its own


def line_model(
    plan: FollowPlan,
    corrected: Float32,
    axis: Axis,
    line: tuple[float, float],
    sd: float,
    correlation: Float64,
    frequency: float,
) -> LineModel | None:
    """Return the shape of the reference line, and where the signals fitted together stand.

    Parameters
    ----------
    plan
        What is followed.
    corrected, axis
        The calibration's mean spectrum without baseline.
    line
        Width (ppm) and Lorentzian share of the reference line.
    sd, correlation
        Noise of one point of it, and its autocorrelation.
    frequency
        1H frequency in MHz.

    Returns
    -------
    None where no signal is fitted together with another.
    """
    groups = fitted_groups(plan)
    if not groups:
        return None
    centre, singlet = float("nan"), False
    if plan.reference is not None:
        centre, height = line_near(
            corrected, axis, plan.reference.centre, 0.5 * plan.reference.width
        )
        singlet = height > _SHAPE_SNR * sd
    shape = measured_shape(corrected, axis, centre, *line, sd, singlet=singlet)
    places = np.full(len(plan.all), np.nan)
    model = LineModel(shape, axis.step_ppm, line[0], places, correlation)
    found = places.copy()
    for members in groups:
        fit = fit_group(corrected, axis, frequency, plan.all, members, model, 0.0, sd)
        if fit is None:
            continue
        for place, index in enumerate(members):
            low, high = plan.all[index].window
            error = float(np.sqrt(fit.covariance[place, place]))
            if fit.areas[place] > SEEN * error and low < fit.shifts_ppm[place] < high:
                found[index] = fit.shifts_ppm[place]
    return LineModel(shape, axis.step_ppm, line[0], found, correlation)
