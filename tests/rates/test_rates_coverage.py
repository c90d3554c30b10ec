"""A small part of the coverage study of tests/benchmarks/coverage_rates.py."""

import pytest

from tests.benchmarks.coverage_rates import cell

RUNS = 80


@pytest.mark.parametrize(
    ("law", "noise", "spectra", "conversion"),
    [
        ("first-order", "independent", 8, 0.30),
        ("first-order", "shared", 20, 0.75),
        ("second-order", "heteroscedastic", 20, 0.95),
        ("second-order-mixed", "independent", 20, 0.75),
        ("first-order-reversible", "independent", 20, 0.30),
    ],
)
def test_intervals_hold_the_truth(law: str, noise: str, spectra: int, conversion: float) -> None:
    """95 % wanted; the bounds are three standard errors of 80 runs away."""
    found = cell(law, noise, spectra, conversion, RUNS)
    assert found.closed >= 0.95 * RUNS
    assert found.coverage >= 0.875
    assert found.warned <= 0.19 * RUNS
    assert 0.8 < found.width < 1.25


def test_in_a_drift_it_holds_or_warns() -> None:
    found = cell("first-order", "drift-unstated", 20, 0.75, RUNS)
    assert found.coverage >= 0.85 or found.warned >= 0.9 * RUNS
    assert cell("first-order", "drift", 20, 0.75, RUNS).coverage >= 0.9
