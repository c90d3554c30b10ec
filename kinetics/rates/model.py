"""A law applied to a series: parameter vector in, predicted amounts and their derivatives out."""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from kinetics.errors import FitError, InputError
from kinetics.rates.laws import Array, Law, Mechanism, mechanism_of
from kinetics.rates.question import Question
from kinetics.rates.series import Float64, Series

# Three-point Gauss–Legendre over the acquisition: exact where the curve is a polynomial of
# fifth degree there.
_NODES = np.sqrt(3 / 5) * np.array([-0.5, 0.0, 0.5])
_NODE_WEIGHTS = np.array([5.0, 8.0, 5.0]) / 18.0
# Below this part of the span of the series an acquisition is a point in time.
_POINT_LIKE = 0.002
# Held as they are: from the logarithm of a reverse rate near zero a search does not come back.
_PLAIN = ("order", "k_reverse")
_STEP = 1e-30  # complex step; no cancellation, so it may be tiny


@dataclass(frozen=True, slots=True, eq=False)
class Model:
    """A law with its parameters laid out for a series.

    The vector holds the logarithm of each positive rate parameter, `order` and `k_reverse` as they
    are (noise may make the latter negative), then the starting amounts over `scale`.

    Attributes
    ----------
    law, mechanism
        The law and the species it speaks of.
    names
        Parameter names: the rates, then ``SPECIES_0``.
    free_start
        Species whose starting amounts are parameters.
    fixed_start
        Species whose starting amounts are known or zero.
    observed
        Species of the columns that the law predicts; others are not fitted.
    columns
        Their columns in the series.
    origin_s
        Time from which the law runs.
    scale
        Unit of the starting amounts in the vector.
    rate_scale
        Amount at which the vector holds the rate of a law with a free order, ln(k U^(n−1)): at an
        amount the data show, rate and order are hardly correlated.
    """

    law: Law
    mechanism: Mechanism
    names: tuple[str, ...]
    free_start: tuple[str, ...]
    fixed_start: Mapping[str, float]
    observed: tuple[str, ...]
    columns: tuple[int, ...]
    origin_s: float
    scale: float
    rate_scale: float = 1.0

    @property
    def size(self) -> int:
        """Number of parameters."""
        return len(self.names)

    def is_log(self, index: int) -> bool:
        """Whether the vector holds the logarithm of a parameter."""
        return index < len(self.law.rates) and self.law.rates[index] not in _PLAIN

    def to_natural(self, x: Array) -> Array:
        """Turn a vector into parameter values, shape (p,)."""
        count = len(self.law.rates)
        parts = []
        for i in range(self.size):
            if self.is_log(i):
                parts.append(np.exp(x[i] - self._shift(x)))
            else:
                parts.append(x[i] if i < count else x[i] * self.scale)
        return np.array(parts)

    def to_vector(self, natural: Float64) -> Float64:
        """Turn parameter values into a vector, shape (p,)."""
        out = np.array(natural, np.float64)
        for i in range(self.size):
            if self.is_log(i):
                out[i] = np.log(natural[i]) + self._shift(natural)
            elif i >= len(self.law.rates):
                out[i] = natural[i] / self.scale
        return out

    def _shift(self, x: Array) -> Array:
        """Logarithm of U^(n−1); `order` is the same in the vector and by itself."""
        if self.rate_scale == 1.0 or "order" not in self.law.rates:
            return 0.0
        return (x[self.law.rates.index("order")] - 1.0) * np.log(self.rate_scale)

    def natural_slope(self, x: Float64) -> Float64:
        """Return the derivative of `to_natural`, shape (p, p)."""
        steps = x.astype(complex)[:, None] + 1j * _STEP * np.eye(x.size)
        columns = [self.to_natural(steps[:, i]).imag / _STEP for i in range(x.size)]
        return np.stack(columns, axis=1)

    def parts(self, x: Array) -> tuple[dict[str, Array], dict[str, Array]]:
        """Return rates and starting amounts as dictionaries."""
        natural = self.to_natural(x)
        count = len(self.law.rates)
        rates = dict(zip(self.law.rates, natural[:count], strict=True))
        start: dict[str, Array] = dict(self.fixed_start)
        start.update(zip(self.free_start, natural[count:], strict=True))
        return rates, start

    def amounts(self, x: Array, time_s: Array) -> dict[str, Array]:
        """Return the amount of every species of the mechanism at times since the run's start."""
        rates, start = self.parts(x)
        return self.law.amounts(self.mechanism, rates, start, time_s - self.origin_s)

    def amount_at(self, x: Float64, species: str, time_s: float) -> tuple[float, Float64]:
        """Return the amount of a species at a time and its derivative by the vector, shape (p,)."""
        at = np.array([time_s])
        slope = np.empty(self.size)
        for i in range(self.size):
            stepped = np.array(x, complex)
            stepped[i] += 1j * _STEP
            slope[i] = float(np.imag((self.amounts(stepped, at)[species] + 0 * at)[0]) / _STEP)
        return float(np.real((self.amounts(x, at)[species] + 0 * at)[0])), slope

    def starts(self, series: Series) -> list[Float64]:
        """Return starting vectors from the data."""
        return starts(self, series)

    def predict(self, x: Array, time_s: Float64, acquisition_s: Float64) -> Array:
        """Return the observed amounts averaged over each acquisition, shape (n, m)."""
        if not averages(time_s, acquisition_s):
            found = self.amounts(x, time_s)
            return np.stack([found[name] + 0 * time_s for name in self.observed], axis=1)
        total: Array = 0.0
        for node, weight in zip(_NODES, _NODE_WEIGHTS, strict=True):
            found = self.amounts(x, time_s + node * acquisition_s)
            total = total + weight * np.stack(
                [found[name] + 0 * time_s for name in self.observed], axis=1
            )
        return total

    def jacobian(self, x: Float64, time_s: Float64, acquisition_s: Float64) -> Float64:
        """Return the derivative of `predict` by the vector, shape (n, m, p)."""
        columns = []
        for i in range(self.size):
            stepped = np.array(x, complex)
            stepped[i] += 1j * _STEP
            columns.append(self.predict(stepped, time_s, acquisition_s).imag / _STEP)
        return np.stack(columns, axis=2)


