"""Mass-action schemes, written as chemists write them: ``A + B -> C``, ``A <-> B``, ``2 A -> D``.

Each step is first or second order. The rate of a step as written is k times the amounts of its
left side (each to its coefficient); ``<->`` adds the reverse. Rate parameters are named ``k_1``,
``k_2`` … in the order of the steps, ``k_1_reverse`` for the way back.

Amounts and their derivatives by all parameters are found together: schemes of first-order steps
by the matrix exponential, the rest by an integrator that switches to a stiff method (LSODA,
Petzold, SIAM J. Sci. Stat. Comput. 4 (1983) 136).
"""

import re
from dataclasses import dataclass

import numpy as np
from scipy.integrate import solve_ivp
from scipy.linalg import expm

from kinetics.errors import FitError, InputError
from kinetics.rates.series import Float64

_TERM = re.compile(r"^\s*(?:(\d+)\s*\*?\s*)?([A-Za-z][\w'′*·]*)\s*$")
_RELATIVE, _ABSOLUTE = 1e-9, 1e-12  # of the integrator, the second of the largest amount


@dataclass(frozen=True, slots=True)
class Step:
    """One elementary way: coefficients of the left and of the right side, and its rate's name."""

    left: tuple[tuple[str, int], ...]
    right: tuple[tuple[str, int], ...]
    rate: str

    @property
    def order(self) -> int:
        """Molecularity."""
        return sum(count for _, count in self.left)


@dataclass(frozen=True, slots=True, eq=False)
class Scheme:
    """A parsed scheme.

    Attributes
    ----------
    text
        As written.
    steps
        One a way: a reversible step is two.
    species
        In the order they are first named.
    """

    text: tuple[str, ...]
    steps: tuple[Step, ...]
    species: tuple[str, ...]

    @property
    def rates(self) -> tuple[str, ...]:
        """Names of the rate parameters."""
        return tuple(step.rate for step in self.steps)

    @property
    def is_linear(self) -> bool:
        """Whether all steps are first order."""
        return all(step.order == 1 for step in self.steps)

    def exponents(self) -> Float64:
        """Coefficients of the left sides, shape (steps, species)."""
        return self._table([step.left for step in self.steps])

    def changes(self) -> Float64:
        """What a turn of each step does to the amounts, shape (steps, species)."""
        return self._table([step.right for step in self.steps]) - self.exponents()

    def _table(self, sides: list[tuple[tuple[str, int], ...]]) -> Float64:
        out = np.zeros((len(sides), len(self.species)))
        for row, side in enumerate(sides):
            for name, count in side:
                out[row, self.species.index(name)] += count
        return out


def parse_scheme(lines: tuple[str, ...] | list[str]) -> Scheme:
    """Read a scheme.

    Parameters
    ----------
    lines
        One step a line.

    Raises
    ------
    InputError
        If a line is not a step of first or second order; the message shows it.

    Examples
    --------
    >>> scheme = parse_scheme(["A + B <-> C", "C -> D"])
    >>> scheme.rates
    ('k_1', 'k_1_reverse', 'k_2')
    """
    if not lines:
        raise InputError("scheme: holds no step; write e.g. scheme = ['A + B -> C']")
    steps: list[Step] = []
    for number, line in enumerate(lines, 1):
        both = "<->" in line
        sides = line.split("<->" if both else "->")
        if len(sides) != 2:
            raise InputError(f"scheme: {line!r}: expected one arrow, -> or <->")
        left, right = (_side(side, line) for side in sides)
        name = f"k_{number}"
        ways = [Step(left, right, name)]
        if both:
            ways.append(Step(right, left, f"{name}_reverse"))
        for step in ways:
            if step.order not in (1, 2):
                raise InputError(
                    f"scheme: {line!r}: a step of order {step.order}; only one or two molecules "
                    "meet in a step, write it as several"
                )
        steps += ways
    species: dict[str, None] = {}
    for step in steps:
        for name, _ in (*step.left, *step.right):
            species.setdefault(name)
    return Scheme(tuple(lines), tuple(steps), tuple(species))


def _side(text: str, line: str) -> tuple[tuple[str, int], ...]:
    out: dict[str, int] = {}
    for term in text.split("+"):
        found = _TERM.match(term)
        if found is None:
            raise InputError(f"scheme: {line!r}: {term.strip()!r} is not a species, e.g. A or 2 A")
        count = int(found.group(1) or 1)
        if count < 1:
            raise InputError(f"scheme: {line!r}: {term.strip()!r} counts no molecule")
        out[found.group(2)] = out.get(found.group(2), 0) + count
    return tuple(out.items())


