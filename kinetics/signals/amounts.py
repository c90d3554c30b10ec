"""From integrals to amounts, with the covariance that the shared reference causes.

Internal standard: c = c_ref · (A / A_ref) · (N_ref / N), A integrals, N protons (standard formula;
propagation of uncertainty after GUM, JCGM 100). Nothing here touches a spectrum, so a
changed reference concentration or proton count re-measures nothing.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

from kinetics.signals.model import Concentrations
from kinetics.spectra.model import Float64


@dataclass(frozen=True, slots=True)
class AmountRule:
    """How integrals become amounts.

    Attributes
    ----------
    kind
        ``"signal"``, ``"closure"`` or ``"none"``.
    species
        Species of each signal, in the order of the integrals (reference left out).
    protons
        Protons of each signal, same length.
    reference_protons
        Protons of the reference (kind ``"signal"``).
    reference_concentration
        mol/L at the start; None: results are ratios.
    reference_u
        Standard uncertainty of it in mol/L, or None.
    closure_total
        The constant the weighted sum of all species equals, mol/L (kind ``"closure"``).
    closure_weights
        Weight of each species in that sum.
    """

    kind: Literal["signal", "closure", "none"]
    species: tuple[str, ...]
    protons: tuple[float, ...]
    reference_protons: float = 1.0
    reference_concentration: float | None = None
    reference_u: float | None = None
    closure_total: float = 1.0
    closure_weights: tuple[tuple[str, float], ...] = ()

    @property
    def unit(self) -> str:
        """Unit of the amounts."""
        if self.kind == "none":
            return "per scan"
        if self.kind == "signal" and self.reference_concentration is None:
            return "ratio"
        return "mol/L"

    @property
    def columns(self) -> tuple[str, ...]:
        """The species, each once, in order of first appearance."""
        return tuple(dict.fromkeys(self.species))


def concentrations(
    values: Float64, covariance: Float64, rule: AmountRule, dilution: Float64 | None = None
) -> Concentrations:
    """Turn integrals into amounts.

    Parameters
    ----------
    values
        Integrals, shape (n, k), the reference first with kind ``"signal"``.
    covariance
        Their covariance, shape (n, k, k).
    rule
        How.
    dilution
        Starting volume over volume at each spectrum, shape (n,): what a dose has left of the
        reference's concentration. None: 1.

    Returns
    -------
    Concentrations
        One row a spectrum. Rows whose reference is not above zero are nan.
    """
    per_signal, cov = _per_signal(values, covariance, rule)
    species_values, species_cov = _combined(per_signal, cov, rule)
    systematic = 0.0
    if rule.kind == "closure":
        species_values, species_cov = _closed(species_values, species_cov, rule)
    elif rule.kind == "signal" and rule.reference_concentration is not None:
        factor = np.full(values.shape[0], rule.reference_concentration)
        if dilution is not None:
            factor = factor * dilution
        species_values = species_values * factor[:, None]
        species_cov = species_cov * (factor**2)[:, None, None]
        systematic = (rule.reference_u or 0.0) / rule.reference_concentration
    return Concentrations(rule.columns, species_values, species_cov, systematic, rule.unit)


def _per_signal(values: Float64, covariance: Float64, rule: AmountRule) -> tuple[Float64, Float64]:
    """Each signal per proton, over the reference per proton; first-order propagation."""
    protons = np.asarray(rule.protons)
    if rule.kind != "signal":
        return values / protons, covariance / np.outer(protons, protons)
    reference = np.where(values[:, 0] > 0, values[:, 0], np.nan) / rule.reference_protons
    ratio = values[:, 1:] / protons / reference[:, None]
    count = ratio.shape[1]
    slope = np.zeros((values.shape[0], count, count + 1))
    slope[:, np.arange(count), np.arange(1, count + 1)] = 1 / protons / reference[:, None]
    slope[:, :, 0] = -ratio / (reference * rule.reference_protons)[:, None]
    return ratio, slope @ covariance @ slope.transpose(0, 2, 1)


def _combined(values: Float64, covariance: Float64, rule: AmountRule) -> tuple[Float64, Float64]:
    """Combine signals of one species by the weights their noise gives them, fixed along the run.

    Weights that change from spectrum to spectrum would let a faint signal's bias come and go.
    """
    columns = rule.columns
    if len(columns) == len(rule.species):
        return values, covariance
    variances = np.einsum("nii->ni", covariance)
    known = np.isfinite(variances).all(axis=1)
    typical = np.median(variances[known], axis=0) if known.any() else np.ones(len(rule.species))
    onto = np.zeros((len(columns), len(rule.species)))
    for row, name in enumerate(columns):
        members = np.array([s == name for s in rule.species])
        weight = np.where(members, 1.0 / np.maximum(typical, 1e-300), 0.0)
        onto[row] = weight / weight.sum()
    return values @ onto.T, onto @ covariance @ onto.T


def _closed(values: Float64, covariance: Float64, rule: AmountRule) -> tuple[Float64, Float64]:
    """Scale so that the weighted sum of the species is what was charged."""
    weights = dict(rule.closure_weights)
    w = np.array([weights.get(name, 0.0) for name in rule.columns])
    total = values @ w
    total = np.where(total > 0, total, np.nan)
    share = values / total[:, None]
    count = values.shape[1]
    slope = (np.eye(count)[None] - share[:, :, None] * w[None, None, :]) / total[:, None, None]
    scaled = slope @ covariance @ slope.transpose(0, 2, 1)
    return share * rule.closure_total, scaled * rule.closure_total**2


def disagreement(
    values: Float64, covariance: Float64, rule: AmountRule
) -> Sequence[tuple[str, float, float]]:
    """Compare several signals of one species with each other.

    Returns
    -------
    (species, largest relative difference of a signal's mean from the species' mean, that in
    standard errors) for each species that has more than one signal.
    """
    per_signal, cov = _per_signal(values, covariance, rule)
    out = []
    for name in rule.columns:
        members = [i for i, s in enumerate(rule.species) if s == name]
        if len(members) < 2 or per_signal.shape[0] == 0:
            continue
        part = per_signal[:, members]
        mean = np.nanmean(part, axis=1, keepdims=True)
        difference = np.nanmean(part - mean, axis=0)
        error = np.sqrt(np.nanmean(np.einsum("nii->ni", cov)[:, members], axis=0) / len(part))
        worst = int(np.argmax(np.abs(difference)))
        size = float(np.nanmean(mean))
        if size > 0:
            out.append(
                (name, float(difference[worst] / size), float(difference[worst] / error[worst]))
            )
    return out
