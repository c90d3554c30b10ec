"""Generalised least squares with the full covariance, and profile-likelihood intervals.

The stated covariance of each spectrum (noise of the windows and of the shared reference) is a
block. Where the scatter about the fit is larger than it says, two further parts are estimated by
restricted maximum likelihood (Patterson & Thompson 1971): a white part equal for all values,
and a shared part proportional to the values (a wandering reference). What then remains is
absorbed by the residual variance, and intervals are taken from Student's t.
"""

from dataclasses import dataclass, replace

import numpy as np
from scipy.optimize import least_squares, minimize, minimize_scalar
from scipy.stats import chi2

from kinetics.errors import FitError
from kinetics.rates.model import Model, starts
from kinetics.rates.series import Float64, Series

_TOLERANCE = 3e-16
_TRIED = 3  # the best starts that are followed to the end
# Extra parts are estimated only where the plain fit's scatter is unlikely by the stated errors.
_EXCESS_P = 0.01
_FEWEST_FOR_CORRELATION = 10
_CORRELATION_SD = 2.33  # one-sided, 1 %
_HIGHEST_CORRELATION = 0.97


@dataclass(frozen=True, slots=True, eq=False)
class Whitener:
    """Turns residuals of shape (n, m) into uncorrelated ones of unit variance.

    Attributes
    ----------
    inverse
        Inverse Cholesky factor of each block, shape (n, m, m).
    log_det
        Logarithm of the determinant of the whole covariance.
    white, shared
        Variances of the extra white part (amount²) and of the shared relative part.
    rho
        Correlation of neighbouring spectra.
    """

    inverse: Float64
    log_det: float
    white: float = 0.0
    shared: float = 0.0
    rho: float = 0.0

    @property
    def extra_parts(self) -> int:
        """Number of variance parts that were estimated."""
        return sum(1 for part in (self.white, self.shared, self.rho) if part)

    def apply(self, values: Float64) -> Float64:
        """Whiten residuals, shape (n, m) → (n, m)."""
        return self._innovations(np.einsum("nij,nj->ni", self.inverse, values))

    def apply_jacobian(self, jacobian: Float64) -> Float64:
        """Whiten a Jacobian, shape (n, m, p) → (n m, p)."""
        return self._innovations(self.inverse @ jacobian).reshape(-1, jacobian.shape[2])

    def _innovations(self, values: Float64) -> Float64:
        """Take from each spectrum what the one before it foretells."""
        if self.rho == 0.0 or values.shape[0] < 2:
            return values
        out = np.array(values)
        out[1:] = (values[1:] - self.rho * values[:-1]) / np.sqrt(1 - self.rho**2)
        return out

    def correlated(self, rho: float) -> "Whitener":
        """Return the whitener for neighbouring spectra correlated by `rho` (AR(1))."""
        spectra, species = self.inverse.shape[0], self.inverse.shape[1]
        plain = self.log_det - species * (spectra - 1) * np.log1p(-(self.rho**2))
        log_det = plain + species * (spectra - 1) * np.log1p(-(rho**2))
        return replace(self, log_det=float(log_det), rho=rho)


