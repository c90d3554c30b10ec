"""A mass-action scheme as a model that can be fitted like a law."""

from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from kinetics.errors import FitError, InputError
from kinetics.rates.laws import Array, Law, Mechanism
from kinetics.rates.model import Model, averages
from kinetics.rates.question import Question
from kinetics.rates.scheme import Scheme, parse_scheme, solve
from kinetics.rates.series import Float64, Series

SCHEME = "scheme"
_NODES = np.sqrt(3 / 5) * np.array([-0.5, 0.0, 0.5])
_NODE_WEIGHTS = np.array([5.0, 8.0, 5.0]) / 18.0
_RANDOM_STARTS = 40
_DECADES = 1.5  # by which single rates are tried away from the common one


@dataclass(frozen=True, slots=True, eq=False)
class SchemeModel(Model):
    """A model whose curves are integrated; derivatives come from the integration as well.

    Attributes
    ----------
    scheme
        The steps.
    """

    scheme: Scheme | None = None

    def amounts(self, x: Array, time_s: Array) -> dict[str, Array]:
        """Return the amount of every species at times since the run's start."""
        found, _ = self._solved(np.asarray(np.real(x), np.float64), np.atleast_1d(time_s))
        return {name: found[:, i] for i, name in enumerate(self._steps.species)}

    def amount_at(self, x: Float64, species: str, time_s: float) -> tuple[float, Float64]:
        """Return the amount of a species at a time and its derivative by the vector, shape (p,)."""
        found, slope = self._solved(x, np.array([time_s]))
        column = self._steps.species.index(species)
        return float(found[0, column]), slope[0, column]

    def predict(self, x: Array, time_s: Float64, acquisition_s: Float64) -> Array:
        """Return the observed amounts averaged over each acquisition, shape (n, m)."""
        return self._averaged(x, time_s, acquisition_s)[0]

    def jacobian(self, x: Float64, time_s: Float64, acquisition_s: Float64) -> Float64:
        """Return the derivative of `predict` by the vector, shape (n, m, p)."""
        return self._averaged(x, time_s, acquisition_s)[1]

    @property
    def _steps(self) -> Scheme:
        assert self.scheme is not None  # given by scheme_model
        return self.scheme

    def _averaged(
        self, x: Float64, time_s: Float64, acquisition_s: Float64
    ) -> tuple[Float64, Float64]:
        columns = [self._steps.species.index(name) for name in self.observed]
        if not averages(time_s, acquisition_s):
            found, slope = self._solved(x, time_s)
            return found[:, columns], slope[:, columns]
        times = time_s[:, None] + _NODES * acquisition_s[:, None]
        found, slope = self._solved(x, times.ravel())
        shape = (time_s.size, _NODES.size)
        return (
            np.einsum("k,nks->ns", _NODE_WEIGHTS, found[:, columns].reshape(*shape, -1)),
            np.einsum(
                "k,nksp->nsp",
                _NODE_WEIGHTS,
                slope[:, columns].reshape(*shape, len(columns), self.size),
            ),
        )

    def _solved(self, x: Float64, time_s: Float64) -> tuple[Float64, Float64]:
        """Amounts (n, s) and derivatives by the vector (n, s, p), the times in any order."""
        natural = self.to_natural(np.asarray(x, np.float64))
        count = len(self.law.rates)
        start = {**self.fixed_start, **dict(zip(self.free_start, natural[count:], strict=True))}
        begin = np.array([float(start[name]) for name in self._steps.species])
        after = np.maximum(time_s - self.origin_s, 0.0)
        unique, place = np.unique(after, return_inverse=True)
        found, by_rates, by_start = _cached(
            self._steps, natural[:count].tobytes(), begin.tobytes(), unique.tobytes()
        )
        free = [self._steps.species.index(name) for name in self.free_start]
        slope = np.concatenate(
            (by_rates * natural[:count], by_start[:, :, free] * self.scale), axis=2
        )
        return found[place], slope[place]

    def starts(self, series: Series) -> list[Float64]:
        """Return starting vectors: a common rate on a grid, and rates scattered about it."""
        columns = list(self.columns)
        first = series.values[0, columns]
        seen = dict(zip(self.observed, first, strict=True))
        spread = float(np.max(np.ptp(series.values[:, columns], axis=0)))
        size = max(float(np.max(np.abs(series.values[:, columns]))), 1e-12)
        amounts = [float(seen.get(name, max(spread, size))) for name in self.free_start]
        span = max(float(series.time_s[-1]) - self.origin_s, 1e-9)
        unit = np.array([size ** (step.order - 1) for step in self._steps.steps])
        draw = np.random.default_rng(0)
        common = [np.full(unit.size, g) for g in np.geomspace(0.05, 50.0, 10) / span]
        scattered = [
            10 ** draw.uniform(-_DECADES, _DECADES, unit.size)
            * (10 ** draw.uniform(-0.7, 1.0) / span)
            for _ in range(_RANDOM_STARTS)
        ]
        return [
            self.to_vector(np.concatenate((rates / unit, amounts)))
            for rates in (*common, *scattered)
        ]


