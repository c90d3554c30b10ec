"""Rate laws in closed forms that stay accurate in every limit.

v is the rate of the reaction as written: −d[A]/dt = a·v with the coefficient a of A, and
d[P]/dt = p·v. All forms are analytic in their parameters, so that the fit differentiates them by
the complex step, which is exact to the last digits (Squire & Trapp, SIAM Rev. 40 (1998) 110).

φ(x) = (1 − e^(−x))/x is entire; with it no form divides by a difference that may vanish.
"""

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from kinetics.errors import InputError
from kinetics.rates.question import Question

Array = Any  # float64 or complex128, shape (n,) or scalar: the complex step passes both


def phi(x: Array) -> Array:
    """Return (1 − e^(−x))/x, 1 at 0, for real or complex x."""
    x = np.asarray(x)
    small = np.abs(x) < 1e-5
    safe = np.where(small, 1.0, x)
    return np.where(small, 1.0 - x / 2 + x * x / 6, -np.expm1(-safe) / safe)


@dataclass(frozen=True, slots=True)
class Mechanism:
    """The species a law speaks of, taken from a question.

    Attributes
    ----------
    reactants, products
        (species, coefficient), the limiting reactant first.
    intermediate
        Of consecutive laws.
    """

    reactants: tuple[tuple[str, float], ...]
    products: tuple[tuple[str, float], ...]
    intermediate: str | None = None

    @property
    def species(self) -> tuple[str, ...]:
        """All species."""
        middle = () if self.intermediate is None else (self.intermediate,)
        return tuple(s for s, _ in self.reactants) + middle + tuple(s for s, _ in self.products)


Start = Mapping[str, Array]
Extent = Callable[[Mechanism, Mapping[str, Array], Start, Array], Array]


@dataclass(frozen=True, slots=True)
class Law:
    """One rate law.

    Attributes
    ----------
    name
        As in the sheet.
    rates
        Names of its rate parameters; all but `order` are positive.
    unit
        Unit of its first rate parameter with amounts in mol/L; ``U`` stands for the amount unit.
    needs_start_of
        Number of reactants whose starting amount enters the curve.
    equation
        The law in words and symbols, shown wherever k is shown.
    amounts
        (mechanism, rates, start, t) → amount of each species at times t.
    units
        Unit of each rate parameter where they differ; empty: all are of `unit`.
    """

    name: str
    rates: tuple[str, ...]
    unit: str
    needs_start_of: int
    equation: str
    amounts: Callable[[Mechanism, Mapping[str, Array], Start, Array], dict[str, Array]]
    units: tuple[str, ...] = ()


def _by_extent(extent: Extent) -> Callable[..., dict[str, Array]]:
    """Amounts of a one-step reaction from its extent ξ: A₀ − a ξ and P₀ + p ξ."""

    def amounts(
        m: Mechanism, rates: Mapping[str, Array], start: Start, t: Array
    ) -> dict[str, Array]:
        xi = extent(m, rates, start, t)
        out = {name: start[name] - a * xi for name, a in m.reactants}
        out.update({name: start[name] + p * xi for name, p in m.products})
        return out

    return amounts


def _zero(m: Mechanism, r: Mapping[str, Array], start: Start, t: Array) -> Array:
    name, a = m.reactants[0]
    end = start[name] / a
    xi = r["k"] * t
    return np.where(np.real(xi) < np.real(end), xi, end)


def _first(m: Mechanism, r: Mapping[str, Array], start: Start, t: Array) -> Array:
    name, a = m.reactants[0]
    k = r["k"] if "k" in r else r["k_observed"]
    return start[name] * k * t * phi(a * k * t)


def _second(m: Mechanism, r: Mapping[str, Array], start: Start, t: Array) -> Array:
    name, a = m.reactants[0]
    return start[name] ** 2 * r["k"] * t / (1.0 + a * r["k"] * start[name] * t)


def _mixed(m: Mechanism, r: Mapping[str, Array], start: Start, t: Array) -> Array:
    (first, a), (second, b) = m.reactants[:2]
    x, y = start[first] / a, start[second] / b
    low, high = (x, y) if np.real(x) <= np.real(y) else (y, x)
    kappa = r["k"] * a * b
    g = kappa * t * phi(kappa * (high - low) * t)
    return low * high * g / (1.0 + low * g)


def _nth(m: Mechanism, r: Mapping[str, Array], start: Start, t: Array) -> Array:
    name, a = m.reactants[0]
    zero = start[name]
    u = a * r["k"] * zero ** (r["order"] - 1.0) * t
    z = (r["order"] - 1.0) * u
    spent = np.real(z) <= -1.0 + 1e-12
    safe = np.where(spent, -0.5, z)
    small = np.abs(safe) < 1e-8
    log_over = np.where(small, 1.0 - safe / 2, np.log1p(safe) / np.where(small, 1.0, safe))
    left = zero * np.exp(-np.where(spent, 0.0, u) * log_over)
    return (zero - np.where(spent, 0.0 * zero, left)) / a


