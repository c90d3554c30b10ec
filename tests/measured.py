"""Simulated acquisitions in memory, as a reader would return them."""

from dataclasses import replace

import numpy as np

from demo_runs import dunmarolide
from demo_runs.instrument import Instrument, Shim
from demo_runs.lines import Multiplet
from demo_runs.simulate import SimulatedSpectrum, simulate_fid
from kinetics.signals.model import FollowPlan, Signal
from kinetics.spectra.model import Raw, Stamp
from kinetics.spectra.processing import Settings

INSTRUMENT = dunmarolide.INSTRUMENT


def raw_of(spectrum: SimulatedSpectrum) -> Raw:
    """A simulated spectrum of a run."""
    made = raw(spectrum.fid, spectrum.instrument, scans=spectrum.scans, name=str(spectrum.number))
    return replace(made, stamp=Stamp(spectrum.start, spectrum.end, None, None, ""))


def raw(fid: object, instrument: Instrument, *, scans: int = 1, name: str = "1") -> Raw:
    """A FID."""
    return Raw(
        data=np.asarray(fid, np.complex64),
        domain="time",
        frequency_mhz=instrument.frequency_mhz,
        spectral_width_hz=instrument.spectral_width_hz,
        carrier_ppm=instrument.carrier_ppm,
        axis=None,
        group_delay=instrument.group_delay,
        recorded_phase=None,
        scans=scans,
        recycle_s=None,
        flip_angle_deg=None,
        temperature_k=None,
        nucleus="1H",
        solvent="",
        title="",
        stamp=Stamp(None, None, None, None, ""),
        source=name,
        sha256=name,
        format="simulated",
    )


def acquire(
    lines: list[tuple[Multiplet, float]],
    *,
    snr: float | None = 300.0,
    seed: int = 0,
    p0: float = 0.0,
    p1: float = 0.0,
    shift: float = 0.0,
    shim: Shim | None = None,
    name: str = "1",
    instrument: Instrument = INSTRUMENT,
) -> Raw:
    """One FID of some lines; `snr` is that of the first line's height, roughly."""
    noise = 0.0
    if snr is not None:
        signal, amount = lines[0]
        clean = simulate_fid(instrument, [(signal, amount)], shims=(shim,) if shim else ())
        height = float(np.abs(np.fft.fft(clean * np.hanning(2 * clean.size)[clean.size :])).max())
        noise = height / snr / np.sqrt(clean.size / 3)
    noisy = replace(instrument, noise_sd=noise)
    fid = simulate_fid(
        noisy,
        lines,
        p0_deg=p0,
        p1_deg=p1,
        shift_ppm=shift,
        shims=(shim,) if shim else (),
        rng=np.random.default_rng(seed),
    )
    return raw(fid, noisy, name=name)


def plan_of(
    reference: tuple[float, float], *windows: tuple[float, float], protons: float = 1.0
) -> FollowPlan:
    """A plan with a reference and one species a window."""
    signals = tuple(Signal(f"s{i}", window, protons) for i, window in enumerate(windows))
    settings = Settings(shift_window=reference, protected=(reference, *windows))
    return FollowPlan(settings, Signal("reference", reference, 1.0), signals)
