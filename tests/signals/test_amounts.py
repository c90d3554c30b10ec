"""Amounts from integrals: closed forms of ratios, closure, dilution and combining."""

import numpy as np
import pytest

from kinetics.signals.amounts import AmountRule, concentrations
from kinetics.signals.pattern import (
    fitted_shape,
    gaussian_share,
    lorentz_share_at,
    sticks,
    voigt_lines,
)
from kinetics.spectra.model import Axis

REFERENCE = AmountRule(
    "signal", ("a", "b"), (1.0, 3.0), reference_protons=6.0, reference_concentration=0.05,
    reference_u=0.0005,
)  # fmt: skip


def test_internal_standard() -> None:
    """c = c_s (A/A_s)(N_s/N); relative variances add (standard formula; GUM, JCGM 100)."""
    values = np.array([[12.0, 4.0, 6.0]])
    covariance = np.diag([0.012**2, 0.02**2, 0.03**2])[None]
    found = concentrations(values, covariance, REFERENCE)
    assert found.values[0] == pytest.approx([0.05 * 4 / 12 * 6, 0.05 * 6 / 12 * 6 / 3])
    relative = found.standard_uncertainty[0] / found.values[0]
    assert relative == pytest.approx(np.hypot([0.02 / 4, 0.03 / 6], 0.012 / 12))
    shared = found.covariance[0, 0, 1] / np.prod(found.values[0])
    assert shared == pytest.approx((0.012 / 12) ** 2)
    assert found.systematic == pytest.approx(0.01)
    assert found.unit == "mol/L"


def test_pulls_of_ratios_are_those_of_the_noise() -> None:
    rng = np.random.default_rng(4)
    covariance = np.array([[0.04, 0.01, 0.0], [0.01, 0.02, 0.0], [0.0, 0.0, 0.03]])
    noise = rng.multivariate_normal(np.zeros(3), covariance, 4000)
    found = concentrations(
        np.array([12.0, 4.0, 6.0]) + noise, np.broadcast_to(covariance, (4000, 3, 3)), REFERENCE
    )
    pull = (found.values - [0.1, 0.05]) / found.standard_uncertainty
    assert pull.std(axis=0) == pytest.approx([1, 1], abs=0.04)
    seen = np.corrcoef(found.values.T)[0, 1]
    stated = found.covariance[:, 0, 1] / found.standard_uncertainty.prod(axis=1)
    assert seen == pytest.approx(stated.mean(), abs=0.04)


def test_closure_and_its_covariance() -> None:
    rule = AmountRule(
        "closure",
        ("a", "b"),
        (1.0, 1.0),
        closure_total=0.4,
        closure_weights=(("a", 1.0), ("b", 2.0)),
    )
    values = np.array([[3.0, 1.0], [1.0, 2.0]])
    found = concentrations(values, np.broadcast_to(0.01 * np.eye(2), (2, 2, 2)), rule)
    assert found.values @ [1.0, 2.0] == pytest.approx([0.4, 0.4])
    # What adds up to a constant has no noise along it.
    along = np.einsum("i,nij,j->n", [1.0, 2.0], found.covariance, [1.0, 2.0])
    assert along == pytest.approx([0.0, 0.0], abs=1e-15)


def test_signals_of_one_species_are_combined_by_their_noise() -> None:
    rule = AmountRule("none", ("a", "a"), (1.0, 2.0))
    values = np.array([[1.0, 2.2]])
    found = concentrations(values, np.diag([0.04, 0.04])[None], rule)
    # Per proton 1.0 ± 0.2 and 1.1 ± 0.1: weights 1 to 4.
    assert found.values[0, 0] == pytest.approx((1.0 + 4 * 1.1) / 5)
    assert found.covariance[0, 0, 0] == pytest.approx(1 / (1 / 0.04 + 1 / 0.01))


def test_no_rows_and_rows_without_a_reference_are_no_warning() -> None:
    rule = AmountRule("signal", ("a", "a"), (1.0, 2.0), reference_concentration=0.05)
    assert concentrations(np.zeros((0, 3)), np.zeros((0, 3, 3)), rule).values.shape == (0, 1)
    lost = concentrations(np.array([[-1.0, 2.0, 3.0]]), np.eye(3)[None], rule)
    assert np.isnan(lost.values).all()


def test_dilution_scales_amounts() -> None:
    found = concentrations(
        np.array([[12.0, 4.0, 6.0]] * 2), np.broadcast_to(np.eye(3) * 1e-4, (2, 3, 3)), REFERENCE,
        np.array([1.0, 0.5]),
    )  # fmt: skip
    assert found.values[1] == pytest.approx(found.values[0] / 2)


@pytest.mark.parametrize(
    ("couplings", "shares"),
    [
        ([(1, 7.0)], [1, 1]),
        ([(2, 7.0)], [1, 2, 1]),
        ([(3, 7.0)], [1, 3, 3, 1]),
        ([(1, 10.0), (1, 3.0)], [1, 1, 1, 1]),
    ],
)
def test_n_plus_one(couplings: list[tuple[int, float]], shares: list[int]) -> None:
    """n equivalent neighbours give n + 1 lines with binomial intensities (common practice)."""
    offsets, found = sticks(couplings)
    assert found * sum(shares) == pytest.approx(shares)
    assert offsets == pytest.approx(-offsets[::-1])
    assert np.ptp(offsets) == pytest.approx(sum(n * hz for n, hz in couplings))


@pytest.mark.parametrize("share", [0.0, 0.3, 0.85, 1.0])
def test_voigt_lines(share: float) -> None:
    axis = Axis(5.0, -0.0005, 20000)
    line = voigt_lines(axis, np.array([0.0]), np.array([2.0]), 0.02, share)
    half = np.interp(0.01, axis.ppm()[::-1], line[::-1])
    assert half / line.max() == pytest.approx(0.5, abs=0.002)
    outside = (2 / np.pi) * 0.01 * share / 5 * 2
    assert line.sum() * 0.0005 == pytest.approx(2.0 - outside, rel=0.002)
    gauss = 0.02 * gaussian_share(share)
    assert lorentz_share_at(0.02, gauss) == pytest.approx(share, abs=1e-4)
    rng = np.random.default_rng(1)
    noisy = (line + 0.002 * line.max() * rng.standard_normal(axis.size)).astype(np.float32)
    width, found = fitted_shape(
        noisy,
        axis,
        np.array([0.001]),
        np.ones(1),
        (0.022, 0.8),
        0.002 * float(line.max()),
        (0.2, 0.5),
    )
    assert width == pytest.approx(0.02, rel=0.01)
    assert found == pytest.approx(max(share, 0.05), abs=0.03)
