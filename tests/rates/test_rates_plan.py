"""The outlook before a run against what simulated runs then give."""

import numpy as np
import pytest

from kinetics.errors import InputError
from kinetics.rates.fitting import fit
from kinetics.rates.plan import Setup, advice, best_length_s, expected, spectra_for
from kinetics.rates.series import make_series
from tests.rates.simulated import ONE

SETUP = Setup({"A": 1.0, "P": 0.0}, half_life_s=float(np.log(2)), noise_sd=0.01)


def test_expected_width_is_that_of_simulated_runs() -> None:
    found = expected(SETUP, ONE, "first-order", 30, 2.0)
    assert found.k == pytest.approx(1.0, rel=1e-8)
    assert found.unit == "1/s"
    assert found.conversion == pytest.approx(1 - np.exp(-2.0), rel=1e-8)
    rng = np.random.default_rng(1)
    t = 2.0 * (np.arange(30) + 1) / 30
    widths = []
    for _ in range(40):
        values = np.c_[np.exp(-t), 1 - np.exp(-t)] + 0.01 * rng.normal(size=(30, 2))
        s = make_series(t, values, ["A", "P"], standard_uncertainty=0.01)
        k = fit(s, "first-order", ONE, as_stated=True).parameter("k")
        widths.append(0.5 * (k.high - k.low))
    assert found.half_width == pytest.approx(float(np.median(widths)), rel=0.06)


def test_the_difference_between_laws_is_that_of_simulated_runs() -> None:
    found = expected(SETUP, ONE, "first-order", 20, 0.9)
    rng = np.random.default_rng(2)
    t = 0.9 * (np.arange(20) + 1) / 20
    seen = []
    for _ in range(30):
        values = np.c_[np.exp(-t), 1 - np.exp(-t)] + 0.01 * rng.normal(size=(20, 2))
        s = make_series(t, values, ["A", "P"], standard_uncertainty=0.01)
        right, wrong = (fit(s, law, ONE, as_stated=True).aicc for law in ONE.laws)
        seen.append(wrong - right)
    assert found.told_from["second-order"] == pytest.approx(float(np.median(seen)), rel=0.15)


def test_more_spectra_and_a_better_length_narrow_k() -> None:
    length = best_length_s(SETUP, ONE, "first-order", 40)
    assert 1.0 < length / SETUP.half_life_s < 6.0
    count = spectra_for(SETUP, ONE, "first-order", length, 0.005)
    assert count is not None
    reached = expected(SETUP, ONE, "first-order", count, length, others=False).half_width
    assert reached <= 0.005
    less = expected(SETUP, ONE, "first-order", int(0.9 * count), length, others=False).half_width
    assert less > 0.005
    assert spectra_for(SETUP, ONE, "first-order", length, 1e-5) is None


def test_words_say_what_to_change() -> None:
    slow = Setup({"A": 1.0, "P": 0.0}, SETUP.half_life_s, 0.01, acquisition_s=0.2)
    found = expected(slow, ONE, "first-order", 30, 2.0)
    words = " ".join(advice(slow, found, 120, 0.005))
    assert "take 120 spectra" in words
    assert "fewer scans" in words
    assert "tenth of the half-life" in words
    assert "replicate runs" in words


def test_nonsense_is_refused_by_name() -> None:
    with pytest.raises(InputError, match="half_life_s must be positive"):
        expected(Setup({"A": 1.0}, -1.0, 0.01), ONE, "first-order", 10, 1.0)
    with pytest.raises(InputError, match="none of its species"):
        expected(Setup({"Z": 1.0}, 1.0, 0.01), ONE, "first-order", 10, 1.0)
