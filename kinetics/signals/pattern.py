"""The n+1 pattern of a signal and the lines it is made of.

A proton with n equivalent neighbours gives n + 1 lines with binomial intensities (common
practice); several sets of neighbours split it one after the other.
"""

from collections.abc import Iterable
from math import comb

import numpy as np

from kinetics.spectra.model import Axis, Float64


def sticks(couplings: Iterable[tuple[int, float]]) -> tuple[Float64, Float64]:
    """Return the line offsets (Hz, ascending) and their shares (sum 1) of a first-order pattern.

    Parameters
    ----------
    couplings
        (n, J in Hz) for each set of n equivalent neighbours; none for a singlet.

    Examples
    --------
    >>> sticks([(2, 7.0)])
    (array([-7.,  0.,  7.]), array([0.25, 0.5 , 0.25]))
    """
    offsets, shares = np.zeros(1), np.ones(1)
    for neighbours, hz in couplings:
        steps = hz * (np.arange(neighbours + 1) - neighbours / 2)
        weights = np.array([comb(neighbours, k) for k in range(neighbours + 1)]) / 2.0**neighbours
        offsets = (offsets[:, None] + steps).ravel()
        shares = (shares[:, None] * weights).ravel()
    order = np.argsort(offsets, kind="stable")
    return offsets[order], shares[order]


def lorentzian_lines(axis: Axis, centres_ppm: Float64, shares: Float64, fwhm_ppm: float) -> Float64:
    """Return Lorentzian lines of total area `shares.sum()` (intensity × ppm), shape (n,)."""
    ppm = axis.ppm()
    half = 0.5 * fwhm_ppm
    out = np.zeros(axis.size)
    for centre, share in zip(centres_ppm, shares, strict=True):
        out += share * half / np.pi / ((ppm - centre) ** 2 + half**2)
    return out
