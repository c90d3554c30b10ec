"""What is followed (`Signal`, `FollowPlan`) and what comes of it."""

from dataclasses import dataclass

import numpy as np

from kinetics.spectra.model import Float64
from kinetics.spectra.processing import Settings, Window


@dataclass(frozen=True, slots=True)
class Signal:
    """One signal in the spectrum.

    Attributes
    ----------
    species
        Whose signal it is; of the reference, its name.
    window
        Ascending limits in ppm.
    protons
        Number of protons behind it.
    couplings
        (n, J): n equivalent neighbours with the coupling constant J in Hz, for n + 1 lines each.
    method
        ``"sum"``, or ``"multiplet"``: the line shape is fitted, with overlapping neighbours.
    follow
        Whether the window follows the signal's own drift against the reference.
    exchanging
        Whether breadth and wandering are to be expected (OH, NH, water).
    t1_s
        Longitudinal relaxation time in s, None where it is not known.
    """

    species: str
    window: Window
    protons: float
    couplings: tuple[tuple[int, float], ...] = ()
    method: str = "sum"
    follow: bool = True
    exchanging: bool = False
    t1_s: float | None = None

    @property
    def centre(self) -> float:
        """Middle of the window, ppm."""
        return 0.5 * (self.window[0] + self.window[1])

    @property
    def width(self) -> float:
        """Width of the window, ppm."""
        return self.window[1] - self.window[0]


@dataclass(frozen=True, slots=True)
class FollowPlan:
    """All that `measure` needs to know of the sheet.

    Attributes
    ----------
    settings
        Processing.
    reference
        The quantitative reference; None with closure or without a reference.
    signals
        The followed signals.
    """

    settings: Settings
    reference: Signal | None
    signals: tuple[Signal, ...]

    @property
    def all(self) -> tuple[Signal, ...]:
        """The reference (where there is one) and the signals, in the order of `Integrals`."""
        return self.signals if self.reference is None else (self.reference, *self.signals)


@dataclass(frozen=True, slots=True, eq=False)
class Integrals:
    """Integrals of one spectrum, the reference first where there is one.

    This is what the record keeps; concentrations are derived from it.

    Attributes
    ----------
    values
        float64, shape (k,), intensity per scan times ppm, corrected for cut-off tails.
    covariance
        float64, shape (k, k), from the noise of the spectrum.
    offsets_ppm
        How far each window was moved from the sheet's, shape (k,).
    heights
        Highest point in each window over the noise of one point, shape (k,).
    """

    values: Float64
    covariance: Float64
    offsets_ppm: Float64
    heights: Float64


@dataclass(frozen=True, slots=True, eq=False)
class Concentrations:
    """Amounts of the species along a run, one row a spectrum.

    Attributes
    ----------
    species
        Names of the columns.
    values
        float64, shape (n, m), in `unit`.
    covariance
        float64, shape (n, m, m): random part. All species of a spectrum are divided by the same
        reference integral, hence the off-diagonal terms.
    systematic
        Relative standard uncertainty that all values share (concentration and purity of the
        reference): it scales amounts and second-order k, but no first-order k.
    unit
        ``"mol/L"``, ``"ratio"`` or ``"per scan"``.
    """

    species: tuple[str, ...]
    values: Float64
    covariance: Float64
    systematic: float
    unit: str

    @property
    def standard_uncertainty(self) -> Float64:
        """Random standard uncertainty of each value, shape (n, m)."""
        return np.asarray(np.sqrt(np.einsum("nii->ni", self.covariance)), np.float64)