@lru_cache(maxsize=8)
def _cached(
    scheme: Scheme, rates: bytes, start: bytes, times: bytes
) -> tuple[Float64, Float64, Float64]:
    """Solve a scheme; a search asks for values and derivatives at the same place in turn."""
    return solve(scheme, np.frombuffer(rates), np.frombuffer(start), np.frombuffer(times))


def scheme_model(series: Series, question: Question) -> SchemeModel:
    """Lay out the parameters of a question's scheme for a series.

    Observed species start freely, others at their charge, or at zero; the limiting species is a
    parameter where it is neither observed nor charged.

    Raises
    ------
    InputError
        If the scheme cannot be read, or names none of the species asked about.
    FitError
        If none of its species is observed.
    """
    scheme = parse_scheme(question.scheme)
    observed = tuple(s for s in series.species if s in scheme.species)
    if not observed:
        raise FitError("scheme: none of its species is observed in the spectra")
    strange = [s for s in question.consumed if s not in scheme.species]
    if strange:
        raise InputError(f"scheme: {strange[0]} in consumed stands in no step")
    consumed: Mapping[str, float] = question.consumed or {scheme.species[0]: 1.0}
    limiting = question.limiting_species or scheme.species[0]
    order = [limiting, *(s for s in consumed if s != limiting)]
    reactants = tuple((s, float(consumed.get(s, 1.0))) for s in order)
    products = tuple(
        (s, float(question.formed.get(s, 1.0))) for s in scheme.species if s not in order
    )
    known_units = series.unit == "mol/L"
    fixed = {s: float(v) for s, v in question.known_start.items() if s in scheme.species}
    free = [s for s in observed if s not in fixed]
    for name in scheme.species:
        if name in free or name in fixed:
            continue
        if name in question.charged and known_units:
            fixed[name] = float(question.charged[name])
        elif name == limiting:
            free.append(name)
        else:
            fixed[name] = 0.0
    law = Law(
        name=SCHEME,
        rates=scheme.rates,
        unit="1/s",
        needs_start_of=0,
        equation="; ".join(scheme.text),
        amounts=_not_closed,
        units=tuple("1/s" if step.order == 1 else "1/(U s)" for step in scheme.steps),
    )
    return SchemeModel(
        law=law,
        mechanism=Mechanism(reactants, products),
        names=(*scheme.rates, *(f"{name}_0" for name in free)),
        free_start=tuple(free),
        fixed_start=fixed,
        observed=observed,
        columns=tuple(series.species.index(name) for name in observed),
        origin_s=question.fit_origin_s,
        scale=float(np.max(np.abs(series.values))) or 1.0,
        scheme=scheme,
    )


def _not_closed(*_: object) -> dict[str, Array]:
    raise FitError("a scheme has no closed form; its model integrates it")
