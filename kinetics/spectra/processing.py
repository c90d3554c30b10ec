"""From one `Raw` to one `Spectrum`, with what the run's calibration holds in common."""

from dataclasses import dataclass, replace
from functools import lru_cache
from typing import Literal

import numpy as np

from kinetics.errors import UnreadableError
from kinetics.remarks import Remark
from kinetics.spectra.align import Template, displacement, line_near
from kinetics.spectra.baseline import BaselineOperator, Ranges, baseline_operator, merged
from kinetics.spectra.fourier import ComplexSpectrum, rotate, rotated, transform
from kinetics.spectra.lines import LinePosition, noise_sd, width_at_half
from kinetics.spectra.matched import NO_GROUPS, GroupShapes, matched_phases
from kinetics.spectra.model import Axis, Float32, Float64, ProcessingRecord, Raw, Spectrum
from kinetics.spectra.phase import LinePhases, Phase, fit_phase, line_phases

Window = tuple[float, float]


@dataclass(frozen=True, slots=True)
class Settings:
    """What the sheet says about processing.

    Attributes
    ----------
    broadening_hz, zero_fill
        Apodisation in Hz and zero filling (times the next power of two).
    phase
        ``"automatic"``, ``"recorded"``, or (p0, p1) in degrees.
    baseline
        ``"automatic"`` or ``"none"``.
    exclude
        ppm ranges never used.
    shift_window
        Where the shift reference is to be found in ppm; None: whole-spectrum alignment only.
    shift_target
        Shift given to it in every spectrum; None: where it stands in the calibration.
    protected
        ppm ranges that must not pull the baseline (the windows of all signals).
    """

    broadening_hz: float = 0.3
    zero_fill: int = 2
    phase: Literal["automatic", "recorded"] | tuple[float, float] = "automatic"
    baseline: Literal["automatic", "none"] = "automatic"
    exclude: tuple[Window, ...] = ()
    shift_window: Window | None = None
    shift_target: float | None = None
    protected: tuple[Window, ...] = ()


@dataclass(frozen=True, slots=True, eq=False)
class Shared:
    """What all spectra of a run have in common, learned from the first ones.

    Attributes
    ----------
    p1_deg
        First-order phase; nan where phases are not found here.
    template
        For alignment; in ppm after referencing.
    occupied
        ppm ranges in which lines stand, after referencing.
    shift_ppm
        Where the shift reference stands after referencing; nan without one.
    groups
        Shapes of groups of lines against which phases are found; empty where they are not.
    """

    p1_deg: float
    template: Template
    occupied: tuple[Window, ...]
    shift_ppm: float
    groups: GroupShapes = NO_GROUPS


@dataclass(frozen=True, slots=True, eq=False)
class Phased:
    """A real spectrum before alignment and baseline.

    `noise_correlation` as in `ComplexSpectrum`; None for a spectrum that arrived processed, whose
    noise a run's spectra tell together (`coloured`).
    """

    values: Float32
    axis: Axis
    noise_correlation: Float64 | None
    phase: Phase
    remarks: tuple[Remark, ...]
    source: tuple[ComplexSpectrum, LinePhases] | None = None

    def turned(self, phase: Phase) -> "Phased":
        """Return the same spectrum with another phase correction."""
        if self.source is None:
            raise ValueError("a spectrum that arrived processed cannot be phased again")
        values = rotate(self.source[0].values, phase.p0_deg, phase.p1_deg)
        return replace(self, values=values, phase=phase)


def phased(raw: Raw, settings: Settings, p1_deg: float | None) -> Phased:
    """Transform a FID and phase it; pass a spectrum that arrived processed.

    Raises
    ------
    UnreadableError
        If the spectrometer frequency or width is unknown.
    """
    if raw.domain == "frequency":
        if raw.axis is None:
            raise UnreadableError("the file holds a spectrum without a shift axis")
        values = np.asarray(raw.data.real, np.float32) / np.float32(raw.scans)
        values = np.asarray(np.nan_to_num(values), np.float32)
        recorded = Phase(0.0, 0.0, 0.0, 0)
        return Phased(values, raw.axis, None, recorded, ())
    if raw.frequency_mhz is None or not raw.spectral_width_hz > 0:
        raise UnreadableError("the file does not say the spectrometer frequency or spectral width")
    spectrum = transform(raw, broadening_hz=settings.broadening_hz, zero_fill=settings.zero_fill)
    phase, lines, remarks = _phase(raw, spectrum, settings, p1_deg)
    values = rotate(spectrum.values, phase.p0_deg, phase.p1_deg)
    source = None if lines is None else (spectrum, lines)
    return Phased(values, spectrum.axis, spectrum.noise_correlation, phase, remarks, source)


