"""All laws of a question fitted to a series, compared, and put into words."""

from collections.abc import Mapping
from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any

import numpy as np

from kinetics.errors import FitError
from kinetics.rates.fitting import Fit, Quantity, fit, in_range
from kinetics.rates.outcome import Balance, Forecast, Outcome, balance, forecast, outcome
from kinetics.rates.progress import Change, Progress, changes, progress
from kinetics.rates.question import Question, check_laws
from kinetics.rates.scheme_model import SCHEME
from kinetics.rates.series import Series
from kinetics.rates.words import verdict
from kinetics.remarks import Remark

# A law less likely than another by more than this is out (references: order chosen wrongly in
# few runs, and forecasts united over laws within it cover).
IN_PLAY_DELTA = 6.0


@dataclass(frozen=True, eq=False)
class Study:
    """What the data say to a question.

    Attributes
    ----------
    series, question
        What was fitted, and what was asked.
    fits
        One a law that could be fitted, the likeliest first.
    weights
        Akaike weight of each fit.
    failed
        Law → why it could not be fitted.
    preferred
        Name of the law the data single out; None where they cannot tell.
    verdict
        One or two plain sentences, with what cannot be concluded.
    outcome, forecast, balance
        By the likeliest law.
    """

    series: Series
    question: Question
    fits: tuple[Fit, ...]
    weights: Mapping[str, float]
    failed: Mapping[str, str]
    preferred: str | None
    verdict: str
    outcome: Outcome
    forecast: Forecast
    balance: Balance | None

    @property
    def best(self) -> Fit:
        """The likeliest fit."""
        return self.fits[0]

    def by_law(self, law: str) -> Fit | None:
        """Return the fit of a law, None if it could not be fitted or was not asked for."""
        return next((f for f in self.fits if f.law == law), None)

    @cached_property
    def progress(self) -> Progress:
        """Whether the reaction is over or has levelled off."""
        return progress(self.best.series, self.question)

    @cached_property
    def changes(self) -> tuple[Change, ...]:
        """What changed along the run: rate, stall, a step of the reference."""
        return changes(self.best)

    @property
    def remarks(self) -> tuple[Remark, ...]:
        """Remarks of the likeliest fit."""
        return self.best.diagnostics.remarks


def study(series: Series, question: Question) -> Study:
    """Fit all laws of a question and compare them.

    Raises
    ------
    FitError
        If no law can be fitted; the message says why.
    InputError
        If the laws exclude each other, or a law lacks what it needs.

    Examples
    --------
    >>> from kinetics.rates.series import make_series
    >>> times = [100, 300, 500, 800, 1200, 1600, 2000, 2400]
    >>> amounts = [0.904, 0.742, 0.607, 0.449, 0.302, 0.201, 0.136, 0.090]
    >>> series = make_series(times, amounts, ["ester"], standard_uncertainty=0.002)
    >>> found = study(series, Question({"ester": 1}, laws=("first-order", "second-order")))
    >>> found.preferred
    'first-order'
    """
    check_laws(question)
    fits, failed = [], {}
    for law in (SCHEME,) if question.scheme else question.laws:
        try:
            fits.append(fit(series, law, question))
        except FitError as why:
            failed[law] = str(why)
    if not fits:
        raise FitError("; ".join(failed.values()) or "no law was asked for")
    fits.sort(key=lambda f: f.aicc)
    aicc = np.array([f.aicc for f in fits])
    # With too few points for the criterion no law is likelier than another.
    relative = np.exp(-0.5 * (aicc - aicc[0])) if np.isfinite(aicc[0]) else np.ones(aicc.size)
    weights = {f.law: float(w) for f, w in zip(fits, relative / relative.sum(), strict=True)}
    in_play = [f for f in fits if not f.aicc - fits[0].aicc > IN_PLAY_DELTA]
    preferred = _preferred(fits, in_play, failed)
    unit = series.unit
    reached = outcome(fits[0], question, unit)
    return Study(
        series=series,
        question=question,
        fits=tuple(fits),
        weights=weights,
        failed=failed,
        preferred=preferred,
        verdict=verdict(fits, in_play, preferred, failed, reached),
        outcome=reached,
        forecast=forecast(fits[0], in_play, question, reached.conversion, unit),
        balance=balance(in_range(series, question), question),
    )


