"""`measure(raw, recipe)`: one raw spectrum to one measured row, depending on nothing else."""

from dataclasses import dataclass
from typing import Literal

import numpy as np

from kinetics.errors import UnreadableError
from kinetics.remarks import Remark
from kinetics.sheet import Sheet
from kinetics.signals.amounts import AmountRule
from kinetics.signals.calibration import Calibration
from kinetics.signals.integrals import fit_multiplets, integrate
from kinetics.signals.model import FollowPlan, Integrals, Signal
from kinetics.signals.quality import remarks_on
from kinetics.signals.saturation import relaxed
from kinetics.spectra.model import Axis, Float32, ProcessingRecord, Raw, Spectrum
from kinetics.spectra.processing import Settings, process
from kinetics.version import __version__

# The picture of the whole night shows this many cells a spectrum.
PICTURE_CELLS = 2048


@dataclass(frozen=True, slots=True, eq=False)
class Recipe:
    """Everything a measurement depends on beside the raw spectrum.

    Attributes
    ----------
    sheet_version
        Number of the sheet's version in the logbook.
    plan
        What is followed, from that sheet.
    calibration
        Learned from the run's first spectra.
    program_version
        Version of this program.
    """

    sheet_version: int
    plan: FollowPlan
    calibration: Calibration
    program_version: str = __version__


@dataclass(frozen=True, slots=True, eq=False)
class Measurement:
    """What was measured in one spectrum.

    Attributes
    ----------
    state
        ``"measured"`` or ``"doubtful"``.
    remarks
        What was noticed.
    integrals
        Of the reference and the signals.
    trace
        The referenced spectrum before baseline correction, float32, shape (n,).
    axis
        Its axis.
    noise_sd, line_width_hz, record
        As in `Spectrum`.
    """

    state: Literal["measured", "doubtful"]
    remarks: tuple[Remark, ...]
    integrals: Integrals
    trace: Float32
    axis: Axis
    noise_sd: float
    line_width_hz: float
    record: ProcessingRecord


def follow_plan(sheet: Sheet) -> FollowPlan:
    """Translate a sheet into what `measure` needs."""
    reference = None
    if sheet.reference.kind == "signal" and sheet.reference.window is not None:
        reference = Signal(
            species=sheet.reference.name or "reference",
            window=sheet.reference.window,
            protons=sheet.reference.protons,
            follow=False,
            t1_s=sheet.reference.t1_s,
        )
    signals = tuple(
        Signal(
            species=entry.species,
            window=entry.window,
            protons=entry.protons,
            couplings=tuple((c.n, c.hz) for c in entry.couplings),
            method=entry.method,
            follow=entry.follow,
            exchanging=entry.exchanging,
            t1_s=entry.t1_s,
        )
        for entry in sheet.signals
    )
    shift_window, shift_target = sheet.reference.window, sheet.reference.shift
    if sheet.shift_reference is not None:
        shift_window, shift_target = sheet.shift_reference.window, sheet.shift_reference.shift
    windows = [s.window for s in signals] + ([reference.window] if reference else [])
    settings = Settings(
        broadening_hz=sheet.processing.line_broadening_hz,
        zero_fill=sheet.processing.zero_fill,
        phase=sheet.processing.phase,
        baseline=sheet.processing.baseline,
        exclude=sheet.processing.exclude,
        shift_window=shift_window,
        shift_target=shift_target,
        protected=tuple(windows),
    )
    return FollowPlan(settings, reference, signals)


def amount_rule(sheet: Sheet) -> AmountRule:
    """Translate a sheet into how integrals become amounts."""
    kinetics = sheet.kinetics
    weights: dict[str, float] = {}
    if sheet.reference.kind == "closure":
        # What is consumed comes back as what is formed: n formed molecules of coefficient b
        # stand for n/b turns of the reaction, each of which used a molecules of coefficient a.
        limiting = kinetics.limiting or next(iter(kinetics.consumed), None)
        scale = kinetics.consumed.get(limiting, 1.0) if limiting else 1.0
        if limiting:
            weights[limiting] = 1.0
        for name, coefficient in kinetics.formed.items():
            weights[name] = scale / coefficient
        if kinetics.intermediate is not None:
            weights[kinetics.intermediate] = 1.0
    total = sum(kinetics.charged.get(name, 0.0) * w for name, w in weights.items())
    return AmountRule(
        kind=sheet.reference.kind,
        species=tuple(entry.species for entry in sheet.signals),
        protons=tuple(entry.protons for entry in sheet.signals),
        reference_protons=sheet.reference.protons,
        reference_concentration=sheet.reference.concentration,
        reference_u=sheet.reference.concentration_u,
        closure_total=total or 1.0,
        closure_weights=tuple(weights.items()),
    )


def measure(raw: Raw, recipe: Recipe) -> Measurement:
    """Measure one spectrum.

    Depends on nothing but its arguments: not on arrival order, not on what ran before.

    Raises
    ------
    UnreadableError
        If the spectrum cannot be processed; the message says why in a chemist's words.
    """
    plan, calibration = recipe.plan, recipe.calibration
    if raw.data.size < 64:
        raise UnreadableError(f"the spectrum has only {raw.data.size} points")
    if not np.all(np.isfinite(raw.data)):
        raise UnreadableError("the data contain values that are not numbers")
    spectrum = process(raw, plan.settings, calibration.shared)
    fits = fit_multiplets(spectrum, plan, calibration)
    integrals = integrate(spectrum, plan, calibration, fits)
    remarks = remarks_on(spectrum, integrals, plan, calibration, fits)
    integrals, saturated = relaxed(integrals, plan, raw.recycle_s, raw.flip_angle_deg)
    remarks = (*remarks, *saturated)
    doubtful = any(remark.doubtful for remark in remarks)
    return Measurement(
        state="doubtful" if doubtful else "measured",
        remarks=remarks,
        integrals=integrals,
        trace=spectrum.intensities + spectrum.baseline,
        axis=spectrum.axis,
        noise_sd=spectrum.noise_sd,
        line_width_hz=spectrum.line_width_hz,
        record=spectrum.record,
    )


def picture_row(spectrum: Spectrum | Measurement, low: float, high: float) -> Float32:
    """Return the highest value in each of PICTURE_CELLS equal cells from `high` to `low` ppm."""
    axis = spectrum.axis
    values = spectrum.trace if isinstance(spectrum, Measurement) else spectrum.intensities
    position = (np.linspace(high, low, PICTURE_CELLS + 1) - axis.first_ppm) / axis.step_ppm
    edges = np.clip(np.round(position), 0, axis.size - 1).astype(np.intp)
    row = np.maximum.reduceat(values, edges[:-1])
    return np.asarray(row, np.float32)
