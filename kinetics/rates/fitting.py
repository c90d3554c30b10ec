"""One law fitted to one series: parameters with intervals, and what they say."""

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy.optimize import brentq
from scipy.stats import norm
from scipy.stats import t as student

from kinetics.errors import FitError
from kinetics.rates.estimate import Estimate, Problem, estimate
from kinetics.rates.laws import Array, law_named, unit_of
from kinetics.rates.model import Model, make_model
from kinetics.rates.profile import Profile, profile
from kinetics.rates.question import Question
from kinetics.rates.series import Float64, Series
from kinetics.remarks import Remark

_STEP = 1e-30
# Below this number of values a drift is not told from plain scatter.
_FEW_FOR_DRIFT = 50


@dataclass(frozen=True, slots=True)
class Parameter:
    """One fitted parameter.

    Attributes
    ----------
    name, unit
        As in the contract.
    value, standard_error
        Estimate and standard error in `unit`.
    low, high
        Interval; nan on a side that the data do not bound.
    interval
        ``"profile"``.
    """

    name: str
    unit: str
    value: float
    standard_error: float
    low: float
    high: float
    interval: str = "profile"


@dataclass(frozen=True, slots=True)
class Quantity:
    """A value with its interval; nan where it cannot be had."""

    value: float
    low: float
    high: float


NOTHING = Quantity(float("nan"), float("nan"), float("nan"))


@dataclass(frozen=True, slots=True)
class Diagnostics:
    """What the residuals say.

    Attributes
    ----------
    autocorrelation
        Lag-one correlation of the whitened residuals.
    correlated
        Whether that is beyond chance.
    runs_p
        Two-sided p of the number of runs of one sign (Wald & Wolfowitz 1940), nan for few points.
    remarks
        In words.
    """

    autocorrelation: float
    correlated: bool
    runs_p: float
    remarks: tuple[Remark, ...]


