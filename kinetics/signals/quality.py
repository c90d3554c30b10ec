"""What is remarked on in a spectrum, with every threshold and its reason in one place."""

from collections.abc import Sequence
from itertools import combinations

import numpy as np

from kinetics.remarks import Remark
from kinetics.signals.calibration import Calibration
from kinetics.signals.integrals import coverage, standard_errors
from kinetics.signals.model import FollowPlan, Integrals
from kinetics.signals.multiplet import MultipletFit
from kinetics.spectra.lines import highest, width_at_half
from kinetics.spectra.model import Spectrum

# An integral ratio good to 1 % wants S/N 150 to 250 of the reference line (memory: Malz & Jancke
# 2005; Bharti & Roy 2012). Below 10 the line itself is in question.
WEAK_REFERENCE_SNR = 50.0
LOST_REFERENCE_SNR = 10.0
# Twice the width at the start halves every height and lets neighbours run into each other.
BROAD_FACTOR = 2.0
# Phases of single lines scatter by 1–2° in clean spectra; 8° costs some per cent of an integral.
PHASE_DISAGREEMENT_DEG = 8.0
# More than this of the axis shift within a run is a lock jump or a temperature step.
MOVED_PPM = 0.1
# A negative integral beyond noise means phase or baseline, never chemistry.
NEGATIVE_SIGMA = 5.0
# A fit of overlapping signals leaves 0.1–0.5 % of the variance under bad shim; a missing line or
# a wrong coupling leaves several per cent. Both must hold: at poor S/N noise alone leaves much.
PATTERN_UNEXPLAINED = 0.01
PATTERN_EXCESS = 3.0
# A twentieth of a window holds but tails; from a fifth on a line of one may lie in both.
OVERLAP_SEEN, OVERLAP_DOUBTFUL = 0.05, 0.2
# A Lorentzian less the line through the edges of a window n widths wide keeps 76 % at n = 4 and
# less below (derived); the tails outside are then guessed rather than measured.
WIDTHS_IN_WINDOW = 4.0
SEEN_HEIGHT = 10.0
# Two widths from its centre a Lorentzian has 6 % of its height and 8 % of its area beyond.
CROSSING_WIDTHS = 2.0


def remarks_on(
    spectrum: Spectrum,
    integrals: Integrals,
    plan: FollowPlan,
    calibration: Calibration,
    fits: Sequence[MultipletFit] = (),
) -> tuple[Remark, ...]:
    """Return what is to be remarked on in one measured spectrum.

    Parameters
    ----------
    spectrum, integrals
        The spectrum and what was measured in it.
    plan, calibration
        Of the run.
    fits
        Of overlapping signals.
    """
    out: list[Remark] = list(spectrum.remarks)
    out += _reference(spectrum, integrals, plan, calibration)
    out += _phase(spectrum, plan)
    out += _fits(fits, plan)
    out += _overlaps(fits, plan)
    out += _exchanging(spectrum, integrals, plan)
    errors = standard_errors(integrals)
    offset = 0 if plan.reference is None else 1
    biggest = float(np.max(np.abs(integrals.values))) if integrals.values.size else 0.0
    for index, signal in enumerate(plan.all):
        on_axis = coverage(spectrum.axis, signal)
        if on_axis < 0.999:
            out.append(
                Remark(
                    "window-off-axis",
                    f"{100 * (1 - on_axis):.0f} % of the window of {signal.species} "
                    f"({signal.window[1]:.2f} to {signal.window[0]:.2f} ppm) lies outside the "
                    "spectrum.",
                    "Its integral is too small.",
                    "Correct the window in the sheet, or widen the spectral width.",
                    doubtful=True,
                    subject=signal.species,
                )
            )
        value = integrals.values[index]
        if index >= offset and value < -NEGATIVE_SIGMA * errors[index] and -value > 0.01 * biggest:
            out.append(
                Remark(
                    "negative-integral",
                    f"The integral of {signal.species} is negative by "
                    f"{-value / errors[index]:.0f} times its noise.",
                    "Phase or baseline is wrong there.",
                    "Look at the spectrum; fix the phase or exclude the solvent in the sheet.",
                    doubtful=True,
                    subject=signal.species,
                )
            )
    return tuple(out)


def _fits(fits: Sequence[MultipletFit], plan: FollowPlan) -> list[Remark]:
    out = []
    for fit in fits:
        names = " and ".join(dict.fromkeys(plan.all[i].species for i in fit.members))
        unexplained = 1.0 - fit.explained
        if fit.excess > PATTERN_EXCESS and unexplained > PATTERN_UNEXPLAINED:
            out.append(
                Remark(
                    "pattern-mismatch",
                    f"The n + 1 patterns stated for {names} explain "
                    f"{100 * fit.explained:.1f} % of the variance in their windows, and what is "
                    f"left is {fit.excess:.0f} times the noise.",
                    "The areas may be off by several per cent.",
                    "Check the couplings in the sheet; protons that couple with each other and "
                    "stand close do not follow n + 1 (strong coupling), and another signal may "
                    "lie under them.",
                    doubtful=True,
                    subject=names,
                )
            )
    return out


