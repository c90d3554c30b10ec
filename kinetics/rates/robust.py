"""A refit that outliers cannot pull, and the names of the outliers. Nothing is ever dropped.

Weights come from a t-distribution of the spectra's errors (Lange, Little & Taylor, J. Am. Statist.
Assoc. 84 (1989) 881): (ν + m)/(ν + d²) for a spectrum at the distance d, ν = 4.
"""

from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt
from scipy.stats import chi2

from kinetics.rates.estimate import Estimate, Problem
from kinetics.rates.noise import Whitener
from kinetics.rates.series import Float64

_NU = 4.0
_ROUNDS = 25
_SETTLED = 1e-6
_SUSPECT_P, _OUTLIER_P = 0.05, 0.01  # for the farthest of all spectra
_FEWEST = 6


@dataclass(frozen=True, slots=True, eq=False)
class Robust:
    """A robust refit.

    Attributes
    ----------
    x
        Parameter vector, shape (p,).
    weights
        Say of each spectrum, 1 where it scatters as the rest, shape (n,).
    outliers
        Indices of the spectra that do not belong, ascending.
    """

    x: Float64
    weights: Float64
    outliers: npt.NDArray[np.intp]


def suspicious(found: Estimate) -> bool:
    """Whether a spectrum lies so far off that a robust refit is worth its time."""
    distance = _distances(found.whitener.correlated(0.0), found.residuals)
    n, m = found.residuals.shape
    return bool(n >= _FEWEST and distance.max() > chi2.isf(_SUSPECT_P / n, m))


def robust_refit(problem: Problem, found: Estimate) -> Robust:
    """Fit again with weights that fall with the distance from the curve."""
    w = found.whitener.correlated(0.0)
    x = np.array(found.x)
    n, m = found.residuals.shape
    weights = np.ones(n)
    for _ in range(_ROUNDS):
        distance = _distances(w, problem.data - problem.predict(x))
        weights = np.minimum((_NU + m) / (_NU + distance), 1.0)
        weighted = replace(w, inverse=w.inverse * np.sqrt(weights)[:, None, None])
        moved, _ = problem.search(x, weighted, tolerance=1e-10)
        change = float(np.max(np.abs(moved - x) / np.maximum(np.abs(x), 1e-12)))
        x = moved
        if change < _SETTLED:
            break
    distance = _distances(w, problem.data - problem.predict(x))
    return Robust(x, weights, np.flatnonzero(distance > chi2.isf(_OUTLIER_P / n, m)))


def _distances(w: Whitener, rest: Float64) -> Float64:
    """Squared distance of each spectrum, scaled by the median spectrum, shape (n,)."""
    squared = np.asarray((w.apply(rest) ** 2).sum(axis=1), np.float64)
    typical = float(np.median(squared)) / float(chi2.median(rest.shape[1]))
    return squared / typical if typical > 0 else np.zeros_like(squared)
