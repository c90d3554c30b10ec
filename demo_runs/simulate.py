"""From signals and amounts to FIDs, with the truth of each kept beside it.

`simulate_fid` makes one FID from a list of (signal, amount); tests of phase, baseline, drift and
overlap use it directly. `simulate_run` plays a whole `Scenario`. Everything random comes from
seeded generators, one to a spectrum, so any subset of a run can be made again.

A FID of 32,768 points with 30 signals takes a few milliseconds: a damped wave at point
n = 256 q + r is the product of a factor for q and one for r, so the sum over all lines is one
matrix product, exact to rounding.
"""

from collections.abc import Collection, Iterator, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from math import exp

import numpy as np
import numpy.typing as npt

from demo_runs.instrument import Complex128, Instrument, Shim, delayed
from demo_runs.lines import Multiplet, stick_pattern
from demo_runs.scenario import Habits, Scenario, Species

Float64 = npt.NDArray[np.float64]

_BLOCK = 256
_PERFECT = Shim()


def simulate_fid(
    instrument: Instrument,
    lines: Sequence[tuple[Multiplet, float]],
    *,
    scans: int = 1,
    p0_deg: float = 0.0,
    p1_deg: float = 0.0,
    shift_ppm: float = 0.0,
    shims: Sequence[Shim] = (),
    gain: float = 1.0,
    rng: np.random.Generator | None = None,
) -> Complex128:
    """Return one FID.

    Parameters
    ----------
    instrument
        The receiver; its `noise_sd` counts only where `rng` is given.
    lines
        Pairs (signal, amount in mol/L). A solvent hump is a signal hundreds of Hz wide.
    scans
        Scans added up: the signal grows with their number, the noise with its root.
    p0_deg, p1_deg
        Phase error of a line at offset f: p0 + p1 f / (spectral width), degrees. Multiplying the
        spectrum by exp(−i ·) of that corrects it.
    shift_ppm
        Added to the position of every line.
    shims
        Field inhomogeneities, all in force together.
    gain
        Factor of the receiver on signal and noise.
    rng
        Source of the noise; None: no noise.

    Returns
    -------
    complex128, shape (instrument.points,). At time zero a signal contributes
    amount × protons × sensitivity × scans × gain (see `areas`).
    """
    dwell, points = instrument.dwell_s, instrument.points
    offset, amplitude, width = _line_table(instrument, lines, shift_ppm)
    phase = np.deg2rad(p0_deg + p1_deg * offset / instrument.spectral_width_hz)
    start = amplitude * scans * gain * np.exp(1j * phase)
    rate = (2j * np.pi * offset - np.pi * width) * dwell
    blocks = -(-points // _BLOCK)
    coarse = np.exp(np.multiply.outer(np.arange(blocks) * _BLOCK, rate)) * start
    fine = np.exp(np.multiply.outer(rate, np.arange(_BLOCK)))
    fid = (coarse @ fine).ravel()[:points]
    time = np.arange(points, dtype=np.float64) * dwell
    for shim in shims:
        if shim != _PERFECT:
            fid = fid * shim.envelope(time)
    fid = delayed(fid, instrument.group_delay)
    if rng is not None and instrument.noise_sd > 0:
        scale = instrument.noise_sd * gain * np.sqrt(scans)
        fid = fid + scale * rng.standard_normal((points, 2)).view(np.complex128)[:, 0]
    return np.asarray(fid, np.complex128)


def _line_table(
    instrument: Instrument, lines: Sequence[tuple[Multiplet, float]], shift_ppm: float
) -> tuple[Float64, Float64, Float64]:
    """Offsets in Hz, amplitudes of one scan and widths in Hz of all single lines."""
    offsets, amplitudes, widths = [np.zeros(0)], [np.zeros(0)], [np.zeros(0)]
    for signal, amount in lines:
        places, weights = stick_pattern(signal)
        offsets.append(places + instrument.offset_hz(signal.shift_ppm + shift_ppm))
        amplitudes.append(weights * (amount * signal.protons * instrument.sensitivity))
        widths.append(np.full(places.size, signal.width_hz))
    return np.concatenate(offsets), np.concatenate(amplitudes), np.concatenate(widths)


def area_hz(instrument: Instrument, amplitude: float) -> float:
    """Return the integral over frequency in Hz of a line of this amplitude at time zero.

    ``sum(real(fft)) · (width / size)`` of the correctly phased spectrum, the first point of the
    FID halved: amplitude × spectral width / 2, whatever the zero filling (derived).
    """
    return amplitude * instrument.spectral_width_hz / 2


@dataclass(frozen=True, slots=True)
class Truth:
    """What really was, for one spectrum.

    Attributes
    ----------
    amounts
        mol/L of every species, averaged exactly over the acquisition.
    amounts_mid
        mol/L of every species at the middle of the acquisition.
    time_s
        Middle of the acquisition, s after the start of the reaction.
    positions_ppm
        Where the centre of each signal stands, by label.
    areas
        Amplitude at time zero of each signal (amount × protons × sensitivity × scans × gain).
    p0_deg, p1_deg
        Phase error, as in `simulate_fid`.
    shift_ppm
        Common shift of all lines.
    gain
        Factor of the receiver.
    shims
        Field inhomogeneities in force.
    """

    amounts: dict[str, float]
    amounts_mid: dict[str, float]
    time_s: float
    positions_ppm: dict[str, float]
    areas: dict[str, float]
    p0_deg: float
    p1_deg: float
    shift_ppm: float
    gain: float
    shims: tuple[Shim, ...]


@dataclass(frozen=True, slots=True)
class SimulatedSpectrum:
    """One acquisition as it leaves the simulated instrument.

    Attributes
    ----------
    number
        Counted from 1.
    fid
        complex128, shape (points,).
    instrument
        The receiver it came from.
    scans, recycle_s
        Scans, and the time of one in s.
    start, end
        Start and end of the acquisition, timezone-aware, whole seconds.
    temperature_k
        Probe temperature as recorded, K.
    title, solvent, site
        As recorded.
    truth
        What really was.
    """

    number: int
    fid: Complex128
    instrument: Instrument
    scans: int
    recycle_s: float
    start: datetime
    end: datetime
    temperature_k: float
    title: str
    solvent: str
    site: str
    truth: Truth


def simulate_run(
    scenario: Scenario,
    *,
    seed: int,
    started: datetime,
    count: int | None = None,
    only: Collection[int] | None = None,
) -> Iterator[SimulatedSpectrum]:
    """Yield the spectra of a run in the order of time.

    Parameters
    ----------
    scenario
        What happens and how it is measured.
    seed
        Spectrum `number` depends on seed and number alone.
    started
        When the reaction began; timezone-aware, its fraction of a second is cut off, since the
        formats carry whole seconds.
    count
        Number of spectra; default: that of the schedule.
    only
        Numbers (from 1) to make; the others are skipped, without changing these.
    """
    if started.tzinfo is None:
        raise ValueError("started needs an offset, e.g. datetime(…, tzinfo=UTC)")
    began = started.replace(microsecond=0)
    schedule, habits = scenario.schedule, scenario.habits
    walk = np.random.default_rng([seed, 0])
    shift, gain = 0.0, 0.0
    for index in range(schedule.count if count is None else count):
        shift += habits.wander_ppm * float(walk.standard_normal())
        gain += habits.gain_wander * float(walk.standard_normal())
        if only is not None and index + 1 not in only:
            continue
        # Whole seconds, as recorded; the truth follows the recorded clock.
        start_s = float(round(schedule.start_s(index)))
        yield _one(scenario, seed, index + 1, began, start_s, shift, exp(gain))


def _one(
    scenario: Scenario,
    seed: int,
    number: int,
    began: datetime,
    start_s: float,
    wander_ppm: float,
    gain: float,
) -> SimulatedSpectrum:
    schedule, habits = scenario.schedule, scenario.habits
    rng = np.random.default_rng([seed, number])
    end_s = start_s + round(schedule.duration_s)
    middle = (start_s + end_s) / 2
    p0 = habits.p0_deg + _scatter(rng, habits.p0_sd_deg)
    temperature = habits.temperature_k + habits.temperature_sd_k * float(rng.standard_normal())
    common = wander_ppm + habits.drift_ppm_per_h * middle / 3600
    common += sum(ppm for when, ppm in habits.jumps if middle >= when)
    shims = _shims(habits, middle)
    mean, mid = _amounts(scenario, start_s, end_s), _amounts(scenario, middle, middle)
    lines, labels = _lines(scenario, mean, middle)
    instrument = scenario.instrument
    fid = simulate_fid(
        instrument,
        lines,
        scans=schedule.scans,
        p0_deg=p0,
        p1_deg=habits.p1_deg,
        shift_ppm=common,
        shims=shims,
        gain=gain,
        rng=rng,
    )
    scale = instrument.sensitivity * schedule.scans * gain
    pairs = list(zip(labels, lines, strict=True))
    truth = Truth(
        amounts=mean,
        amounts_mid=mid,
        time_s=middle,
        positions_ppm={label: signal.shift_ppm + common for label, (signal, _) in pairs},
        areas={label: amount * signal.protons * scale for label, (signal, amount) in pairs},
        p0_deg=p0,
        p1_deg=habits.p1_deg,
        shift_ppm=common,
        gain=gain,
        shims=shims,
    )
    start = (began + timedelta(seconds=start_s)).astimezone(UTC)
    return SimulatedSpectrum(
        number=number,
        fid=fid,
        instrument=instrument,
        scans=schedule.scans,
        recycle_s=schedule.recycle_s,
        start=start,
        end=start + timedelta(seconds=end_s - start_s),
        temperature_k=round(temperature, 3),
        title=f"{scenario.title}, spectrum {number}",
        solvent=scenario.solvent,
        site=scenario.site,
        truth=truth,
    )


def _scatter(rng: np.random.Generator, sd_deg: float) -> float:
    """A phase with this scatter; 360 and more means anywhere on the circle."""
    if sd_deg >= 360:
        return float(rng.uniform(-180, 180))
    return sd_deg * float(rng.standard_normal())


def _shims(habits: Habits, time_s: float) -> tuple[Shim, ...]:
    shims = [habits.shim]
    for episode in habits.episodes:
        place = (time_s - episode.from_s) / (episode.to_s - episode.from_s)
        if 0 < place < 1:
            share = float(np.sin(np.pi * place) ** 2)
            worst = episode.worst
            shims.append(
                Shim(
                    worst.lorentz_hz * share,
                    worst.gauss_hz * share,
                    worst.tail_share * share,
                    worst.tail_hz,
                )
            )
    return tuple(shims)


def _amounts(scenario: Scenario, start_s: float, end_s: float) -> dict[str, float]:
    """mol/L of everything, averaged from start to end (the value itself where they are equal)."""
    amounts = scenario.course.mean(start_s, end_s)
    for species, amount in scenario.standing:
        amounts[species.name] = amount
    for late in scenario.late:
        low, high = start_s - late.from_s, end_s - late.from_s
        amounts[late.species.name] = late.amount * _mean_rise(low, high, late.rise_s)
    return amounts


def _mean_rise(low_s: float, high_s: float, rise_s: float) -> float:
    """Mean of 1 − exp(−t/τ) (0 before t = 0) from low to high."""
    if high_s <= 0:
        return 0.0
    if high_s == low_s:
        return 1 - exp(-high_s / rise_s)
    begin = max(low_s, 0.0)
    risen = (high_s - begin) - rise_s * (exp(-begin / rise_s) - exp(-high_s / rise_s))
    return risen / (high_s - low_s)


def _lines(
    scenario: Scenario, amounts: dict[str, float], time_s: float
) -> tuple[list[tuple[Multiplet, float]], list[str]]:
    """All signals where they stand at this time, with their amounts and labels."""
    everything: list[Species] = list(scenario.species)
    everything += [species for species, _ in scenario.standing]
    everything += [late.species for late in scenario.late]
    lines, labels = [], []
    for species in everything:
        for signal in species.signals:
            slid = signal.shift_ppm + signal.drift_ppm_per_h * time_s / 3600
            lines.append((signal.at(slid), amounts[species.name]))
            labels.append(signal.label or f"{species.name} {signal.shift_ppm:g}")
    return lines, labels
