"""The phase of a group of lines from its far field, whatever the shape of the lines.

Outside a group of lines centred at x₀ the complex spectrum is a series
a/(x − x₀) + b/(x − x₀)² + c/(x − x₀)³ + …, as the field of a group of charges is far from it.
The first coefficient is the total area of the group times its phase, and nothing else: bad shim,
overlap and couplings only enter the higher ones. All groups and a smooth complex baseline are
fitted together by robust linear least squares to block means of the points outside the groups.
Where noise allows it this is far more accurate than any method that looks at the lines
themselves; how accurate, the fit says.
"""

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.linalg import solve_triangular

from kinetics.spectra.model import Axis, Complex64, Float64

Complex128 = npt.NDArray[np.complex128]

_BLOCK_HZ = 8.0  # wide enough to average the ripples of a FID cut at half a second
_REACH_PPM = 1.5
_TERMS = 3
_BASELINE_TERMS = 4
_STRONG = 0.03  # groups whose summed heights are below this part of the largest are left out
_MARGIN_WIDTHS = 10.0


@dataclass(frozen=True, slots=True)
class GroupPhases:
    """Phases of the strong groups of lines.

    Attributes
    ----------
    ppm
        Centre of each group, shape (g,).
    correction_deg
        Phase correction each asks for, degrees, shape (g,).
    sigma_deg
        Standard error of it, degrees, shape (g,).
    """

    ppm: Float64
    correction_deg: Float64
    sigma_deg: Float64


def _groups(
    lines_ppm: Float64, heights: Float64, margin: float
) -> list[tuple[float, float, float, float]]:
    """Join lines closer than two margins: (low, high, centre, summed height) of each group."""
    out: list[tuple[float, float, float, float]] = []
    order = np.argsort(lines_ppm)
    start = 0
    for stop in range(1, order.size + 1):
        last = stop == order.size
        if last or lines_ppm[order[stop]] - lines_ppm[order[stop - 1]] > 2.5 * margin:
            members = order[start:stop]
            weight = heights[members]
            centre = float((lines_ppm[members] * weight).sum() / weight.sum())
            low, high = float(lines_ppm[members].min()), float(lines_ppm[members].max())
            out.append((low - margin, high + margin, centre, float(weight.sum())))
            start = stop
    return out


def group_phases(
    values: Complex64,
    axis: Axis,
    lines_ppm: Float64,
    heights: Float64,
    width_ppm: float,
    frequency_mhz: float,
    exclude: tuple[tuple[float, float], ...] = (),
) -> GroupPhases:
    """Fit the far field of the strong groups of lines.

    Parameters
    ----------
    values, axis
        The complex spectrum, shape (n,).
    lines_ppm, heights
        Where lines stand and how high, shape (k,).
    width_ppm
        A typical full width at half height.
    frequency_mhz
        1H frequency.
    exclude
        ppm ranges to leave out.

    Returns
    -------
    GroupPhases
        Empty where the spectrum leaves no room between the groups.
    """
    nothing = GroupPhases(np.zeros(0), np.zeros(0), np.zeros(0))
    if lines_ppm.size == 0:
        return nothing
    groups = _groups(lines_ppm, heights, _MARGIN_WIDTHS * width_ppm)
    largest = max(group[3] for group in groups)
    strong = np.array(
        [
            group[2]
            for group in groups
            if group[3] >= _STRONG * largest
            and not any(low <= group[2] <= high for low, high in exclude)
        ],
        np.float64,
    )
    block = max(round(_BLOCK_HZ / frequency_mhz / abs(axis.step_ppm)), 1)
    count = axis.size // block
    means = values[: count * block].reshape(count, block).mean(axis=1).astype(np.complex128)
    ppm = np.asarray(
        axis.first_ppm + axis.step_ppm * (np.arange(count) * block + 0.5 * (block - 1)), np.float64
    )
    use = np.zeros(count, bool)
    for centre in strong:
        use |= np.abs(ppm - centre) < _REACH_PPM
    for low, high in [group[:2] for group in groups] + list(exclude):
        use &= (ppm < low) | (ppm > high)
    unknowns = _TERMS * strong.size + _BASELINE_TERMS
    if strong.size == 0 or use.sum() < 3 * unknowns:
        return nothing
    return _solved(ppm[use], means[use], strong, width_ppm * _MARGIN_WIDTHS)


def _solved(
    ppm: Float64,
    means: np.ndarray[tuple[int], np.dtype[np.complex128]],
    strong: Float64,
    unit: float,
) -> GroupPhases:
    inverse = unit / (ppm[:, None] - strong)
    columns = [inverse ** (k + 1) for k in range(_TERMS)]
    place = 2 * (ppm - ppm.min()) / max(float(np.ptp(ppm)), 1e-9) - 1
    columns.append(np.polynomial.legendre.legvander(place, _BASELINE_TERMS - 1))
    design = np.concatenate(columns, axis=1)
    scale = np.linalg.norm(design, axis=0)
    design = design / scale
    weight = np.ones(ppm.size)
    parts = np.stack([means.real, means.imag], axis=1)
    spread = 0.0
    triangle = np.eye(design.shape[1])
    for _ in range(8):  # robust: small lines nobody found stand in some of the blocks
        # The design is real: one real decomposition serves both parts.
        orthogonal, triangle = np.linalg.qr(design * weight[:, None])
        both = solve_triangular(
            triangle, orthogonal.T @ (parts * weight[:, None]), check_finite=False
        )
        rest = np.hypot(*(parts - design @ both).T)
        spread = 1.4826 * float(np.median(rest)) + 1e-30
        weight = 1.0 / np.sqrt(1.0 + (rest / (2.0 * spread)) ** 2)
    solution = both[:, 0] + 1j * both[:, 1]
    inverse_triangle = solve_triangular(triangle, np.eye(triangle.shape[0]), check_finite=False)
    # Rayleigh: the median of |z| is 1.177 sd of either part.
    variance = (spread / 1.4826 / 1.177) ** 2 * np.sum(inverse_triangle**2, axis=1)
    first = solution[: strong.size]
    # A·e^{iφ}/(i·2π·(ν − ν₀)) is the far field of a line, so i·a has its phase φ.
    correction = -np.rad2deg(np.angle(1j * first))
    sigma = np.rad2deg(np.sqrt(variance[: strong.size]) / np.maximum(np.abs(first), 1e-300))
    return GroupPhases(strong, correction, np.minimum(sigma, 180.0))
