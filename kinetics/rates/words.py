"""The verdict in words, and numbers as people read them: rounded to their uncertainty."""

from collections.abc import Mapping, Sequence
from math import floor, isfinite, log10

from kinetics.rates.fitting import Fit, Parameter
from kinetics.rates.outcome import Outcome

# Order one and two are told apart in 96 % of runs at half conversion and 1 % noise, in all at
# three quarters (references, trials on intervals).
_TELLING_CONVERSION = 0.75


def rounded(value: float, low: float = float("nan"), high: float = float("nan")) -> str:
    """Write a value with the digits its interval leaves (two of the half-width).

    Examples
    --------
    >>> rounded(2.01234e-4, 1.99e-4, 2.03e-4)
    '2.012e-4'
    >>> rounded(3448.2, 3415.0, 3483.0)
    '3448'
    """
    if not isfinite(value):
        return "—"
    half = max((abs(value - e) for e in (low, high) if isfinite(e)), default=0.0)
    if not half > 0:
        half = abs(value) * 5e-4
    if value == 0 or not half > 0:
        return f"{value:g}"
    size = floor(log10(abs(value)))
    last = floor(log10(half)) - 1
    digits = max(size - last, 0)
    if -3 <= size <= 5:
        return f"{value:.{max(-last, 0)}f}"
    mantissa = value / 10.0**size
    return f"{mantissa:.{min(digits, 8)}f}e{size}"


def with_interval(p: Parameter) -> str:
    """Write ``k = 2.01e-4 1/s (1.99e-4 to 2.03e-4)``, open sides in words."""
    head = f"{p.name} = {rounded(p.value, p.low, p.high)} {p.unit}"
    if isfinite(p.low) and isfinite(p.high):
        ends = (rounded(e, p.low, p.high) for e in (p.low, p.high))
        return f"{head} ({' to '.join(ends)})"
    if isfinite(p.low):
        return f"{head} (at least {rounded(p.low, p.value)}, no upper bound)"
    if isfinite(p.high):
        return f"{head} (at most {rounded(p.high, p.value)}, no lower bound)"
    return f"{head} (not bounded by the data)"


def rates_in_words(f: Fit) -> str:
    """Write the rate parameters of a fit."""
    return ", ".join(with_interval(p) for p in f.parameters if p.name in f.model.law.rates)


def verdict(
    fits: Sequence[Fit],
    in_play: Sequence[Fit],
    preferred: str | None,
    failed: Mapping[str, str],
    reached: Outcome,
) -> str:
    """Say in one or two plain sentences what the data allow and what they do not."""
    best = fits[0]
    if preferred is not None and len(fits) == 1:
        words = f"{best.law}: {rates_in_words(best)}; no other law was tried."
    elif preferred is not None:
        words = f"The data single out {best.law}: {rates_in_words(best)}."
    elif len(in_play) > 1:
        each = "; ".join(f"{f.law}: {rates_in_words(f)}" for f in in_play)
        words = f"The data cannot tell between {_listed([f.law for f in in_play])} ({each})."
        conversion = reached.conversion.value
        if isfinite(conversion) and conversion < _TELLING_CONVERSION:
            words += (
                f" At {100 * conversion:.0f} % conversion that is usual: follow to 75 %, or repeat "
                "with another starting concentration."
            )
        else:
            words += " A run at another starting concentration would decide."
    elif best.diagnostics.correlated:
        words = (
            f"{best.law} fits best ({rates_in_words(best)}), but its residuals are correlated: "
            "the law may be wrong or something drifts, so no law is singled out."
        )
    else:
        words = f"{best.law} fits best, but the data do not bound its rate: {rates_in_words(best)}."
    if failed:
        words += " Not fitted: " + "; ".join(failed.values()) + "."
    return words


def _listed(names: Sequence[str]) -> str:
    return names[0] if len(names) == 1 else ", ".join(names[:-1]) + " and " + names[-1]
