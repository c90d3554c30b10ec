"""The n+1 pattern of a signal and the lines it is made of.

A proton with n equivalent neighbours gives n + 1 lines with binomial intensities (common
practice); several sets of neighbours split it one after the other.
"""

from collections.abc import Iterable
from math import comb

import numpy as np
from scipy.optimize import least_squares
from scipy.special import voigt_profile

from kinetics.spectra.model import Axis, Float32, Float64

# Of a decently shimmed magnet with 0.3 Hz of broadening (common practice), and how they differ.
USUAL_SHARE, SHARE_SD = 0.85, 0.15
_FITTED_WIDTHS = 8.0


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


# Beyond so many widths a Voigt profile is its Lorentzian tail to a few parts in a thousand of it.
_CORE_WIDTHS = 25.0


def gaussian_share(lorentz_share: float) -> float:
    """Return the Gaussian width of a Voigt line over its width, given the Lorentzian one's share.

    From f = 0.5346 l + √(0.2166 l² + g²), good to 0.02 % (Olivero & Longbothum, J. Quant.
    Spectrosc. Radiat. Transfer 17 (1977) 233; memory).
    """
    rest = (1.0 - 0.5346 * lorentz_share) ** 2 - 0.2166 * lorentz_share**2
    return float(np.sqrt(max(rest, 0.0)))


def lorentz_share_at(fwhm: float, gauss_fwhm: float) -> float:
    """Return the Lorentzian share of a line of another width that has a given Gaussian width.

    Inverse of `gaussian_share`. A line no wider than its Gaussian part has none.
    """
    if gauss_fwhm >= fwhm:
        return 0.0
    # (w − 0.5346 l)² = 0.2166 l² + g², of which the smaller root is the line's.
    a, b = 0.5346**2 - 0.2166, -2 * 0.5346 * fwhm
    c = fwhm**2 - gauss_fwhm**2
    return float((-b - np.sqrt(b**2 - 4 * a * c)) / (2 * a) / fwhm)


def voigt_lines(
    axis: Axis, centres_ppm: Float64, shares: Float64, fwhm_ppm: float, lorentz_share: float = 1.0
) -> Float64:
    """Return lines of total area `shares.sum()` (intensity × ppm), shape (n,).

    Parameters
    ----------
    axis
        Where to.
    centres_ppm, shares
        Shape (k,).
    fwhm_ppm
        Width at half height.
    lorentz_share
        Width of the Lorentzian part over `fwhm_ppm`, 0 … 1: 1 for Lorentzian lines. Shim makes
        the core of a line wider than its far tails tell.
    """
    half = 0.5 * fwhm_ppm * lorentz_share
    sigma = fwhm_ppm * gaussian_share(lorentz_share) / np.sqrt(8 * np.log(2))
    ppm = axis.ppm()
    out = np.zeros(axis.size)
    for centre, share in zip(centres_ppm, shares, strict=True):
        line = half / np.pi / ((ppm - centre) ** 2 + half**2 + 1e-30)
        reach = _CORE_WIDTHS * fwhm_ppm
        start, stop = (int(v) for v in axis.span((centre - reach, centre + reach)))
        start, stop = max(start, 0), min(stop + 1, axis.size)
        if stop > start and sigma > 0:
            line[start:stop] = voigt_profile(ppm[start:stop] - centre, sigma, half)
        out += share * line
    return out


def fitted_shape(
    corrected: Float32,
    axis: Axis,
    centres_ppm: Float64,
    shares: Float64,
    start: tuple[float, float],
    sd: float,
    spread: tuple[float, float],
) -> tuple[float, float]:
    """Return width (ppm) and Lorentzian share of a signal's lines, by least squares.

    Parameters
    ----------
    corrected, axis
        A spectrum of good S/N without baseline.
    centres_ppm, shares
        The signal's lines, shape (k,).
    start
        Expected width (ppm) and share; the answer leans to them where noise hides the tails.
    sd
        Noise of one point.
    spread
        How far lines usually are from that: relative standard deviation of the width, absolute
        one of the share.
    """
    width, share = start
    reach = _FITTED_WIDTHS * width
    begin, end = axis.span((float(centres_ppm.min()) - reach, float(centres_ppm.max()) + reach))
    first, last = max(int(begin), 0), min(int(end) + 1, axis.size)
    part = corrected[first:last].astype(np.float64)
    if part.size < 12 or sd <= 0 or part.max() < 10.0 * sd:
        return start
    piece = Axis(axis.first_ppm + axis.step_ppm * first, axis.step_ppm, part.size)
    area = float(part.sum() * abs(axis.step_ppm))

    def misfit(x: Float64) -> Float64:
        scale, moved, log_width, lorentz = x
        lines = voigt_lines(
            piece, centres_ppm + moved * width, shares, width * np.exp(log_width), lorentz
        )
        usual = (log_width / spread[0], (lorentz - share) / spread[1])
        return np.append((scale * area * lines - part) / sd, usual)

    found = least_squares(
        misfit,
        [1.0, 0.0, 0.0, share],
        bounds=([0.3, -0.5, -0.5, 0.05], [3.0, 0.5, 0.5, 1.0]),
        x_scale=[0.1, 0.05, 0.05, 0.1],
    )
    return width * float(np.exp(found.x[2])), float(found.x[3])
