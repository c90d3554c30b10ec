"""The phase of a spectrum against the lines of its own run.

The shape of a run's lines is known from its first spectra, dispersion included. Laid over each
group of lines of a later spectrum and fitted with a free complex amplitude, that shape gives the
phase as well as noise allows at all (for one line the standard error in radians is that of its
relative amplitude), with the small shifts and widths of one spectrum and the tails of its
neighbours taken up by terms of their own.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt
import scipy.fft
from scipy.interpolate import CubicSpline

from kinetics.spectra.baseline import Ranges
from kinetics.spectra.model import Axis, Complex64, Float64
from kinetics.spectra.phase import LinePhases

Complex128 = npt.NDArray[np.complex128]

_MOST_GROUPS = 8
_WIDEST_PPM = 0.8  # wider is a hump or a solvent, whose shape need not stay
_SNR = 20.0  # a group must stand so far out of the noise of the mean spectrum
_FARTHEST_PPM = 0.03  # how far a group may stand from where the alignment puts it
_FLOOR_DEG = 0.2
_MISFIT = 0.5  # a group of which the shape leaves more than this part is another one
# Phase error in radians that a line broader by its own width may carry; 0.25 is what shims with
# a third of their width on one side gave in simulation.
_LOPSIDED = 0.25
_ROUNDS = 3
_TAPS = np.arange(-2, 4)  # neighbours that a value between points is made of


@dataclass(frozen=True, eq=False)
class GroupShapes:
    """Complex shapes of the groups of lines of a run, phased.

    Attributes
    ----------
    first_ppm
        Shift (after referencing) of the first point of each group, one a group.
    step_ppm
        Point distance (negative).
    shapes
        complex64, one a group, one point a `step_ppm`.
    """

    first_ppm: tuple[float, ...]
    step_ppm: float
    shapes: tuple[Complex64, ...]

    @cached_property
    def solvers(self) -> "tuple[_Solver, ...]":
        """What is needed to fit each shape; made once, since it is the same for all spectra."""
        return tuple(_solver(shape.astype(np.complex128)) for shape in self.shapes)


@dataclass(frozen=True, slots=True, eq=False)
class _Solver:
    """Least squares of one shape, its derivative and a straight line, columns of norm one."""

    shape: Complex128
    design: Complex128
    pseudo: Complex128
    norms: Float64
    gain: float


def _solver(shape: Complex128) -> _Solver:
    x = np.linspace(-1.0, 1.0, shape.size)
    design = np.stack([shape, np.gradient(shape), np.ones_like(shape), x.astype(complex)], axis=1)
    norms = np.linalg.norm(design, axis=0)
    design = design / norms
    pseudo = np.linalg.pinv(design)
    return _Solver(shape, design, pseudo, norms, float(np.sum(np.abs(pseudo[0]) ** 2)))


NO_GROUPS = GroupShapes((), -1.0, ())


def group_shapes(
    spectra: Sequence[tuple[Complex64, Axis]], occupied: Ranges, exclude: Ranges, noise: float
) -> GroupShapes:
    """Average the groups of lines of phased complex spectra.

    Parameters
    ----------
    spectra
        Phased complex values, shape (n,), and their referenced axes; the first gives the grid.
    occupied
        ppm ranges in which lines stand.
    exclude
        ppm ranges never used.
    noise
        Noise sd of one point of one spectrum.
    """
    grid = spectra[0][1]
    found: list[tuple[float, float, Complex64]] = []
    for low, high in occupied:
        if high - low > _WIDEST_PPM or any(low < b and a < high for a, b in exclude):
            continue
        start, stop = (round(v) for v in grid.span((low, high)))
        if start < 4 or stop > grid.size - 4 or stop - start < 16:
            continue
        ppm = np.asarray(grid.first_ppm + grid.step_ppm * np.arange(start, stop), np.float64)
        mean = np.mean([_at(values, axis, ppm) for values, axis in spectra], axis=0)
        height = float(np.abs(mean - np.median(mean.real)).max())
        if height > _SNR * noise / np.sqrt(len(spectra)):
            found.append((height, float(ppm[0]), mean.astype(np.complex64)))
    found.sort(key=lambda group: -group[0])
    kept = found[:_MOST_GROUPS]
    return GroupShapes(
        tuple(first for _, first, _ in kept), grid.step_ppm, tuple(shape for _, _, shape in kept)
    )


def _at(values: Complex64, axis: Axis, ppm: Float64) -> Complex128:
    """Complex spectrum at evenly spaced shifts, between points by Lagrange's polynomial.

    Where the spacing is that of the axis all points lie equally far from their neighbours, so that
    one set of weights serves them all; a run whose axis has changed takes a spline.
    """
    place = (ppm - axis.first_ppm) / axis.step_ppm
    start = int(np.floor(place[0]))
    first, stop = start + int(_TAPS[0]), start + place.size + int(_TAPS[-1])
    inside = first >= 0 and stop <= values.size
    if not inside or abs(place[-1] - place[0] - (place.size - 1)) > 0.01:
        spline = CubicSpline(np.arange(values.size), values)
        return np.asarray(spline(np.clip(place, 0, values.size - 1)))
    distance = place[0] - start - _TAPS
    others = ~np.eye(_TAPS.size, dtype=bool)
    gaps = (_TAPS[:, None] - _TAPS[None, :]).astype(np.float64)
    weights = np.array(
        [np.prod(distance[row] / gaps[k, row]) for k, row in enumerate(others)], np.float64
    )
    return np.convolve(values[first:stop], weights[::-1], "valid").astype(np.complex128)


def matched_phases(
    values: Complex64, axis: Axis, shapes: GroupShapes, p0_deg: float, p1_deg: float
) -> LinePhases:
    """Return the phase that each group asks for.

    Parameters
    ----------
    values
        Complex spectrum after phase correction with `p0_deg` and `p1_deg`, shape (n,).
    axis
        Its axis, referenced.
    shapes
        From `group_shapes`.
    p0_deg, p1_deg
        The correction that was applied; answers are corrections of the spectrum before it.
    """
    found: list[tuple[float, float, float]] = []
    for first, solver in zip(shapes.first_ppm, shapes.solvers, strict=True):
        shape = solver.shape
        ppm = np.asarray(first + shapes.step_ppm * np.arange(shape.size), np.float64)
        place = axis.position(float(ppm[shape.size // 2]))
        if not shape.size < place < axis.size - shape.size:
            continue
        answer = _matched(values, axis, solver, ppm)
        if answer is not None:
            where = (place + 0.5) / axis.size - 0.5
            correction = p0_deg + p1_deg * where - answer[0]
            found.append((where, correction, float(np.hypot(answer[1], _FLOOR_DEG))))
    numbers = np.array(found, np.float64).reshape(-1, 3)
    return LinePhases(numbers[:, 0], numbers[:, 1], numbers[:, 2])


def _matched(
    values: Complex64, axis: Axis, solver: _Solver, ppm: Float64
) -> tuple[float, float] | None:
    """Phase (degrees) of the spectrum against one shape, and its standard error."""
    shape, pseudo, scale = solver.shape, solver.pseudo, solver.norms
    shift = _start(values, axis, shape, ppm)
    for round_ in range(_ROUNDS):
        seen = _at(values, axis, ppm + shift)
        solution = pseudo @ seen
        if round_ < _ROUNDS - 1 and abs(solution[0]) > 0:
            points = float((solution[1] / scale[1] / (solution[0] / scale[0])).real)
            shift -= float(np.clip(points, -3.0, 3.0)) * axis.step_ppm
            if abs(shift) > _FARTHEST_PPM:
                return None
    rest = seen - solver.design @ solution
    left = float(np.sqrt(np.mean(np.abs(rest) ** 2)))
    line = float(np.abs(solution[0]))
    if left * np.sqrt(shape.size) > _MISFIT * line or line == 0.0:
        return None
    # Neighbouring points are alike: about as many are independent as a line has points apart.
    alike = max(_alike(rest), 1.0)
    noise = np.sqrt(0.5 * solver.gain * alike) * left / line
    # A worse shim is seldom symmetric, and lop-sided lines look like dispersion. The imaginary
    # part of the derivative's share is how much broader (points) the lines have become.
    broader = abs(float((solution[1] / solution[0]).imag)) * _LOPSIDED
    sigma = np.hypot(noise, broader)
    return float(np.rad2deg(np.angle(solution[0]))), float(np.rad2deg(sigma))


def _start(values: Complex64, axis: Axis, shape: Complex128, ppm: Float64) -> float:
    """Shift at which the magnitudes agree best, to a point."""
    reach = max(int(_FARTHEST_PPM / abs(axis.step_ppm)), 1)
    middle = round(axis.position(float(ppm[0])))
    start = middle - reach
    part = np.abs(values[max(start, 0) : middle + shape.size + reach])
    if start < 0 or part.size < shape.size + 2 * reach:
        return 0.0
    magnitude = np.abs(shape)
    score = np.correlate(part - part.mean(), magnitude - magnitude.mean(), "valid")
    distance = np.arange(score.size) - reach
    likely = score * (1 - 0.05 * np.abs(distance) / reach)
    return float(distance[int(np.argmax(likely))]) * axis.step_ppm


def _alike(rest: Complex128) -> float:
    """Sum of the autocorrelation of what is left, over the lags at which it is positive."""
    total = float(np.sum(np.abs(rest) ** 2))
    if total == 0.0:
        return 1.0
    out = 1.0
    # All lags at once: the autocorrelation is the transform of the power spectrum.
    size = scipy.fft.next_fast_len(rest.size + 32)
    spectrum = np.asarray(scipy.fft.fft(rest, size))
    lags = np.asarray(scipy.fft.ifft(np.abs(spectrum) ** 2))[: min(rest.size // 4, 32)].real / total
    for part in lags[1:]:
        if part <= 0.05:
            break
        out += 2.0 * float(part)
    return out
