"""Profile-likelihood intervals, calibrated by Student's t.

For a trial value of one parameter all others are fitted again; the interval ends where the sum of
squares has grown by t² residual variances (Bates & Watts, Nonlinear Regression Analysis, 1988,
chapter 6). Where it never grows that much the data do not bound the parameter on that side.

The ends are found by Newton steps for both conditions at once (Venzon & Moolgavkar, Applied
Statistics 37 (1988) 87); where those do not settle, by a bracket along the profile.
"""

from dataclasses import dataclass

import numpy as np
from scipy.stats import t as student

from kinetics.rates.estimate import Estimate, Problem
from kinetics.rates.series import Float64

# Searched this many standard errors away, and to a factor e^7 ≈ 1000 for a rate constant.
_FARTHEST_SE = 60.0
_FARTHEST_LOG = 7.0
_FARTHEST_ORDER = 20.0
_CLOSE = 1e-6  # relative, of the t-scaled distance
_NEWTON_STEPS = 12


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


def profile_curve(problem: Problem, found: Estimate, index: int, reach: float = 3.0) -> Profile:
    """Return a profile at evenly spread values, for a picture.

    Parameters
    ----------
    reach
        How far to go on either side, in standard errors.
    """
    error = float(np.sqrt(found.covariance[index, index]))
    centre = float(found.x[index])
    points = [(centre, 0.0)]
    for sign in (-1.0, 1.0):
        warm = np.array(found.x)
        for share in np.linspace(0.1, 1.0, 10):
            warm[index] = centre + sign * share * reach * error
            if not np.isfinite(warm[index]):
                break
            warm, cost = problem.search(warm, found.whitener, fixed=index, tolerance=1e-8)
            points.append((float(warm[index]), sign * _root(cost, found)))
    points.sort()
    natural = np.array([_natural(problem, found.x, index, v) for v, _ in points])
    return Profile(float("nan"), float("nan"), natural, np.array([d for _, d in points]))


def _natural(problem: Problem, x: Float64, index: int, value: float) -> float:
    moved = np.array(x)
    moved[index] = value
    with np.errstate(all="ignore"):
        return float(problem.model.to_natural(moved)[index])


def _root(cost: float, found: Estimate) -> float:
    return float(np.sqrt(max(cost - found.chi2, 0.0) / found.scale)) if found.scale > 0 else 0.0


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
    if problem.model.names[index] == "order":
        farthest = min(farthest, _FARTHEST_ORDER)
    if not np.isfinite(farthest) or farthest <= 0:
        return None
    quick = _newton_end(problem, found, index, sign, goal)
    # An end much closer than the quadratic says is a search gone astray, not an end.
    if quick is not None and 0.05 * goal * error < sign * (quick - centre) <= farthest:
        points.append((quick, sign * goal))
        return quick
    return _bracketed_end(problem, found, index, (sign, goal, farthest), points)


def _newton_end(
    problem: Problem, found: Estimate, index: int, sign: float, goal: float
) -> float | None:
    """Solve for the end and for the other parameters there at once; None if it does not settle.

    With the Gauss–Newton curvature the others follow the one linearly, d = a + τ b, and the sum of
    squares is a quadratic in τ.
    """
    w = found.whitener
    others = [i for i in range(found.x.size) if i != index]
    x = _tangent(found, index, sign * goal * float(np.sqrt(found.covariance[index, index])))
    growth = goal**2 * found.scale
    b = np.zeros(found.x.size)
    with np.errstate(all="ignore"):
        for _ in range(_NEWTON_STEPS):
            rest = w.apply(problem.predict(x) - problem.data).ravel()
            slope = w.apply_jacobian(problem.jacobian(x))
            excess = float(rest @ rest) - found.chi2 - growth
            if not np.isfinite(excess) or not np.all(np.isfinite(slope)):
                return None
            half, curve = slope.T @ rest, slope.T @ slope
            a, b[:] = np.zeros(x.size), 0.0
            b[index] = 1.0
            if others:
                block = curve[np.ix_(others, others)]
                right = np.stack((half[others], curve[others, index]), axis=1)
                size = np.sqrt(np.diag(block))
                if not np.all(size > 0):
                    return None
                scaled = block / np.outer(size, size)
                solved = np.linalg.lstsq(scaled, right / size[:, None], rcond=1e-13)[0]
                a[others], b[others] = -solved[:, 0] / size, -solved[:, 1] / size
            q2 = float(b @ curve @ b)
            q1 = 2.0 * float(half @ b + a @ curve @ b)
            gain = float(2.0 * half @ a + a @ curve @ a)  # ≤ 0: what the others still win
            inside = q1 * q1 - 4.0 * q2 * (excess + gain)
            if not (q2 > 0 and inside >= 0):
                return None
            tau = (-q1 + sign * float(np.sqrt(inside))) / (2.0 * q2)
            if abs(excess) < 2 * _CLOSE * growth and -gain < 2 * _CLOSE * growth:
                return float(x[index]) + tau
            step = a + tau * b
            if abs(step[index]) > 2.0 * abs(x[index] - found.x[index]):
                return None
            x = x + step
            if sign * (x[index] - found.x[index]) <= 0:
                return None
    return None


def _bracketed_end(
    problem: Problem,
    found: Estimate,
    index: int,
    wanted: tuple[float, float, float],
    points: list[tuple[float, float]],
) -> float | None:
    """Walk along the profile until the goal lies between two points, then close in."""
    sign, goal, farthest = wanted
    centre = float(found.x[index])
    error = float(np.sqrt(found.covariance[index, index]))
    warm = np.array(found.x)
    inside: tuple[float, float] = (0.0, 0.0)
    outside: tuple[float, float] | None = None
    step = min(goal * error, 0.5 * farthest)
    for _ in range(40):
        distance = min(step, farthest)
        warm[index] = centre + sign * distance
        begin = _tangent(found, index, sign * distance) if outside is None else warm
        moved, cost = problem.search(begin, found.whitener, fixed=index, tolerance=1e-10)
        warm = np.array(moved)
        root = _root(cost, found)
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
