"""Is the reaction over, has it levelled off, did something change? Rules for a running series.

Over and levelled off are judged by a plateau of its own that is fitted to each species, not by
the law: the bound on what is still to come must be small, the last points flat (an F-test), and
no drift left in the residuals (a cumulative sum), for two spectra in a row. The rules cannot tell
an equilibrium from a stall, so they say "levelled off at x %". The benchmark
tests/benchmarks/forecast_rates.py measures how often they fire early.

Changes are looked for in recursive residuals, each point against what those before it foretell
(Brown, Durbin & Evans, J. R. Statist. Soc. B 37 (1975) 149), by a two-sided cumulative sum (Page,
Biometrika 41 (1954) 100): along the reaction a change of rate or a stall, along the amounts
themselves a step of the reference.
"""

from dataclasses import dataclass
from math import exp, inf, nan

import numpy as np
import numpy.typing as npt
from scipy.optimize import brentq, minimize_scalar
from scipy.stats import f as fisher
from scipy.stats import t as student

from kinetics.rates.fitting import Fit
from kinetics.rates.noise import whitener
from kinetics.rates.question import Question
from kinetics.rates.series import Float64, Series

REMAINDER = 0.02  # still to come, of the whole change
_ONE_SIDED = 0.975
_FLAT_P = 0.01
_SLACK, _ALARM = 0.5, 6.0  # of the cumulative sum, in standard deviations
_FEWEST = 10
_TAIL = 8  # spectra that must be flat
_COMPLETE = 0.95  # conversion from which a plateau is called the end of the reaction
_CLEAR_CHANGE = 10.0  # the whole change over its standard error


@dataclass(frozen=True, slots=True)
class Plateau:
    """An exponential approach to a plateau, fitted to all species with one rate.

    Attributes
    ----------
    k, k_low
        Rate of the approach and its lower bound, 1/s.
    remainder, remainder_high
        Share of the whole change still to come at the last spectrum, and its upper bound.
    start, end
        Fitted amounts at the beginning and on the plateau, shape (m,).
    flat
        Whether the last spectra show no slope.
    drift
        Largest cumulative sum of the residuals, in standard deviations.
    clear
        Whether the change as a whole stands out of the noise.
    """

    k: float
    k_low: float
    remainder: float
    remainder_high: float
    start: Float64
    end: Float64
    flat: bool
    drift: float
    clear: bool

    @property
    def reached(self) -> bool:
        """Whether all rules are met at this spectrum."""
        settled = self.remainder_high < REMAINDER and self.flat and self.drift < _ALARM
        return bool(settled and self.clear)


def plateau(series: Series, origin_s: float = 0.0) -> Plateau | None:
    """Fit a plateau to a series; None for too few spectra or no time."""
    n, m = series.values.shape
    times = series.time_s - origin_s
    span = float(times[-1]) if n else 0.0
    if n < _FEWEST or not span > 0:
        return None
    w = whitener(series.covariance)
    target = w.apply(series.values).ravel()
    dof = n * m - 2 * m - 1

    def design(k: float) -> Float64:
        basis = np.stack((np.ones(n), np.exp(-k * times)), axis=1)
        blocks = np.einsum("nij,nb->nijb", w.inverse, basis)
        return np.asarray(blocks.reshape(n * m, 2 * m), np.float64)

    def solved(k: float) -> tuple[Float64, Float64]:
        a = design(k)
        size = np.linalg.norm(a, axis=0)
        beta = np.linalg.lstsq(a / size, target, rcond=1e-12)[0] / size
        return beta, target - a @ beta

    def cost(log_k: float) -> float:
        rest = solved(exp(log_k))[1]
        return float(rest @ rest)

    grid = np.log(np.geomspace(0.05, 200.0, 24) / span)
    costs = [cost(g) for g in grid]
    at = int(np.argmin(costs))
    low, high = grid[max(at - 1, 0)], grid[min(at + 1, grid.size - 1)]
    best = float(minimize_scalar(cost, bounds=(low, high), method="bounded").x)
    least = cost(best)
    scale = least / dof if dof > 0 else inf
    goal = least + float(student.ppf(_ONE_SIDED, max(dof, 1))) ** 2 * scale
    k = exp(best)
    if cost(grid[0]) > goal:
        k_low = exp(brentq(lambda g: cost(g) - goal, grid[0], best, xtol=1e-4))
    else:
        k_low = 0.0
    beta, rest = solved(k)
    pair = beta.reshape(m, 2)
    change = pair[:, 1]
    rows = rest.reshape(n, m)
    along = _project(rows, w.apply(np.broadcast_to(change, (n, m)) + 0.0))
    sd = float(np.sqrt(scale)) or 1.0
    whole = float(np.linalg.norm(w.apply(change + np.zeros((n, m)))[-1]))
    return Plateau(
        k=k,
        k_low=k_low,
        remainder=exp(-k * span),
        remainder_high=exp(-k_low * span),
        start=pair.sum(axis=1),
        end=pair[:, 0],
        flat=_is_flat(series, w.apply(series.values), change, w.inverse),
        drift=float(np.max(np.abs(cumulative(along / sd)))),
        clear=whole > _CLEAR_CHANGE * sd,
    )


