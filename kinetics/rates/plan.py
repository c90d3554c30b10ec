"""Before the run: how often and how long to measure, and how well k will then be known.

The same models are used as in fitting. How well k will be known follows from the information in
noiseless data of the stated noise (Cramér–Rao, with Student's t); whether two laws will be told
apart from the sum of squares that the wrong law leaves on noiseless data of the right one.
"""

from collections.abc import Mapping
from dataclasses import dataclass, replace
from math import inf, isfinite, log, nan, sqrt

import numpy as np
from scipy.optimize import brentq
from scipy.stats import t as student

from kinetics.errors import FitError, InputError
from kinetics.rates.estimate import Problem
from kinetics.rates.laws import law_named, mechanism_of, unit_of
from kinetics.rates.model import Model, make_model
from kinetics.rates.noise import whitener
from kinetics.rates.question import Question
from kinetics.rates.series import Float64, Series, make_series

# A second rate constant is not known beforehand: equilibrium at 80 %, second step half as fast.
_SECOND = {"first-order-reversible": 0.25, "consecutive-first-order": 0.5}
_TRIED_LENGTHS = np.geomspace(0.3, 8.0, 24)  # half-lives
_MOST_SPECTRA = 20_000
_TELLING_DELTA = 6.0


@dataclass(frozen=True, slots=True)
class Setup:
    """What is planned.

    Attributes
    ----------
    start
        Expected starting amounts, mol/L (or ratios), of the observed species; others from
        `charged` of the question.
    half_life_s
        Expected half-life of the limiting species, s.
    noise_sd
        Expected noise of one amount in one spectrum, in the unit of `start`.
    shared_relative_sd
        Relative noise of the reference integral, shared by all amounts of a spectrum.
    acquisition_s
        Length of one spectrum, s.
    unit
        Of the amounts.
    """

    start: Mapping[str, float]
    half_life_s: float
    noise_sd: float
    shared_relative_sd: float = 0.0
    acquisition_s: float = 0.0
    unit: str = "mol/L"


@dataclass(frozen=True, slots=True)
class Expected:
    """How well a run will tell.

    Attributes
    ----------
    law, spectra, length_s
        What was asked.
    conversion
        At the end of the run.
    k, unit
        The rate parameter that the half-life stands for.
    half_width
        Expected half-width of its interval, relative; inf where the data will not bound it.
    order_half_width
        Expected half-width of a free order's interval; nan where the law has no order.
    told_from
        Other law → expected difference of AICc; above 6 it will mostly be told apart.
    """

    law: str
    spectra: int
    length_s: float
    conversion: float
    k: float
    unit: str
    half_width: float
    order_half_width: float
    told_from: Mapping[str, float]


def expected(
    setup: Setup, question: Question, law: str, spectra: int, length_s: float, others: bool = True
) -> Expected:
    """Say how well a planned run will tell.

    Parameters
    ----------
    setup, question
        What is planned and what is asked; the question's other laws are set against `law`.
    law
        The law expected to hold.
    spectra, length_s
        How many, evenly spread over how long.
    others
        Whether to work out how well other laws, and a free order, will be told.

    Raises
    ------
    InputError
        If a number is not positive or the law lacks what it needs.
    FitError
        If the spectra are fewer than the parameters.
    """
    _check(setup, spectra, length_s)
    times = length_s * (np.arange(spectra) + 1.0) / spectra
    series, model, x = _noiseless(setup, question, law, times)
    half_width = _half_width(series, model, x, 0, question.confidence)
    name = question.limiting_species or ""
    left = float(np.real(model.amounts(x, np.array([length_s]))[name] + np.zeros(1))[0])
    begin = float(np.real(model.amounts(x, np.array([0.0]))[name] + np.zeros(1))[0])
    order, told = nan, {}
    if others:
        order = _order_half_width(series, question, law)
        told = {
            other: _difference(series, model, other, question)
            for other in question.laws
            if other != law
        }
    return Expected(
        law=law,
        spectra=spectra,
        length_s=length_s,
        conversion=1.0 - left / begin,
        k=float(model.to_natural(x)[0]),
        unit=unit_of(law_named(law).rates[0], law_named(law), setup.unit),
        half_width=half_width,
        order_half_width=order,
        told_from=told,
    )


def best_length_s(setup: Setup, question: Question, law: str, spectra: int) -> float:
    """Return how long to measure for the narrowest interval of k with so many spectra, s."""
    widths = [
        expected(setup, question, law, spectra, f * setup.half_life_s, others=False).half_width
        for f in _TRIED_LENGTHS
    ]
    return float(_TRIED_LENGTHS[int(np.argmin(widths))] * setup.half_life_s)


def spectra_for(
    setup: Setup, question: Question, law: str, length_s: float, half_width: float
) -> int | None:
    """Return how many spectra give k to a relative half-width; None if 20,000 do not."""
    count = 8
    while count <= _MOST_SPECTRA:
        found = expected(setup, question, law, count, length_s, others=False).half_width
        if found <= half_width:
            return count
        # The half-width falls with the root of the number.
        growth = (found / half_width) ** 2 if isfinite(found) else 2.0
        count = max(count + 1, int(count * min(growth, 8.0) * 0.98))
    return None


