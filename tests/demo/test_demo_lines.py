"""Stick patterns against closed forms."""

from math import comb

import numpy as np
import pytest

from demo_runs.lines import Multiplet, stick_pattern, strongly_coupled_pair


@pytest.mark.parametrize("neighbours", [1, 2, 3, 6])
def test_n_neighbours_give_n_plus_one_binomial_lines(neighbours: int) -> None:
    # Source: the n + 1 rule (common practice): 1:1, 1:2:1, 1:3:3:1 …
    offsets, weights = stick_pattern(Multiplet(1.0, 3, ((neighbours, 7.0),)))
    assert offsets.size == neighbours + 1
    np.testing.assert_allclose(np.diff(offsets), 7.0)
    expected = [comb(neighbours, i) / 2**neighbours for i in range(neighbours + 1)]
    np.testing.assert_allclose(weights, expected)
    assert abs(weights @ offsets) < 1e-12


def test_doublet_of_doublets_has_four_equal_lines() -> None:
    offsets, weights = stick_pattern(Multiplet(1.0, 1, ((1, 10.0), (1, 2.0))))
    np.testing.assert_allclose(np.sort(offsets), [-6, -4, 4, 6])
    np.testing.assert_allclose(weights, 0.25)


def test_satellites_take_1_1_per_cent_and_stand_half_a_coupling_away() -> None:
    offsets, weights = stick_pattern(Multiplet(1.0, 3, satellite_hz=130.0))
    np.testing.assert_allclose(offsets, [0, -65, 65])
    np.testing.assert_allclose(weights, [0.989, 0.0055, 0.0055])  # common practice: 1.1 %


@pytest.mark.parametrize("distance_hz", [3.0, 15.0, 120.0])
def test_strongly_coupled_pair_is_what_diagonalising_gives(distance_hz: float) -> None:
    frequency, j = 60.0, 12.0
    a, b = Multiplet(2.0 + distance_hz / frequency, 1), Multiplet(2.0, 1)
    first, second = strongly_coupled_pair(a, b, j, frequency)
    positions, weights = [], []
    for signal in (first, second):
        offsets, shares = stick_pattern(signal)
        positions += list(offsets + signal.shift_ppm * frequency)
        weights += list(shares)
        assert shares.sum() == pytest.approx(1.0)
    order = np.argsort(positions)
    found = np.array(positions)[order], np.array(weights)[order]
    expected = _two_spins(a.shift_ppm * frequency, b.shift_ppm * frequency, j)
    np.testing.assert_allclose(found[0], expected[0], atol=1e-9)
    np.testing.assert_allclose(found[1], expected[1], atol=1e-9)


def _two_spins(first_hz: float, second_hz: float, j_hz: float) -> tuple[np.ndarray, np.ndarray]:
    """Lines of two coupled spins from the 4 × 4 Hamiltonian; intensities sum to 2."""
    x = np.array([[0, 1], [1, 0]], complex) / 2
    y = np.array([[0, -1j], [1j, 0]]) / 2
    z = np.diag([0.5, -0.5]).astype(complex)
    one = np.eye(2)
    pairs = [(np.kron(s, one), np.kron(one, s)) for s in (x, y, z)]
    hamiltonian = first_hz * pairs[2][0] + second_hz * pairs[2][1]
    hamiltonian = hamiltonian + j_hz * sum(a @ b for a, b in pairs)
    energy, states = np.linalg.eigh(hamiltonian)
    raising = pairs[0][0] + pairs[0][1] + 1j * (pairs[1][0] + pairs[1][1])
    strength = np.abs(states.conj().T @ raising @ states) ** 2
    upper, lower = np.nonzero(strength > 1e-9)
    lines = energy[upper] - energy[lower]
    order = np.argsort(lines)
    return lines[order], strength[upper, lower][order] / 2
