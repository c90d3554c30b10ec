"""What a run's first spectra teach: made from the first one, and once more from the first twenty.

`calibrate` is a pure function of raw spectra and the plan. Everything that `measure` takes for
granted about a run stands in the `Calibration` it returns.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.interpolate import CubicSpline

from kinetics.errors import UnreadableError
from kinetics.signals.joint import line_model
from kinetics.signals.model import FollowPlan, Signal
from kinetics.signals.multiplet_model import LineModel
from kinetics.signals.pattern import SHARE_SD, USUAL_SHARE, fitted_shape, sticks
from kinetics.signals.response import Response, make_response
from kinetics.signals.undeclared import undeclared
from kinetics.spectra.align import Template, displacement, line_near, make_template
from kinetics.spectra.baseline import merged
from kinetics.spectra.coloured import noise_correlation
from kinetics.spectra.fourier import rotated, transform
from kinetics.spectra.lines import (
    LinePosition,
    find_lines,
    noise_sd,
    occupied_ranges,
    width_at_half,
)
from kinetics.spectra.matched import NO_GROUPS, GroupShapes, group_shapes
from kinetics.spectra.model import Axis, Float32, Float64, Raw
from kinetics.spectra.phase import LinePhases, common_slope, line_phases
from kinetics.spectra.processing import (
    Phased,
    Settings,
    Shared,
    Window,
    baseline_operator_for,
    corrected_baseline,
    phased,
)

# Beyond this the shift reference is sought outside its window too, in ppm.
_SEARCH_BEYOND = 0.3
_SMALLEST_SNR = 5.0
# Shapes for following take in a quarter of the window; a signal must stand this far out of the
# noise of the mean spectrum to have a shape of its own.
SHAPE_SNR = 10.0
# The template for alignment spans the declared windows and this much on either side, in ppm.
_TEMPLATE_MARGIN = 0.75
# How far the width of a line (relative) and its Lorentzian share are from the reference's, usually.
_USUAL_SPREAD = (0.1, 0.1)


@dataclass(frozen=True, slots=True, eq=False)
class Calibration:
    """What the spectra of a run share.

    Attributes
    ----------
    version
        1 for that from the first spectrum, 2 for that from the first twenty.
    learned_from
        SHA-256 of each raw spectrum it was learned from.
    shared
        First-order phase, alignment template, occupied ranges, shift of the reference.
    first_shift_ppm
        Shift correction of the first spectrum.
    line_width_hz
        Full width at half height of the reference line in the mean spectrum.
    shapes
        Mean shape of each signal in its window, float32, empty where it could not be seen.
    shape_step_ppm
        Point distance of `shapes` (negative).
    response
        How sums over windows answer to line areas, and the noise of the sums.
    others
        Windows of strong lines nobody declared; they stand behind the plan's in `response`.
    model
        What joint fits of overlapping signals start from; None where the plan asks for none.
    """

    version: int
    learned_from: tuple[str, ...]
    shared: Shared
    first_shift_ppm: float
    line_width_hz: float
    shapes: tuple[Float32, ...]
    shape_step_ppm: float
    response: Response
    others: tuple[Signal, ...] = ()
    model: LineModel | None = None


def calibrate(raws: Sequence[Raw], plan: FollowPlan, version: int = 1) -> Calibration:
    """Learn from the first spectra of a run.

    Parameters
    ----------
    raws
        One or more spectra, in order of time.
    plan
        What is followed.
    version
        Number the calibration shall carry.

    Raises
    ------
    UnreadableError
        If the first spectrum cannot be processed at all.
    """
    settings = plan.settings
    p1 = _first_order_phase(raws, settings)
    parts = [phased(raw, settings, None if np.isnan(p1) else p1) for raw in raws]
    first = parts[0]
    axis, shift = _first_axis(first, settings)
    template = make_template(first.values, axis, _template_range(plan, axis), settings.exclude)
    axes = _aligned(parts, axis, template, settings, shift)
    mean = _mean_spectrum(parts, axes)
    frequency = raws[0].frequency_mhz or float("nan")
    corrected, occupied, sd = _settled_baseline(mean, axis, settings)
    width_ppm = _line_width(corrected, axis, shift, plan, sd)
    shared = Shared(p1, template, occupied, shift, _groups(parts, axes, occupied, settings))
    shapes = tuple(_shape(corrected, axis, signal, sd) for signal in plan.all)
    lines = [_lines_of(corrected, axis, signal, sd, frequency) for signal in plan.all]
    others = undeclared(corrected, axis, plan, sd, width_ppm)
    lorentz_share, own_widths = _line_shapes(plan, corrected, axis, lines, width_ppm, sd)
    correlation = _noise_colour(parts)
    response = make_response(
        [*plan.all, *(other.signal for other in others)],
        plan.reference,
        axis,
        corrected,
        [*lines, *((other.centres_ppm, other.shares) for other in others)],
        width_ppm,
        [*own_widths, *(other.width_ppm for other in others)],
        lorentz_share,
        None if settings.baseline == "none" else baseline_operator_for(axis, settings, occupied),
        correlation,
        sd,
    )
    return Calibration(
        version=version,
        learned_from=tuple(raw.sha256 for raw in raws),
        shared=shared,
        first_shift_ppm=axis.first_ppm - first.axis.first_ppm,
        line_width_hz=width_ppm * frequency,
        shapes=shapes,
        shape_step_ppm=axis.step_ppm,
        response=response,
        others=tuple(other.signal for other in others),
        model=line_model(
            plan,
            corrected,
            axis,
            (width_ppm if plan.reference is None else own_widths[0], lorentz_share),
            sd,
            correlation,
            frequency,
        ),
    )


def _noise_colour(parts: Sequence[Phased]) -> Float64:
    known = parts[0].noise_correlation
    if known is not None:
        return known
    size = parts[0].values.size
    return noise_correlation([part.values for part in parts if part.values.size == size])


def _first_order_phase(raws: Sequence[Raw], settings: Settings) -> float:
    """First-order phase that all spectra share; nan where none is needed."""
    if settings.phase != "automatic":
        return float("nan")
    seen: list[LinePhases] = []
    for raw in raws:
        if raw.domain != "time" or raw.frequency_mhz is None:
            continue
        spectrum = transform(
            raw, broadening_hz=settings.broadening_hz, zero_fill=settings.zero_fill
        )
        seen.append(line_phases(raw, spectrum, settings.exclude))
    slope = common_slope(seen)
    return float("nan") if slope is None else slope


def _first_axis(part: Phased, settings: Settings) -> tuple[Axis, float]:
    """Axis of the first spectrum after referencing, and where its shift reference then stands."""
    if settings.shift_window is None:
        return part.axis, float("nan")
    low, high = settings.shift_window
    middle, half = 0.5 * (low + high), 0.5 * (high - low)
    found, height = line_near(part.values, part.axis, middle, half)
    if height < _SMALLEST_SNR * noise_sd(part.values):
        found, height = line_near(part.values, part.axis, middle, half + _SEARCH_BEYOND)
        if height < _SMALLEST_SNR * noise_sd(part.values):
            raise UnreadableError(
                f"no line stands out of the noise near the shift reference at {middle:.3f} ppm"
            )
    target = found if settings.shift_target is None else settings.shift_target
    return part.axis.shifted(target - found), target


def _template_range(plan: FollowPlan, axis: Axis) -> Window:
    ends = [limit for signal in plan.all for limit in signal.window]
    if plan.settings.shift_window is not None:
        ends.extend(plan.settings.shift_window)
    last = axis.first_ppm + axis.step_ppm * (axis.size - 1)
    low = max(min(ends) - _TEMPLATE_MARGIN, last)
    high = min(max(ends) + _TEMPLATE_MARGIN, axis.first_ppm)
    return (low, high) if high > low + 0.05 else (last, axis.first_ppm)


def _aligned(
    parts: Sequence[Phased], axis: Axis, template: Template, settings: Settings, shift: float
) -> list[Axis]:
    """Referenced axes of the spectra, each laid over the first."""
    axes = [axis]
    for part in parts[1:]:
        moved = part.axis.shifted(-displacement(part.values, part.axis, template, settings.exclude))
        if not np.isnan(shift):
            moved = moved.shifted(shift - line_near(part.values, moved, shift)[0])
        axes.append(moved)
    return axes


def _mean_spectrum(parts: Sequence[Phased], axes: Sequence[Axis]) -> Float32:
    """Mean of the spectra on the axis of the first, shape (n,)."""
    total = parts[0].values.astype(np.float64)
    ppm = axes[0].ppm()[::-1]
    for part, axis in zip(parts[1:], axes[1:], strict=True):
        # Linear interpolation would widen narrow lines.
        placed = CubicSpline(axis.ppm()[::-1], part.values[::-1].astype(np.float64))
        inside = (ppm >= axis.ppm()[-1]) & (ppm <= axis.first_ppm)
        total += np.where(inside, placed(ppm), 0.0)[::-1]
    return np.asarray(total / len(parts), np.float32)


def _groups(
    parts: Sequence[Phased], axes: Sequence[Axis], occupied: tuple[Window, ...], settings: Settings
) -> GroupShapes:
    """Complex shapes of the lines, for the phase of later spectra."""
    spectra = [
        (rotated(part.source[0].values, part.phase.p0_deg, part.phase.p1_deg), axis)
        for part, axis in zip(parts, axes, strict=True)
        if part.source is not None
    ]
    if not spectra:
        return NO_GROUPS
    return group_shapes(spectra, occupied, settings.exclude, noise_sd(parts[0].values))


def _settled_baseline(
    mean: Float32, axis: Axis, settings: Settings
) -> tuple[Float32, tuple[Window, ...], float]:
    """Find where lines stand and correct the baseline, twice: each needs the other."""
    occupied: tuple[Window, ...] = ()
    corrected, sd = mean, 0.0
    for _ in range(3):
        corrected, _, _ = corrected_baseline(mean, axis, settings, occupied)
        free = baseline_operator_for(axis, settings, occupied).free
        sd = noise_sd(corrected, free)
        occupied = merged(occupied_ranges(corrected, axis, sd, _points_of_a_line(axis)))
    corrected, _, _ = corrected_baseline(mean, axis, settings, occupied)
    return corrected, occupied, sd


def _points_of_a_line(axis: Axis) -> float:
    return max(0.004 / abs(axis.step_ppm), 2.0)


def _line_width(corrected: Float32, axis: Axis, shift: float, plan: FollowPlan, sd: float) -> float:
    """Width at half height in ppm of the reference line, or of the narrowest signal."""
    limit = max(round(0.15 / abs(axis.step_ppm)), 8)
    places = [] if np.isnan(shift) else [shift]
    places += [_top(corrected, axis, signal)[0] for signal in plan.all]
    widths = []
    for place in places:
        index = axis.position(place)
        if not 1 <= index < axis.size - 1:
            continue
        line = LinePosition(index, float(corrected[round(index)]))
        width = width_at_half(corrected, line, limit) * abs(axis.step_ppm)
        if line.height > _SMALLEST_SNR * sd and np.isfinite(width):
            if place == shift:
                return width
            widths.append(width)
    return min(widths, default=4.0 * abs(axis.step_ppm))


def _line_shapes(
    plan: FollowPlan,
    corrected: Float32,
    axis: Axis,
    lines: Sequence[tuple[Float64, Float64]],
    width_ppm: float,
    sd: float,
) -> tuple[float, list[float]]:
    """Lorentzian share of the reference's line-width, and the width of each signal's lines.

    Shim is common to all lines, but natural widths differ by some tenths of a hertz, and so do the
    tails outside the windows.
    """
    first = next((i for i, s in enumerate(plan.all) if not s.exchanging), None)
    share = USUAL_SHARE
    if first is not None:
        chosen = (
            first
            if plan.reference is not None
            else max(
                (i for i, s in enumerate(plan.all) if not s.exchanging),
                key=lambda i: _top(corrected, axis, plan.all[i])[1],
            )
        )
        _, share = fitted_shape(
            corrected, axis, *lines[chosen], (width_ppm, USUAL_SHARE), sd, (0.1, SHARE_SD)
        )
    widths = []
    for signal, one in zip(plan.all, lines, strict=True):
        if signal.exchanging:
            widths.append(_exchanging_width(corrected, axis, signal, sd, width_ppm))
            continue
        own, _ = fitted_shape(corrected, axis, *one, (width_ppm, share), sd, _USUAL_SPREAD)
        # A signal that seems much broader consists of lines that run into each other.
        widths.append(float(np.clip(own, 0.8 * width_ppm, 1.3 * width_ppm)))
    return share, widths


def _exchanging_width(
    corrected: Float32, axis: Axis, signal: Signal, sd: float, reference_ppm: float
) -> float:
    """Width of an exchanging proton's line where it can be seen, else that of the reference."""
    place, height = _top(corrected, axis, signal)
    if height < SHAPE_SNR * sd:
        return reference_ppm
    limit = max(round(signal.width / abs(axis.step_ppm)), 8)
    line = LinePosition(axis.position(place), height)
    width = width_at_half(corrected, line, limit) * abs(axis.step_ppm)
    return width if np.isfinite(width) else reference_ppm


