"""One law fitted to one series: parameters with intervals, and what they say."""

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from scipy.optimize import brentq
from scipy.stats import t as student

from kinetics.errors import FitError
from kinetics.rates.advise import law_remarks, outlier_remarks
from kinetics.rates.diagnostics import Diagnostics, diagnose
from kinetics.rates.estimate import Estimate, Problem, estimate
from kinetics.rates.laws import law_named, unit_of
from kinetics.rates.model import Model, make_model
from kinetics.rates.profile import Profile, profile, profile_curve
from kinetics.rates.question import Question
from kinetics.rates.scheme_model import SCHEME, scheme_model
from kinetics.rates.series import Float64, Series


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

    def profile(self, name: str) -> Profile:
        """Return the profile of a parameter over three standard errors, for a picture."""
        index = self.model.names.index(name)
        return profile_curve(*_by_itself(self.problem, self.estimate, index), index)

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
        return self.model.amount_at(self.estimate.x, species, time_s)

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
        shifted = self.time_to_share(name, 0.5)
        return shifted if begin > 0 else NOTHING

    def time_to_share(self, species: str, share: float) -> Quantity:
        """Return the time since the fit's origin until a share of a species is left.

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


def fit(series: Series, law: str, question: Question, as_stated: bool = False) -> Fit:
    """Fit one law.

    Parameters
    ----------
    series
        Amounts against time.
    law
        Name of the law, as in the sheet; ``"scheme"`` for the question's mass-action steps.
    question
        What is asked; its `laws` are not looked at.
    as_stated
        Take the stated covariance up to a factor (ordinary weighted least squares) and do not
        look for further scatter or correlation.

    Raises
    ------
    FitError
        If the data do not allow the fit.
    InputError
        If the question does not name what the law needs.

    Examples
    --------
    >>> from kinetics.rates.series import make_series
    >>> amounts = [0.905, 0.819, 0.741, 0.670, 0.607, 0.549]
    >>> series = make_series([100, 200, 300, 400, 500, 600], amounts, ["ester"])
    >>> k = fit(series, "first-order", Question({"ester": 1})).parameter("k")
    >>> f"{k.value:.3g} {k.unit}"
    '0.001 1/s'
    """
    part = in_range(series, question)
    if law == SCHEME:
        model: Model = scheme_model(part, question)
        chosen = model.law
    else:
        chosen = law_named(law)
        model = make_model(chosen, part, question)
    problem = Problem(model, part)
    found = estimate(problem, as_stated)
    profiles = tuple(
        profile(*_by_itself(problem, found, i), i, question.confidence) for i in range(model.size)
    )
    natural = model.to_natural(found.x)
    slope = model.natural_slope(found.x)
    errors = np.sqrt(np.maximum(np.diag(slope @ found.covariance @ slope.T), 0.0))
    parameters = tuple(
        Parameter(
            name,
            unit_of(name, chosen, series.unit),
            # Noise may turn a reverse rate near zero negative; nature does not.
            *_not_negative(name, float(natural[i]), float(errors[i]), profiles[i]),
        )
        for i, name in enumerate(model.names)
    )
    judged = diagnose(found, {p.name: (p.low, p.high) for p in parameters})
    more = law_remarks(model) + outlier_remarks(problem, found)
    return Fit(
        law=law,
        equation=chosen.equation,
        series=part,
        question=question,
        problem=problem,
        estimate=found,
        parameters=parameters,
        profiles=profiles,
        diagnostics=replace(judged, remarks=(*judged.remarks, *more)),
    )


def _by_itself(problem: Problem, found: Estimate, index: int) -> tuple[Problem, Estimate]:
    """Return problem and minimum with the vector laid out so that an element is a parameter."""
    model = problem.model
    if index or model.rate_scale == 1.0:
        return problem, found
    plain = replace(model, rate_scale=1.0)
    turn = np.eye(model.size)
    turn[0, model.law.rates.index("order")] = -np.log(model.rate_scale)
    moved = replace(
        found,
        x=plain.to_vector(model.to_natural(found.x)),
        covariance=turn @ found.covariance @ turn.T,
    )
    return Problem(plain, problem.series), moved


def _not_negative(
    name: str, value: float, error: float, p: Profile
) -> tuple[float, float, float, float]:
    if name != "k_reverse":
        return value, error, p.low, p.high
    low = 0.0 if np.isnan(p.low) else max(p.low, 0.0)
    return max(value, 0.0), error, low, max(p.high, 0.0) if np.isfinite(p.high) else p.high


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
