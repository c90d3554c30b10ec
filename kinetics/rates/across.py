"""Rate constants across runs: replicates, ratios, Arrhenius and Eyring.

One run's interval is not reproducibility: replicate runs scatter by more than each fit's own
error. The scatter between runs is therefore estimated (Paule & Mandel, J. Res. NBS 87 (1982) 377)
and carried into every interval, calibrated by Student's t as Knapp & Hartung do (Statist. Med. 22
(2003) 2693), but never below what the stated errors say by themselves. An error in temperature
enters as an effective variance (Ea s_T/(R T²))² of ln k. Lines are centred at the harmonic-mean
temperature, without which ln A and Ea are correlated by 0.999.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from math import exp, isfinite, log, nan, sqrt

import numpy as np
from scipy.constants import Boltzmann, Planck
from scipy.constants import R as GAS
from scipy.optimize import brentq
from scipy.stats import norm
from scipy.stats import t as student

from kinetics.errors import InputError
from kinetics.rates.fitting import Quantity
from kinetics.rates.series import Float64

_ROUNDS = 30
# Below these numbers of different temperatures an interval is not worth having.
_TOO_FEW, _FEW = 3, 4
_SAME_K = 0.5  # temperatures closer than this are one


@dataclass(frozen=True, slots=True)
class Rate:
    """A rate constant of one run.

    Attributes
    ----------
    run
        Name of the run.
    value, standard_error
        k and its standard error by the fit, in `unit`.
    unit
        Of k; runs are compared only where it is the same.
    temperature_k, temperature_u_k
        Temperature and its standard uncertainty in K; nan where unknown.
    """

    run: str
    value: float
    standard_error: float
    unit: str
    temperature_k: float = nan
    temperature_u_k: float = 0.0

    @property
    def relative_variance(self) -> float:
        """Variance of ln k by the fit."""
        return (self.standard_error / self.value) ** 2


@dataclass(frozen=True, slots=True, eq=False)
class Line:
    """A weighted straight line (or constant) through values whose scatter is estimated too.

    Attributes
    ----------
    coefficients
        Intercept, then slope where there is one, shape (p,).
    covariance
        Shape (p, p).
    between_sd
        Standard deviation between runs beyond the stated errors.
    dof
        Degrees of freedom, 0 where the line goes through all points by force.
    quantile
        Half-width of an interval in standard errors: Student's t times the root of chi2/dof
        (which is 1 where scatter between runs was found), at least the normal quantile.
    t
        Student's t of the asked confidence, the normal quantile where dof is 0.
    """

    coefficients: Float64
    covariance: Float64
    between_sd: float
    dof: int
    quantile: float
    t: float

    def at(self, *basis: float) -> tuple[float, float]:
        """Return value and standard error of a combination of the coefficients."""
        b = np.array(basis)
        return float(b @ self.coefficients), sqrt(max(float(b @ self.covariance @ b), 0.0))

    def interval(self, *basis: float, extra: float = 0.0) -> Quantity:
        """Return a combination with its interval, `extra` variance added."""
        value, error = self.at(*basis)
        half = self.quantile * sqrt(error**2 + extra)
        return Quantity(value, value - half, value + half)


def straight_line(
    design: Float64, values: Float64, variances: Float64, confidence: float = 0.95
) -> Line:
    """Fit a line with stated variances and an estimated further one, equal for all.

    Parameters
    ----------
    design
        Shape (n, p).
    values, variances
        Shape (n,).
    confidence
        Two-sided.
    """
    dof = int(values.size - design.shape[1])
    floor = float(np.mean(variances)) or 1e-30

    def solved(between: float) -> tuple[Float64, Float64, float]:
        weight = 1.0 / (variances + between + 1e-12 * floor)
        normal = design.T @ (design * weight[:, None])
        covariance = np.asarray(np.linalg.inv(normal), np.float64)
        coefficients = covariance @ (design.T @ (weight * values))
        rest = values - design @ coefficients
        return coefficients, covariance, float((weight * rest**2).sum())

    between = 0.0
    if dof > 0 and solved(0.0)[2] > dof:
        high = float(np.var(values)) + floor
        while solved(high)[2] > dof:
            high *= 4.0
        between = float(brentq(lambda v: solved(v)[2] - dof, 0.0, high, xtol=1e-12 * high))
    coefficients, covariance, chi2 = solved(between)
    normal = float(norm.ppf(0.5 + confidence / 2))
    t = float(student.ppf(0.5 + confidence / 2, dof)) if dof > 0 else normal
    # Never below what the stated errors say by themselves, however well the points happen to lie.
    quantile = max(normal, t * sqrt(chi2 / dof)) if dof > 0 else normal
    return Line(coefficients, covariance, sqrt(between), dof, quantile, t)


@dataclass(frozen=True, slots=True)
class Pooled:
    """One k from replicates: mean with interval, and how much single runs scatter (relative)."""

    k: Quantity
    unit: str
    runs: int
    between_sd: float


def replicates(rates: Sequence[Rate], confidence: float = 0.95) -> Pooled:
    """Return the mean of k over runs of the same reaction at the same temperature.

    Raises
    ------
    InputError
        If there are no rates, their units differ, or one is not positive.

    Examples
    --------
    >>> pooled = replicates([Rate("a", 2.0e-4, 1e-6, "1/s"), Rate("b", 2.2e-4, 1e-6, "1/s")])
    >>> f"{pooled.k.value:.3g}, runs scatter by {100 * pooled.between_sd:.0f} %"
    '0.00021, runs scatter by 7 %'
    """
    unit = _one_unit(rates)
    line = straight_line(np.ones((len(rates), 1)), *_logs(rates), confidence)
    return Pooled(_exponential(line.interval(1.0)), unit, len(rates), line.between_sd)


def ratio(
    above: Sequence[Rate], below: Sequence[Rate], confidence: float = 0.95
) -> tuple[Quantity, float]:
    """Return the ratio of k of two groups of runs (isotopes, catalysts) with its interval.

    Returns
    -------
    ratio, between_sd
        The second is the relative scatter between runs, 0 where one run a side cannot show it.
    """
    rates = [*above, *below]
    _one_unit(rates)
    side = np.r_[np.ones(len(above)), np.zeros(len(below))]
    line = straight_line(np.c_[np.ones(side.size), side], *_logs(rates), confidence)
    return _exponential(line.interval(0.0, 1.0)), line.between_sd


@dataclass(frozen=True, slots=True, eq=False)
class TemperatureFit:
    """k against temperature.

    Attributes
    ----------
    kind
        ``"arrhenius"`` or ``"eyring"``.
    energy_j_mol
        Activation energy or enthalpy, J/mol.
    second
        ln A (A in the unit of k), or the activation entropy in J/(mol K).
    unit
        Of k.
    centre_k
        Harmonic-mean temperature, K.
    between_sd
        Relative scatter between runs beyond fit and temperature errors.
    temperatures
        Number of different temperatures.
    words
        What these runs can and cannot tell.
    line, rates
        The line about 1/T − 1/`centre_k`, and what it goes through.
    """

    kind: str
    energy_j_mol: Quantity
    second: Quantity
    unit: str
    centre_k: float
    between_sd: float
    temperatures: int
    words: str
    line: Line
    rates: tuple[Rate, ...]

    def predict(self, temperature_k: float, single_run: bool = True) -> Quantity:
        """Return k at another temperature.

        Parameters
        ----------
        temperature_k
            In K.
        single_run
            Whether the interval is that of a further run (with its scatter) or of the mean.
        """
        x = 1.0 / temperature_k - 1.0 / self.centre_k
        extra = self.between_sd**2 if single_run else 0.0
        found = _exponential(self.line.interval(1.0, x, extra=extra))
        factor = temperature_k if self.kind == "eyring" else 1.0
        return Quantity(found.value * factor, found.low * factor, found.high * factor)


def arrhenius(rates: Sequence[Rate], confidence: float = 0.95) -> TemperatureFit:
    """Fit k = A exp(−Ea/(R T)).

    Raises
    ------
    InputError
        If there are fewer than two temperatures, units differ, or a k is not positive.
    """
    return _temperature_fit(rates, "arrhenius", confidence)


def eyring(rates: Sequence[Rate], confidence: float = 0.95) -> TemperatureFit:
    """Fit k = (kB T/h) exp(ΔS/R − ΔH/(R T)), transmission coefficient 1.

    The entropy of a second-order k refers to the standard state 1 mol/L.

    Raises
    ------
    InputError
        As `arrhenius`.
    """
    return _temperature_fit(rates, "eyring", confidence)


def _temperature_fit(rates: Sequence[Rate], kind: str, confidence: float) -> TemperatureFit:
    unit = _one_unit(rates)
    known = tuple(r for r in rates if isfinite(r.temperature_k))
    different = distinct_temperatures(known)
    if different < 2:
        raise InputError("a temperature dependence needs runs at two temperatures at least")
    temperature = np.array([r.temperature_k for r in known])
    centre = float(1.0 / np.mean(1.0 / temperature))
    x = 1.0 / temperature - 1.0 / centre
    values, fit_variance = _logs(known)
    if kind == "eyring":
        values = values - np.log(temperature)
    spread = np.array([r.temperature_u_k for r in known]) / temperature**2
    design = np.c_[np.ones(x.size), x]
    slope = 0.0
    line = straight_line(design, values, fit_variance, confidence)
    for _ in range(_ROUNDS):
        slope = float(line.coefficients[1])
        own = slope - (temperature if kind == "eyring" else 0.0)  # d ln k/d(1/T) adds T
        line = straight_line(design, values, fit_variance + (own * spread) ** 2, confidence)
        if abs(float(line.coefficients[1]) - slope) <= 1e-10 * abs(slope):
            break
    energy = line.interval(0.0, -GAS)
    second = line.interval(1.0, -1.0 / centre)  # at 1/T = 0
    if kind == "eyring":
        shift = log(Boltzmann / Planck)
        second = Quantity(*(GAS * (v - shift) for v in (second.value, second.low, second.high)))
    words = _temperature_words(different, line, energy, float(np.ptp(temperature)))
    return TemperatureFit(
        kind, energy, second, unit, centre, line.between_sd, different, words, line, known
    )


def distinct_temperatures(rates: Sequence[Rate]) -> int:
    """Return the number of temperatures that differ by more than half a kelvin."""
    count, last = 0, -np.inf
    for t in sorted(r.temperature_k for r in rates if isfinite(r.temperature_k)):
        if t - last > _SAME_K:
            count, last = count + 1, t
    return count


def _temperature_words(different: int, line: Line, energy: Quantity, span: float) -> str:
    half = 0.5 * (energy.high - energy.low) / abs(energy.value) if energy.value else nan
    if line.dof == 0:
        return (
            "Two runs at two temperatures: a line through two points has nothing to test it. The "
            "interval holds only the errors of the two fits and of the temperatures; the scatter "
            "between runs, usually the larger part, is not in it. Measure at four temperatures or "
            "more, or repeat both."
        )
    if different <= _TOO_FEW:
        return (
            f"{different} temperatures leave {line.dof} degree{'s' if line.dof > 1 else ''} of "
            f"freedom (Student's t = {line.t:.1f}): the interval of ±{100 * half:.0f} % is "
            "hardly worth having, and a bend cannot be seen. Add temperatures."
        )
    words = f"{different} temperatures over {span:.0f} K give the energy to ±{100 * half:.1f} %."
    if different <= _FEW:
        words += " A fifth temperature, at the end of the range, would help most."
    if line.between_sd > 0:
        words += (
            f" Runs scatter by {100 * line.between_sd:.1f} % beyond their own errors; that is "
            "allowed for."
        )
    return words


def _one_unit(rates: Sequence[Rate]) -> str:
    if not rates:
        raise InputError("there are no rate constants to compare")
    units = {r.unit for r in rates}
    if len(units) > 1:
        raise InputError(f"rate constants of different units: {', '.join(sorted(units))}")
    for r in rates:
        if not (r.value > 0 and isfinite(r.value) and isfinite(r.standard_error)):
            raise InputError(f"{r.run}: k = {r.value:g} ± {r.standard_error:g} cannot be compared")
    return units.pop()


def _logs(rates: Sequence[Rate]) -> tuple[Float64, Float64]:
    return (
        np.log(np.array([r.value for r in rates])),
        np.array([r.relative_variance for r in rates]),
    )


def _exponential(q: Quantity) -> Quantity:
    return Quantity(exp(min(q.value, 700.0)), exp(min(q.low, 700.0)), exp(min(q.high, 700.0)))