@dataclass(frozen=True, eq=False)
class Fit:
    """A law fitted to a series.

    Attributes
    ----------
    law
        Name of the law.
    equation
        The law in symbols.
    series
        What was fitted (after the range of the fit).
    question
        What was asked.
    problem, estimate
        Model and minimum.
    parameters
        With intervals.
    profiles
        One a parameter.
    diagnostics
        Of the residuals.
    """

    law: str
    equation: str
    series: Series
    question: Question
    problem: Problem
    estimate: Estimate
    parameters: tuple[Parameter, ...]
    profiles: tuple[Profile, ...]
    diagnostics: Diagnostics

    @property
    def model(self) -> Model:
        """The model."""
        return self.problem.model

    @property
    def points(self) -> int:
        """Number of spectra."""
        return self.series.size

    @cached_property
    def aicc(self) -> float:
        """Akaike's criterion with the small-sample correction (Hurvich & Tsai 1989)."""
        count = self.estimate.whitened.size
        k = self.model.size + 1 + self.estimate.whitener.extra_parts
        if count <= k + 1:
            return float("inf")
        return self.estimate.minus_two_log_likelihood + 2 * k + 2 * k * (k + 1) / (count - k - 1)

    @property
    def residual_sd(self) -> float:
        """Root mean square of the residuals over the degrees of freedom, in the amount's unit."""
        return float(np.sqrt((self.estimate.residuals**2).sum() / self.estimate.dof))

    @property
    def t_quantile(self) -> float:
        """Student's t for the asked confidence."""
        return float(student.ppf(0.5 + self.question.confidence / 2, self.estimate.dof))

    def parameter(self, name: str) -> Parameter:
        """Return a parameter by name."""
        return next(p for p in self.parameters if p.name == name)

    def curve(self, time_s: Float64) -> tuple[Float64, Float64, Float64]:
        """Return the fitted amounts of the observed species and their confidence band.

        Parameters
        ----------
        time_s
            Shape (q,).

        Returns
        -------
        values, low, high
            Shape (q, m) each, columns as in ``model.observed``; the band is that of the curve
            (not of single points).
        """
        times = np.asarray(time_s, np.float64)
        none = np.zeros_like(times)
        values = np.real(self.model.predict(self.estimate.x, times, none))
        slope = self.model.jacobian(self.estimate.x, times, none)
        variance = np.einsum("qmi,ij,qmj->qm", slope, self.estimate.covariance, slope)
        half = self.t_quantile * np.sqrt(np.maximum(variance, 0.0))
        return values, values - half, values + half

    def amount_at(self, species: str, time_s: float) -> tuple[float, Float64]:
        """Return an amount at a time and its derivative by the vector, shape (p,)."""

        def value(x: Array) -> Array:
            return self.model.amounts(x, np.array([time_s]))[species] + 0 * np.array([time_s])

        slope = np.empty(self.model.size)
        for i in range(self.model.size):
            stepped = np.array(self.estimate.x, complex)
            stepped[i] += 1j * _STEP
            slope[i] = float(np.imag(value(stepped)[0]) / _STEP)
        return float(np.real(value(self.estimate.x)[0])), slope

    def time_to(self, species: str, amount: float, horizon_s: float) -> Quantity:
        """Return when a consumed species has fallen to an amount, s since the run's start.

        nan where it does not get there within `horizon_s`. The interval is symmetric in the
        logarithm of the time since the fit's origin.
        """
        origin = self.model.origin_s

        def over(after: float) -> float:
            return self.amount_at(species, origin + after)[0] - amount

        if not over(0.0) > 0 or not over(horizon_s) < 0:
            return NOTHING
        after = float(brentq(over, 0.0, horizon_s, xtol=1e-9 * horizon_s, rtol=1e-12))
        _, slope = self.amount_at(species, origin + after)
        width = max(1e-6 * after, 1e-12)
        rate = (over(after + width) - over(after - width)) / (2 * width)
        if not rate < 0:
            return NOTHING
        by_vector = -slope / rate
        error = float(np.sqrt(by_vector @ self.estimate.covariance @ by_vector)) / after
        factor = float(np.exp(min(self.t_quantile * error, 700.0)))
        return Quantity(origin + after, origin + after / factor, origin + after * factor)

    def half_life(self) -> Quantity:
        """Return the half-life of the limiting species from the fit's start, s."""
        name = self.question.limiting_species
        if name is None or name not in self.model.mechanism.species:
            return NOTHING
        if self.law in ("first-order", "pseudo-first-order"):
            k, a = self.parameters[0], dict(self.model.mechanism.reactants)[name]
            return Quantity(*(np.log(2) / (a * v) for v in (k.value, k.high, k.low)))
        begin = self.amount_at(name, self.model.origin_s)[0]
        shifted = self._time_to_share(name, 0.5)
        return shifted if begin > 0 else NOTHING

    def _time_to_share(self, species: str, share: float) -> Quantity:
        """Time since the fit's origin until a species has fallen to a share of its start.

        Unlike `time_to` the goal moves with the fitted starting amount.
        """
        origin = self.model.origin_s
        begin, begin_slope = self.amount_at(species, origin)
        span = max(float(self.series.time_s[-1]) - origin, 1e-9)
        horizon = 1e4 * span

        def over(after: float) -> float:
            return self.amount_at(species, origin + after)[0] - share * begin

        if not begin > 0 or not over(horizon) < 0:
            return NOTHING
        after = float(brentq(over, 0.0, horizon, xtol=1e-12 * horizon, rtol=1e-12))
        _, slope = self.amount_at(species, origin + after)
        width = 1e-6 * after
        rate = (over(after + width) - over(after - width)) / (2 * width)
        by_vector = -(slope - share * begin_slope) / rate
        error = float(np.sqrt(by_vector @ self.estimate.covariance @ by_vector)) / after
        factor = float(np.exp(min(self.t_quantile * error, 700.0)))
        return Quantity(after, after / factor, after * factor)


