"""The order in a reactant from runs at different starting concentrations.

Two ways: the slope of ln(initial rate) against ln(concentration), and a time-normalised
comparison, in which the time axis of each run is replaced by ∫ c^n dt and the order n sought that
lays the curves of all runs over each other (J. Burés, Angew. Chem. Int. Ed. 55 (2016) 2028 and
16084). The second uses the whole curves and needs no law.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from math import nan

import numpy as np
from scipy.optimize import brentq, minimize_scalar
from scipy.stats import t as student

from kinetics.errors import InputError
from kinetics.rates.across import straight_line
from kinetics.rates.fitting import Quantity
from kinetics.rates.series import Float64

_RANGE = (-2.0, 4.0)
_DEGREE = 5
_FINE = 400  # steps of the interpolated concentration


@dataclass(frozen=True, slots=True)
class InitialRate:
    """Rate of a run at its start, and the concentration it is set against.

    Attributes
    ----------
    run
        Name.
    concentration
        Of the reactant whose order is sought, mol/L.
    rate, standard_error
        mol/(L s).
    """

    run: str
    concentration: float
    rate: float
    standard_error: float


def order_from_initial_rates(rates: Sequence[InitialRate], confidence: float = 0.95) -> Quantity:
    """Return the order in a reactant with its interval; what else differs is not allowed for.

    Raises
    ------
    InputError
        If there are fewer than two concentrations, or a value is not positive.

    Examples
    --------
    >>> runs = [InitialRate(str(c), c, 2e-4 * c**2, 2e-6 * c**2) for c in (0.1, 0.2, 0.4)]
    >>> round(order_from_initial_rates(runs).value, 6)
    2.0
    """
    for r in rates:
        if not (r.concentration > 0 and r.rate > 0):
            raise InputError(f"{r.run}: concentration and initial rate must be positive")
    x = np.log([r.concentration for r in rates])
    if len(rates) < 2 or float(np.ptp(x)) < 1e-6:
        raise InputError("an order needs runs at two concentrations at least")
    variances = np.array([(r.standard_error / r.rate) ** 2 for r in rates])
    design = np.c_[np.ones(x.size), x - x.mean()]
    line = straight_line(design, np.log([r.rate for r in rates]), variances, confidence)
    return line.interval(0.0, 1.0)


@dataclass(frozen=True, slots=True, eq=False)
class Course:
    """What a time-normalised comparison needs of a run.

    Attributes
    ----------
    run
        Name.
    time_s
        Shape (n,), ascending.
    concentration
        Of the reactant whose order is sought, mol/L, shape (n,); a constant for a catalyst.
    formed
        Amount turned over (product formed, or reactant gone), mol/L, shape (n,).
    """

    run: str
    time_s: Float64
    concentration: Float64
    formed: Float64


@dataclass(frozen=True, slots=True, eq=False)
class Overlay:
    """Order that lays the runs over each other.

    Attributes
    ----------
    order
        With interval; nan on a side where the curves overlay as well out to the end of the range.
    residual_sd
        Scatter about the common curve, mol/L.
    times
        The normalised time of each run at the best order, as plotted, shape (n,) each.
    """

    order: Quantity
    residual_sd: float
    times: tuple[Float64, ...]


def time_normalised_order(courses: Sequence[Course], confidence: float = 0.95) -> Overlay:
    """Find the order in a reactant at which the runs fall on one curve.

    The common curve is a polynomial of fifth degree through all points; the interval ends where
    its sum of squares has grown by t² residual variances.

    Raises
    ------
    InputError
        If there are fewer than two runs, too few points, or a concentration is not positive.
    """
    if len(courses) < 2:
        raise InputError("a time-normalised comparison needs two runs at least")
    count = sum(c.time_s.size for c in courses)
    dof = count - _DEGREE - 2
    if dof < 4:
        raise InputError(f"{count} points are too few for a time-normalised comparison")
    for c in courses:
        if not np.all(c.concentration > 0):
            raise InputError(
                f"{c.run}: concentrations must be positive; cut the run before its end"
            )
    formed = np.concatenate([c.formed for c in courses])
    typical = float(np.exp(np.mean([np.log(c.concentration).mean() for c in courses])))

    def cost(order: float) -> float:
        times = np.concatenate([normalised_time(c, order, typical) for c in courses])
        return _scatter(times, formed)

    grid = np.linspace(*_RANGE, 61)
    start = int(np.argmin([cost(n) for n in grid]))
    low, high = grid[max(start - 1, 0)], grid[min(start + 1, grid.size - 1)]
    best = float(minimize_scalar(cost, bounds=(low, high), method="bounded").x)
    least = cost(best)
    variance = least / dof
    goal = least + float(student.ppf(0.5 + confidence / 2, dof)) ** 2 * variance

    def end(sign: float) -> float:
        inside = best
        for far in np.arange(0.05, _RANGE[1] - _RANGE[0], 0.05):
            here = best + sign * far
            if not _RANGE[0] <= here <= _RANGE[1]:
                return nan
            if cost(here) > goal:
                return float(brentq(lambda n: cost(n) - goal, inside, here, xtol=1e-6))
            inside = here
        return nan

    times = tuple(normalised_time(c, best, typical) for c in courses)
    return Overlay(Quantity(best, end(-1.0), end(1.0)), float(np.sqrt(variance)), times)


def normalised_time(course: Course, order: float, typical: float = 1.0) -> Float64:
    """Return ∫ (c/typical)^order dt from the run's start, shape (n,)."""
    fine = np.union1d(np.linspace(0.0, float(course.time_s[-1]), _FINE), course.time_s)
    c = np.interp(fine, course.time_s, np.log(course.concentration / typical))
    rate = np.exp(order * c)
    steps = 0.5 * (rate[1:] + rate[:-1]) * np.diff(fine)
    total = np.concatenate(([0.0], np.cumsum(steps)))
    return np.asarray(np.interp(course.time_s, fine, total), np.float64)


def _scatter(times: Float64, formed: Float64) -> float:
    """Sum of squares about the common curve."""
    scaled = 2 * times / float(times.max()) - 1
    basis = np.polynomial.chebyshev.chebvander(scaled, _DEGREE)
    rest = formed - basis @ np.linalg.lstsq(basis, formed, rcond=None)[0]
    return float(rest @ rest)
