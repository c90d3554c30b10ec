"""Phase: first spectra and series, over shims, offsets and noise (smaller grid of issue scale)."""

from dataclasses import replace

import numpy as np
import pytest

from demo_runs import dunmarolide
from demo_runs.instrument import Shim
from demo_runs.lines import Multiplet
from demo_runs.simulate import simulate_run
from kinetics.measure import Recipe, follow_plan, measure
from kinetics.sheet import read_sheet
from kinetics.signals.calibration import calibrate
from kinetics.spectra.fourier import transform
from kinetics.spectra.matched import group_shapes, matched_phases
from kinetics.spectra.phase import common_slope, fit_phase, line_phases
from tests.command import ROOT
from tests.measured import acquire, raw_of
from tests.recorded import STARTED

LINES = [
    (Multiplet(7.2, 2, width_hz=0.9), 0.2),
    (Multiplet(5.6, 1, ((3, 5.0),), width_hz=0.9), 0.3),
    (Multiplet(3.1, 6, width_hz=0.8), 0.05),
    (Multiplet(1.2, 3, ((1, 5.0),), width_hz=0.9), 0.3),
]


def off(found: float, true: float) -> float:
    return (found - true + 180.0) % 360.0 - 180.0


def test_first_spectra() -> None:
    """At S/N 100 every line within 5 degrees in four of five, whatever p0 and p1 are."""
    good = []
    places = (np.array([7.2, 5.6, 3.1, 1.2]) - 5.0) / 20.0
    for p1 in (-60.0, 0.0, 60.0):
        for seed, p0 in enumerate(np.linspace(-170, 170, 12)):
            raw = acquire(LINES, snr=100.0, seed=seed, p0=float(p0), p1=p1)
            spectrum = transform(raw, broadening_hz=0.3, zero_fill=2)
            found = fit_phase(line_phases(raw, spectrum))
            assert found is not None
            # The truth is the phase of the FID; the correction undoes it.
            wrong = [off(found.p0_deg - found.p1_deg * x, -p0 - p1 * x) for x in places]
            good.append(max(map(abs, wrong)) < 5.0)
    assert np.mean(good) >= 0.8


def test_no_line_no_phase() -> None:
    raw = acquire([(LINES[0][0], 1e-9)], snr=1e-6)
    spectrum = transform(raw, broadening_hz=0.3, zero_fill=2)
    assert fit_phase(line_phases(raw, spectrum)) is None
    assert common_slope([line_phases(raw, spectrum)]) is None


def test_a_series_is_phased_to_half_a_degree() -> None:
    """The scatter of the zero order along the demonstration's first half, lock jump included."""
    sheet, _ = read_sheet(ROOT / "demo_runs" / "demo.toml")
    plan = follow_plan(sheet)
    made = list(simulate_run(dunmarolide.demo(), seed=3, started=STARTED, count=60))
    raws = [raw_of(spectrum) for spectrum in made]
    recipe = Recipe(1, plan, calibrate(raws[:20], plan, 2))
    wrong = [
        off(measure(raw, recipe).record.p0_deg, -spectrum.truth.p0_deg)
        for raw, spectrum in zip(raws, made, strict=True)
    ]
    assert np.std(wrong) < 0.5
    assert abs(np.mean(wrong)) < 2.0


def test_lines_that_became_lop_sided_lose_their_say() -> None:
    good = Shim(lorentz_hz=0.2)
    bad = Shim(lorentz_hz=0.8, tail_share=0.4, tail_hz=2.0)
    first = transform(acquire(LINES, snr=None, shim=good), broadening_hz=0.3, zero_fill=2)
    occupied = ((6.9, 7.5), (5.3, 5.9), (2.9, 3.3), (0.9, 1.5))
    shapes = group_shapes([(first.values, first.axis)], occupied, (), 1e-3)
    assert len(shapes.shapes) == 4
    for shim, sigma in ((good, 1.0), (bad, 3.0)):
        later = transform(
            acquire(LINES, snr=None, shim=shim, p0=0.0), broadening_hz=0.3, zero_fill=2
        )
        found = matched_phases(later.values, later.axis, shapes, 0.0, 0.0)
        assert found.where.size >= 1
        # Whatever it finds is within a few of the errors it states.
        assert np.all(np.abs(found.correction_deg) < 3.0 * found.sigma_deg + 0.1)
        assert (
            np.median(found.sigma_deg) < sigma if shim is good else np.median(found.sigma_deg) > 1.0
        )


@pytest.mark.parametrize("shift", [0.0, 0.0007, -0.011])
def test_matched_phase_sees_a_turn_through_a_shift(shift: float) -> None:
    first = transform(acquire(LINES, snr=None), broadening_hz=0.3, zero_fill=2)
    shapes = group_shapes([(first.values, first.axis)], ((6.9, 7.5), (2.9, 3.3)), (), 1e-3)
    turned = acquire(LINES, snr=None, p0=7.0, shift=shift)
    later = transform(replace(turned, source="2"), broadening_hz=0.3, zero_fill=2)
    found = matched_phases(later.values, later.axis, shapes, 0.0, 0.0)
    assert found.correction_deg == pytest.approx([-7.0, -7.0], abs=0.1)
