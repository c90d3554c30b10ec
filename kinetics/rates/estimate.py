"""Generalised least squares with the full covariance.

The search is a Levenberg–Marquardt (MINPACK's) from a grid of starts that come from the data. The
grid is tried on a few of the spectra, so that its cost does not grow with the run. What remains
unexplained by stated and estimated covariance (see `noise`) is absorbed by the residual variance,
and intervals are taken from Student's t.
"""

from dataclasses import dataclass

import numpy as np
from scipy.optimize import leastsq
from scipy.stats import chi2

from kinetics.errors import FitError
from kinetics.rates.model import Model
from kinetics.rates.noise import (
    Whitener,
    beyond_chance,
    correlation,
    extra_parts,
    lag_one,
    whitener,
)
from kinetics.rates.series import Float64, Series

__all__ = ["Estimate", "Problem", "Whitener", "estimate", "finished", "lag_one", "whitener"]

_TOLERANCE = 3e-16
_ROUGH = 1e-7
_SAME = 1e-5
_POLISHED_SIZE = 1000  # values; in longer series the last digits are far below the noise
_POLISHED = 3  # Gauss–Newton steps at the end of a search
_TRIED = 3  # the best starts that are followed to the end
_FEW = 60  # spectra on which starts are tried
# Extra parts are estimated only where the plain fit's scatter is unlikely by the stated errors.
_EXCESS_P = 0.01
# Correlation is allowed for wherever it is positive: in independent noise that widens intervals
# by a few per cent, with few spectra in a drift it is what saves them. It is remarked on only
# from `_SURE_SD` standard errors beyond chance. tests/benchmarks/coverage_rates.py shows both.
_ALLOWED_SD = 0.0
_SURE_SD = 1.5
_HUGE = 1e150


@dataclass(frozen=True, slots=True, eq=False)
class Estimate:
    """A law fitted to a series.

    Attributes
    ----------
    x
        Parameter vector of the model, shape (p,).
    covariance
        Of the vector, scaled by the residual variance, shape (p, p).
    whitener
        Used in the fit.
    residuals
        Observed less predicted, shape (n, m).
    whitened
        The same, uncorrelated and of unit variance as far as the covariance is right.
    chi2
        Sum of squares of `whitened`.
    dof
        Degrees of freedom.
    scale
        chi2 / dof: residual variance over the stated one.
    plain_correlation
        Lag-one correlation of the residuals before any was allowed for.
    correlated
        Whether that is beyond chance (one in twenty).
    excess
        chi2 / dof by the stated covariance alone, nan where none was stated.
    """

    x: Float64
    covariance: Float64
    whitener: Whitener
    residuals: Float64
    whitened: Float64
    chi2: float
    dof: int
    scale: float
    plain_correlation: float = 0.0
    correlated: bool = False
    excess: float = float("nan")

    @property
    def minus_two_log_likelihood(self) -> float:
        """−2 ln L with the residual variance at its maximum-likelihood value."""
        count = self.whitened.size
        spread = float(np.log(2 * np.pi * max(self.chi2, 1e-300) / count))
        return count * (1 + spread) + self.whitener.log_det


class Problem:
    """One model and one series; keeps what all searches share."""

    def __init__(self, model: Model, series: Series) -> None:
        self.model, self.series = model, series
        self.data = series.values[:, list(model.columns)]
        block = np.ix_(range(series.size), model.columns, model.columns)
        self.stated = series.covariance[block]
        self.dof = self.data.size - model.size
        if self.dof < 1:
            raise FitError(
                f"{model.law.name}: {self.data.size} values cannot determine {model.size} "
                "parameters and their uncertainty; wait for more spectra"
            )

    def predict(self, x: Float64) -> Float64:
        """Return the fitted curve at the spectra, shape (n, m)."""
        curve = self.model.predict(x, self.series.time_s, self.series.acquisition_s)
        return np.asarray(np.real(curve), np.float64)

    def jacobian(self, x: Float64) -> Float64:
        """Return its derivative, shape (n, m, p)."""
        return self.model.jacobian(x, self.series.time_s, self.series.acquisition_s)

    def thinned(self) -> "Problem":
        """Return the problem on a few spectra spread evenly over the run."""
        if self.series.size <= _FEW:
            return self
        rows = np.unique(np.linspace(0, self.series.size - 1, _FEW).astype(np.intp))
        return Problem(self.model, self.series.select(rows))

    def search(
        self, x: Float64, w: Whitener, fixed: int | None = None, tolerance: float = _TOLERANCE
    ) -> tuple[Float64, float]:
        """Minimise from a start, with one element of the vector held if `fixed` is given."""
        free = [i for i in range(x.size) if i != fixed]
        full = np.array(x, np.float64)

        def place(part: Float64) -> Float64:
            full[free] = part
            return full

        def rest(part: Float64) -> Float64:
            value = w.apply(self.predict(place(part)) - self.data).ravel()
            return np.asarray(np.where(np.isfinite(value), value, _HUGE), np.float64)

        def slope(part: Float64) -> Float64:
            value = w.apply_jacobian(self.jacobian(place(part)))[:, free]
            return np.asarray(np.where(np.isfinite(value), value, 0.0), np.float64)

        with np.errstate(all="ignore"):
            if free:
                found = leastsq(
                    rest,
                    full[free],
                    Dfun=slope,
                    full_output=True,
                    xtol=tolerance,
                    ftol=tolerance,
                    gtol=0.0,
                    maxfev=400,
                )
                place(np.asarray(found[0], np.float64))
            value = rest(full[free])
            cost = float(value @ value)
            polished = free and tolerance == _TOLERANCE and value.size <= _POLISHED_SIZE
            for _ in range(_POLISHED if polished else 0):
                # The sum of squares is flat to its last digit long before its slope is nought.
                before = np.array(full[free])
                jacobian = slope(before)
                size = np.linalg.norm(jacobian, axis=0)
                if not np.all(size > 0):
                    break
                move = np.linalg.lstsq(jacobian / size, -value, rcond=1e-14)[0] / size
                trial = rest(before + move)
                if not float(trial @ trial) <= cost * (1 + 1e-9):
                    place(before)
                    break
                value, cost = trial, float(trial @ trial)
                if np.all(np.abs(move) <= 1e-13 * np.abs(before)):
                    break
        return np.array(full), cost

    def best(self, w: Whitener) -> tuple[Float64, float]:
        """Minimise from the grid of starts; `w` is used for the end of the search."""
        few = self.thinned()
        rough = w if few is self else whitener(few.stated)
        with np.errstate(all="ignore"):
            costs = []
            for x in self.model.starts(few.series):
                rest = rough.apply(few.predict(x) - few.data)
                cost = float((rest**2).sum())
                costs.append((cost if np.isfinite(cost) else np.inf, x))
        costs.sort(key=lambda item: item[0])
        found: list[tuple[Float64, float]] = []
        for _, x in costs[: max(_TRIED, len(self.model.law.rates))]:
            found.append(few.search(x, rough, tolerance=_ROUGH))
            if len(found) > 1 and abs(found[-1][1] - found[-2][1]) <= _SAME * found[-1][1]:
                break  # two starts that end alike need no third
        return self.search(min(found, key=lambda item: item[1])[0], w)


