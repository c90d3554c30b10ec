"""Units, numbers and the methods of a run as its report writes them."""

import re
from collections.abc import Iterable
from dataclasses import dataclass
from datetime import datetime
from math import floor, isfinite, log10
from zoneinfo import ZoneInfo

import numpy as np

from kinetics.rates.fitting import Parameter, Quantity
from kinetics.rates.model import averages
from kinetics.rates.study import IN_PLAY_DELTA, Study
from kinetics.rates.words import rounded
from kinetics.run import DOUBTFUL_U, Run
from kinetics.signals.integrals import FOLLOW_EXCHANGING_PPM, FOLLOW_PPM
from kinetics.spectra.baseline import HALF_RESPONSE_PPM

_TIME_UNITS = {"s": 1.0, "min": 60.0, "h": 3600.0}
_UNITS = {"1/s": "s⁻¹", "L/(mol s)": "L mol⁻¹ s⁻¹", "mol/(L s)": "mol L⁻¹ s⁻¹"}
_RAISED = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")
_POWER = re.compile(r"(?<![\w.])(-?\d+(?:\.\d+)?)e(-?\d+)(?!\.?\w)")
_MINUS = re.compile(r"(?<![\w.)\]-])-(?=\d)")


@dataclass(frozen=True, slots=True)
class Scale:
    """Units in which a run is shown.

    Attributes
    ----------
    time, second
        Name of the time unit, and its length in s.
    amount, factor
        Name of the amount unit, and what a recorded amount is multiplied with.
    """

    time: str
    second: float
    amount: str
    factor: float


def scale_of(run: Run) -> Scale:
    """Return the units the sheet asks for, else such as fit the length of the run."""
    times = run.time_s[run.measured]
    span = float(np.ptp(times)) if times.size else 0.0
    time = run.sheet.display.time or ("s" if span < 900 else "min" if span < 3 * 3600 else "h")
    asked, charged = run.sheet.display.amount, max(run.sheet.kinetics.charged.values(), default=0.0)
    amount, factor = {
        "ratio": ("mol per mol of reference", 1.0),
        "per scan": ("integral per scan and proton", 1.0),
    }.get(run.sheet.amount_unit, ("mol/L", 1.0))
    if run.sheet.amount_unit == "mol/L" and asked == "mM":
        amount, factor = "mmol/L", 1000.0
    elif run.sheet.amount_unit == "mol/L" and asked == "percent" and charged > 0:
        amount, factor = f"% of {charged:g} mol/L", 100.0 / charged
    return Scale(time, _TIME_UNITS[time], amount, factor)


def pretty(text: str) -> str:
    """Write every ``2.0e-4`` in a text as ``2.0 × 10⁻⁴``, and minus signs as such."""
    text = _POWER.sub(
        lambda m: f"{m[1]}\N{NO-BREAK SPACE}×\N{NO-BREAK SPACE}10{raised(m[2])}", text
    )
    return _MINUS.sub("−", text)


def raised(power: str) -> str:
    """Write an integer as an exponent."""
    return power.translate(_RAISED)


def unit_words(unit: str) -> str:
    """Write a unit with raised powers."""
    return _UNITS.get(unit, unit)


def value_and_interval(q: Quantity | Parameter, factor: float = 1.0) -> tuple[str, str]:
    """Return a value and its interval as text; an open side in words."""
    value, low, high = factor * q.value, factor * q.low, factor * q.high
    if not isfinite(value):
        return "—", ""
    text = pretty(rounded(value, low, high))
    if isfinite(low) and isfinite(high):
        return text, pretty(f"{rounded(low, value)} to {rounded(high, value)}")
    if isfinite(low):
        return text, pretty(f"at least {rounded(low, value)}, no upper bound")
    if isfinite(high):
        return text, pretty(f"at most {rounded(high, value)}, no lower bound")
    return text, "not bounded by the data"


def plus_minus(value: float, u: float) -> str:
    """Write a value and its standard uncertainty, that with two digits."""
    if not isfinite(value):
        return "—"
    if not (isfinite(u) and u > 0):
        return f"{value:.4g}"
    last = floor(log10(u)) - 1
    if last < -6:
        return pretty(f"{value:.4e} ± {u:.1e}".replace("e-0", "e-").replace("e+0", "e"))
    return f"{value:.{max(-last, 0)}f} ± {u:.{max(-last, 0)}f}"


def clock(moment: datetime | None, zone: str) -> str:
    """Write a moment in the run's zone with its offset: ``2026-03-03 19:04:10 +01:00``."""
    if moment is None:
        return "—"
    there = moment.astimezone(ZoneInfo(zone))
    text = there.isoformat(sep=" ", timespec="seconds")
    return f"{text[:19]} {text[19:]}"


def ranges(numbers: Iterable[int]) -> str:
    """Write ascending numbers with runs drawn together: ``3–7, 12``."""
    parts: list[list[int]] = []
    for number in numbers:
        if parts and number == parts[-1][1] + 1:
            parts[-1][1] = number
        else:
            parts.append([number, number])
    return ", ".join(f"{a}" if a == b else f"{a}–{b}" for a, b in parts)


