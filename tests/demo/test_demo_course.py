"""The true courses against closed forms and against one another."""

from dataclasses import replace

import numpy as np
import pytest

from demo_runs.course import Course, Step, first_order, second_order

TIMES = np.linspace(0, 20_000, 41)


def test_first_order_is_exponential_and_balances() -> None:
    amounts = first_order("A", "B", 2e-4, 0.4).at(TIMES)
    np.testing.assert_allclose(amounts["A"], 0.4 * np.exp(-2e-4 * TIMES), rtol=1e-13)
    np.testing.assert_allclose(amounts["A"] + amounts["B"], 0.4, rtol=1e-13)


def test_second_order_follows_the_rate_as_written() -> None:
    # v = k [A]², −d[A]/dt = 2 v (contract): 1/[A] grows by 2 k t, half as much B is formed.
    amounts = second_order("A", "B", 1e-3, 0.5).at(TIMES)
    np.testing.assert_allclose(1 / amounts["A"], 2 + 2e-3 * TIMES, rtol=1e-12)
    np.testing.assert_allclose(amounts["B"], (0.5 - amounts["A"]) / 2, rtol=1e-12)


def test_zero_order_stops_at_nothing() -> None:
    step = Step((("A", 1),), (("B", 1),), 1e-4, (("A", 0),))
    amounts = Course((step,), (("A", 0.5),)).at([0.0, 1000.0, 5000.0, 9000.0])
    np.testing.assert_allclose(amounts["A"], [0.5, 0.4, 0.0, 0.0], atol=1e-14)


@pytest.mark.parametrize("order", [0.5, 1.0, 1.5, 2.0, 3.0])
def test_closed_form_and_integration_agree(order: float) -> None:
    step = Step((("A", 1),), (("B", 1),), 3e-4, (("A", order),))
    closed = Course((step,), (("A", 0.5),))
    # A second step that never turns over forces the numerical way.
    still = Step((("C", 1),), (("D", 1),), 0.0)
    numerical = replace(closed, steps=(step, still))
    times = TIMES[TIMES < 4000]
    for name in ("A", "B"):
        np.testing.assert_allclose(
            numerical.at(times)[name], closed.at(times)[name], rtol=1e-7, atol=1e-9
        )


def test_consecutive_steps_match_the_textbook_solution() -> None:
    k1, k2 = 4e-4, 1e-4
    steps = (Step((("A", 1),), (("B", 1),), k1), Step((("B", 1),), (("C", 1),), k2))
    amounts = Course(steps, (("A", 0.3),)).at(TIMES)
    middle = 0.3 * k1 / (k2 - k1) * (np.exp(-k1 * TIMES) - np.exp(-k2 * TIMES))
    np.testing.assert_allclose(amounts["B"], middle, atol=1e-8)


def test_mean_over_an_acquisition_has_the_sinh_factor() -> None:
    # Source: derived; references.md: exact factor sinh(k Ta/2)/(k Ta/2) at the middle.
    k, length = 1e-3, 600.0
    course = first_order("A", "B", k, 0.4)
    mean = course.mean(1000.0, 1000.0 + length)["A"]
    half = k * length / 2
    assert mean == pytest.approx(0.4 * np.exp(-k * 1300.0) * np.sinh(half) / half, rel=1e-12)


def test_a_start_inside_the_acquisition_counts_the_part_before_as_unreacted() -> None:
    course = first_order("A", "B", 1e-3, 0.4)
    mean = course.mean(-100.0, 300.0)["A"]
    after = 0.4 * (1 - np.exp(-0.3)) / 1e-3
    assert mean == pytest.approx((0.4 * 100 + after) / 400, rel=1e-12)
