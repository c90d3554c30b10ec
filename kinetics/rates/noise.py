"""The covariance of what a law leaves: stated, and estimated where the scatter demands it.

The stated covariance of each spectrum (noise of the windows and of the shared reference) is a
block. Where the scatter about the fit is larger than it says, two further parts are estimated by
restricted maximum likelihood (Patterson & Thompson, Biometrika 58 (1971) 545; average-information
steps of Gilmour, Thompson & Cullis, Biometrics 51 (1995) 1440): a white part equal for all
values, and a shared part proportional to the values (a wandering reference). Neighbouring
spectra may further be correlated, AR(1), also estimated.
"""

from dataclasses import dataclass, replace

import numpy as np

from kinetics.errors import FitError
from kinetics.rates.series import Float64

_RHO_GRID = np.linspace(0.0, 0.97, 98)
_FLOOR = 1e-8  # of the residual variance: an estimated part below ten times this is none
_STEPS = 30
_FEWEST_SPECTRA, _FEWEST_DOF = 5, 4
_CLOSE = 5e-3  # in the logarithm of a variance; its own standard error is far larger
_NOTHING_GAINED = 0.01  # in −2 ln L
_PART = 400  # spectra that show where to start
_LONGEST_STEP = 2.0  # in the logarithm of a variance


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
        return self._innovations(lower_times(self.inverse, values[:, :, None])[:, :, 0])

    def apply_jacobian(self, jacobian: Float64) -> Float64:
        """Whiten a Jacobian, shape (n, m, p) → (n m, p)."""
        whitened = self._innovations(lower_times(self.inverse, jacobian))
        return whitened.reshape(-1, jacobian.shape[2])

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


def lower_times(lower: Float64, right: Float64) -> Float64:
    """Multiply lower triangular blocks (n, m, m) by (n, m, p).

    Written out over the few species: many small matrix products cost more than the arithmetic.
    """
    out = np.empty_like(right)
    for i in range(lower.shape[1]):
        total = lower[:, i, 0, None] * right[:, 0]
        for j in range(1, i + 1):
            total = total + lower[:, i, j, None] * right[:, j]
        out[:, i] = total
    return out


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
        lower = np.asarray(np.linalg.cholesky(total), np.float64)
    except np.linalg.LinAlgError:
        raise FitError("the covariance of a spectrum's amounts is not positive definite") from None
    diagonal = np.einsum("nii->ni", lower)
    return Whitener(inverse_lower(lower), 2.0 * float(np.log(diagonal).sum()), white, shared)


def inverse_lower(lower: Float64) -> Float64:
    """Invert lower triangular blocks, shape (n, m, m), by forward substitution."""
    out = np.zeros_like(lower)
    size = lower.shape[1]
    for i in range(size):
        out[:, i, i] = 1.0 / lower[:, i, i]
        for j in range(i):
            total = (lower[:, i, j:i] * out[:, j:i, j]).sum(axis=1)
            out[:, i, j] = -total * out[:, i, i]
    return out


def lag_one(whitened: Float64) -> float:
    """Return the correlation of neighbouring residuals, pooled over the species, shape (n, m)."""
    total = float((whitened**2).sum())
    return float((whitened[1:] * whitened[:-1]).sum()) / total if total > 0 else 0.0


def beyond_chance(whitened: Float64, slope: Float64) -> float:
    """Return the lag-one correlation in standard errors beyond what independent noise leaves.

    A fit makes residuals of independent noise negatively correlated; mean and variance of the
    statistic under independence are exact (Durbin & Watson, Biometrika 37 (1950) 409).

    Parameters
    ----------
    whitened
        Shape (n, m).
    slope
        Whitened Jacobian, shape (n m, p).

    Returns
    -------
    float
        −inf for too few spectra.
    """
    n, m = whitened.shape
    size = np.linalg.norm(slope, axis=0)
    q = np.linalg.qr(slope[:, size > 0] / size[size > 0])[0]
    dof = n * m - q.shape[1]
    if n < _FEWEST_SPECTRA or dof < _FEWEST_DOF:
        return -np.inf
    shifted = _neighbours(q.reshape(n, m, -1)).reshape(n * m, -1)
    inner = q.T @ shifted
    first = -float(np.trace(inner))
    second = 0.5 * m * (n - 1) - 2 * float((shifted**2).sum()) + float((inner**2).sum())
    mean = first / dof
    variance = 2 * (second - first**2 / dof) / (dof * (dof + 2))
    return float((lag_one(whitened) - mean) / np.sqrt(variance)) if variance > 0 else -np.inf


def _neighbours(rows: Float64) -> Float64:
    """Half the sum of the rows before and after, shape (n, m, p)."""
    out = np.zeros_like(rows)
    out[1:] += 0.5 * rows[:-1]
    out[:-1] += 0.5 * rows[1:]
    return out


@dataclass(frozen=True, slots=True, eq=False)
class _Pieces:
    """Restricted likelihood at trial variances: −2 ln L, its slope and average information."""

    value: float
    slope: Float64
    information: Float64