def _preferred(fits: list[Fit], in_play: list[Fit], failed: Mapping[str, str]) -> str | None:
    """The law the data single out, if they do.

    Withheld while another law is in play, while a law could not be tried, while neighbouring
    residuals of the best are correlated, and while its rate is not bounded on both sides.
    """
    best = fits[0]
    bounded = all(
        np.isfinite(p.low) and np.isfinite(p.high)
        for p in best.parameters
        if p.name in best.model.law.rates
    )
    alone = len(in_play) == 1 and not failed
    steady = not best.diagnostics.correlated
    return best.law if alone and steady and bounded else None


def with_law_first(result: Study, law: str | None) -> Study:
    """Return the study with a law that a person chose in front.

    Outcome and forecast then follow that law; weights, preference and verdict stay as they are.
    """
    chosen = None if law is None else result.by_law(law)
    if chosen is None or chosen is result.best:
        return result
    fits = (chosen, *(f for f in result.fits if f is not chosen))
    unit = result.series.unit
    reached = outcome(chosen, result.question, unit)
    return replace(
        result,
        fits=fits,
        outcome=reached,
        forecast=forecast(chosen, [chosen], result.question, reached.conversion, unit),
    )


def document(result: Study) -> dict[str, Any]:
    """Return the parts of ``fit --json`` that concern fits, as plain JSON values."""
    return {
        "confidence": result.question.confidence,
        "fits": [_fit_document(f, result.weights[f.law]) for f in result.fits],
        "not_fitted": dict(result.failed),
        "preferred": result.preferred,
        "verdict": result.verdict,
        "outcome": _outcome_document(result.outcome),
        "forecast": {
            "target_conversion": plain(result.forecast.target_conversion),
            "reached": result.forecast.reached,
            "time_s": quantity(result.forecast.time_s),
        },
        "progress": {
            "state": result.progress.state,
            "conversion": plain(result.progress.conversion),
            "remainder_high": plain(result.progress.remainder_high),
            "words": result.progress.words,
        },
        "changes": [
            {"kind": c.kind, "time_s": c.time_s, "noticed_s": c.noticed_s, "words": c.words}
            for c in result.changes
        ],
        "balance": None
        if result.balance is None
        else {"mean": plain(result.balance.mean), "worst": plain(result.balance.worst)},
    }


def _fit_document(f: Fit, weight: float) -> dict[str, Any]:
    w = f.estimate.whitener
    return {
        "law": f.law,
        "equation": f.equation,
        "points": f.points,
        "aicc": plain(f.aicc),
        "weight": plain(weight),
        "residual_sd": plain(f.residual_sd),
        "parameters": {
            p.name: {
                "value": plain(p.value),
                "standard_error": plain(p.standard_error),
                "low": plain(p.low),
                "high": plain(p.high),
                "unit": p.unit,
                "interval": p.interval,
            }
            for p in f.parameters
        },
        "half_life_s": quantity(f.half_life()),
        "systematic": plain(f.series.systematic),
        "noise": {
            "scale": plain(f.estimate.scale),
            "white_sd": plain(float(np.sqrt(w.white))),
            "shared_sd": plain(float(np.sqrt(w.shared))),
            "correlation": plain(w.rho),
        },
        "diagnostics": {
            "autocorrelation": plain(f.diagnostics.autocorrelation),
            "runs_p": plain(f.diagnostics.runs_p),
            "remarks": [str(remark) for remark in f.diagnostics.remarks],
        },
    }


def _outcome_document(o: Outcome) -> dict[str, Any]:
    return {
        "limiting": o.limiting,
        "basis": o.basis,
        "conversion": quantity(o.conversion),
        "yield": {name: quantity(q) for name, q in o.yields.items()},
        "selectivity": {name: quantity(q) for name, q in o.selectivity.items()},
    }


def plain(value: float) -> float | None:
    """Return a plain JSON number, None for what cannot be had."""
    number = float(value)
    return number if np.isfinite(number) else None


def quantity(q: Quantity) -> dict[str, float | None] | None:
    """Return a value with its interval, None where there is none."""
    if not np.isfinite(q.value):
        return None
    return {"value": plain(q.value), "low": plain(q.low), "high": plain(q.high)}
