"""Baseline: what it must take away, what it must leave alone."""

import numpy as np
import pytest

from kinetics.spectra.baseline import baseline_operator, merged
from kinetics.spectra.model import Axis

AXIS = Axis(12.0, -14.0 / 8192, 8192)
PPM = AXIS.ppm()


def line(
    centre: float, width: float, height: float = 1.0
) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
    return height / (1 + ((PPM - centre) / (width / 2)) ** 2)


def test_merged_ranges() -> None:
    assert merged([(3, 4), (2, 3.5), (6, 5)]) == ((2, 4), (5, 6))


def test_a_hump_goes_and_a_protected_wide_line_stays() -> None:
    hump = 0.3 * np.exp(-(((PPM - 4.7) / 2.5) ** 2)) + 0.02 * PPM
    wide = line(3.0, 0.12)
    operator = baseline_operator(AXIS, [(2.0, 4.0)])
    left = wide + hump - operator.apply(wide + hump)
    assert np.abs(left - wide).max() < 0.02
    area = left[(PPM > 2.0) & (PPM < 4.0)].sum() / wide[(PPM > 2.0) & (PPM < 4.0)].sum()
    assert area == pytest.approx(1.0, abs=0.06)


def test_the_transpose_is_that_of_the_operator() -> None:
    rng = np.random.default_rng(0)
    operator = baseline_operator(AXIS, [(2.0, 4.0), (7.0, 7.5)])
    weights, values = rng.standard_normal(AXIS.size), 1e-3 * rng.standard_normal(AXIS.size)
    direct = float(weights @ operator.apply(values).astype(np.float64))
    assert direct == pytest.approx(float(operator.transposed(weights) @ values), rel=1e-3, abs=1e-4)


@pytest.mark.parametrize("height", [0.05, 1.0])
def test_a_line_that_appears_later_does_not_bend_it(height: float) -> None:
    rng = np.random.default_rng(1)
    noise = 0.003 * rng.standard_normal(AXIS.size)
    operator = baseline_operator(AXIS, [(2.9, 3.3)])
    before = operator.apply(noise)
    after = operator.apply(noise + line(2.74, 0.02, height))
    beside = (PPM > 2.9) & (PPM < 3.3)
    # What is left is the line's own far tail, which no baseline can tell from itself.
    assert np.abs(after - before)[beside].max() < 0.0015 + 0.002 * height
    assert np.abs(before).max() < 0.003


def test_everything_protected_means_no_baseline() -> None:
    operator = baseline_operator(AXIS, [(-10.0, 20.0)])
    assert not operator.apply(np.ones(AXIS.size)).any()