def _overlaps(fits: Sequence[MultipletFit], plan: FollowPlan) -> list[Remark]:
    """Summed windows that share a part of the spectrum."""
    fitted = {index for fit in fits for index in fit.members}
    summed = [s for i, s in enumerate(plan.all) if i not in fitted]
    out = []
    for a, b in combinations(summed, 2):
        shared = min(a.window[1], b.window[1]) - max(a.window[0], b.window[0])
        part = shared / min(a.width, b.width)
        if part > OVERLAP_SEEN:
            out.append(
                Remark(
                    "windows-overlap",
                    f"The windows of {a.species} and {b.species} share {shared:.3f} ppm, "
                    f"{100 * part:.0f} % of the narrower one.",
                    "What lies there counts for both.",
                    'Narrow the windows, or give both method = "multiplet".',
                    doubtful=part > OVERLAP_DOUBTFUL,
                    subject=f"{a.species} and {b.species}",
                )
            )
    return out


def _exchanging(spectrum: Spectrum, integrals: Integrals, plan: FollowPlan) -> list[Remark]:
    """Lines of exchanging protons that are wide for their window, or about to leave it."""
    out: list[Remark] = []
    axis = spectrum.axis
    for index, signal in enumerate(plan.all):
        if not signal.exchanging or integrals.heights[index] < SEEN_HEIGHT:
            continue
        low, high = signal.window
        start, stop = (int(v) for v in axis.span(signal.window))
        line = highest(spectrum.intensities, start, stop + 1)
        points = width_at_half(spectrum.intensities, line, max(2 * (stop - start), 8))
        width = points * abs(axis.step_ppm)
        place = axis.first_ppm + axis.step_ppm * line.index
        if not np.isfinite(width) or width > signal.width / WIDTHS_IN_WINDOW:
            broad = f"{width:.2f} ppm wide" if np.isfinite(width) else "wider than can be measured"
            out.append(
                Remark(
                    "wide-for-window",
                    f"The line of {signal.species} is {broad}, its window {signal.width:.2f} ppm.",
                    "Much of it lies outside or is taken for baseline: its integral is too small.",
                    "Widen the window where there is room, or measure at higher field or another "
                    "temperature; rest no rate constant on it.",
                    doubtful=True,
                    subject=signal.species,
                )
            )
        for other in plan.all:
            if other is signal or low < other.centre < high:
                continue
            edge = other.window[0] if other.centre > place else other.window[1]
            gap = abs(edge - place)
            if np.isfinite(width) and gap < CROSSING_WIDTHS * width:
                out.append(
                    Remark(
                        "exchanging-near",
                        f"The line of {signal.species} stands {gap:.3f} ppm from the window of "
                        f"{other.species}, {gap / width:.1f} of its widths.",
                        f"Wandering on, it will add to the integral of {other.species}.",
                        "Hold temperature and pH steady, or follow another signal of "
                        f"{other.species}.",
                        subject=f"{signal.species} and {other.species}",
                    )
                )
    return out


def _reference(
    spectrum: Spectrum,
    integrals: Integrals,
    plan: FollowPlan,
    calibration: Calibration,
) -> list[Remark]:
    out: list[Remark] = []
    if plan.reference is not None:
        snr, name = float(integrals.heights[0]), plan.reference.species
        relative = float(np.sqrt(integrals.covariance[0, 0]) / max(integrals.values[0], 1e-300))
        if snr < LOST_REFERENCE_SNR or integrals.values[0] <= 0:
            out.append(
                Remark(
                    "reference-lost",
                    f"The reference {name} stands only {snr:.1f} times above the noise.",
                    "No amount can be had from this spectrum.",
                    "Check shim, lock and receiver, and the reference window in the sheet.",
                    doubtful=True,
                    subject=name,
                )
            )
        elif snr < WEAK_REFERENCE_SNR:
            out.append(
                Remark(
                    "reference-weak",
                    f"The reference {name} stands {snr:.0f} times above the noise; its integral "
                    f"is good to {100 * relative:.1f} %.",
                    "Every amount of this spectrum carries that uncertainty.",
                    "Take more scans, or a stronger reference.",
                    subject=name,
                )
            )
    usual = calibration.line_width_hz
    if np.isfinite(usual) and spectrum.line_width_hz > BROAD_FACTOR * usual:
        out.append(
            Remark(
                "lines-broad",
                f"The reference line is {spectrum.line_width_hz:.2f} Hz wide, "
                f"{spectrum.line_width_hz / usual:.1f} times its width at the start.",
                "Neighbouring signals run into each other's windows.",
                "Shim; check for bubbles and solids.",
                doubtful=True,
            )
        )
    moved = spectrum.record.shift_ppm - calibration.first_shift_ppm
    if abs(moved) > MOVED_PPM:
        out.append(
            Remark(
                "lines-moved",
                f"All lines stand {abs(moved):.3f} ppm {'below' if moved > 0 else 'above'} their "
                "place in the first spectrum.",
                "The windows have followed.",
                "Check lock and temperature.",
            )
        )
    return out


def _phase(spectrum: Spectrum, plan: FollowPlan) -> list[Remark]:
    disagreement = spectrum.record.phase_disagreement_deg
    if plan.settings.phase != "automatic" or disagreement <= PHASE_DISAGREEMENT_DEG:
        return []
    return [
        Remark(
            "phase-doubtful",
            f"The lines do not agree on a phase: half of them are off by more than "
            f"{disagreement:.0f}°.",
            "Integrals may be off by several per cent.",
            "Look at the spectrum; give a fixed phase or exclude the solvent in the sheet.",
            doubtful=True,
        )
    ]