def extra_parts(
    stated: Float64,
    rest: Float64,
    jacobian: Float64,
    curve: Float64,
    begin: tuple[float, float] | None = None,
) -> tuple[float, float]:
    """Estimate the extra white and shared variances with the curve linearised about the fit.

    Parameters
    ----------
    stated
        Covariance of each spectrum, shape (n, m, m).
    rest, curve
        Residuals and fitted values, shape (n, m).
    jacobian
        Derivative of the curve, shape (n, m, p).
    begin
        Where to start; default: from what a part of the spectra shows.

    Returns
    -------
    white, shared
        Zero where the data show no such part. The shared part is looked for only where more
        than one species is observed: with one it cannot be told from other errors.
    """
    joint = curve.shape[1] > 1
    excess = max(float(np.mean(rest**2)), 1e-300)
    typical = float(np.mean(np.einsum("nii->ni", stated)))
    unit = np.array([excess, excess / max(float(np.mean(curve**2)), 1e-300)])
    part = max(rest.shape[0] // _PART, 1)
    if begin is None and part > 1:
        begin = extra_parts(stated[::part], rest[::part], jacobian[::part], curve[::part])
    at = np.array([max(1.0 - typical / excess, 0.1), 0.1])
    if begin is not None:
        at = np.maximum(np.array(begin) / unit, _FLOOR)
    unit = unit[: 1 + joint]
    logs = np.log(at[: 1 + joint])
    limits = np.log(_FLOOR), np.log(100.0)
    here = _pieces(np.exp(logs) * unit, stated, rest, jacobian, curve)
    for _ in range(_STEPS):
        theta = np.exp(logs) * unit
        slope = here.slope * theta
        information = here.information * np.outer(theta, theta)
        ridge = 1e-9 + 1e-6 * np.trace(information)
        move = -np.linalg.solve(information + ridge * np.eye(theta.size), slope)
        longest = float(np.max(np.abs(move)))
        move *= min(1.0, _LONGEST_STEP / max(longest, 1e-300))
        for _ in range(8):
            trial_logs = np.clip(logs + move, *limits)
            trial = _pieces(np.exp(trial_logs) * unit, stated, rest, jacobian, curve)
            if trial.value <= here.value + 1e-9:
                break
            move = move * 0.4
        else:
            break
        moved = float(np.max(np.abs(trial_logs - logs)))
        gained = here.value - trial.value
        logs, here = trial_logs, trial
        if moved < _CLOSE or gained < _NOTHING_GAINED:
            break
    theta = np.where(np.exp(logs) > 10 * _FLOOR, np.exp(logs) * unit, 0.0)
    return float(theta[0]), float(theta[1]) if joint else 0.0


def _pieces(
    theta: Float64, stated: Float64, rest: Float64, jacobian: Float64, curve: Float64
) -> _Pieces:
    shared = float(theta[1]) if theta.size > 1 else 0.0
    w = whitener(stated, float(theta[0]), shared, curve)
    a, b = w.apply_jacobian(jacobian), w.apply(rest).ravel()
    size = np.linalg.norm(a, axis=0)
    a = a / np.where(size > 0, size, 1.0)
    q, upper = np.linalg.qr(a)
    left = b - q @ (q.T @ b)  # whitened P y
    log_normal = 2 * float(np.log(np.maximum(np.abs(np.diag(upper)), 1e-300)).sum())
    log_normal += 2 * float(np.log(np.maximum(size, 1e-300)).sum())
    value = w.log_det + log_normal + float(left @ left)
    # A part of the covariance, whitened, is G G' with G = L⁻¹ (white) or L⁻¹ c (shared).
    n, m = rest.shape
    left_rows, q_rows = left.reshape(n, m), q.reshape(n, m, -1)
    columns = [w.inverse]
    if theta.size > 1:
        columns.append(lower_times(w.inverse, curve[:, :, None]))
    slope, directions = [], []
    for g in columns:
        trace = float((g**2).sum()) - float((np.einsum("nmk,nmp->nkp", g, q_rows) ** 2).sum())
        along = np.einsum("nmk,nm->nk", g, left_rows)
        slope.append(trace - float((along**2).sum()))
        directions.append(np.einsum("nmk,nk->nm", g, along).ravel())
    stack = np.stack(directions, axis=1)
    stack_left = stack - q @ (q.T @ stack)
    return _Pieces(value, np.array(slope), stack.T @ stack_left)


def correlation(w: Whitener, rest: Float64, jacobian: Float64) -> float:
    """Estimate the correlation of neighbouring spectra by restricted likelihood.

    The mean of the restricted likelihood over correlations from 0 to 0.97 is taken, not its
    peak: with few spectra the peak lies too low too often.

    Parameters
    ----------
    w
        Whitener of the single spectra.
    rest, jacobian
        Residuals, shape (n, m), and derivative of the curve, shape (n, m, p).
    """
    b = lower_times(w.inverse, rest[:, :, None])
    a = lower_times(w.inverse, jacobian)
    size = np.linalg.norm(a, axis=(0, 1))
    both = np.concatenate((a / np.where(size > 0, size, 1.0), b), axis=2)
    now, before = both[1:], both[:-1]
    # All that the likelihood needs are four sums of squares and products.
    first = both[0].T @ both[0]
    here, lagged = (np.tensordot(v, v, axes=((0, 1), (0, 1))) for v in (now, before))
    cross = np.tensordot(now, before, axes=((0, 1), (0, 1)))
    n, m = rest.shape
    dof = n * m - a.shape[2]
    costs = []
    for rho in _RHO_GRID:
        total = first + (here - rho * (cross + cross.T) + rho**2 * lagged) / (1 - rho**2)
        lower = np.linalg.cholesky(total + 1e-13 * np.diag(np.diag(total)))
        log_diagonal = 2 * np.log(np.diag(lower))
        log_det = m * (n - 1) * float(np.log1p(-(rho**2)))
        costs.append(log_det + float(log_diagonal[:-1].sum()) + dof * float(log_diagonal[-1]))
    weight = np.exp(-0.5 * (np.array(costs) - min(costs)))
    return float((weight * _RHO_GRID).sum() / weight.sum())