def estimate(problem: Problem, as_stated: bool = False) -> Estimate:
    """Fit a model to a series.

    Parameters
    ----------
    as_stated
        Take the stated covariance up to a factor and estimate no further part: ordinary weighted
        least squares, as most published fits are.

    Raises
    ------
    FitError
        If there are too few values, or the search does not end in finite values.
    """
    stated = problem.series.stated
    w = whitener(problem.stated)
    x, cost = problem.best(w)
    excess = cost / problem.dof if stated else float("nan")
    if as_stated:
        return _checked(problem, x, cost, w, (0.0, False, excess))
    more = chi2.sf(cost, problem.dof) < _EXCESS_P if stated else problem.data.shape[1] > 1
    parts: tuple[float, float] | None = None
    for _ in range(2 if more and cost > 0 else 0):
        curve = problem.predict(x)
        # Where nothing is stated all of the noise is estimated.
        base = problem.stated if stated else problem.stated * (1e-6 * cost / problem.dof)
        parts = extra_parts(base, problem.data - curve, problem.jacobian(x), curve, parts)
        if not any(parts):
            break
        w = whitener(base, *parts, curve)
        x, cost = problem.search(x, w)
    rest, jacobian = problem.data - problem.predict(x), problem.jacobian(x)
    plain = w.apply(rest)
    distance = beyond_chance(plain, w.apply_jacobian(jacobian))
    if distance > _ALLOWED_SD:
        rho = correlation(w, rest, jacobian)
        w = w.correlated(rho)
        x, cost = problem.search(x, w)
    return _checked(problem, x, cost, w, (lag_one(plain), distance > _SURE_SD, excess))


def _checked(
    problem: Problem, x: Float64, cost: float, w: Whitener, noticed: tuple[float, bool, float]
) -> Estimate:
    if not np.all(np.isfinite(x)) or not np.isfinite(cost):
        raise FitError(f"{problem.model.law.name}: the fit does not converge on these data")
    return finished(problem, x, w, noticed)


def finished(
    problem: Problem,
    x: Float64,
    w: Whitener,
    noticed: tuple[float, bool, float] = (0.0, False, float("nan")),
) -> Estimate:
    """Gather what belongs to a minimum."""
    residuals = problem.data - problem.predict(x)
    whitened = w.apply(residuals)
    slope = w.apply_jacobian(problem.jacobian(x))
    cost = float((whitened**2).sum())
    scale = cost / problem.dof
    return Estimate(
        x=x,
        covariance=_inverse_normal(slope) * scale,
        whitener=w,
        residuals=residuals,
        whitened=whitened,
        chi2=cost,
        dof=problem.dof,
        scale=scale,
        plain_correlation=noticed[0],
        correlated=noticed[1],
        excess=noticed[2],
    )


def _inverse_normal(slope: Float64) -> Float64:
    """Return (J'J)⁻¹ by a QR of the column-scaled Jacobian."""
    size = np.linalg.norm(slope, axis=0)
    size = np.where(size > 0, size, 1.0)
    upper = np.linalg.qr(slope / size, mode="r")
    with np.errstate(all="ignore"):
        inverse = np.linalg.pinv(upper)
    return np.asarray((inverse @ inverse.T) / np.outer(size, size), np.float64)