def _top(corrected: Float32, axis: Axis, signal: Signal) -> tuple[float, float]:
    return line_near(corrected, axis, signal.centre, 0.5 * signal.width)


def _shape(corrected: Float32, axis: Axis, signal: Signal, sd: float) -> Float32:
    """Shape of a signal, its first point exactly on the upper edge of the window."""
    start, stop = axis.span(signal.window)
    place = start + np.arange(int(stop - start) + 1)
    place = place[(place >= 0) & (place <= axis.size - 1)]
    part = np.interp(place, np.arange(axis.size), corrected)
    if place.size < 8 or place[0] != start or part.max() < SHAPE_SNR * sd:
        return np.zeros(0, np.float32)
    return np.asarray(part, np.float32)


def _lines_of(
    corrected: Float32, axis: Axis, signal: Signal, sd: float, frequency: float
) -> tuple[Float64, Float64]:
    """Centres (ppm) and shares of the lines a signal is made of.

    The pattern of the sheet about the signal's middle where couplings are stated; otherwise the
    lines seen in the mean spectrum; otherwise one line in the middle of the window.
    """
    start, stop = (round(v) for v in axis.span(signal.window))
    start, stop = max(start, 0), min(stop, axis.size)
    part = corrected[start:stop]
    if part.size < 8 or part.max() < _SMALLEST_SNR * sd:
        centre = np.array([signal.centre])
        seen, heights = centre, np.ones(1)
    else:
        found = find_lines(part, max(sd, 0.08 * float(part.max()) / 6.0))
        if found.size == 0:
            found = np.array([int(np.argmax(part))])
        seen = axis.first_ppm + axis.step_ppm * (start + found)
        heights = part[found].astype(np.float64)
    if signal.couplings and np.isfinite(frequency):
        offsets, shares = sticks(signal.couplings)
        middle = float((seen * heights).sum() / heights.sum())
        return middle + offsets / frequency, shares
    return seen, heights / heights.sum()
