"""What is drawn of several runs at once: k against temperature, and their courses laid together."""

from collections.abc import Mapping
from dataclasses import dataclass
from math import nan
from typing import Any

import numpy as np

from kinetics.rates.across import Rate, TemperatureFit, arrhenius, eyring
from kinetics.rates.series import Float64
from kinetics.run import Run

_CURVE_POINTS = 60
_BEYOND_K = 3.0  # the line runs on by this beyond the outermost temperatures


@dataclass(frozen=True, slots=True, eq=False)
class TemperatureCurve:
    """k by a fitted temperature dependence.

    Attributes
    ----------
    temperature_k
        Shape (q,), ascending, K.
    k, low, high
        Mean k there and its interval, in the unit of the comparison, shape (q,).
    """

    temperature_k: Float64
    k: Float64
    low: Float64
    high: Float64


@dataclass(frozen=True, slots=True, eq=False)
class Course:
    """What is left of the limiting species in one run.

    Attributes
    ----------
    time_s
        Since the fit's start, shape (n,).
    share, share_u
        Amount over the fitted amount at the start, and its standard uncertainty (that of the
        single spectrum), shape (n,).
    """

    time_s: Float64
    share: Float64
    share_u: Float64


def temperature_fit(found: Mapping[str, Any], kind: str) -> TemperatureFit | None:
    """Return the fit behind a comparison's `arrhenius` or `eyring`; None where it has none.

    Parameters
    ----------
    found
        A document of `compare`.
    kind
        ``"arrhenius"`` or ``"eyring"``.
    """
    if found[kind] is None:
        return None
    rates = [
        Rate(
            run["logbook"],
            run["k"]["value"],
            run["k"]["standard_error"],
            found["unit"],
            nan if run["temperature_k"] is None else run["temperature_k"],
            run["temperature_u_k"],
        )
        for run in found["runs"]
    ]
    return (arrhenius if kind == "arrhenius" else eyring)(rates, found["confidence"])


def temperature_curve(fitted: TemperatureFit) -> TemperatureCurve:
    """Return a fitted temperature dependence at evenly spread temperatures, to be drawn."""
    known = [rate.temperature_k for rate in fitted.rates]
    at = np.linspace(min(known) - _BEYOND_K, max(known) + _BEYOND_K, _CURVE_POINTS)
    found = [fitted.predict(float(t), single_run=False) for t in at]
    return TemperatureCurve(
        at,
        np.array([q.value for q in found]),
        np.array([q.low for q in found]),
        np.array([q.high for q in found]),
    )


def course(run: Run, start: float | None) -> Course | None:
    """Return the course of a run over its start; None where the limiting species is not seen.

    Parameters
    ----------
    run
        The run.
    start
        Fitted amount of the limiting species at the fit's start, in the unit of its amounts.
    """
    question = run.question()
    name = question.limiting_species
    if name is None or name not in run.amounts.species or not start or run.fitted.size == 0:
        return None
    column = run.amounts.species.index(name)
    rows = run.fitted
    time = run.time_s[run.measured[rows]] - question.fit_origin_s
    after = time >= 0
    return Course(
        time[after],
        run.amounts.values[rows, column][after] / start,
        run.amounts.standard_uncertainty[rows, column][after] / start,
    )
