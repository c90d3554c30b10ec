"""Joint fits of overlapping signals at 60 MHz, against the amounts that were simulated."""

from dataclasses import replace

import numpy as np
import pytest

from demo_runs.instrument import Shim
from demo_runs.lines import Multiplet, strongly_coupled_pair
from kinetics.logbook import codec
from kinetics.measure import Measurement, Recipe, measure
from kinetics.signals.calibration import calibrate
from kinetics.signals.model import FollowPlan, Signal
from kinetics.signals.multiplet import fitted_groups
from kinetics.spectra.model import Raw
from kinetics.spectra.processing import Settings
from tests.measured import INSTRUMENT, acquire

MHZ = 60.0
APART = 4.0 / MHZ
LOW_FIELD = replace(INSTRUMENT, frequency_mhz=MHZ)
GOOD = Shim(lorentz_hz=0.2, gauss_hz=0.3)
BAD = Shim(lorentz_hz=0.4, gauss_hz=0.6, tail_share=0.2, tail_hz=0.8)
REF = Multiplet(3.1, 9, width_hz=0.6)


def plan(method: str = "multiplet") -> FollowPlan:
    ref = Signal("ref", (2.9, 3.3), 9, follow=False)
    a = Signal("a", (1.0, 1.45), 3, ((2, 7.0),), method)
    b = replace(a, species="b", window=(1.0 + APART, 1.45 + APART))
    windows = (ref.window, a.window, b.window)
    return FollowPlan(Settings(shift_window=ref.window, protected=windows), ref, (a, b))


def raws(share: float, count: int, shim: Shim, snr: float = 300.0) -> list[Raw]:
    triplet = Multiplet(1.22, 3, ((2, 7.0),), width_hz=0.6)
    lines = [(REF, 0.05), (triplet, 0.2 * share), (triplet.at(1.22 + APART), 0.2 * (1 - share))]
    return [
        acquire(lines, snr=snr, seed=seed, p0=20, instrument=LOW_FIELD, shim=shim)
        for seed in range(count)
    ]


def measured(spectra: list[Raw], what: FollowPlan) -> list[Measurement]:
    recipe = Recipe(1, what, calibrate(spectra[:20], what, 2))
    return [measure(raw, recipe) for raw in spectra]


def ratios(rows: list[Measurement]) -> np.ndarray:
    values = np.array([row.integrals.values for row in rows])
    return values[:, 1:] / values[:, :1]


def truth(share: float) -> np.ndarray:
    return 0.2 * 3 * np.array([share, 1 - share]) / (0.05 * 9)


@pytest.mark.parametrize("shim", [GOOD, BAD])
@pytest.mark.parametrize("share", [0.95, 0.5])
def test_overlapping_triplets(share: float, shim: Shim) -> None:
    rows = measured(raws(share, 40, shim, snr=1000), plan())
    bias = ratios(rows).mean(axis=0) / truth(share) - 1
    bound = [0.015, 0.05] if share > 0.5 else [0.025, 0.025]
    assert np.all(np.abs(bias) < bound)
    rows = measured(raws(share, 20, shim, snr=1000), replace_method(plan(), "sum"))
    assert np.abs(ratios(rows).mean(axis=0) / truth(share) - 1).max() > 5 * np.abs(bias).max()
    assert {"windows-overlap"} <= {remark.code for remark in rows[0].remarks}
    assert rows[0].state == "doubtful"


def replace_method(what: FollowPlan, method: str) -> FollowPlan:
    return replace(what, signals=tuple(replace(s, method=method) for s in what.signals))


def test_stated_noise_is_the_noise_seen() -> None:
    rows = measured(raws(0.5, 120, GOOD), plan())
    values = np.array([row.integrals.values[1:] for row in rows])
    covariance = np.array([row.integrals.covariance[1:, 1:] for row in rows])
    # The sum of both areas is well known, their difference less so: both must be right.
    for way in (np.array([1.0, 1.0]), np.array([1.0, -1.0])):
        stated = np.sqrt(way @ covariance.mean(axis=0) @ way)
        assert (values @ way).std() == pytest.approx(stated, rel=0.2)


def test_a_pair_that_couples_strongly_is_not_called_n_plus_one() -> None:
    distance = 0.15
    first, second = strongly_coupled_pair(
        Multiplet(1.22, 1, width_hz=0.6), Multiplet(1.22 + distance, 1, width_hz=0.6), 12.0, MHZ
    )
    lines = [(REF, 0.05), (first, 0.3), (second, 0.3)]
    spectra = [acquire(lines, seed=s, instrument=LOW_FIELD, shim=GOOD) for s in range(3)]
    base = plan()
    a = replace(base.signals[0], couplings=((1, 12.0),), protons=1)
    b = replace(a, species="b", window=(a.window[0] + distance, a.window[1] + distance))
    rows = measured(spectra, replace(base, signals=(a, b)))
    codes = {remark.code for row in rows for remark in row.remarks}
    assert "pattern-mismatch" in codes
    assert "window-off-axis" not in codes


def test_same_spectrum_same_numbers_whatever_was_kept() -> None:
    spectra = raws(0.95, 3, GOOD)
    calibration = calibrate(spectra, plan(), 2)
    again = codec.calibration_from_bytes(codec.calibration_to_bytes(calibration))
    one = measure(spectra[2], Recipe(1, plan(), calibration)).integrals
    two = measure(spectra[2], Recipe(1, plan(), again)).integrals
    np.testing.assert_array_equal(one.values, two.values)
    np.testing.assert_array_equal(one.covariance, two.covariance)
    assert np.all(np.linalg.eigvalsh(one.covariance) > 0)


def test_groups() -> None:
    assert fitted_groups(plan()) == ((1, 2),)
    assert fitted_groups(replace_method(plan(), "sum")) == ()
    mixed = plan()
    mixed = replace(mixed, signals=(mixed.signals[0], replace(mixed.signals[1], method="sum")))
    assert fitted_groups(mixed) == ((1, 2),)