def _phase(
    raw: Raw, spectrum: ComplexSpectrum, settings: Settings, p1_deg: float | None
) -> tuple[Phase, LinePhases | None, tuple[Remark, ...]]:
    if isinstance(settings.phase, tuple):
        return Phase(settings.phase[0], settings.phase[1], 0.0, 0), None, ()
    if settings.phase == "recorded":
        if raw.recorded_phase is None:
            return (
                Phase(0.0, 0.0, 0.0, 0),
                None,
                (
                    Remark(
                        "phase-not-recorded",
                        "The sheet asks for the recorded phase, but the file holds none.",
                        "The spectrum was left unphased.",
                        'Use phase = "automatic".',
                        doubtful=True,
                    ),
                ),
            )
        return Phase(*raw.recorded_phase, 0.0, 0), None, ()
    lines = line_phases(raw, spectrum, settings.exclude)
    found = fit_phase(lines, p1_deg)
    if found is None:
        return (
            Phase(0.0, 0.0, 180.0, 0),
            None,
            (
                Remark(
                    "no-line",
                    "No line stands out of the noise, so no phase could be found.",
                    "The integrals of this spectrum mean little.",
                    "Check shim, lock, sample and receiver.",
                    doubtful=True,
                ),
            ),
        )
    return found, lines, ()


def process(raw: Raw, settings: Settings, shared: Shared) -> Spectrum:
    """Phase, align, correct the baseline of and measure the noise of one spectrum.

    Depends on nothing but its arguments.

    Raises
    ------
    UnreadableError
        If the file lacks what is needed to make a spectrum.
    """
    first_order = None if np.isnan(shared.p1_deg) else shared.p1_deg
    part = phased(raw, settings, first_order)
    moved = displacement(part.values, part.axis, shared.template, settings.exclude)
    axis, line = _referenced(part, moved, shared)
    if part.source is not None and shared.groups.shapes:
        part = _phased_by_groups(part, axis, shared)
        axis, line = _referenced(part, moved, shared)
    corrected, baseline, _ = corrected_baseline(part.values, axis, settings, shared.occupied)
    free = baseline_operator_for(axis, settings, shared.occupied).free
    sd = noise_sd(corrected, free)
    width = float("nan")
    frequency = raw.frequency_mhz or float("nan")
    if line is not None:
        top = LinePosition(axis.position(line), float(corrected[round(axis.position(line))]))
        limit = max(round(0.15 / abs(axis.step_ppm)), 8)
        width = width_at_half(corrected, top, limit) * abs(axis.step_ppm) * frequency
    return Spectrum(
        intensities=corrected,
        baseline=baseline,
        axis=axis,
        noise_sd=sd,
        line_width_hz=width,
        frequency_mhz=frequency,
        record=ProcessingRecord(
            p0_deg=part.phase.p0_deg,
            p1_deg=part.phase.p1_deg,
            phase_disagreement_deg=part.phase.disagreement_deg if part.phase.lines else 0.0,
            line_broadening_hz=settings.broadening_hz if raw.domain == "time" else 0.0,
            zero_fill=settings.zero_fill if raw.domain == "time" else 1,
            baseline=settings.baseline,
            shift_ppm=axis.first_ppm - part.axis.first_ppm,
        ),
        remarks=(*raw.remarks, *part.remarks),
    )


def _phased_by_groups(part: Phased, axis: Axis, shared: Shared) -> Phased:
    """Find the zero order again, with the shapes of the run's own lines."""
    if part.source is None:
        return part
    spectrum, lines = part.source
    p0, p1 = part.phase.p0_deg, part.phase.p1_deg
    groups = matched_phases(rotated(spectrum.values, p0, p1), axis, shared.groups, p0, p1)
    together = LinePhases(
        np.concatenate((lines.where, groups.where)),
        np.concatenate((lines.correction_deg, groups.correction_deg)),
        np.concatenate((lines.sigma_deg, groups.sigma_deg)),
    )
    found = fit_phase(together, p1)
    return part if found is None else part.turned(found)


def _referenced(part: Phased, moved: float, shared: Shared) -> tuple[Axis, float | None]:
    """Lay the spectrum over the template, then put the shift reference where it belongs."""
    axis = part.axis.shifted(-moved)
    if np.isnan(shared.shift_ppm):
        return axis, None
    found, _ = line_near(part.values, axis, shared.shift_ppm)
    return axis.shifted(shared.shift_ppm - found), shared.shift_ppm


def baseline_operator_for(axis: Axis, settings: Settings, occupied: Ranges) -> BaselineOperator:
    """Return the baseline operator of a referenced axis."""
    protected = merged([*settings.protected, *settings.exclude, *occupied])
    # Along a run the axis moves by fractions of a point; an operator is exact to half a point.
    grid = round(axis.first_ppm / axis.step_ppm)
    return _operator_on_grid(axis.size, axis.step_ppm, grid, protected)


@lru_cache(maxsize=16)
def _operator_on_grid(
    size: int, step_ppm: float, grid: int, protected: tuple[Window, ...]
) -> BaselineOperator:
    return baseline_operator(Axis(grid * step_ppm, step_ppm, size), protected)


def corrected_baseline(
    values: Float32, axis: Axis, settings: Settings, occupied: Ranges
) -> tuple[Float32, Float32, BaselineOperator | None]:
    """Return corrected intensities, the baseline, and the operator (None for ``"none"``)."""
    if settings.baseline == "none":
        return values, np.zeros_like(values), None
    operator = baseline_operator_for(axis, settings, occupied)
    baseline = operator.apply(values)
    return values - baseline, baseline, operator
