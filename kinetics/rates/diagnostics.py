"""What the residuals of a fit say, each with a sentence on what it means here."""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from scipy.stats import norm

from kinetics.rates.estimate import Estimate, Problem
from kinetics.rates.noise import beyond_chance
from kinetics.rates.series import Float64
from kinetics.remarks import Remark

# Below this number of values a drift is not told from plain scatter.
_FEW_FOR_DRIFT = 50
_SIMULATED = 999
_MOST_SIMULATED = 600  # values; above that the normal approximation is as good
_HIGH_LEVERAGE = 3.0  # times the mean


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


def diagnose(found: Estimate, intervals: Mapping[str, tuple[float, float]]) -> Diagnostics:
    """Judge a fit by its residuals and by what its intervals leave open."""
    remarks: list[Remark] = []
    remarks += noise_remarks(found)
    for name, (low, high) in intervals.items():
        if np.isnan(low) or np.isnan(high):
            sides = [s for s, v in (("below", low), ("above", high)) if np.isnan(v)]
            remarks.append(
                Remark(
                    "not-bounded",
                    f"The data do not bound {name} {' or '.join(sides)}.",
                    "Only the other end of its interval means anything."
                    if len(sides) == 1
                    else "Its value means nothing.",
                    "Follow the reaction further, or ask for a law with fewer parameters.",
                    subject=name,
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
    unexplained = bool(found.whitener.white or found.whitener.shared)
    if unexplained and count < _FEW_FOR_DRIFT and np.isfinite(found.excess):
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


@dataclass(frozen=True, slots=True, eq=False)
class Details:
    """The longer look at the residuals, for people who ask.

    Attributes
    ----------
    durbin_watson, durbin_watson_p
        Statistic of the whitened residuals before correlation was allowed for, and its one-sided
        p against positive correlation (simulated for up to 600 values).
    leverage
        Share of each spectrum in the parameters, shape (n,); its sum is their number.
    normal_quantiles, ordered
        Normal plot: expected and found standardised residuals, ascending, shape (n m,).
    species_correlation
        Correlation of the residuals of the first two species, nan for one.
    sentences
        One a diagnostic.
    """

    durbin_watson: float
    durbin_watson_p: float
    leverage: Float64
    normal_quantiles: Float64
    ordered: Float64
    species_correlation: float
    sentences: tuple[str, ...]


def details(problem: Problem, found: Estimate, seed: int = 0) -> Details:
    """Look closely at a fit.

    Parameters
    ----------
    problem, found
        A fit's ``problem`` and ``estimate``.
    seed
        Of the simulation behind the Durbin–Watson p.
    """
    w = found.whitener.correlated(0.0)
    rest = w.apply(found.residuals)
    slope = w.apply_jacobian(problem.jacobian(found.x))
    size = np.linalg.norm(slope, axis=0)
    q = np.linalg.qr(slope[:, size > 0] / size[size > 0])[0]
    n, m = rest.shape
    leverage = (q**2).reshape(n, m, -1).sum(axis=(1, 2))
    statistic = _durbin_watson(rest)
    if rest.size <= _MOST_SIMULATED:
        noise = np.random.default_rng(seed).normal(size=(_SIMULATED, n * m))
        noise -= (noise @ q) @ q.T
        drawn = np.array([_durbin_watson(row.reshape(n, m)) for row in noise])
        p = float((1 + np.count_nonzero(drawn <= statistic)) / (_SIMULATED + 1))
    else:
        p = float(norm.sf(beyond_chance(rest, slope)))
    spread = np.sqrt(np.maximum(1 - (q**2).sum(axis=1), 1e-12)) * np.sqrt(found.scale or 1.0)
    ordered = np.sort(rest.ravel() / spread)
    ranks = (np.arange(n * m) + 0.625) / (n * m + 0.25)  # Blom 1958
    correlation = float("nan")
    if m > 1 and n > 2 and np.all(np.std(found.residuals[:, :2], axis=0) > 0):
        correlation = float(np.corrcoef(found.residuals[:, 0], found.residuals[:, 1])[0, 1])
    quantiles = np.asarray(norm.ppf(ranks), np.float64)
    return Details(
        statistic,
        p,
        leverage,
        quantiles,
        ordered,
        correlation,
        _sentences(p, runs_p(rest), leverage, correlation, (quantiles, ordered)),
    )


def _durbin_watson(rest: Float64) -> float:
    total = float((rest**2).sum())
    return float((np.diff(rest, axis=0) ** 2).sum()) / total if total > 0 else 2.0


def _sentences(
    p: float,
    runs: float,
    leverage: Float64,
    correlation: float,
    plot: tuple[Float64, Float64],
) -> tuple[str, ...]:
    out = [
        f"Durbin–Watson p = {p:.3f}: neighbouring points lie on the same side of the curve more "
        "often than chance allows; the law may be wrong, or something drifts."
        if p < 0.05
        else f"Durbin–Watson p = {p:.2f}: neighbouring points scatter independently."
    ]
    if np.isfinite(runs):
        out.append(
            f"Runs of one sign: p = {runs:.2f}, "
            + ("longer or shorter than chance makes them." if runs < 0.05 else "as chance has it.")
        )
    top = int(np.argmax(leverage))
    if leverage[top] > _HIGH_LEVERAGE * float(leverage.mean()):
        out.append(
            f"Spectrum {top + 1} alone carries {100 * leverage[top] / leverage.sum():.0f} % of the "
            "say in the parameters: an error there goes straight into k."
        )
    else:
        out.append("No single spectrum decides the parameters.")
    if np.isfinite(correlation):
        if correlation > 0.4:
            meaning = "they move together, as a wandering reference or receiver makes them"
        elif correlation < -0.4:
            meaning = "one rises where the other falls: a wrong law, or neighbours that overlap"
        else:
            meaning = "they scatter independently"
        out.append(f"Residuals of the two species correlate by {correlation:.2f}: {meaning}.")
    fit = float(np.corrcoef(*plot)[0, 1]) if plot[0].size > 3 else 1.0
    out.append(
        "The residuals are heavier in the tails than a normal distribution: look for outliers."
        if fit < 0.95
        else "The residuals look normally distributed."
    )
    return tuple(out)
