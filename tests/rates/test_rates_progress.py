"""End-point, levelling off and changes: small versions of the study in tests/benchmarks."""

import numpy as np
import pytest

from kinetics.rates.fitting import fit
from kinetics.rates.progress import changes, cumulative, plateau, progress, recursive_residuals
from kinetics.rates.series import Series, make_series
from tests.benchmarks.forecast_rates import choices, end_points, forecasts, stalls
from tests.rates.simulated import ONE, run


def stalled(seed: int, at: float, n: int = 60, end: float = 4.0) -> Series:
    t = end * (np.arange(n) + 1) / n
    a = np.exp(-np.minimum(t, at))
    rng = np.random.default_rng(seed)
    values = np.c_[a, 1 - a] + 0.01 * rng.normal(size=(n, 2))
    return make_series(t, values, ["A", "P"], standard_uncertainty=0.01)


def test_a_finished_reaction_is_over() -> None:
    found = progress(run(1, n=60, end=7.0), ONE)
    assert found.state == "over"
    assert found.conversion == pytest.approx(1.0, abs=0.02)
    assert found.remainder_high < 0.02


def test_an_equilibrium_is_levelled_off_with_its_conversion() -> None:
    t = 7 * (np.arange(60) + 1) / 60
    a = 0.4 + 0.6 * np.exp(-t)
    rng = np.random.default_rng(2)
    s = make_series(
        t,
        np.c_[a, 1 - a] + 0.005 * rng.normal(size=(60, 2)),
        ["A", "P"],
        standard_uncertainty=0.005,
    )
    found = progress(s, ONE)
    assert found.state == "levelled-off"
    assert found.conversion == pytest.approx(0.6, abs=0.02)
    assert "equilibrium or a stall" in found.words


def test_nothing_is_called_on_noise_alone_or_few_spectra() -> None:
    rng = np.random.default_rng(3)
    t = np.arange(1.0, 41.0)
    s = make_series(t, 1 + 0.01 * rng.normal(size=40), ["A"], standard_uncertainty=0.01)
    assert progress(s, ONE).state == "running"
    assert plateau(run(3, n=6)) is None


def test_a_stall_is_noticed_dated_and_the_site_named() -> None:
    (change,) = changes(fit(stalled(4, 1.0), "first-order", ONE))
    assert change.kind == "rate"
    assert change.time_s == pytest.approx(1.0, abs=0.4)
    assert "accumulation" in change.words


def test_a_step_of_the_reference_is_not_taken_for_the_reaction() -> None:
    s = run(5, n=60, end=3.0)
    values = s.values * np.where(np.arange(60) >= 30, 1.06, 1.0)[:, None]
    s = make_series(s.time_s, values, s.species, standard_uncertainty=0.01)
    (change,) = changes(fit(s, "first-order", ONE))
    assert change.kind == "reference"


def test_recursive_residuals_of_independent_noise_are_standard() -> None:
    z = np.concatenate(
        [recursive_residuals(fit(run(i, n=60), "first-order", ONE))[0].ravel() for i in range(20)]
    )
    assert z.std() == pytest.approx(1.0, abs=0.08)
    assert abs(np.corrcoef(z[:-1], z[1:])[0, 1]) < 0.06


def test_cumulative_sum_is_two_sided() -> None:
    assert cumulative(np.full(10, 1.5))[-1] == pytest.approx(10.0)
    assert cumulative(np.full(10, -1.5))[-1] == pytest.approx(-10.0)
    assert np.all(cumulative(np.full(10, 0.4)) == 0)


def test_end_is_called_late_rather_than_early() -> None:
    found = end_points(runs=25)
    assert found["early_%"] == 0.0
    assert found["never_%"] == 0.0
    assert 0 <= found["median_delay"] <= 5


def test_hard_stalls_are_never_called_over() -> None:
    found = stalls(runs=20)
    assert found["called_over_%"] == 0.0
    assert found["stall_noticed_%"] >= 85.0


@pytest.mark.parametrize("laws", [("first-order",), ("first-order", "second-order")])
def test_forecast_at_forty_per_cent_holds_the_truth(laws: tuple[str, ...]) -> None:
    found = forecasts("first-order", laws, runs=80)
    assert found.covered / found.runs > 0.88  # 95 % less three standard errors
    assert found.width < 1.3


def test_order_is_rarely_chosen_wrongly() -> None:
    for rho in (0.0, 0.6):
        assert choices("second-order", 0.75, 40, rho)["wrong_%"] <= 2.5
    assert choices("first-order", 0.75, 40, 0.0)["right_%"] >= 85.0