def advice(setup: Setup, found: Expected, wanted: int | None, target: float) -> tuple[str, ...]:
    """Put the outlook in words."""
    lines = [
        f"{found.spectra} spectra over {found.length_s:.0f} s reach {100 * found.conversion:.0f} % "
        f"conversion and give k to ±{100 * found.half_width:.2g} %."
        if isfinite(found.half_width)
        else f"{found.spectra} spectra over {found.length_s:.0f} s will not bound k."
    ]
    if wanted is None:
        lines.append(f"±{100 * target:.2g} % is out of reach with this noise; use more scans.")
    elif found.half_width > target:
        lines.append(f"For ±{100 * target:.2g} % take {wanted} spectra.")
    interval = found.length_s / found.spectra
    if setup.acquisition_s > interval:
        lines.append(
            f"A spectrum takes {setup.acquisition_s:.0f} s, but they would have to start every "
            f"{interval:.0f} s: use fewer scans."
        )
    if setup.acquisition_s > 0.1 * setup.half_life_s:
        lines.append(
            "An acquisition is more than a tenth of the half-life: the law is averaged over it, "
            "but the first points carry little."
        )
    if isfinite(found.order_half_width):
        lines.append(f"A free order would be known to ±{found.order_half_width:.2g}.")
    for other, difference in found.told_from.items():
        verb = "be told" if difference > 2 * _TELLING_DELTA else "hardly be told"
        lines.append(
            f"{other} will {verb} from {found.law} (expected difference of AICc {difference:.0f})."
        )
    lines.append("This is one run's interval; replicate runs usually scatter more.")
    return tuple(lines)


def _check(setup: Setup, spectra: int, length_s: float) -> None:
    for name, value in (
        ("half_life_s", setup.half_life_s),
        ("noise_sd", setup.noise_sd),
        ("length_s", length_s),
        ("spectra", spectra),
    ):
        if not (isfinite(value) and value > 0):
            raise InputError(f"{name} must be positive, got {value:g}")


def _noiseless(
    setup: Setup, question: Question, law: str, times: Float64
) -> tuple[Series, Model, Float64]:
    chosen = law_named(law)
    mechanism = mechanism_of(chosen, question)
    observed = tuple(s for s in setup.start if s in mechanism.species)
    if not observed:
        raise InputError(f"{law}: none of its species is among the starting amounts")
    ones = np.ones((times.size, len(observed)))
    acquisition = np.full(times.size, setup.acquisition_s)
    blank = make_series(times, ones, observed, acquisition_s=acquisition, unit=setup.unit)
    model = replace(make_model(chosen, blank, question), scale=max(setup.start.values()))
    start = [float(setup.start.get(s, question.charged.get(s, 0.0))) for s in model.free_start]
    name = question.limiting_species or ""

    def vector(log_rate: float) -> Float64:
        rate = float(np.exp(log_rate))
        rates = {"order": 1.0}
        for i, p in enumerate(r for r in chosen.rates if r != "order"):
            rates[p] = rate if i == 0 else rate * _SECOND.get(law, 1.0)
        return model.to_vector(np.array([*(rates[p] for p in chosen.rates), *start]))

    def over(log_rate: float) -> float:
        at = np.array([0.0, setup.half_life_s])
        amount = np.real(model.amounts(vector(log_rate), at)[name] + 0 * at)
        return float(amount[1] - 0.5 * amount[0])

    centre = -log(setup.half_life_s)
    low, high = centre - 25.0, centre + 25.0
    if not over(low) > 0 > over(high):
        raise InputError(f"{law}: {name} never falls to half with these starting amounts")
    x = vector(float(brentq(over, low, high, xtol=1e-10)))
    values = np.real(model.predict(x, times, acquisition))
    shared = setup.shared_relative_sd**2 * values[:, :, None] * values[:, None, :]
    covariance = setup.noise_sd**2 * np.eye(len(observed)) + shared
    series = make_series(
        times, values, observed, covariance=covariance, acquisition_s=acquisition, unit=setup.unit
    )
    return series, model, x


def _half_width(series: Series, model: Model, x: Float64, index: int, confidence: float) -> float:
    """Half-width of a parameter's interval in the vector (relative for a logarithm)."""
    dof = series.values.size - model.size
    if dof < 1:
        raise FitError(f"{series.values.size} values cannot determine {model.size} parameters")
    w = whitener(series.covariance)
    slope = w.apply_jacobian(model.jacobian(x, series.time_s, series.acquisition_s))
    size = np.linalg.norm(slope, axis=0)
    if not np.all(size > 0):
        return inf
    scaled = slope / size
    normal = scaled.T @ scaled
    if np.linalg.cond(normal) > 1e14:
        return inf
    error = sqrt(float(np.linalg.inv(normal)[index, index])) / float(size[index])
    return float(student.ppf(0.5 + confidence / 2, dof)) * error


def _order_half_width(series: Series, question: Question, law: str) -> float:
    orders = {"zero-order": 0.0, "first-order": 1.0, "second-order": 2.0, "nth-order": 1.0}
    if law not in orders:
        return nan
    model = make_model(law_named("nth-order"), series, question)
    problem = Problem(model, series)
    x, _ = problem.best(whitener(problem.stated))
    return _half_width(series, model, x, 1, question.confidence)


def _difference(series: Series, right: Model, other: str, question: Question) -> float:
    """Expected AICc of another law less that of the right one."""
    try:
        problem = Problem(make_model(law_named(other), series, question), series)
    except (FitError, InputError):
        return nan
    _, misfit = problem.best(whitener(problem.stated))
    count = series.values.size

    def penalty(size: int) -> float:
        k = size + 1
        return 2 * k + 2 * k * (k + 1) / (count - k - 1) if count > k + 1 else inf

    dof = max(count - right.size, 1)
    growth = count * log(1.0 + misfit / dof)
    return growth + penalty(problem.model.size) - penalty(right.size)