def _project(rows: Float64, direction: Float64) -> Float64:
    """Component of each row along a direction, shape (n, m) each → (n,)."""
    size = np.maximum(np.linalg.norm(direction, axis=1), 1e-300)
    return np.asarray(np.einsum("nm,nm->n", rows, direction) / size, np.float64)


def _is_flat(series: Series, whitened: Float64, change: Float64, inverse: Float64) -> bool:
    """Whether the tail shows no slope along the change (F-test at one per cent)."""
    n, m = whitened.shape
    tail = slice(max(n - max(_TAIL, n // 6), 0), n)
    t = series.time_s[tail] - float(series.time_s[tail].mean())
    count = t.size
    y = whitened[tail].ravel()
    level = inverse[tail].reshape(count * m, m)
    slope = np.einsum("nij,j,n->ni", inverse[tail], change, t).reshape(-1, 1)
    plain = y - level @ np.linalg.lstsq(level, y, rcond=None)[0]
    both = np.hstack((level, slope / max(float(np.linalg.norm(slope)), 1e-300)))
    full = y - both @ np.linalg.lstsq(both, y, rcond=None)[0]
    dof = count * m - m - 1
    gain = float(plain @ plain - full @ full)
    left = float(full @ full) / dof
    return bool(left <= 0 or fisher.sf(gain / left, 1, dof) > _FLAT_P)


def cumulative(standardised: Float64) -> Float64:
    """Return the two-sided cumulative sum with slack; the sign says which side, shape (n,)."""
    up = down = 0.0
    out = np.empty(standardised.size)
    for i, z in enumerate(standardised):
        up = max(0.0, up + float(z) - _SLACK)
        down = max(0.0, down - float(z) - _SLACK)
        out[i] = up if up >= down else -down
    return out


@dataclass(frozen=True, slots=True)
class Progress:
    """Where the reaction stands.

    Attributes
    ----------
    state
        ``"running"``, ``"levelled-off"`` or ``"over"``.
    conversion
        Of the limiting species on the fitted plateau, nan where it is not observed.
    remainder_high
        Upper bound of the share of the whole change still to come; nan for too few spectra.
    words
        One plain sentence.
    """

    state: str
    conversion: float
    remainder_high: float
    words: str


def progress(series: Series, question: Question) -> Progress:
    """Say whether the reaction is over or has levelled off, by the last two spectra."""
    origin = min(question.fit_origin_s, float(series.time_s[0])) if series.size else 0.0
    now = plateau(series, origin)
    if now is None:
        return Progress("running", nan, nan, "Too few spectra to say where it will level off.")
    before = plateau(series.select(np.arange(series.size - 1)), origin)
    conversion = _plateau_conversion(series, question, now)
    if not (now.reached and before is not None and before.reached):
        return Progress(
            "running", conversion, now.remainder_high, "The reaction has not levelled off yet."
        )
    at = f"{100 * conversion:.1f} %" if np.isfinite(conversion) else "a steady amount"
    left = f"less than {100 * now.remainder_high:.1g} % of the change is still to come"
    if conversion >= _COMPLETE:
        return Progress(
            "over",
            conversion,
            now.remainder_high,
            f"The reaction is over: it levels off at {at} conversion, {left}.",
        )
    return Progress(
        "levelled-off",
        conversion,
        now.remainder_high,
        f"Levelled off at {at} conversion, {left}. That may be an equilibrium or a stall; the "
        "curve cannot tell which.",
    )


def _plateau_conversion(series: Series, question: Question, found: Plateau) -> float:
    name = question.limiting_species
    if name in series.species:
        column = series.species.index(name)
        charged = question.charged.get(name, 0.0) if series.unit == "mol/L" else 0.0
        begin = charged or float(found.start[column])
        return 1.0 - float(found.end[column]) / begin if begin > 0 else nan
    charged = question.charged.get(name or "", 0.0) if series.unit == "mol/L" else 0.0
    for product, p in question.formed.items():
        if product in series.species and charged > 0:
            a = question.consumed.get(name or "", 1.0)
            made = float(found.end[series.species.index(product)])
            return made * a / (p * charged)
    return nan


@dataclass(frozen=True, slots=True)
class Change:
    """Something that changed along the run.

    Attributes
    ----------
    kind
        ``"rate"`` (faster, slower or stalled), ``"reference"`` or ``"unclear"`` (one species
        alone cannot tell the two apart).
    time_s
        Where it began.
    noticed_s
        When it was beyond doubt.
    words
        One plain sentence.
    """

    kind: str
    time_s: float
    noticed_s: float
    words: str


def recursive_residuals(fit: Fit) -> tuple[Float64, npt.NDArray[np.intp]]:
    """Return each spectrum's residual against what those before it foretell, standardised.

    Returns
    -------
    residuals, rows
        Shape (q, m), and the index of each in the series: the first spectra only make a start.
        The law is linearised about the fit.
    """
    w, model, series = fit.estimate.whitener, fit.model, fit.series
    slope = w.apply_jacobian(
        model.jacobian(fit.estimate.x, series.time_s, series.acquisition_s)
    ).reshape(series.size, len(model.columns), model.size)
    rest = fit.estimate.whitened
    size = np.maximum(np.linalg.norm(slope.reshape(-1, model.size), axis=0), 1e-300)
    slope = slope / size
    normal = np.cumsum(np.einsum("nmi,nmj->nij", slope, slope), axis=0)
    moment = np.cumsum(np.einsum("nmi,nm->ni", slope, rest), axis=0)
    first = max(2 * model.size, _FEWEST // 2)
    usable = [i for i in range(first, series.size) if np.linalg.cond(normal[i - 1]) < 1e12]
    rows = np.array(usable, np.intp)
    if rows.size == 0:
        return np.zeros((0, rest.shape[1])), rows
    before = np.linalg.inv(normal[rows - 1])
    ahead = rest[rows] - np.einsum("nmi,nij,nj->nm", slope[rows], before, moment[rows - 1])
    spread = np.eye(rest.shape[1]) + np.einsum("nmi,nij,nkj->nmk", slope[rows], before, slope[rows])
    lower = np.linalg.cholesky(spread)
    standard = np.linalg.solve(lower, ahead[:, :, None])[:, :, 0]
    # A change must not hide in the scatter it makes itself: the scale is a median.
    scale = float(np.median(np.abs(standard))) / 0.6745
    return standard / (scale if scale > 0 else 1.0), rows


def changes(fit: Fit) -> tuple[Change, ...]:
    """Look for a change of rate, a stall or a step of the reference along a fit.

    Only the first is reported: what follows it is judged by a law that no longer holds.
    """
    standard, rows = recursive_residuals(fit)
    if rows.size < 3:
        return ()
    w, series = fit.estimate.whitener, fit.series
    curve = fit.problem.predict(fit.estimate.x)[rows]
    flows = dict(fit.model.mechanism.products)
    flows.update({s: -a for s, a in fit.model.mechanism.reactants})
    flow = np.array([flows.get(s, 0.0) for s in fit.model.observed])
    inverse = w.inverse[rows]
    along_rate = np.einsum("nij,j->ni", inverse, flow)
    along_reference = np.einsum("nij,nj->ni", inverse, curve)
    found = []
    single = len(fit.model.observed) == 1
    kinds = (
        (("unclear", along_rate),)
        if single
        else (
            ("rate", along_rate),
            ("reference", along_reference),
        )
    )
    for kind, direction in kinds:
        path = cumulative(_project(standard, direction))
        over = np.flatnonzero(np.abs(path) > _ALARM)
        if over.size == 0:
            continue
        alarm = int(over[0])
        sign = float(np.sign(path[alarm]))
        quiet = np.flatnonzero(sign * path[:alarm] <= 0)
        begin = int(quiet[-1]) + 1 if quiet.size else 0
        found.append((alarm, -abs(float(path[-1])), kind, begin, sign))
    if not found:
        return ()
    alarm, _, kind, begin, sign = min(found)
    start, noticed = float(series.time_s[rows[begin]]), float(series.time_s[rows[alarm]])
    return (Change(kind, start, noticed, _change_words(kind, start, sign)),)


def _change_words(kind: str, start: float, sign: float) -> str:
    if kind == "reference":
        return (
            f"From about {start:.0f} s all amounts are {'higher' if sign > 0 else 'lower'} "
            "together: the reference stepped, not the reaction."
        )
    faster = "more" if sign > 0 else "less"
    words = (
        f"From about {start:.0f} s {faster} is turned over than the points before foretold: the "
        f"reaction {'sped up' if sign > 0 else 'slowed down or stalled'}"
    )
    if kind == "unclear":
        words += ", or the reference stepped; with one species the two cannot be told apart"
    if sign < 0:
        words += ". A stall while feeding means accumulation; follow the site's procedure"
    return words + "."