def methods(run: Run, study: Study | None) -> list[str]:
    """Say how the numbers were made, one text a step, as this run's sheet has it."""
    return [_processing(run), _integrals(run), _amounts(run), _times(run, study), _fits(run)]


def _processing(run: Run) -> str:
    p = run.sheet.processing
    formats = sorted({e.format for e in run.entries if e.integrals is not None})
    records = [e.processing for e in run.entries if e.processing is not None]
    out = f"Read as {', '.join(formats)}. " if formats else ""
    # Zero filling 1 without broadening is how a spectrum that arrived processed is recorded.
    if any(r.line_broadening_hz > 0 or r.zero_fill > 1 for r in records):
        phase = {
            "automatic": "the zero order was found in each spectrum from its own lines, the first "
            "order once from the first spectra of the run",
            "recorded": "with the phase recorded in the files",
        }.get(str(p.phase), "with the fixed phase given in the sheet")
        out += (
            f"FIDs were multiplied by an exponential of {p.line_broadening_hz:g} Hz, zero-filled "
            f"to {p.zero_fill} times the next power of two and Fourier transformed; phase: {phase}"
            ". "
        )
    elif records:
        out += "The spectra were taken as they arrived, already transformed and phased. "
    out += "Each was laid over a template of the first ones by correlation"
    if run.sheet.shift_reference is not None or run.sheet.reference.window is not None:
        out += ", and the line of the shift reference was then put where it belongs"
    out += ". "
    if p.baseline == "none":
        return out + "No baseline was corrected."
    return out + (
        "Baseline: block means of the points outside all windows, excluded ranges and known lines, "
        "smoothed by penalised second differences (Whittaker); waves longer than "
        f"{HALF_RESPONSE_PPM:g} ppm are followed by half or more."
    )


def _integrals(run: Run) -> str:
    out = (
        "Integrals are sums over the windows, points at the edges counted in part; where the "
        "first spectra called for it, from a straight line through the margins of the window. "
    )
    signals = run.sheet.signals
    if any(s.follow for s in signals):
        reach = max(FOLLOW_EXCHANGING_PPM if s.exchanging else FOLLOW_PPM for s in signals)
        out += f"Windows followed their signals by up to {reach:g} ppm, unless told not to. "
    return out + (
        "The sums were corrected for the tails that the windows cut off, for the tails of "
        "the other signals and for what the baseline takes of them, with Lorentzian lines as broad "
        "as in the first spectra and broadening with the reference line. The covariance of the "
        "integrals comes from the noise of each spectrum, baseline included."
    )


def _amounts(run: Run) -> str:
    reference = run.sheet.reference
    if reference.kind == "closure":
        out = "Amounts: integral per proton, scaled so that all species together are the charge. "
    elif reference.kind == "none":
        out = "Amounts: integral per proton and scan, without a reference. "
    else:
        out = "Amounts: integral per proton over that of the reference"
        if reference.concentration is not None:
            out += f", times its concentration of {reference.concentration:g} mol/L"
        out += ". "
    if len(run.sheet.species) < len(run.sheet.signals):
        out += "Signals of one species are combined with fixed weights, by their noise. "
    if run.sheet.vessel is not None and any(e.volume_ml for e in run.sheet.events):
        out += "Dilution by doses and feeds was allowed for. "
    return out + "Uncertainty was propagated to first order (GUM, JCGM 100), covariance included."


def _times(run: Run, study: Study | None) -> str:
    lag = run.sheet.time.lag_s
    out = "The time of a spectrum is the middle of its acquisition"
    out += f", less a lag of {lag:g} s. " if lag else ". "
    if study is None:
        return out
    series = study.best.series
    if averages(series.time_s, series.acquisition_s):
        return out + "The laws were averaged over each acquisition."
    return out + "Acquisitions are short against the run; the laws were taken at their middle."


def _fits(run: Run) -> str:
    return (
        "Laws were fitted by generalised least squares with the full covariance (Levenberg–"
        "Marquardt from a grid of starts). Where the points scatter more than their noise says, "
        "a part equal for all values and a part proportional to them were estimated by restricted "
        "maximum likelihood; correlation of neighbouring spectra was allowed for where it was "
        f"positive. Doubtful spectra are fitted with a further {100 * DOUBTFUL_U:g} % standard "
        "uncertainty; those set aside are not fitted. Intervals: profile likelihood calibrated by "
        f"Student's t, {100 * run.sheet.kinetics.confidence:g} %; those of conversion, yield, "
        "forecast and curve by propagation. Laws are compared by Akaike's criterion with the "
        f"small-sample correction; one within {IN_PLAY_DELTA:g} of the best stays in play. A law "
        "is singled out only if no other is in play, all that were asked for could be fitted, its "
        "rates are bounded on both sides and its residuals are not correlated."
    )