def whitener(
    covariance: Float64, white: float = 0.0, shared: float = 0.0, curve: Float64 | None = None
) -> Whitener:
    """Build a whitener from the stated covariance and the extra parts.

    Raises
    ------
    FitError
        If a covariance is not positive definite.
    """
    total = covariance
    if white:
        total = total + white * np.eye(covariance.shape[1])
    if shared and curve is not None:
        total = total + shared * curve[:, :, None] * curve[:, None, :]
    try:
        lower = np.linalg.cholesky(total)
    except np.linalg.LinAlgError:
        raise FitError("the covariance of a spectrum's amounts is not positive definite") from None
    diagonal = np.einsum("nii->ni", lower)
    return Whitener(np.linalg.inv(lower), 2.0 * float(np.log(diagonal).sum()), white, shared)


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
    """

    x: Float64
    covariance: Float64
    whitener: Whitener
    residuals: Float64
    whitened: Float64
    chi2: float
    dof: int
    scale: float

    @property
    def minus_two_log_likelihood(self) -> float:
        """−2 ln L with the residual variance at its maximum-likelihood value."""
        count = self.whitened.size
        spread = float(np.log(2 * np.pi * self.chi2 / count))
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
            return np.asarray(np.where(np.isfinite(value), value, 1e150), np.float64)

        def slope(part: Float64) -> Float64:
            value = w.apply_jacobian(self.jacobian(place(part)))[:, free]
            return np.asarray(np.where(np.isfinite(value), value, 0.0), np.float64)

        if not free:
            value = rest(np.zeros(0))
            return full, float(value @ value)
        with np.errstate(all="ignore"):
            found = least_squares(
                rest,
                full[free],
                jac=slope,
                method="lm",
                x_scale="jac",
                xtol=tolerance,
                ftol=tolerance,
                gtol=tolerance,
                max_nfev=400,
            )
        return np.array(place(found.x)), float(2 * found.cost)

    def best(self, w: Whitener) -> tuple[Float64, float]:
        """Minimise from the grid of starts."""
        with np.errstate(all="ignore"):
            costs = []
            for x in starts(self.model, self.series):
                rest = w.apply(self.predict(x) - self.data)
                cost = float((rest**2).sum())
                costs.append((cost if np.isfinite(cost) else np.inf, x))
        costs.sort(key=lambda item: item[0])
        found = [self.search(x, w) for _, x in costs[:_TRIED]]
        return min(found, key=lambda item: item[1])


def lag_one(whitened: Float64) -> float:
    """Return the correlation of neighbouring residuals, pooled over the species, shape (n, m)."""
    total = float((whitened**2).sum())
    return float((whitened[1:] * whitened[:-1]).sum()) / total if total > 0 else 0.0


def is_correlated(whitened: Float64, parameters: int) -> bool:
    """Whether neighbouring residuals are positively correlated beyond chance (one in a hundred).

    A fit of p parameters makes residuals of independent noise negatively correlated, by about
    p over the number of spectra and species; the bound allows for that.
    """
    spectra, count = whitened.shape[0], whitened.size
    if spectra < _FEWEST_FOR_CORRELATION:
        return False
    return bool(lag_one(whitened) > _CORRELATION_SD / np.sqrt(count) - parameters / count)


def estimate(problem: Problem) -> Estimate:
    """Fit a model to a series.

    Raises
    ------
    FitError
        If there are too few values, or the search does not end in finite values.
    """
    w = whitener(problem.stated)
    x, cost = problem.best(w)
    for _ in range(2):
        if chi2.sf(cost, problem.dof) > _EXCESS_P and not (w.white or w.shared):
            break
        white, shared = _reml(problem, x)
        w = whitener(problem.stated, white, shared, problem.predict(x))
        x, cost = problem.search(x, w)
    if is_correlated(w.apply(problem.data - problem.predict(x)), problem.model.size):
        w = w.correlated(_correlation(problem, x, w))
        x, cost = problem.search(x, w)
    if not np.all(np.isfinite(x)) or not np.isfinite(cost):
        raise FitError(f"{problem.model.law.name}: the fit does not converge on these data")
    return finished(problem, x, w)


def finished(problem: Problem, x: Float64, w: Whitener) -> Estimate:
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
    )


def _inverse_normal(slope: Float64) -> Float64:
    """Return (J'J)⁻¹ by a QR of the column-scaled Jacobian."""
    size = np.linalg.norm(slope, axis=0)
    size = np.where(size > 0, size, 1.0)
    upper = np.linalg.qr(slope / size, mode="r")
    with np.errstate(all="ignore"):
        inverse = np.linalg.pinv(upper)
    return np.asarray((inverse @ inverse.T) / np.outer(size, size), np.float64)


def _correlation(problem: Problem, x: Float64, w: Whitener) -> float:
    """Estimate the correlation of neighbouring spectra by restricted maximum likelihood."""
    rest, slope = problem.data - problem.predict(x), problem.jacobian(x)

    def objective(rho: float) -> float:
        trial = w.correlated(rho)
        a, b = trial.apply_jacobian(slope), trial.apply(rest).ravel()
        upper = np.linalg.qr(a, mode="r")
        left = b - a @ np.linalg.lstsq(a, b, rcond=None)[0]
        log_normal = 2 * float(np.log(np.maximum(np.abs(np.diag(upper)), 1e-300)).sum())
        spread = float(np.log(left @ left / problem.dof))
        return trial.log_det + log_normal + problem.dof * spread

    found = minimize_scalar(objective, bounds=(0.0, _HIGHEST_CORRELATION), method="bounded")
    return float(found.x)


def _reml(problem: Problem, x: Float64) -> tuple[float, float]:
    """Estimate the extra white and shared variances with the curve linearised about x."""
    curve, slope = problem.predict(x), problem.jacobian(x)
    rest = problem.data - curve
    typical = float(np.mean(np.einsum("nii->ni", problem.stated)))
    excess = max(float(np.mean(rest**2)), 1e-30)
    size2 = max(float(np.mean(curve**2)), 1e-30)
    joint = curve.shape[1] > 1

    def objective(logs: Float64) -> float:
        white = float(np.exp(logs[0]))
        shared = float(np.exp(logs[1])) if joint else 0.0
        w = whitener(problem.stated, white, shared, curve)
        a, b = w.apply_jacobian(slope), w.apply(rest).ravel()
        upper = np.linalg.qr(a, mode="r")
        projected = b - a @ np.linalg.lstsq(a, b, rcond=None)[0]
        diagonal = np.abs(np.diag(upper))
        log_normal = 2 * float(np.log(np.maximum(diagonal, 1e-300)).sum())
        return w.log_det + log_normal + float(projected @ projected)

    floor = 1e-8
    begin = [np.log(max(excess - typical, 0.1 * excess))]
    limits = [(np.log(floor * excess), np.log(100 * excess))]
    if joint:
        begin.append(np.log(max(0.1 * excess / size2, 1e-12)))
        limits.append((np.log(floor * excess / size2), np.log(100 * excess / size2)))
    found = minimize(objective, np.array(begin), method="L-BFGS-B", bounds=limits)
    white = float(np.exp(found.x[0]))
    shared = float(np.exp(found.x[1])) if joint else 0.0
    return (
        white if white > 10 * floor * excess else 0.0,
        shared if shared > 10 * floor * excess / size2 else 0.0,
    )
