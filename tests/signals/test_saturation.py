"""Saturation against the closed form, and remarks on exchanging signals."""

from dataclasses import replace

import numpy as np
import pytest

from demo_runs.lines import Multiplet
from kinetics.measure import Measurement, Recipe, measure
from kinetics.signals.calibration import calibrate
from kinetics.signals.model import FollowPlan
from kinetics.signals.saturation import saturation_factor
from kinetics.spectra.model import Raw
from tests.measured import INSTRUMENT, acquire, plan_of

LOW_FIELD = replace(INSTRUMENT, frequency_mhz=60.0)
REF = (Multiplet(3.1, 6, width_hz=0.8), 0.05)


def one(raw: Raw, plan: FollowPlan) -> Measurement:
    return measure(raw, Recipe(1, plan, calibrate([raw], plan)))


def with_t1(reference_s: float | None, signal_s: float | None) -> FollowPlan:
    plan = plan_of((3.0, 3.2), (7.0, 7.4))
    assert plan.reference is not None
    signals = (replace(plan.signals[0], t1_s=signal_s),)
    return replace(plan, reference=replace(plan.reference, t1_s=reference_s), signals=signals)


@pytest.mark.parametrize(
    ("ratio", "angle", "left"),
    # Derived: (1 − E)/(1 − E cos θ), by hand.
    [(5.0, 90.0, 0.99326), (1.0, 90.0, 0.63212), (1.0, 30.0, 0.92768), (1e3, 60.0, 1.0)],
)
def test_closed_form(ratio: float, angle: float, left: float) -> None:
    assert saturation_factor(ratio, 1.0, angle) == pytest.approx(left, abs=1e-4)


def test_known_t1_is_corrected_and_said() -> None:
    raw = acquire([REF, (Multiplet(7.2, 2, width_hz=0.9), 0.2)], snr=500)
    short = replace(raw, recycle_s=3.0, flip_angle_deg=90.0)
    plain = one(short, with_t1(None, None))
    both = one(short, with_t1(4.0, 2.0))
    factors = np.array([saturation_factor(3.0, 4.0), saturation_factor(3.0, 2.0)])
    np.testing.assert_allclose(both.integrals.values * factors, plain.integrals.values)
    assert "recycling-short" in {remark.code for remark in both.remarks}
    half = one(short, with_t1(None, 2.0))
    np.testing.assert_array_equal(half.integrals.values, plain.integrals.values)
    assert "recycling-short" in {remark.code for remark in half.remarks}
    assert "recycle-unknown" in {remark.code for remark in one(raw, with_t1(4.0, 2.0)).remarks}
    assert "recycling-short" not in {remark.code for remark in plain.remarks}


def exchanging(width_hz: float, at: float) -> set[str]:
    plan = plan_of((2.9, 3.3), (3.9, 4.9), (5.2, 5.8))
    plan = replace(plan, signals=(replace(plan.signals[0], exchanging=True), plan.signals[1]))
    lines = [REF, (Multiplet(at, 1, width_hz=width_hz), 0.3), (Multiplet(5.5, 1), 0.3)]
    raw = acquire(lines, snr=1000, instrument=LOW_FIELD)
    return {remark.code for remark in one(raw, plan).remarks}


def test_exchanging_signals() -> None:
    assert not {"wide-for-window", "exchanging-near"} & exchanging(3.0, 4.4)
    assert "wide-for-window" in exchanging(40.0, 4.4)
    assert "exchanging-near" in exchanging(15.0, 4.8)
