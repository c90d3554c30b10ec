"""Pictures of simulated runs with and without an impurity, for tests and benchmarks."""

import numpy as np

from demo_runs.lines import Multiplet
from kinetics.measure import Recipe, measure, picture_row
from kinetics.signals.calibration import calibrate
from kinetics.signals.unassigned import Unassigned, unassigned
from kinetics.spectra.model import Raw
from tests.measured import INSTRUMENT, acquire, plan_of

LIMITS = (0.2, 11.0)
REF = (3.06, 3.22)
WINDOWS = ((5.44, 5.80), (9.48, 9.76))
PLAN = plan_of(REF, *WINDOWS)
IMPURITY_PPM = 2.74


def spectra(seed: int, count: int, *, impurity: float, snr: float = 300.0) -> list[Raw]:
    """A first-order run; the singlet appears at half time with this part of the reactant's area."""
    out = []
    for i in range(count):
        left = float(np.exp(-2.5 * i / count))
        lines = [
            (Multiplet(3.14, 6, width_hz=0.8, satellite_hz=138), 0.05),
            (Multiplet(5.62, 1, ((3, 5.0),), width_hz=0.9, satellite_hz=162), 0.4 * left),
            (Multiplet(9.62, 1, ((3, 2.8),), width_hz=0.9, satellite_hz=173), 0.4 * (1 - left)),
            (Multiplet(4.76, 2, width_hz=3.5), 0.5),
        ]
        if impurity and i >= count // 2:
            lines.append((Multiplet(IMPURITY_PPM, 1, width_hz=0.9), 0.4 * impurity))
        out.append(acquire(lines, snr=snr, seed=1000 * seed + i, p0=25, name=str(i)))
    return out


def found(raws: list[Raw]) -> tuple[Unassigned, ...]:
    """What is remarked on after the last of these spectra."""
    recipe = Recipe(1, PLAN, calibrate(raws[:20], PLAN, 2))
    picture = np.array([picture_row(measure(raw, recipe), *LIMITS) for raw in raws])
    return unassigned(picture, LIMITS, (REF, *WINDOWS), (), REF, INSTRUMENT.frequency_mhz)
