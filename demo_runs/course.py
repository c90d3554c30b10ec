"""How the amounts really run: the true law of a simulated reaction.

Written without any of the rate laws in `kinetics.rates`, so that a simulated run is a check of
them and not a copy: single steps of one reactant have their closed form here, everything else
is integrated numerically.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import numpy.typing as npt
from scipy.integrate import OdeSolution, solve_ivp

Float64 = npt.NDArray[np.float64]
Pairs = tuple[tuple[str, float], ...]

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(12)


@dataclass(frozen=True, slots=True)
class Step:
    """One elementary step.

    Attributes
    ----------
    consumed, formed
        Pairs (species, stoichiometric coefficient).
    k
        Rate constant of the rate as written, v = k ∏ [X]^order, in s, mol and L.
    orders
        Pairs (species, order); left out, every consumed species counts with its coefficient.
    """

    consumed: Pairs
    formed: Pairs
    k: float
    orders: Pairs = ()

    @property
    def rate_orders(self) -> Pairs:
        """The orders that hold."""
        return self.orders or self.consumed


@dataclass(frozen=True, slots=True)
class Course:
    """Amounts of all species against time.

    Attributes
    ----------
    steps
        What happens. Empty: nothing does.
    initial
        Pairs (species, mol/L at time zero); a species that is only formed may be left out.
    """

    steps: tuple[Step, ...]
    initial: Pairs

    @property
    def species(self) -> tuple[str, ...]:
        """All species, in the order of their first mention."""
        named = [name for name, _ in self.initial]
        for step in self.steps:
            named += [name for name, _ in step.consumed + step.formed]
        return tuple(dict.fromkeys(named))

    def at(self, time_s: npt.ArrayLike) -> dict[str, Float64]:
        """Return the amounts in mol/L at times in s; before time zero nothing has happened."""
        time = np.maximum(np.asarray(time_s, np.float64), 0.0)
        closed = _closed_form(self, time)
        if closed is not None:
            return closed
        horizon = float(2.0 ** np.ceil(np.log2(max(float(time.max(initial=0.0)), 1.0))))
        table = np.asarray(_integrated(self, horizon)(time.ravel()), np.float64)
        return dict(zip(self.species, table.reshape(len(self.species), *time.shape), strict=True))

    def mean(self, start_s: float, end_s: float) -> dict[str, float]:
        """Return the amounts in mol/L averaged over an acquisition (Gauss–Legendre, 12 nodes).

        A start of the reaction inside the acquisition is honoured: the part before it counts
        with the initial amounts.
        """
        if end_s <= start_s:
            return {name: float(value) for name, value in self.at(start_s).items()}
        before = min(max(0.0 - start_s, 0.0), end_s - start_s)
        low = max(start_s, 0.0)
        length = end_s - start_s - before
        times = low + length * (_NODES + 1) / 2
        running, initial = self.at(times), self.at(0.0)
        share = before / (end_s - start_s)
        return {
            name: float(share * initial[name] + (1 - share) * (_WEIGHTS @ running[name]) / 2)
            for name in self.species
        }


def first_order(reactant: str, product: str, k: float, amount: float) -> Course:
    """Return A → B with −d[A]/dt = k [A]; `amount` is [A] at time zero in mol/L."""
    return Course((Step(((reactant, 1),), ((product, 1),), k),), ((reactant, amount),))


def second_order(reactant: str, product: str, k: float, amount: float) -> Course:
    """Return 2 A → B with v = k [A]² and −d[A]/dt = 2 v."""
    return Course((Step(((reactant, 2),), ((product, 1),), k),), ((reactant, amount),))


def _closed_form(course: Course, time: Float64) -> dict[str, Float64] | None:
    """One step, one reactant, any order: exact; None for everything else."""
    if len(course.steps) != 1:
        return None
    step = course.steps[0]
    if len(step.consumed) != 1 or len(step.rate_orders) != 1:
        return None
    (reactant, coefficient), (driver, order) = step.consumed[0], step.rate_orders[0]
    if driver != reactant or reactant in dict(step.formed):
        return None
    start = dict(course.initial)
    amount = start.get(reactant, 0.0)
    if amount == 0.0:
        left = np.zeros_like(time)
    elif order == 1.0:
        left = amount * np.exp(-coefficient * step.k * time)
    else:
        # [A]^(1−n) = [A]0^(1−n) + (n − 1) a k t; below order 1 it ends in finite time.
        power = amount ** (1 - order) + (order - 1) * coefficient * step.k * time
        left = np.maximum(power, 0.0) ** (1 / (1 - order))
    extent = (amount - left) / coefficient
    amounts = {name: np.full_like(time, start.get(name, 0.0)) for name in course.species}
    amounts[reactant] = left
    for name, number in step.formed:
        amounts[name] = amounts[name] + number * extent
    return amounts


@lru_cache(maxsize=64)
def _integrated(course: Course, horizon_s: float) -> OdeSolution:
    """The numerical solution up to the horizon, shape (species, times) when called with times."""
    names = course.species
    place = {name: i for i, name in enumerate(names)}
    start = np.array([dict(course.initial).get(name, 0.0) for name in names])
    change = np.zeros((len(names), len(course.steps)))
    for column, step in enumerate(course.steps):
        for name, number in step.consumed:
            change[place[name], column] -= number
        for name, number in step.formed:
            change[place[name], column] += number

    def slope(_time: float, amounts: Float64) -> Float64:
        rates = np.array([_rate(step, amounts, place) for step in course.steps])
        return np.asarray(change @ rates, np.float64)

    solution = solve_ivp(
        slope, (0.0, horizon_s), start, "LSODA", dense_output=True, rtol=1e-11, atol=1e-14
    )
    if not solution.success or solution.sol is None:
        raise ValueError(f"the true course cannot be integrated: {solution.message}")
    return solution.sol


def _rate(step: Step, amounts: Float64, place: Mapping[str, int]) -> float:
    rate = step.k
    for name, order in step.rate_orders:
        rate *= max(float(amounts[place[name]]), 0.0) ** order
    return rate
