"""Signals as sticks: first-order multiplets, 13C satellites, a strongly coupled pair.

Nothing here knows of time, amounts or noise; `demo_runs.simulate` turns sticks into a FID.
"""

from dataclasses import dataclass, replace
from math import comb

import numpy as np
import numpy.typing as npt

Float64 = npt.NDArray[np.float64]

# Share of the carbon that is 13C, so of a C-H signal that stands in its two satellites together
# (common practice: "1.1 %").
CARBON_13_SHARE = 0.011


@dataclass(frozen=True, slots=True)
class Multiplet:
    """One signal: a first-order multiplet of Lorentzian lines.

    Attributes
    ----------
    shift_ppm
        Position of the centre in ppm.
    protons
        Number of protons behind it.
    couplings
        Pairs (n, J): n equivalent neighbours with the coupling constant J in Hz. Several pairs
        make a doublet of doublets and so on.
    width_hz
        Full width at half height of each line in Hz, shimming not included.
    drift_ppm_per_h
        How fast this signal alone slides, ppm per hour from the start of the reaction (OH, water).
    satellite_hz
        One-bond coupling to 13C in Hz; 0 leaves the satellites out. The main line loses what
        they take.
    sticks
        Pairs (offset in Hz from the centre, weight) that replace `couplings` where a pattern is
        not first order; the weights sum to 1.
    label
        Name under which the truth of a spectrum lists it.
    """

    shift_ppm: float
    protons: float
    couplings: tuple[tuple[int, float], ...] = ()
    width_hz: float = 1.0
    drift_ppm_per_h: float = 0.0
    satellite_hz: float = 0.0
    sticks: tuple[tuple[float, float], ...] = ()
    label: str = ""

    def at(self, shift_ppm: float) -> "Multiplet":
        """Return the same signal centred elsewhere."""
        return replace(self, shift_ppm=shift_ppm)


def stick_pattern(multiplet: Multiplet) -> tuple[Float64, Float64]:
    """Return the lines of a multiplet.

    n equivalent neighbours give n + 1 lines with binomial intensities (common practice); each
    further group splits every line again.

    Returns
    -------
    offsets_hz, weights
        Shape (lines,) each; positive offsets lie at higher ppm; the weights sum to 1.
    """
    if multiplet.sticks:
        table = np.asarray(multiplet.sticks, np.float64)
        offsets, weights = table[:, 0], table[:, 1]
    else:
        offsets, weights = np.zeros(1), np.ones(1)
        for neighbours, hz in multiplet.couplings:
            places = (np.arange(neighbours + 1) - neighbours / 2) * hz
            shares = np.array([comb(neighbours, i) for i in range(neighbours + 1)], np.float64)
            offsets = np.add.outer(offsets, places).ravel()
            weights = np.multiply.outer(weights, shares / 2**neighbours).ravel()
    if multiplet.satellite_hz > 0:
        half = multiplet.satellite_hz / 2
        side = CARBON_13_SHARE / 2
        offsets = np.concatenate([offsets, offsets - half, offsets + half])
        weights = np.concatenate([weights * (1 - 2 * side), weights * side, weights * side])
    return offsets, weights


def strongly_coupled_pair(
    first: Multiplet, second: Multiplet, j_hz: float, frequency_mhz: float
) -> tuple[Multiplet, Multiplet]:
    """Return two signals of one proton each that couple with one another, exactly.

    The closed form of the two-spin system: with D the distance of the shifts in Hz and
    C = √(D² + J²), the four lines stand at ±(C ± J)/2 from the middle, and each half of the
    pattern has an inner line of weight (1 + J/C)/2 and an outer one of (1 − J/C)/2 (derived;
    textbook result for the AB system). Far apart it becomes two doublets.

    Parameters
    ----------
    first, second
        The two signals; their `couplings` are replaced, everything else is kept.
    j_hz
        Coupling constant in Hz, positive.
    frequency_mhz
        1H frequency of the spectrometer in MHz, since the pattern depends on it.
    """
    distance = abs(first.shift_ppm - second.shift_ppm) * frequency_mhz
    middle_ppm = (first.shift_ppm + second.shift_ppm) / 2
    spread = float(np.hypot(distance, j_hz))
    inner, outer = (spread - j_hz) / 2, (spread + j_hz) / 2
    strong = (1 + j_hz / spread) / 2

    def half(signal: Multiplet) -> Multiplet:
        side = 1.0 if signal.shift_ppm >= middle_ppm else -1.0
        own = (signal.shift_ppm - middle_ppm) * frequency_mhz
        lines = ((side * inner - own, strong), (side * outer - own, 1 - strong))
        return replace(signal, couplings=(), sticks=lines)

    return half(first), half(second)
