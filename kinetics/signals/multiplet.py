"""Overlapping signals, measured together: the reference line's shape on each n + 1 pattern.

Free are the area, shift, couplings and one extra width of each signal, and for all of them a
constant and what the automatic phase has left over here: two degrees mistake 1 % of one signal for
another that lies on its flank.
Areas and constant are linear and are solved for at every step (variable projection; Golub &
Pereyra, SIAM J. Numer. Anal. 10 (1973) 413). The others are held near what calibration and sheet
say by the strength of a usual spread, so that a signal too faint to say where it stands keeps its
place. The model is built in the time domain, where shifts by parts of a point, couplings and
widths are factors and their derivatives exact.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import product

import numpy as np
from scipy.linalg import toeplitz

from kinetics.signals.model import FollowPlan, Signal
from kinetics.signals.multiplet_model import (
    Free,
    Layout,
    LineModel,
    lay_out,
    linear_columns,
    nonlinear_slopes,
    projected,
)
from kinetics.spectra.model import Axis, Float32, Float64

# Usual spreads. Shift of a signal seen in the calibration, in reference line-widths; of one not
# seen there, as a part of its window or of the distance to a neighbour's middle. Coupling:
# relative to the sheet's. Width: in line-widths.
_SHIFT_SEEN = 0.5
_ROOM, _ROOM_GAP = 0.15, 0.45
_COUPLING = 0.03
_WIDTH = 0.15
_PHASE = np.deg2rad(3.0)  # how far off the phase usually is at one group of lines
_NARROWEST = -0.5  # an extra width below −½ of the line's own is no width any more
# A signal counts as seen in the calibration above so many standard errors of its area.
SEEN = 8.0
# A place away from the middle of the window must better the sum of squares by so many variances.
_SWEEP_GAIN = 25.0
_SWEEP_STEP = 0.5
_SWEEP_MOST = 10
_STEPS = 12


@dataclass(frozen=True, slots=True, eq=False)
class MultipletFit:
    """A group of signals fitted together.

    Attributes
    ----------
    members
        Their places in `FollowPlan.all`, length g.
    areas, covariance
        Shape (g,) and (g, g), in the units of `Integrals`.
    shifts_ppm
        Where the middle of each stands, shape (g,).
    widths_ppm
        Extra width of each over the calibration's line, shape (g,).
    explained
        Part of the variance in the range that the fit explains, 0 … 1.
    excess
        Mean square of what is left over that of the noise: 1 where nothing is left to explain.
    """

    members: tuple[int, ...]
    areas: Float64
    covariance: Float64
    shifts_ppm: Float64
    widths_ppm: Float64
    explained: float
    excess: float


def fitted_groups(plan: FollowPlan) -> tuple[tuple[int, ...], ...]:
    """Return which signals are fitted together, as places in `plan.all`.

    Signals of method ``"multiplet"`` whose windows overlap or touch form a group, and so does a
    summed one that overlaps them; the reference and exchanging signals never do.
    """
    able = [
        i
        for i, s in enumerate(plan.all)
        if s is not plan.reference and (s.method == "multiplet" or not s.exchanging)
    ]
    left = {i for i in able if plan.all[i].method == "multiplet"}
    groups = []
    while left:
        group = {min(left)}
        while True:
            more = {
                i
                for i in able
                if i not in group and any(_overlap(plan.all[i], plan.all[j]) for j in group)
            }
            if not more:
                break
            group |= more
        left -= group
        groups.append(tuple(sorted(group)))
    return tuple(groups)


def _overlap(a: Signal, b: Signal) -> bool:
    # Touching windows count: the tails of either reach into the other.
    return min(a.window[1], b.window[1]) >= max(a.window[0], b.window[0]) - 1e-9


def fit_group(
    intensities: Float32,
    axis: Axis,
    frequency_mhz: float,
    signals: Sequence[Signal],
    members: tuple[int, ...],
    lines: LineModel,
    extra_width_ppm: float,
    sd: float,
) -> MultipletFit | None:
    """Fit one group of signals.

    Parameters
    ----------
    intensities, axis, frequency_mhz
        A spectrum without baseline.
    signals
        All of the plan.
    members
        The places of those to be fitted together.
    lines
        From the calibration.
    extra_width_ppm
        By how much lines are wider in this spectrum, as the reference line shows.
    sd
        Noise of one point.

    Returns
    -------
    None where the range lies off the axis or the frequency is not known.
    """
    chosen, correlation = [signals[i] for i in members], lines.correlation
    layout = lay_out(intensities, axis, frequency_mhz, chosen, lines)
    if layout is None:
        return None
    frees, usual, spread = _start(chosen, members, layout, lines, extra_width_ppm)
    # Neighbouring points share noise, so the prior must not be outvoted by points that say the
    # same twice.
    lags = min(correlation.size, layout.data.size)
    inflation = max(1.0, float(1.0 + 2.0 * correlation[1:lags].sum()))
    variance = max(sd, 1e-30) ** 2 * inflation
    values = _swept(layout, frees, usual, chosen, members, lines, variance)
    usual = values.copy()
    values, damping = values.copy(), 1e-3
    linear, rest = projected(layout, frees, values)
    cost = _cost(rest, values, usual, spread, variance)
    for _ in range(_STEPS):
        slopes = nonlinear_slopes(layout, frees, values, linear)
        columns = linear_columns(layout, frees, values)
        # Project the linear part out of the slopes (Kaufman's form).
        solved, *_ = np.linalg.lstsq(columns, slopes, rcond=None)
        slopes = slopes - columns @ solved
        normal = slopes.T @ slopes / variance + np.diag(spread**-2)
        pull = slopes.T @ rest / variance - (values - usual) / spread**2
        step = np.linalg.solve(normal + damping * np.diag(np.diag(normal)), pull)
        tried = _bounded(values + step, frees, lines.width_ppm / abs(axis.step_ppm))
        new_linear, new_rest = projected(layout, frees, tried)
        new_cost = _cost(new_rest, tried, usual, spread, variance)
        if new_cost <= cost:
            gain = cost - new_cost
            values, linear, rest, cost, damping = tried, new_linear, new_rest, new_cost, damping / 8
            if gain < 1e-9 * (1 + cost):
                break
        else:
            damping *= 10.0
    return _result(layout, frees, values, linear, rest, spread, members, sd, correlation, variance)


def _start(
    chosen: Sequence[Signal],
    members: tuple[int, ...],
    layout: Layout,
    lines: LineModel,
    extra_width_ppm: float,
) -> tuple[list[Free], Float64, Float64]:
    """Parameters in points: usual values and spreads."""
    step = abs(layout.axis.step_ppm)
    width = lines.width_ppm / step
    usual, spread = [0.0], [_PHASE]
    frees = []
    for signal, index in zip(chosen, members, strict=True):
        known = lines.places_ppm[index]
        seen = bool(np.isfinite(known))
        usual += [
            layout.axis.position(known if seen else signal.centre) - layout.start,
            extra_width_ppm / step,
        ]
        spread += [
            _SHIFT_SEEN * width if seen else _room(signal, chosen) / (3.0 * step),
            _WIDTH * (width + max(extra_width_ppm / step, 0.0)),
        ]
        at = len(usual)
        for _, hz in signal.couplings:
            usual.append(hz / layout.hz_per_point)
            spread.append(_COUPLING * hz / layout.hz_per_point)
        frees.append(
            Free(
                at - 2,
                at - 1,
                tuple(range(at, len(usual))),
                tuple(n for n, _ in signal.couplings),
            )
        )
    return frees, np.array(usual), np.array(spread)


def _cost(
    rest: Float64, values: Float64, usual: Float64, spread: Float64, variance: float
) -> float:
    return float(rest @ rest) / variance + float((((values - usual) / spread) ** 2).sum())


def _bounded(values: Float64, frees: Sequence[Free], width_points: float) -> Float64:
    out = values.copy()
    for free in frees:
        out[free.width] = max(out[free.width], _NARROWEST * width_points)
    return out


def _swept(
    layout: Layout,
    frees: Sequence[Free],
    usual: Float64,
    chosen: Sequence[Signal],
    members: tuple[int, ...],
    lines: LineModel,
    variance: float,
) -> Float64:
    """Look along the window for each signal whose place the calibration does not know.

    Two unknown neighbours are sought together: one alone would settle between the two.
    """
    step = abs(layout.axis.step_ppm)
    unseen = [n for n, index in enumerate(members) if not np.isfinite(lines.places_ppm[index])]
    values = usual.copy()
    for first in range(0, len(unseen), 2):
        pair = unseen[first : first + 2]
        tracks = []
        for number in pair:
            reach = _room(chosen[number], chosen) / step
            by = max(_SWEEP_STEP * lines.width_ppm / step, reach / _SWEEP_MOST)
            tracks.append(np.arange(-reach, reach + 0.5 * by, by))
        _, rest = projected(layout, frees, values)
        best = float(rest @ rest) - _SWEEP_GAIN * variance
        kept = values
        for offs in product(*tracks):
            tried = values.copy()
            for number, off in zip(pair, offs, strict=True):
                tried[frees[number].shift] += off
            linear, rest = projected(layout, frees, tried)
            cost = float(rest @ rest)
            if cost < best and all(linear[number] > 0 for number in pair):
                best, kept = cost, tried
        values = kept
    return values


def _room(signal: Signal, chosen: Sequence[Signal]) -> float:
    """How far (ppm) a signal may be from the middle of its window, usually three times less.

    Not as far as half-way to a neighbour's: like patterns would swap names.
    """
    gaps = [abs(signal.centre - other.centre) for other in chosen if other is not signal]
    return min(_ROOM * signal.width, _ROOM_GAP * max(min(gaps, default=np.inf), 1e-3))


def _result(
    layout: Layout,
    frees: Sequence[Free],
    values: Float64,
    linear: Float64,
    rest: Float64,
    spread: Float64,
    members: tuple[int, ...],
    sd: float,
    correlation: Float64,
    variance: float,
) -> MultipletFit:
    count, step = len(frees), abs(layout.axis.step_ppm)
    slopes = np.column_stack(
        (linear_columns(layout, frees, values), nonlinear_slopes(layout, frees, values, linear))
    )
    # Diagonal scaling keeps areas and points on one footing.
    scale = np.sqrt((slopes**2).sum(axis=0))
    scale = np.where(scale > 0, scale, 1.0)
    scaled = slopes / scale
    prior = np.concatenate((np.zeros(count + 1), spread**-2)) / scale**2
    normal = scaled.T @ scaled / variance + np.diag(prior)
    inverse = np.linalg.pinv(normal, hermitian=True)
    lags = np.zeros(layout.data.size)
    kept = min(correlation.size, lags.size)
    lags[:kept] = correlation[:kept]
    coloured = scaled.T @ toeplitz(lags) @ scaled * sd**2 / variance**2
    covariance = inverse @ (coloured + np.diag(prior)) @ inverse / np.outer(scale, scale)
    centred = layout.data - layout.data.mean()
    total = float(centred @ centred)
    left = float(rest @ rest)
    return MultipletFit(
        members,
        np.asarray(linear[:count]),
        np.asarray(covariance[:count, :count]),
        np.array(
            [
                layout.axis.first_ppm + layout.axis.step_ppm * (layout.start + values[free.shift])
                for free in frees
            ]
        ),
        np.array([values[free.width] * step for free in frees]),
        1.0 - left / total if total > 0 else 0.0,
        left / max(layout.data.size * sd**2, 1e-300),
    )