def averages(time_s: Float64, acquisition_s: Float64) -> bool:
    """Whether acquisitions are long enough that the law must be averaged over them."""
    if time_s.size < 2:
        return False
    longest = float(acquisition_s.max())
    return longest > 0 and longest > _POINT_LIKE * float(np.ptp(time_s)) > 0


def make_model(law: Law, series: Series, question: Question) -> Model:
    """Lay out the parameters of a law for a series.

    Every observed species gets a starting amount of its own, so that the balance of matter need
    not close at the start. A reactant that is not observed starts at its charge where that is
    known; the limiting one is a parameter where it is not. A product or intermediate that is not
    observed starts at its charge, or at zero.

    Raises
    ------
    InputError
        If the law needs a starting amount that is neither observed nor charged.
    FitError
        If the series observes none of the law's species.
    """
    mechanism = mechanism_of(law, question)
    observed = tuple(s for s in series.species if s in mechanism.species)
    if not observed:
        raise FitError(f"{law.name}: none of its species is observed in the spectra")
    fixed = {s: float(v) for s, v in question.known_start.items() if s in mechanism.species}
    free = [s for s in observed if s not in fixed]
    for place, (name, _) in enumerate(mechanism.reactants):
        if name in observed or name in fixed:
            continue
        if name in question.charged and series.unit == "mol/L":
            fixed[name] = float(question.charged[name])
        elif place == 0:
            free.append(name)
        elif place < law.needs_start_of:
            raise InputError(
                f"{law.name}: {name} is not observed; give its amount in charged, in mol/L, and a "
                "reference concentration"
            )
        else:
            fixed[name] = 0.0
    for name in mechanism.species:
        if name not in free and name not in fixed:
            known = question.charged.get(name, 0.0) if series.unit == "mol/L" else 0.0
            fixed[name] = float(known)
    scale = float(np.max(np.abs(series.values))) or 1.0
    return Model(
        law=law,
        mechanism=mechanism,
        names=(*law.rates, *(f"{name}_0" for name in free)),
        free_start=tuple(free),
        fixed_start=fixed,
        observed=observed,
        columns=tuple(series.species.index(name) for name in observed),
        origin_s=question.fit_origin_s,
        scale=scale,
        rate_scale=scale if "order" in law.rates else 1.0,
    )


def starts(model: Model, series: Series) -> list[Float64]:
    """Return starting vectors from the data: a grid of rate constants, amounts as seen.

    A grid, because from a poor start a least-squares search may run to infinity.
    """
    columns = list(model.columns)
    first, last = series.values[0, columns], series.values[-1, columns]
    if series.size >= 6:
        first = np.median(series.values[:3, columns], axis=0)
        last = np.median(series.values[-3:, columns], axis=0)
    seen = dict(zip(model.observed, first, strict=True))
    turned = max(float(np.max(np.abs(last - first))), 1e-6 * model.scale)
    span = max(float(series.time_s[-1] - model.origin_s), 1e-9)
    beginnings = []
    for amount in (1.0, 1.5, 4.0):
        amounts: list[float] = []
        for name in model.free_start:
            products = [s for s, _ in model.mechanism.products]
            if name not in seen:
                amounts.append(amount * turned)
            elif model.law.name == "autocatalytic" and name in products:
                amounts.append(max(seen[name], 0.01 * turned))
            else:
                amounts.append(seen[name] if name in products else max(seen[name], turned))
        beginnings.append(np.array(amounts))
        if all(name in seen for name in model.free_start):
            break
    out = []
    positive = [name for name in model.law.rates if name != "order"]
    for start in beginnings:
        size = float(np.max(np.abs(start))) if start.size else model.scale
        size = max(size, 1e-12)
        for rate in np.geomspace(0.01, 300.0, 16) / span:
            for second in (0.1, 1.0, 10.0) if len(positive) > 1 else (1.0,):
                for order in (0.5, 1.5, 2.5) if "order" in model.law.rates else (1.0,):
                    unit = _unit_scale(model, size, order)
                    rates = [rate / unit, rate * second / unit][: len(positive)]
                    if "order" in model.law.rates:
                        rates.append(order)
                    out.append(model.to_vector(np.concatenate((rates, start))))
    return out


def _unit_scale(model: Model, size: float, order: float) -> float:
    """Turn a rate in 1/s into that of the law's unit: the power of the amount it carries."""
    if model.law.unit == "U/s":
        return 1.0 / size
    if model.law.unit == "1/(U s)":
        return size
    if model.law.unit == "U^(1-n)/s":
        return float(size ** (order - 1.0))
    return 1.0
