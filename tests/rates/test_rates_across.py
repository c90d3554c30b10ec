"""Across runs: replicates, ratios, temperatures, orders."""

import numpy as np
import pytest
from scipy.constants import Boltzmann, Planck, R

from kinetics.errors import InputError
from kinetics.rates.across import Rate, arrhenius, eyring, ratio, replicates, straight_line
from kinetics.rates.orders import (
    Course,
    InitialRate,
    order_from_initial_rates,
    time_normalised_order,
)


def at(temperatures: list[float], energy: float, noise: list[float] | None = None) -> list[Rate]:
    k = [1e10 * np.exp(-energy / (R * t)) for t in temperatures]
    factor = np.exp(noise) if noise is not None else np.ones(len(k))
    return [
        Rate(f"{t:g} K", v * f, 0.01 * v * f, "1/s", t, 0.2)
        for t, v, f in zip(temperatures, k, factor, strict=True)
    ]


def test_exact_rates_give_the_energy_back() -> None:
    found = arrhenius(at([290.0, 300.0, 310.0, 320.0, 330.0], 85e3))
    assert found.energy_j_mol.value == pytest.approx(85e3, rel=1e-9)
    assert found.second.value == pytest.approx(np.log(1e10), rel=1e-9)
    assert found.predict(305.0).value == pytest.approx(1e10 * np.exp(-85e3 / (R * 305)), rel=1e-9)


def test_eyring_gives_enthalpy_and_entropy_back() -> None:
    t = np.array([290.0, 305.0, 320.0, 335.0])
    k = Boltzmann * t / Planck * np.exp(-30.0 / R) * np.exp(-80e3 / (R * t))
    rates = [Rate(f"{a:g}", b, 0.01 * b, "1/s", a) for a, b in zip(t, k, strict=True)]
    found = eyring(rates)
    assert found.energy_j_mol.value == pytest.approx(80e3, rel=1e-9)
    assert found.second.value == pytest.approx(-30.0, rel=1e-9)
    assert found.predict(300.0).value == pytest.approx(
        Boltzmann * 300 / Planck * np.exp(-30 / R - 80e3 / (R * 300)), rel=1e-9
    )


def test_temperature_errors_are_covered() -> None:
    """References: ignoring a 0.5 K error covers 62 %, the effective variance 95 %."""
    rng = np.random.default_rng(1)
    t = np.linspace(290, 330, 5)
    covered = 0
    for _ in range(400):
        true_t = t + 0.5 * rng.normal(size=5)
        k = 1e10 * np.exp(-85e3 / (R * true_t)) * np.exp(0.005 * rng.normal(size=5))
        rates = [Rate("", b, 0.005 * b, "1/s", a, 0.5) for a, b in zip(t, k, strict=True)]
        q = arrhenius(rates).energy_j_mol
        covered += q.low <= 85e3 <= q.high
    assert 0.925 <= covered / 400 <= 0.99


def test_scatter_between_runs_is_covered_though_each_fit_claims_less() -> None:
    rng = np.random.default_rng(2)
    t = [290.0, 300.0, 310.0, 320.0, 330.0, 340.0]
    covered = 0
    for _ in range(400):
        q = arrhenius(at(t, 85e3, list(0.08 * rng.normal(size=6)))).energy_j_mol
        covered += q.low <= 85e3 <= q.high
    assert 0.925 <= covered / 400 <= 0.98


def test_two_and_three_temperatures_are_called_what_they_are() -> None:
    two = arrhenius(at([300.0, 320.0], 85e3))
    assert "nothing to test it" in two.words
    assert two.line.dof == 0
    three = arrhenius(at([300.0, 310.0, 320.0], 85e3, [0.02, -0.03, 0.01]))
    assert "hardly worth having" in three.words
    assert "12.7" in three.words
    with pytest.raises(InputError, match="two temperatures"):
        arrhenius(at([300.0, 300.2], 85e3))


def test_replicates_carry_their_scatter() -> None:
    found = replicates([Rate("a", 1.0, 0.002, "1/s"), Rate("b", 1.1, 0.002, "1/s")])
    assert found.between_sd == pytest.approx(np.log(1.1) / np.sqrt(2), rel=0.02)
    assert found.k.low < 0.7 < 1.5 < found.k.high  # two runs: t = 12.7
    same = replicates([Rate(str(i), 1.0, 0.01, "1/s") for i in range(4)])
    assert same.between_sd == 0.0
    with pytest.raises(InputError, match="different units"):
        replicates([Rate("a", 1, 0.1, "1/s"), Rate("b", 1, 0.1, "L/(mol s)")])


def test_ratio_holds_the_truth() -> None:
    rng = np.random.default_rng(3)
    covered = 0
    for _ in range(300):
        k = np.exp(np.log([6.0] * 3 + [1.0] * 3) + 0.05 * rng.normal(size=6))
        rates = [Rate(str(i), v, 0.003 * v, "1/s") for i, v in enumerate(k)]
        q, _ = ratio(rates[:3], rates[3:])
        covered += q.low <= 6.0 <= q.high
    assert 0.915 <= covered / 300 <= 0.985


def test_a_line_with_true_errors_needs_no_further_scatter() -> None:
    x = np.linspace(0, 1, 6)
    line = straight_line(np.c_[np.ones(6), x], 1 + 2 * x, np.full(6, 0.01))
    assert line.between_sd == 0.0
    assert line.coefficients == pytest.approx([1.0, 2.0])
    wanted = 0.01 * np.linalg.inv(np.c_[np.ones(6), x].T @ np.c_[np.ones(6), x])
    assert np.allclose(line.covariance, wanted)


def test_order_from_initial_rates() -> None:
    rng = np.random.default_rng(4)
    c = np.array([0.05, 0.1, 0.2, 0.4])
    v = 3e-4 * c**1.5 * np.exp(0.02 * rng.normal(size=4))
    runs = [InitialRate(f"{a}", a, b, 0.02 * b) for a, b in zip(c, v, strict=True)]
    q = order_from_initial_rates(runs)
    assert q.low < 1.5 < q.high
    assert q.high - q.low < 0.3
    with pytest.raises(InputError, match="two concentrations"):
        order_from_initial_rates(runs[:1])


@pytest.mark.parametrize("order", [0.0, 1.0, 2.0])
def test_time_normalised_comparison_finds_the_order(order: float) -> None:
    rng = np.random.default_rng(5)
    courses = []
    for c0 in (0.2, 0.4, 0.8):
        t = np.linspace(20, 2000, 40)
        catalyst = np.full(t.size, c0)
        x = 1.0 - np.exp(-2e-3 * c0**order * t)
        courses.append(Course(f"{c0}", t, catalyst, x + 0.004 * rng.normal(size=40)))
    found = time_normalised_order(courses)
    assert found.order.low < order < found.order.high
    assert found.order.value == pytest.approx(order, abs=0.03)
    assert found.residual_sd == pytest.approx(0.004, rel=0.25)


def test_time_normalised_comparison_with_a_falling_concentration() -> None:
    rng = np.random.default_rng(6)
    courses = []
    for c0 in (0.2, 0.4, 0.8):
        t = np.linspace(20, 3000, 60)
        a = c0 / (1 + 2e-3 * c0 * t)
        courses.append(Course(f"{c0}", t, a, c0 - a + 0.0005 * rng.normal(size=60)))
    assert time_normalised_order(courses).order.value == pytest.approx(2.0, abs=0.05)
