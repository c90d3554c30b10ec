"""What a simulated run consists of: species, schedule and the habits of the instrument."""

from dataclasses import dataclass, field
from typing import Self

from demo_runs.course import Course
from demo_runs.instrument import Instrument, Shim
from demo_runs.lines import Multiplet


@dataclass(frozen=True, slots=True)
class Species:
    """A compound and its signals.

    Attributes
    ----------
    name
        As in the run sheet.
    signals
        Its signals; where a label is empty, name and shift serve.
    """

    name: str
    signals: tuple[Multiplet, ...]


@dataclass(frozen=True, slots=True)
class Late:
    """A compound that is not there from the start: it appears and levels off.

    Attributes
    ----------
    species
        The compound.
    from_s
        When it begins to appear, s after the start of the reaction.
    amount
        Where it levels off, mol/L.
    rise_s
        Time constant of its appearing, s.
    """

    species: Species
    from_s: float
    amount: float
    rise_s: float


@dataclass(frozen=True, slots=True)
class Schedule:
    """When spectra are taken.

    Attributes
    ----------
    count
        Number of spectra.
    interval_s
        From the start of one to the start of the next, s.
    scans
        Scans of each.
    recycle_s
        Time of one scan, acquisition and delay, s.
    first_after_s
        Start of the first spectrum, s after the start of the reaction.
    pauses
        Pairs (after which spectrum, length in s) in which the instrument stood still.
    """

    count: int
    interval_s: float
    scans: int
    recycle_s: float
    first_after_s: float = 0.0
    pauses: tuple[tuple[int, float], ...] = ()

    def __post_init__(self) -> None:
        if self.duration_s > self.interval_s:
            raise ValueError(
                f"{self.scans} scans of {self.recycle_s:g} s do not fit into an interval of "
                f"{self.interval_s:g} s"
            )

    @property
    def duration_s(self) -> float:
        """Length of one acquisition in s."""
        return self.scans * self.recycle_s

    def start_s(self, index: int) -> float:
        """Return the start of spectrum `index` (from 0), s after the start of the reaction."""
        paused = sum(length for after, length in self.pauses if index >= after)
        return self.first_after_s + index * self.interval_s + paused

    @property
    def end_s(self) -> float:
        """End of the last spectrum, s after the start of the reaction."""
        return self.start_s(self.count - 1) + self.duration_s


@dataclass(frozen=True, slots=True)
class ShimEpisode:
    """A stretch in which the shim is worse: it comes and goes as a smooth bump.

    Attributes
    ----------
    from_s, to_s
        Where it begins and ends, s after the start of the reaction.
    worst
        Shim in the middle of it, on top of the usual one.
    """

    from_s: float
    to_s: float
    worst: Shim


@dataclass(frozen=True, slots=True)
class Habits:
    """What the instrument does that nobody asked for.

    Attributes
    ----------
    p0_deg, p0_sd_deg
        Zero-order phase error: its usual value and its scatter from spectrum to spectrum.
        360 scatters over the full circle.
    p1_deg
        First-order phase error over the whole width, degrees, the same in every spectrum.
    drift_ppm_per_h
        How fast all lines slide together.
    wander_ppm
        Standard deviation of the step of a random walk of all lines, each spectrum.
    jumps
        Pairs (s after the start of the reaction, ppm): the lock lost and found again.
    gain_wander
        Relative standard deviation of the step of a random walk of the receiver, each spectrum.
    shim
        The usual shim.
    episodes
        Stretches of worse shim.
    temperature_k, temperature_sd_k
        Probe temperature and its scatter.
    """

    p0_deg: float = 0.0
    p0_sd_deg: float = 0.0
    p1_deg: float = 0.0
    drift_ppm_per_h: float = 0.0
    wander_ppm: float = 0.0
    jumps: tuple[tuple[float, float], ...] = ()
    gain_wander: float = 0.0
    shim: Shim = field(default_factory=Shim)
    episodes: tuple[ShimEpisode, ...] = ()
    temperature_k: float = 298.15
    temperature_sd_k: float = 0.0

    @classmethod
    def perfect(cls) -> Self:
        """Return the habits of an instrument without any."""
        return cls()


@dataclass(frozen=True, slots=True)
class Scenario:
    """A whole simulated run.

    Attributes
    ----------
    title
        Of the run; each spectrum's title adds its number.
    site
        The invented laboratory.
    solvent
        As the instrument records it.
    course
        The true law of the reacting species.
    species
        The reacting species with their signals; those of `course` that are missing here have
        no signal.
    standing
        Pairs (species, mol/L) of everything whose amount stays: reference, water, neighbours.
    reference
        Name of the species among `standing` that is the quantitative reference.
    late
        Compounds that appear on the way.
    instrument, schedule, habits
        How it is measured.
    """

    title: str
    site: str
    solvent: str
    course: Course
    species: tuple[Species, ...]
    standing: tuple[tuple[Species, float], ...]
    reference: str
    instrument: Instrument
    schedule: Schedule
    habits: Habits = field(default_factory=Habits)
    late: tuple[Late, ...] = ()
