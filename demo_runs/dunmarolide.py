"""The invented reaction: dunmarolide opens to dunmaral. Every name and number is made up.

`demo(...)` is the run the player plays, `finished(...)` the night that lies ready to open.
README.md beside this file tells the story.
"""

from dataclasses import replace
from math import exp

from demo_runs.course import first_order
from demo_runs.instrument import Instrument, Shim
from demo_runs.lines import Multiplet
from demo_runs.scenario import Habits, Late, Scenario, Schedule, ShimEpisode, Species

SITE = "Wexmoor Process Laboratory (invented)"
SOLVENT = "D2O"
REACTANT, PRODUCT, REFERENCE = "dunmarolide", "dunmaral", "dimethyl sulfone"

# True rate constant and its temperature dependence.
K_25C = 1.05e-4  # 1/s at 298.15 K
ACTIVATION_J_MOL = 82_000.0
_GAS_CONSTANT = 8.314462618  # J/(mol K), CODATA

CHARGED = 0.400  # mol/L of dunmarolide at the start
REFERENCE_AMOUNT = 0.0500  # mol/L

_REACTANT = Species(
    REACTANT,
    (
        Multiplet(5.62, 1, ((3, 5.0),), width_hz=0.9, satellite_hz=162, label="ring CH"),
        Multiplet(1.25, 3, ((1, 5.0),), width_hz=0.9, satellite_hz=127, label="ring CH3"),
    ),
)
_PRODUCT = Species(
    PRODUCT,
    (
        Multiplet(9.62, 1, ((3, 2.8),), width_hz=0.9, satellite_hz=173, label="CHO"),
        Multiplet(2.19, 3, ((1, 2.8),), width_hz=0.9, satellite_hz=127, label="CH3"),
    ),
)
_REFERENCE = Species(
    REFERENCE, (Multiplet(3.14, 6, width_hz=0.8, satellite_hz=138, label="reference"),)
)
# Water, acid and the OH of everything exchange: one line, broader, sliding as acid is set free.
_WATER = Species(
    "water", (Multiplet(4.76, 2, width_hz=3.5, drift_ppm_per_h=-0.006, label="water and OH"),)
)
_NEIGHBOUR = Species("acetate", (Multiplet(1.92, 3, width_hz=0.8, label="neighbour"),))
_IMPURITY = Species("unknown", (Multiplet(2.74, 3, width_hz=1.0, label="impurity"),))

INSTRUMENT = Instrument(
    frequency_mhz=80.0,
    spectral_width_hz=1600.0,
    carrier_ppm=5.0,
    points=4096,
    group_delay=67.984,
    sensitivity=2000.0,
    noise_sd=130.0,
)


def rate_constant(temperature_k: float) -> float:
    """Return the true first-order k in 1/s at a temperature (Arrhenius from `K_25C`)."""
    return K_25C * exp(-ACTIVATION_J_MOL / _GAS_CONSTANT * (1 / temperature_k - 1 / 298.15))


def scenario(schedule: Schedule, habits: Habits, *, impurity_from_s: float | None) -> Scenario:
    """Return the invented reaction, measured in a given way.

    Parameters
    ----------
    schedule, habits
        When and how it is measured; `habits.temperature_k` sets k.
    impurity_from_s
        When a small impurity begins to appear, s; None: never.
    """
    k = rate_constant(habits.temperature_k)
    late = () if impurity_from_s is None else (Late(_IMPURITY, impurity_from_s, 0.008, 4000.0),)
    celsius = habits.temperature_k - 273.15
    return Scenario(
        title=f"Ring opening of {REACTANT}, {celsius:.0f} C",
        site=SITE,
        solvent=SOLVENT,
        course=first_order(REACTANT, PRODUCT, k, CHARGED),
        species=(_REACTANT, _PRODUCT),
        standing=((_REFERENCE, REFERENCE_AMOUNT), (_WATER, 0.6), (_NEIGHBOUR, 0.06)),
        reference=REFERENCE,
        instrument=INSTRUMENT,
        schedule=schedule,
        habits=habits,
        late=late,
    )


_HABITS = Habits(
    p0_deg=35.0,
    p0_sd_deg=4.0,
    p1_deg=14.0,
    drift_ppm_per_h=0.0025,
    wander_ppm=0.0006,
    gain_wander=0.002,
    shim=Shim(lorentz_hz=0.2, gauss_hz=0.3, tail_share=0.15, tail_hz=0.4),
    temperature_k=298.15,
    temperature_sd_k=0.04,
)


def demo() -> Scenario:
    """Return the run that the player plays: 120 spectra in 8 h, final conversion 95 %."""
    schedule = Schedule(count=120, interval_s=240, scans=16, recycle_s=12.0, first_after_s=60)
    bad = Shim(lorentz_hz=0.8, gauss_hz=1.2, tail_share=0.3, tail_hz=1.2)
    habits = replace(
        _HABITS,
        jumps=((9000.0, 0.012),),
        episodes=(ShimEpisode(17_000.0, 20_500.0, bad),),
    )
    return scenario(schedule, habits, impurity_from_s=14_400.0)


def finished() -> Scenario:
    """Return the finished night: 60 spectra at 30 °C with a pause of the instrument."""
    schedule = Schedule(
        count=60,
        interval_s=360,
        scans=24,
        recycle_s=12.0,
        first_after_s=90,
        pauses=((34, 2700.0),),
    )
    bad = Shim(lorentz_hz=0.6, gauss_hz=1.0, tail_share=0.3, tail_hz=-1.0)
    habits = replace(
        _HABITS,
        temperature_k=303.15,
        drift_ppm_per_h=-0.004,
        episodes=(ShimEpisode(6_500.0, 9_500.0, bad),),
    )
    return scenario(schedule, habits, impurity_from_s=10_800.0)
