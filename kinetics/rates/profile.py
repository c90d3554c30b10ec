"""Profile-likelihood intervals, calibrated by Student's t.

For a trial value of one parameter all others are fitted again; the interval ends where the sum of
squares has grown by t² residual variances (Bates & Watts, Nonlinear Regression Analysis, 1988,
chapter 6). Where it never grows that much the data do not bound the parameter on that side.
"""

from dataclasses import dataclass

import numpy as np
from scipy.stats import t as student

from kinetics.rates.estimate import Estimate, Problem
from kinetics.rates.series import Float64

# Searched this many standard errors away, and to a factor e^7 ≈ 1000 for a rate constant.
_FARTHEST_SE = 60.0
_FARTHEST_LOG = 7.0
_CLOSE = 1e-6  # relative, of the t-scaled distance


@dataclass(frozen=True, slots=True, eq=False)
class Profile:
    """Interval of one parameter, and the curve behind it.

    Attributes
    ----------
    low, high
        Ends in the parameter's own unit; nan on a side that the data do not bound.
    values
        Trial values, ascending, shape (q,).
    deltas
        Signed root of the growth of the sum of squares over the residual variance, shape (q,):
        ±t at the ends of the interval.
    """

    low: float
    high: float
    values: Float64
    deltas: Float64


def profile(problem: Problem, found: Estimate, index: int, confidence: float) -> Profile:
    """Profile one parameter.

    Parameters
    ----------
    problem, found
        The problem and its minimum.
    index
        Which parameter.
    confidence
        Two-sided, e.g. 0.95.
    """
    goal = float(student.ppf(0.5 + confidence / 2, found.dof))
    points = [(float(found.x[index]), 0.0)]
    ends = [_end(problem, found, index, sign, goal, points) for sign in (-1.0, 1.0)]
    points.sort()
    raw = np.array([p[0] for p in points])
    natural = np.array([_natural(problem, found.x, index, v) for v in raw])
    low, high = (float("nan") if e is None else _natural(problem, found.x, index, e) for e in ends)
    return Profile(low, high, natural, np.array([p[1] for p in points]))


def _natural(problem: Problem, x: Float64, index: int, value: float) -> float:
    moved = np.array(x)
    moved[index] = value
    return float(problem.model.to_natural(moved)[index])


def _end(
    problem: Problem,
    found: Estimate,
    index: int,
    sign: float,
    goal: float,
    points: list[tuple[float, float]],
) -> float | None:
    """Find where the signed root reaches the goal on one side; None if it never does."""
    centre = float(found.x[index])
    error = float(np.sqrt(found.covariance[index, index]))
    farthest = _FARTHEST_SE * goal * error if np.isfinite(error) else np.inf
    if problem.model.is_log(index):
        farthest = min(farthest, _FARTHEST_LOG) if np.isfinite(farthest) else _FARTHEST_LOG
    if not np.isfinite(farthest) or farthest <= 0:
        return None
    warm = np.array(found.x)
    inside, outside = (0.0, 0.0), None
    step = min(goal * error, 0.5 * farthest)
    for _ in range(40):
        distance = min(step, farthest)
        warm[index] = centre + sign * distance
        others = _tangent(found, index, sign * distance) if outside is None else None
        begin = warm if others is None else others
        moved, cost = problem.search(begin, found.whitener, fixed=index, tolerance=1e-10)
        warm = np.array(moved)
        root = float(np.sqrt(max(cost - found.chi2, 0.0) / found.scale))
        points.append((centre + sign * distance, sign * root))
        if abs(root - goal) <= _CLOSE * goal:
            return centre + sign * distance
        if root < goal:
            inside = (distance, root)
        else:
            outside = (distance, root)
        if outside is None:
            if distance >= farthest:
                return None
            growth = goal / root if root > 0.05 * goal else 3.0
            step = distance * float(np.clip(1.02 * growth, 1.05, 3.0))
        else:
            share = (goal - inside[1]) / (outside[1] - inside[1])
            # The root is nearly straight in the parameter; stay off the ends to keep the
            # bracket shrinking from both sides.
            share = float(np.clip(share, 0.02, 0.98))
            step = inside[0] + share * (outside[0] - inside[0])
            if outside[0] - inside[0] < 1e-9 * outside[0]:
                return centre + sign * step
    return centre + sign * step


def _tangent(found: Estimate, index: int, move: float) -> Float64:
    """Start the others where the quadratic about the minimum puts them."""
    column = found.covariance[:, index]
    variance = column[index]
    out = np.array(found.x)
    if variance > 0:
        out = out + column / variance * move
    out[index] = found.x[index] + move
    return out