def fit(series: Series, law: str, question: Question) -> Fit:
    """Fit one law.

    Parameters
    ----------
    series
        Amounts against time.
    law
        Name of the law, as in the sheet.
    question
        What is asked; its `laws` are not looked at.

    Raises
    ------
    FitError
        If the data do not allow the fit.
    InputError
        If the question does not name what the law needs.
    """
    chosen = law_named(law)
    part = in_range(series, question)
    model = make_model(chosen, part, question)
    problem = Problem(model, part)
    found = estimate(problem)
    profiles = tuple(profile(problem, found, i, question.confidence) for i in range(model.size))
    natural = model.to_natural(found.x)
    slope = np.array(
        [
            natural[i] if model.is_log(i) else (1.0 if i < len(chosen.rates) else model.scale)
            for i in range(model.size)
        ]
    )
    errors = np.sqrt(np.maximum(np.diag(found.covariance), 0.0)) * slope
    parameters = tuple(
        Parameter(
            name,
            unit_of(name, chosen, series.unit),
            float(natural[i]),
            float(errors[i]),
            profiles[i].low,
            profiles[i].high,
        )
        for i, name in enumerate(model.names)
    )
    return Fit(
        law=law,
        equation=chosen.equation,
        series=part,
        question=question,
        problem=problem,
        estimate=found,
        parameters=parameters,
        profiles=profiles,
        diagnostics=_diagnostics(model, found, parameters),
    )


def in_range(series: Series, question: Question) -> Series:
    """Return the spectra inside the range of the fit.

    Raises
    ------
    FitError
        If there are none.
    """
    low = question.fit_origin_s if question.fit_from_s is None else question.fit_from_s
    inside = series.time_s >= low - 1e-9
    if question.fit_to_s is not None:
        inside &= series.time_s <= question.fit_to_s + 1e-9
    if not inside.any():
        raise FitError(f"no spectrum lies in the range of the fit, from {low:g} s on")
    return series.select(inside)


def runs_p(whitened: Float64) -> float:
    """Return the two-sided p of the number of runs of one sign, pooled over the species."""
    runs = expected = variance = 0.0
    for column in whitened.T:
        up = int((column > 0).sum())
        down = column.size - up
        total = up + down
        if min(up, down) < 3:
            continue
        runs += 1 + int(np.count_nonzero(np.diff(column > 0)))
        expected += 2 * up * down / total + 1
        variance += 2 * up * down * (2 * up * down - total) / (total**2 * (total - 1))
    if variance <= 0:
        return float("nan")
    return float(2 * norm.sf(abs(runs - expected) / np.sqrt(variance)))


def _diagnostics(model: Model, found: Estimate, parameters: tuple[Parameter, ...]) -> Diagnostics:
    remarks: list[Remark] = []
    remarks += noise_remarks(found)
    for p in parameters:
        if np.isnan(p.low) or np.isnan(p.high):
            sides = [s for s, v in (("below", p.low), ("above", p.high)) if np.isnan(v)]
            remarks.append(
                Remark(
                    "not-bounded",
                    f"The data do not bound {p.name} {' or '.join(sides)}.",
                    "Only the other end of its interval means anything."
                    if len(sides) == 1
                    else "Its value means nothing.",
                    "Follow the reaction further, or ask for a law with fewer parameters.",
                    subject=p.name,
                )
            )
    return Diagnostics(
        found.plain_correlation, found.correlated, runs_p(found.whitened), tuple(remarks)
    )


def noise_remarks(found: Estimate) -> list[Remark]:
    """Say where the scatter about the fit is not what intervals are made for."""
    remarks = []
    if found.correlated:
        remarks.append(
            Remark(
                "residuals-correlated",
                "Neighbouring points lie on the same side of the curve "
                f"(correlation {found.plain_correlation:.2f}).",
                "The intervals allow for it, but may still be too narrow; either the law is "
                "wrong or reference, phase or temperature drift.",
                "Look at the residuals; a second signal of the same species tells which.",
            )
        )
    count = found.whitened.size
    if found.whitener.extra_parts and count < _FEW_FOR_DRIFT and np.isfinite(found.excess):
        remarks.append(
            Remark(
                "scatter-unexplained",
                f"The points scatter {np.sqrt(found.excess):.1f} times as much as the noise of "
                "the spectra explains.",
                f"With {found.whitened.shape[0]} spectra it cannot be told whether that is a "
                "drift, and a drift makes the intervals too narrow.",
                "Follow longer or more often, and look at the reference.",
            )
        )
    return remarks
