"""Strong lines that nobody declared: water, solvent, acid.

Their tails reach into the declared windows, and no smooth baseline can tell them from signal. So
they are summed over windows of their own, take part in the mixing matrix, and are then forgotten.
"""

from dataclasses import dataclass

import numpy as np

from kinetics.signals.model import FollowPlan, Signal
from kinetics.spectra.lines import LinePosition, find_lines, width_at_half
from kinetics.spectra.model import Axis, Float32, Float64
from kinetics.spectra.processing import Window

_MOST = 8
_SNR = 10.0
# A line a fiftieth as high as the highest declared one spoils no window by a part in a thousand.
_SHARE = 0.02
_JOIN_WIDTHS = 8.0  # lines closer than this are one group
_MARGIN_WIDTHS = 6.0
_LEAST_WIDTHS = 3.0  # what must be left of a window beside the declared ones
_WIDEST_HZ_SEARCH = 0.15  # ppm, as for the declared lines


@dataclass(frozen=True, slots=True, eq=False)
class Undeclared:
    """A group of lines outside all declared windows.

    Attributes
    ----------
    signal
        Stands for it where signals are summed; of species ``""``.
    centres_ppm, shares
        Its lines, shape (k,).
    width_ppm
        Their width at half height.
    """

    signal: Signal
    centres_ppm: Float64
    shares: Float64
    width_ppm: float


def undeclared(
    corrected: Float32, axis: Axis, plan: FollowPlan, sd: float, width_ppm: float
) -> tuple[Undeclared, ...]:
    """Find them in the mean spectrum of a calibration, strongest first.

    Parameters
    ----------
    corrected, axis
        The mean spectrum without baseline, shape (n,).
    plan
        What is declared.
    sd
        Noise of one point of it.
    width_ppm
        Width of the reference line.
    """
    taken = [*(signal.window for signal in plan.all), *plan.settings.exclude]
    declared = max((_highest(corrected, axis, signal.window) for signal in plan.all), default=0.0)
    level = max(_SNR * sd, _SHARE * declared)
    found = find_lines(corrected, level / 6.0)
    ppm = axis.first_ppm + axis.step_ppm * found
    outside = np.array([not any(a <= x <= b for a, b in taken) for x in ppm], bool)
    out = []
    for members in _groups(found[outside], axis, width_ppm):
        group = _group(corrected, axis, members, taken, width_ppm)
        if group is not None:
            out.append((float(corrected[members].max()) * group.width_ppm, group))
    out.sort(key=lambda pair: -pair[0])
    return tuple(group for _, group in out[:_MOST])


def _highest(corrected: Float32, axis: Axis, window: Window) -> float:
    start, stop = axis.span(window)
    part = corrected[max(int(start), 0) : max(int(stop) + 1, 0)]
    return float(part.max()) if part.size else 0.0


def _groups(
    lines: np.ndarray[tuple[int], np.dtype[np.intp]], axis: Axis, width_ppm: float
) -> list[np.ndarray[tuple[int], np.dtype[np.intp]]]:
    if lines.size == 0:
        return []
    gaps = np.flatnonzero(np.diff(lines) * abs(axis.step_ppm) > _JOIN_WIDTHS * width_ppm)
    return [np.asarray(part, np.intp) for part in np.split(lines, gaps + 1)]


def _group(
    corrected: Float32,
    axis: Axis,
    members: np.ndarray[tuple[int], np.dtype[np.intp]],
    taken: list[Window],
    width_ppm: float,
) -> Undeclared | None:
    heights = corrected[members].astype(np.float64)
    top = int(members[int(np.argmax(heights))])
    limit = max(round(_WIDEST_HZ_SEARCH / abs(axis.step_ppm)), 8)
    own = width_at_half(corrected, LinePosition(float(top), float(corrected[top])), limit)
    own_ppm = own * abs(axis.step_ppm) if np.isfinite(own) else width_ppm
    centres = np.asarray(axis.first_ppm + axis.step_ppm * members, np.float64)
    middle = float(axis.first_ppm + axis.step_ppm * top)
    low = float(centres.min()) - _MARGIN_WIDTHS * own_ppm
    high = float(centres.max()) + _MARGIN_WIDTHS * own_ppm
    for a, b in taken:
        if b <= middle:
            low = max(low, b)
        elif a >= middle:
            high = min(high, a)
    last = axis.first_ppm + axis.step_ppm * (axis.size - 1)
    if high - low < _LEAST_WIDTHS * own_ppm or low < last or high > axis.first_ppm:
        return None
    signal = Signal("", (low, high), 1.0, follow=False)
    return Undeclared(signal, centres, heights / heights.sum(), own_ppm)
