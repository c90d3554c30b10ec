"""What chemists ask next: conversion, yield, selectivity, balance of matter, time to a target."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from kinetics.rates.fitting import NOTHING, Fit, Quantity
from kinetics.rates.question import Question
from kinetics.rates.series import Float64, Series

# How far ahead a forecast looks, in spans of the data.
_HORIZON_SPANS = 300.0
# The worst balance is sought among spectra whose variance is at most so many times the usual.
_AS_CERTAIN = 4.0


@dataclass(frozen=True, slots=True)
class Outcome:
    """How far the reaction has come at the last spectrum.

    Attributes
    ----------
    limiting
        Species conversion refers to.
    basis
        ``"charged"`` (amounts put in) or ``"fitted start"``.
    conversion
        Share of it that has gone, by the fitted curve.
    yields
        Share of it found in each formed species.
    selectivity
        Yield over conversion; nan where conversion is not clearly above zero.
    """

    limiting: str | None
    basis: str
    conversion: Quantity
    yields: Mapping[str, Quantity]
    selectivity: Mapping[str, Quantity]


@dataclass(frozen=True, slots=True)
class Forecast:
    """When a target conversion is reached.

    Attributes
    ----------
    target_conversion
        The target, nan if none was asked for.
    reached
        Whether the conversion at the last spectrum is at or beyond it.
    time_s
        When, in s since the run's start; the interval takes in every law still in play.
    """

    target_conversion: float
    reached: bool
    time_s: Quantity


@dataclass(frozen=True, slots=True)
class Balance:
    """Matter found over matter expected, per spectrum: mean, and the value farthest from 1."""

    mean: float
    worst: float


def outcome(fit: Fit | None, question: Question, unit: str) -> Outcome:
    """Return conversion, yield and selectivity by a fit."""
    name = question.limiting_species
    if fit is None or name is None or name not in fit.model.mechanism.species:
        nothing = dict.fromkeys(question.formed, NOTHING)
        return Outcome(name, "fitted start", NOTHING, nothing, nothing)
    end = float(fit.series.time_s[-1])
    charged = question.charged.get(name, 0.0)
    known = unit == "mol/L" and charged > 0
    start, start_slope = fit.amount_at(name, fit.model.origin_s)
    basis = charged if known else start
    basis_slope = np.zeros_like(start_slope) if known else start_slope
    left, left_slope = fit.amount_at(name, end)
    gone = 1.0 - left / basis
    gone_slope = -left_slope / basis + left * basis_slope / basis**2
    # Against a charge the uncertainty of the reference's concentration counts; against the fitted
    # start it cancels.
    shared = fit.series.systematic if known else 0.0
    conversion = _interval(fit, gone, gone_slope, shared * (1.0 - gone))
    yields, selectivity = {}, {}
    a = float(question.consumed.get(name, 1.0))
    for product, p in question.formed.items():
        if product not in fit.model.observed:
            yields[product] = selectivity[product] = NOTHING
            continue
        made, slope = fit.amount_at(product, end)
        factor = a / p
        found = made * factor / basis
        found_slope = slope * factor / basis - found * basis_slope / basis
        yields[product] = _interval(fit, found, found_slope, shared * found)
        clear = conversion.low > 0.02
        ratio = found / gone if clear else float("nan")
        selectivity[product] = (
            _interval(
                fit,
                ratio,
                found_slope / gone - ratio * gone_slope / gone,
                shared * (ratio + ratio * (1.0 - gone) / gone),
            )
            if clear
            else NOTHING
        )
    return Outcome(name, "charged" if known else "fitted start", conversion, yields, selectivity)


def _interval(fit: Fit, value: float, slope: Float64, systematic_u: float) -> Quantity:
    """Interval from the parameters' covariance and a systematic standard uncertainty."""
    variance = float(slope @ fit.estimate.covariance @ slope)
    half = fit.t_quantile * float(np.sqrt(max(variance, 0.0) + systematic_u**2))
    return Quantity(value, value - half, value + half)


def forecast(
    best: Fit | None, in_play: Sequence[Fit], question: Question, conversion: Quantity, unit: str
) -> Forecast:
    """Forecast when the target conversion is reached.

    Parameters
    ----------
    best
        The fit whose value is given.
    in_play
        The fits whose intervals are united.
    question
        Names target and limiting species.
    conversion
        At the last spectrum.
    unit
        Of the series.
    """
    target, name = question.target_conversion, question.limiting_species
    if target is None:
        return Forecast(float("nan"), False, NOTHING)
    reached = bool(conversion.value >= target)
    if best is None or name is None or name not in best.model.mechanism.species:
        return Forecast(target, reached, NOTHING)
    charged = question.charged.get(name, 0.0)
    times = []
    for fit in in_play:
        origin = fit.model.origin_s
        span = max(float(fit.series.time_s[-1]) - origin, 1.0)
        if unit == "mol/L" and charged > 0:
            times.append(fit.time_to(name, (1 - target) * charged, _HORIZON_SPANS * span))
        else:  # the goal moves with the fitted start
            t = fit.time_to_share(name, 1 - target)
            times.append(Quantity(origin + t.value, origin + t.low, origin + t.high))
    value = times[list(in_play).index(best)] if best in in_play else NOTHING
    lows = [float(t.low) for t in times if np.isfinite(t.low)]
    # A law by which the target is never reached leaves the forecast open above.
    highs = [float(t.high) for t in times]
    high = max(highs, default=float("nan"))
    if not all(np.isfinite(h) for h in highs):
        high = float("nan")
    return Forecast(target, reached, Quantity(value.value, min(lows, default=float("nan")), high))


def balance(series: Series, question: Question) -> Balance | None:
    """Return the balance of matter; None where nothing is formed or it cannot be drawn up.

    Everything is counted as the limiting species. Expected is the charge where it is known, else
    the mean of the first tenth of the spectra. A spectrum counts as much as its noise allows, and
    the worst is sought among those about as certain as the usual one: a doubtful spectrum says
    little about matter.
    """
    name = question.limiting_species
    formed = [p for p in question.formed if p in series.species]
    if name is None or name not in series.species or not formed:
        return None
    a = float(question.consumed.get(name, 1.0))
    share_of = dict.fromkeys(series.species, 0.0)
    share_of[name] = 1.0
    for product in formed:
        share_of[product] = a / question.formed[product]
    if question.intermediate in series.species and question.intermediate not in formed:
        share_of[str(question.intermediate)] = 1.0
    counted = np.array([share_of[species] for species in series.species])
    total = series.values @ counted
    variance = np.einsum("i,nij,j->n", counted, series.covariance, counted)
    charged = question.charged.get(name, 0.0)
    first = max(series.size // 10, min(3, series.size))
    expected = charged if series.unit == "mol/L" and charged > 0 else float(total[:first].mean())
    if not expected > 0:
        return None
    share = total / expected
    usual = float(np.median(variance))
    weight = 1.0 / np.maximum(variance, 1e-6 * usual) if usual > 0 else np.ones_like(variance)
    sound = share[variance <= _AS_CERTAIN * usual]
    return Balance(
        float(np.average(share, weights=weight)), float(sound[np.argmax(np.abs(sound - 1))])
    )
