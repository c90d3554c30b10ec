"""Integrals of simulated spectra: bias, pulls, following, remarks."""

from dataclasses import replace

import numpy as np
import pytest

from demo_runs.instrument import Shim
from demo_runs.lines import Multiplet
from kinetics.measure import Measurement, Recipe, measure
from kinetics.signals.calibration import calibrate
from kinetics.signals.model import FollowPlan
from kinetics.spectra.model import Raw
from tests.measured import acquire, plan_of

REF = Multiplet(3.1, 6, width_hz=0.8)
REST = Multiplet(7.2, 2, width_hz=1.0)
WATER = Multiplet(4.8, 2, width_hz=4.0)
HUMP = Multiplet(4.8, 1, width_hz=400.0)
PLAN = plan_of((3.0, 3.2), (7.1, 7.3))
SHIM = Shim(lorentz_hz=0.2, gauss_hz=0.4, tail_share=0.15, tail_hz=0.4)


def lines(water: float = 0.0, hump: float = 0.0) -> list[tuple[Multiplet, float]]:
    out = [(REF, 0.05), (REST, 0.2)]
    out += [(WATER, water)] if water else []
    return out + ([(HUMP, hump)] if hump else [])


def measured(raws: list[Raw], plan: FollowPlan = PLAN) -> list[Measurement]:
    recipe = Recipe(1, plan, calibrate(raws[:20], plan, 2))
    return [measure(raw, recipe) for raw in raws]


def ratio(measurement: Measurement) -> float:
    values = measurement.integrals.values
    return float(values[1] / values[0])


TRUE = (0.2 * 2) / (0.05 * 6)


@pytest.mark.parametrize(("water", "hump"), [(0.0, 0.0), (1.0, 0.0), (0.5, 2.0)])
@pytest.mark.parametrize("shim", [None, SHIM])
def test_bias_of_isolated_signals(water: float, hump: float, shim: Shim | None) -> None:
    raws = [
        acquire(lines(water, hump), snr=2000, seed=s, p0=30, p1=15, shim=shim) for s in range(6)
    ]
    found = np.mean([ratio(m) for m in measured(raws)])
    assert found == pytest.approx(TRUE, rel=0.006)


def test_pulls_at_a_reference_of_a_hundred() -> None:
    raws = [acquire(lines(), snr=100, seed=100 + s, p0=20) for s in range(150)]
    rows = measured(raws)
    values = np.array([m.integrals.values for m in rows])
    covariance = np.array([m.integrals.covariance for m in rows])
    found = values[:, 1] / values[:, 0]
    slope = np.stack([-found / values[:, 0], 1 / values[:, 0]], axis=1)
    error = np.sqrt(np.einsum("ni,nij,nj->n", slope, covariance, slope))
    pull = (found - found.mean()) / error
    assert pull.std() == pytest.approx(1.0, abs=0.17)
    assert abs(found.mean() / TRUE - 1) < 0.006


def test_windows_follow_a_drift_and_a_jump() -> None:
    shifts = np.concatenate((np.linspace(0, 0.1, 12), 0.12 + np.linspace(0.1, 0.2, 12)))
    raws = [acquire(lines(), snr=500, seed=i, shift=float(s), p0=10) for i, s in enumerate(shifts)]
    found = np.array([ratio(m) for m in measured(raws)])
    assert np.abs(found / TRUE - 1).max() < 0.035  # noise alone is 0.01
    assert abs(found[12:].mean() / found[:12].mean() - 1) < 0.005


def test_a_signal_that_slides_by_itself_is_followed() -> None:
    plan = replace(PLAN, signals=(replace(PLAN.signals[0], window=(7.14, 7.26)),))
    rows = []
    for i, own in enumerate(np.linspace(0, 0.02, 21)):
        moved = [(REF, 0.05), (replace(REST, shift_ppm=7.2 + float(own)), 0.2)]
        rows.append(acquire(moved, snr=800, seed=i))
    found = measured(rows, plan)
    assert ratio(found[-1]) / ratio(found[0]) == pytest.approx(1.0, abs=0.01)
    drift = found[-1].integrals.offsets_ppm[1] - found[0].integrals.offsets_ppm[1]
    assert drift == pytest.approx(0.02, abs=0.002)


def test_measuring_depends_on_nothing_else() -> None:
    raws = [acquire(lines(), snr=200, seed=s) for s in range(4)]
    recipe = Recipe(1, PLAN, calibrate(raws, PLAN, 2))
    first = [measure(raw, recipe).integrals.values for raw in raws]
    again = [measure(raw, recipe).integrals.values for raw in reversed(raws)][::-1]
    assert np.array_equal(first, again)


class TestRemarks:
    def codes(self, odd: Raw, plan: FollowPlan = PLAN) -> set[str]:
        raws = [acquire(lines(), snr=300, seed=s, shim=SHIM) for s in range(6)]
        recipe = Recipe(1, plan, calibrate(raws, plan, 2))
        for raw in raws:
            assert measure(raw, recipe).state == "measured"
        return {remark.code for remark in measure(odd, recipe).remarks}

    def test_none_on_a_good_spectrum(self) -> None:
        assert self.codes(acquire(lines(), snr=300, seed=50, shim=SHIM)) == set()

    def test_a_lost_reference(self) -> None:
        assert "reference-lost" in self.codes(acquire([(REST, 0.2)], snr=300, seed=51))

    def test_bad_shim(self) -> None:
        bad = Shim(lorentz_hz=4.0, gauss_hz=3.0)
        assert "lines-broad" in self.codes(acquire(lines(), snr=300, seed=52, shim=bad))

    def test_a_clipped_receiver(self) -> None:
        clear = acquire(lines(), snr=300, seed=53, shim=SHIM)
        limit = 0.3 * np.abs(clear.data.real).max()
        flat = np.clip(clear.data.real, -limit, limit) + 1j * np.clip(
            clear.data.imag, -limit, limit
        )
        from kinetics.spectra.readers.raw_folder import clipped

        assert [r.code for r in clipped(flat)] == ["receiver-clipped"]
        assert clipped(clear.data) == ()