def solve(
    scheme: Scheme, rates: Float64, start: Float64, times: Float64
) -> tuple[Float64, Float64, Float64]:
    """Integrate a scheme with its sensitivities.

    Parameters
    ----------
    scheme
        The steps.
    rates
        Value of each rate parameter, shape (r,).
    start
        Amount of each species at time zero, shape (s,).
    times
        Ascending, from zero on, shape (n,).

    Returns
    -------
    amounts
        Shape (n, s).
    by_rates
        Derivative by the rate parameters, shape (n, s, r).
    by_start
        Derivative by the starting amounts, shape (n, s, s).

    Raises
    ------
    FitError
        If the integration fails.
    """
    if scheme.is_linear:
        return _linear(scheme, rates, start, times)
    return _integrated(scheme, rates, start, times)


def _linear(
    scheme: Scheme, rates: Float64, start: Float64, times: Float64
) -> tuple[Float64, Float64, Float64]:
    """First-order schemes by the exponential of the matrix and of its augmented form.

    With K = Σ k_j N_j the derivative by k_j of exp(K t) y₀ is a block of exp([[K, N_j], [0, K]] t)
    (Van Loan, IEEE Trans. Autom. Control 23 (1978) 395).
    """
    s, r = start.size, rates.size
    parts = np.einsum("js,jt->jst", scheme.changes(), scheme.exponents())
    k = np.einsum("j,jst->st", rates, parts)
    amounts = np.empty((times.size, s))
    by_rates = np.empty((times.size, s, r))
    by_start = np.empty((times.size, s, s))
    block = np.zeros((r, 2 * s, 2 * s))
    block[:, :s, :s] = block[:, s:, s:] = k
    block[:, :s, s:] = parts
    state = np.broadcast_to(np.eye(2 * s), block.shape).copy()
    now, step, last = 0.0, None, np.nan
    for i, t in enumerate(times):
        if t > now:
            length = float(t - now)
            if step is None or abs(length - last) > 1e-12 * length:
                step, last = expm(block * length), length
            state, now = step @ state, float(t)
        amounts[i] = state[0, :s, :s] @ start
        by_start[i] = state[0, :s, :s]
        by_rates[i] = (state[:, :s, s:] @ start).T
    return amounts, by_rates, by_start


def _integrated(
    scheme: Scheme, rates: Float64, start: Float64, times: Float64
) -> tuple[Float64, Float64, Float64]:
    s, r = start.size, rates.size
    exponents, changes = scheme.exponents(), scheme.changes()

    def products(y: Float64) -> Float64:
        return np.asarray(np.prod(y[None, :] ** exponents, axis=1), np.float64)

    def slopes(y: Float64) -> Float64:
        """Derivative of the products by the amounts, shape (steps, species)."""
        out = np.zeros_like(exponents)
        for j, row in enumerate(exponents):
            for i in np.flatnonzero(row):
                rest = np.array(row)
                rest[i] -= 1
                out[j, i] = row[i] * np.prod(y**rest)
        return out

    def right(_t: float, flat: Float64) -> Float64:
        y, by = flat[:s], flat[s:].reshape(s, r + s)
        flow = products(y)
        jacobian = changes.T @ (rates[:, None] * slopes(y))
        change = jacobian @ by
        change[:, :r] += changes.T * flow
        return np.concatenate((changes.T @ (rates * flow), change.ravel()))

    begin = np.concatenate((start, np.hstack((np.zeros((s, r)), np.eye(s))).ravel()))
    size = float(np.max(np.abs(start))) or 1.0
    span = float(times[-1])
    if span <= 0:
        flat = np.broadcast_to(begin, (times.size, begin.size))
    else:
        scale = np.full(begin.size, size)
        by_rate = np.zeros((s, r + s), bool)
        by_rate[:, :r] = True
        scale[s:][by_rate.ravel()] = size * span
        scale[s:][~by_rate.ravel()] = 1.0
        found = solve_ivp(
            right,
            (0.0, span),
            begin,
            method="LSODA",
            t_eval=times,
            rtol=_RELATIVE,
            atol=_ABSOLUTE * scale,
        )
        if not found.success or found.y.shape[1] != times.size:
            raise FitError(f"the scheme cannot be integrated: {found.message}")
        flat = found.y.T
    by = flat[:, s:].reshape(times.size, s, r + s)
    return flat[:, :s], by[:, :, :r], by[:, :, r:]
