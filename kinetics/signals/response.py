"""How a sum over a window answers to the area of a line, and how noisy it is.

A sum over a window misses the tails outside it, takes in the tails of neighbours, and the
baseline takes away part of what is left. All three are linear in the line areas: with the
lines known from the calibration, sums = M · areas. Areas are M⁻¹ · sums, and the noise of the
sums, baseline included, is carried along. Lines are Voigt profiles: shim broadens their core more
than their far tails, and tails taken for those of a Lorentzian of the same width would cost one
per cent. For a Lorentzian and a window n widths wide the share inside is (2/π) arctan n (tests
compare).
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from kinetics.signals.model import Signal
from kinetics.signals.pattern import gaussian_share, lorentz_share_at, voigt_lines
from kinetics.signals.windows import Weights, noise_covariance, window_weights
from kinetics.spectra.baseline import BaselineOperator
from kinetics.spectra.model import Axis, Float32, Float64

# Line-widths relative to the calibration's at which M is prepared; in between it is interpolated.
WIDTH_FACTORS = np.array([0.5, 0.7, 0.85, 1.0, 1.2, 1.5, 2.0, 3.0, 4.5])
# A local straight baseline is used where the margins stand off zero by more than this part of
# the integral, and by more than four standard deviations.
_LOCAL_SHARE = 0.01
_LOCAL_SIGNIFICANCE = 4.0

# Centres (ppm), shares, width (ppm) and its Lorentzian share of the lines of one signal.
_Shape = tuple[Float64, Float64, float, float]


@dataclass(frozen=True, slots=True, eq=False)
class Response:
    """Answer of the window sums to line areas.

    Attributes
    ----------
    mixing
        float64, shape (f, k, k): M at each of `WIDTH_FACTORS`.
    noise
        float64, shape (k, k): covariance of the sums for unit noise of one point.
    local_baseline
        Whether each window has a local straight baseline of its own, length k.
    line_width_ppm
        Width at half height of the reference line at factor 1.
    """

    mixing: Float64
    noise: Float64
    local_baseline: tuple[bool, ...]
    line_width_ppm: float

    def at_width(self, width_ppm: float) -> Float64:
        """Return M for a line-width, shape (k, k)."""
        factor = width_ppm / self.line_width_ppm
        if not np.isfinite(factor):
            factor = 1.0
        place = np.interp(np.log(max(factor, 1e-6)), np.log(WIDTH_FACTORS), _PLACES)
        left = min(int(place), WIDTH_FACTORS.size - 2)
        share = place - left
        return np.asarray((1 - share) * self.mixing[left] + share * self.mixing[left + 1])


_PLACES = np.arange(WIDTH_FACTORS.size, dtype=np.float64)


def make_response(
    signals: Sequence[Signal],
    reference: Signal | None,
    axis: Axis,
    corrected: Float32,
    lines: Sequence[tuple[Float64, Float64]],
    width_ppm: float,
    own_widths_ppm: Sequence[float],
    lorentz_share: float,
    baseline: BaselineOperator | None,
    correlation: Float64,
    sd: float,
) -> Response:
    """Prepare the response of a plan's windows.

    Parameters
    ----------
    signals, reference
        What is summed, and which of them (if any) is the quantitative reference. Signals of no
        species are lines nobody declared; they get no local baseline.
    axis, corrected
        The mean spectrum of the calibration, baseline removed.
    lines
        Centres (ppm) and shares of the lines of each signal.
    width_ppm
        Width at half height of the reference line.
    own_widths_ppm
        Width of the lines of each signal, in the order of `signals`.
    lorentz_share
        Lorentzian share of the width of the reference line (see `pattern.voigt_lines`); the
        Gaussian part, which is the shim's, is the same width in all lines.
    baseline
        The baseline operator, None where no baseline is corrected.
    correlation
        Noise autocorrelation of the spectrum.
    sd
        Noise of one point of the mean spectrum.
    """
    whole = [window_weights(axis, s.window, local_baseline=False) for s in signals]
    gauss_ppm = width_ppm * gaussian_share(lorentz_share)
    shapes = [
        (*one, own, lorentz_share_at(own, gauss_ppm))
        for one, own in zip(lines, own_widths_ppm, strict=True)
    ]
    mixing = _mixing(axis, whole, shapes, baseline)
    sums = np.array([w.of(corrected) for w in whole])
    factor_one = int(np.flatnonzero(WIDTH_FACTORS == 1.0)[0])
    # Signals that are fitted together may share a window, and their sums then say the same.
    areas = np.linalg.lstsq(mixing[factor_one], sums, rcond=None)[0]
    local = _needs_local(signals, reference, axis, corrected, shapes, areas, correlation, sd)
    if any(local):
        whole = [
            window_weights(axis, s.window, local_baseline=flag)
            for s, flag in zip(signals, local, strict=True)
        ]
        mixing = _mixing(axis, whole, shapes, baseline)
    net = np.array([_net(w, axis.size, baseline) for w in whole])
    return Response(mixing, noise_covariance(net, correlation), local, width_ppm)


def _net(weights: Weights, size: int, baseline: BaselineOperator | None) -> Float64:
    """Weights on the spectrum as it was before the baseline was taken off, shape (n,)."""
    full = weights.full(size)
    return full if baseline is None else full - baseline.transposed(full)


def _mixing(
    axis: Axis,
    weights: Sequence[Weights],
    shapes: Sequence[_Shape],
    baseline: BaselineOperator | None,
) -> Float64:
    out = np.empty((WIDTH_FACTORS.size, len(weights), len(shapes)))
    net = np.array([_net(w, axis.size, baseline) for w in weights])
    for column, (centres, shares, own, lorentz) in enumerate(shapes):
        for which, factor in enumerate(WIDTH_FACTORS):
            out[which, :, column] = net @ voigt_lines(
                axis, centres, shares, own * float(factor), lorentz
            )
    return out


def _needs_local(
    signals: Sequence[Signal],
    reference: Signal | None,
    axis: Axis,
    corrected: Float32,
    shapes: Sequence[_Shape],
    areas: Float64,
    correlation: Float64,
    sd: float,
) -> tuple[bool, ...]:
    """Whether the margins of each window stand off zero by more than the known lines explain."""
    rest = corrected.astype(np.float64)
    for area, (centres, shares, own, lorentz) in zip(areas, shapes, strict=True):
        rest -= area * voigt_lines(axis, centres, shares, own, lorentz)
    # A product is not there yet in the first spectra: what it will become is judged by the
    # largest of the other signals; the reference may be of any strength.
    per_proton = max(
        (
            area / signal.protons
            for area, signal in zip(areas, signals, strict=True)
            if signal is not reference and signal.species
        ),
        default=0.0,
    )
    flags = []
    for area, signal in zip(areas, signals, strict=True):
        straight = window_weights(axis, signal.window, local_baseline=True).full(axis.size)
        plain = window_weights(axis, signal.window, local_baseline=False).full(axis.size)
        under = float((plain - straight) @ rest)
        noise = sd * float(
            np.sqrt(noise_covariance((plain - straight)[None, :], correlation)[0, 0])
        )
        size = area if signal is reference else max(area, per_proton * signal.protons)
        flags.append(
            bool(signal.species)
            and not signal.exchanging
            and size > 0
            and abs(under) > _LOCAL_SHARE * size
            and abs(under) > _LOCAL_SIGNIFICANCE * noise
        )
    return tuple(flags)
