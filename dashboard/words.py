"""Numbers, times and states as people read them."""

from datetime import UTC, datetime
from html import escape
from math import isfinite, isnan
from zoneinfo import ZoneInfo

from kinetics.rates.fitting import Parameter, Quantity
from kinetics.rates.words import rounded

TIME_UNITS = {"s": ("s", 1.0), "min": ("min", 60.0), "h": ("h", 3600.0)}


def time_unit(asked: str | None, span_s: float) -> tuple[str, float]:
    """Return name and length (s) of the unit a time axis is drawn in."""
    if asked is not None:
        return TIME_UNITS[asked]
    return TIME_UNITS["s" if span_s < 900 else "min" if span_s < 3 * 3600 else "h"]


def amount_unit(asked: str | None, unit: str, charged: float) -> tuple[str, float]:
    """Return name of the amount unit and the factor from the recorded one."""
    if unit == "mol/L":
        if asked == "percent" and charged > 0:
            return "% of charge", 100.0 / charged
        return ("mmol/L", 1000.0) if asked == "mM" else ("mol/L", 1.0)
    return ("per reference proton" if unit == "ratio" else "integral per scan"), 1.0


def duration(seconds: float) -> str:
    """Write a duration: ``42 s``, ``12 min``, ``3 h 05 min``, ``2 d 4 h``."""
    if not isfinite(seconds):
        return "—"
    if seconds < 90:
        return f"{seconds:.0f} s"
    minutes = round(seconds / 60)
    if minutes < 90:
        return f"{minutes} min"
    hours, minutes = divmod(minutes, 60)
    if hours < 48:
        return f"{hours} h {minutes:02d} min"
    days, hours = divmod(hours, 24)
    return f"{days} d {hours} h"


def ago(moment: datetime | None, now: datetime | None = None) -> str:
    """Write how long ago a moment was."""
    if moment is None:
        return "—"
    gone = ((now or datetime.now(UTC)) - moment).total_seconds()
    return "just now" if gone < 3 else f"{duration(gone)} ago"


def local(moment: datetime | None, zone: str) -> str:
    """Write a moment in the run's zone: ``Tue 3 Mar 19:04 CET``."""
    if moment is None:
        return "—"
    there = moment.astimezone(ZoneInfo(zone))
    return f"{there:%a} {there.day} {there:%b %H:%M} {there.tzname()}"


def percent(q: Quantity) -> tuple[str, str]:
    """Write a share and its interval in per cent."""
    if not isfinite(q.value):
        return "—", ""
    scaled = Quantity(100 * q.value, 100 * q.low, 100 * q.high)
    text = rounded(scaled.value, scaled.low, scaled.high)
    return (
        f"{text} %",
        f"{rounded(scaled.low, scaled.value)} to {rounded(scaled.high, scaled.value)} %",
    )


def constant(p: Parameter) -> tuple[str, str]:
    """Write a rate constant with its unit, and its interval in words."""
    value = f"{pretty(rounded(p.value, p.low, p.high))} {unit(p.unit)}"
    if isnan(p.low) and isnan(p.high):
        return value, "not bounded by the data"
    if isnan(p.high):
        return value, f"at least {pretty(rounded(p.low, p.value))}"
    if isnan(p.low):
        return value, f"at most {pretty(rounded(p.high, p.value))}"
    return value, f"{pretty(rounded(p.low, p.high))} to {pretty(rounded(p.high, p.low))}"


_RAISED = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


def pretty(number: str) -> str:
    """Write ``2.0e-4`` as ``2.0 × 10⁻⁴``."""
    mantissa, sign, power = number.partition("e")
    return f"{mantissa} × 10{power.translate(_RAISED)}" if sign else number


def unit(text: str) -> str:
    """Write a unit with raised powers."""
    return {"1/s": "s⁻¹", "L/(mol s)": "L mol⁻¹ s⁻¹", "mol/(L s)": "mol L⁻¹ s⁻¹"}.get(text, text)


def inert(text: str) -> str:
    """Make untrusted text harmless inside a figure."""
    return escape(text, quote=False)