def _reversible(m: Mechanism, r: Mapping[str, Array], start: Start, t: Array) -> Array:
    (reactant, a), (product, p) = m.reactants[0], m.products[0]
    net = r["k_forward"] * start[reactant] - r["k_reverse"] * start[product]
    return net * t * phi((a * r["k_forward"] + p * r["k_reverse"]) * t)


def _autocatalytic(m: Mechanism, r: Mapping[str, Array], start: Start, t: Array) -> Array:
    (reactant, a), (product, p) = m.reactants[0], m.products[0]
    x, y = start[reactant] / a, start[product] / p
    s = r["k"] * a * p * (x + y) * t
    return x * y * -np.expm1(-s) / (x * np.exp(-s) + y)


def _consecutive(m: Mechanism, r: Mapping[str, Array], start: Start, t: Array) -> dict[str, Array]:
    name, a = m.reactants[0]
    middle = str(m.intermediate)
    fast, slow = a * r["k_1"], r["k_2"]
    low = fast if np.real(fast) <= np.real(slow) else slow
    high = slow if np.real(fast) <= np.real(slow) else fast
    left = start[name] * np.exp(-fast * t)
    made = r["k_1"] * start[name] * t * np.exp(-low * t) * phi((high - low) * t)
    b = start[middle] * np.exp(-slow * t) + made
    xi = (start[name] - left) / a  # first step
    second = xi + start[middle] - b
    out = {name: left, middle: b}
    out.update({other: start[other] - c * xi for other, c in m.reactants[1:]})
    out.update({product: start[product] + p * second for product, p in m.products})
    return out


_LAWS = (
    Law("zero-order", ("k",), "U/s", 1, "v = k", _by_extent(_zero)),
    Law("first-order", ("k",), "1/s", 0, "v = k [A]", _by_extent(_first)),
    Law("pseudo-first-order", ("k_observed",), "1/s", 0, "v = k_observed [A]", _by_extent(_first)),
    Law("second-order", ("k",), "1/(U s)", 1, "v = k [A]²", _by_extent(_second)),
    Law("second-order-mixed", ("k",), "1/(U s)", 2, "v = k [A][B]", _by_extent(_mixed)),
    Law("nth-order", ("k", "order"), "U^(1-n)/s", 1, "v = k [A]^n", _by_extent(_nth)),
    Law(
        "first-order-reversible",
        ("k_forward", "k_reverse"),
        "1/s",
        1,
        "v = k_forward [A] − k_reverse [P]",
        _by_extent(_reversible),
    ),
    Law("autocatalytic", ("k",), "1/(U s)", 1, "v = k [A][P]", _by_extent(_autocatalytic)),
    Law(
        "consecutive-first-order",
        ("k_1", "k_2"),
        "1/s",
        1,
        "v₁ = k_1 [A], v₂ = k_2 [B]",
        _consecutive,
    ),
)
LAWS = {law.name: law for law in _LAWS}


def law_named(name: str) -> Law:
    """Return a law.

    Raises
    ------
    InputError
        If there is none of that name.
    """
    if name not in LAWS:
        raise InputError(f"there is no rate law {name!r}; known: {', '.join(LAWS)}")
    return LAWS[name]


def mechanism_of(law: Law, question: Question) -> Mechanism:
    """Return the mechanism a law needs, checked against what the question names.

    Raises
    ------
    InputError
        If a species that the law speaks of is not named.
    """
    consumed = dict(question.consumed)
    limiting = question.limiting_species
    if limiting is None:
        raise InputError(f"{law.name} needs a species in consumed")
    order = [limiting, *(s for s in consumed if s != limiting)]
    reactants = tuple((s, float(consumed.get(s, 1.0))) for s in order)
    products = tuple((s, float(p)) for s, p in question.formed.items())
    if law.name == "second-order-mixed" and len(reactants) != 2:
        raise InputError("second-order-mixed needs exactly two species in consumed")
    if law.name in ("first-order-reversible", "autocatalytic") and not products:
        raise InputError(f"{law.name} needs a species in formed")
    if law.name == "consecutive-first-order":
        if question.intermediate is None:
            raise InputError("consecutive-first-order needs intermediate")
        products = tuple((s, p) for s, p in products if s != question.intermediate)
        return Mechanism(reactants, products, question.intermediate)
    return Mechanism(reactants, products)


def unit_of(parameter: str, law: Law, amount_unit: str) -> str:
    """Return the unit of a parameter, e.g. ``"L/(mol s)"`` or ``"1/(ratio s)"``."""
    if parameter == "order":
        return "1"
    if parameter not in law.rates:
        return amount_unit
    form = law.units[law.rates.index(parameter)] if law.units else law.unit
    if form == "1/(U s)":
        return "L/(mol s)" if amount_unit == "mol/L" else f"1/({amount_unit} s)"
    if form == "U/s":
        return "mol/(L s)" if amount_unit == "mol/L" else f"{amount_unit}/s"
    if form == "U^(1-n)/s":
        return f"({amount_unit})^(1-n)/s"
    return form
