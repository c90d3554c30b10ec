"""What the readers share: limits on what a file may declare, and checks of what was read."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np

from kinetics.errors import UnreadableError
from kinetics.remarks import Remark
from kinetics.spectra.model import Complex64

# No 1H FID or spectrum of a reaction is longer than a few hundred thousand points.
MOST_POINTS = 1 << 21
MOST_ROWS = 1 << 16
MOST_BYTES = 256 << 20
MOST_PARAMETER_BYTES = 4 << 20
FEWEST_POINTS = 64

# Some shares show a file at full size before its content: what is not there yet is zero.
EMPTY_END = "the end of the data is still empty"
EMPTY_END_BYTES = 256
_HOLE_POINTS = 256


def checked_nucleus(nucleus: str) -> str:
    """Return the nucleus without decoration.

    Raises
    ------
    UnreadableError
        If it is not 1H.
    """
    plain = nucleus.replace("^", "").replace("<", "").replace(">", "").strip()
    if plain and plain.upper() not in ("1H", "H1", "H", "OFF"):
        raise UnreadableError(f"the spectrum is of {plain[:20]}, not of 1H")
    return "" if plain.upper() == "OFF" else plain


def checked_points(count: int) -> int:
    """Return a declared number of points.

    Raises
    ------
    UnreadableError
        If no spectrum has that many.
    """
    if count < FEWEST_POINTS:
        plural = "point" if count == 1 else "points"
        raise UnreadableError(f"the spectrum has only {count} {plural}")
    if count > MOST_POINTS:
        raise UnreadableError(f"the declared number of points ({count}) makes no sense")
    return count


def checked_scale(**values: float) -> None:
    """Check quantities that must be finite and above zero.

    Raises
    ------
    UnreadableError
        If one is not; its name, underlines as spaces, is in the message.
    """
    for name, value in values.items():
        if not (np.isfinite(value) and value > 0):
            raise UnreadableError(f"the {name.replace('_', ' ')} ({value:g}) makes no sense")


def checked_finite(values: np.ndarray) -> None:
    """Check that all values are numbers and some are not zero.

    Raises
    ------
    UnreadableError
        If not.
    """
    if not np.isfinite(values).all():
        raise UnreadableError("the data contain values that are not numbers")
    if not values.any():
        raise UnreadableError("all data points are zero: nothing was acquired")


def moment(seconds: Any) -> datetime | None:
    """Return Unix seconds as a time in UTC; None for zero, nonsense, or the far future."""
    try:
        number = float(seconds)
        return datetime.fromtimestamp(number, UTC) if 86400 < number < 4e9 else None
    except (TypeError, ValueError, OSError, OverflowError):
        return None


def modified(path: Path) -> datetime:
    """Return when a file was last written, UTC."""
    return datetime.fromtimestamp(path.stat().st_mtime, UTC)


def number(entries: Mapping[str, Any], key: str) -> float | None:
    """Return an entry as a finite number, None where it is not one."""
    try:
        value = float(str(entries[key]).strip().strip("<>"))
    except (KeyError, ValueError):
        return None
    return value if np.isfinite(value) else None


def clipped(values: Any) -> tuple[Remark, ...]:
    """Remark on a receiver that was driven into its limit: flat tops at the largest value."""
    parts = np.concatenate((values.real, values.imag))
    top = np.abs(parts).max()
    # An FID reaches its largest value once; a clipped one stays there.
    if top > 0 and np.count_nonzero(np.abs(parts) >= 0.9999 * top) > 8:
        return (
            Remark(
                "receiver-clipped",
                "The FID stays at its largest value for several points: the receiver clipped.",
                "Line shapes and integrals are distorted.",
                "Lower the receiver gain or the pulse angle.",
                doubtful=True,
            ),
        )
    return ()


def holes(values: Complex64) -> tuple[Remark, ...]:
    """Remark on a stretch of zeros inside a FID: a part of the file that never arrived."""
    filled = np.flatnonzero(values)
    edges = np.concatenate(([-1], filled, [values.size]))
    longest = int(np.diff(edges).max()) - 1
    if longest < _HOLE_POINTS:
        return ()
    return (
        Remark(
            "data-hole",
            f"{longest} points in a row are exactly zero.",
            "A part of the data did not arrive, or the acquisition was stopped; lines are broad "
            "or have feet, and integrals are off.",
            "Compare with the file on the instrument.",
            doubtful=True,
        ),
    )


def carrier_unknown() -> Remark:
    """Remark on a FID that does not say where its centre lies."""
    return Remark(
        "carrier-unknown",
        "The file does not say which shift the centre of the spectrum has.",
        "0 ppm was taken; the shift reference then puts the axis right.",
        "Give [shift_reference] a window as the uncorrected axis shows it.",
    )


def rows_present(rows: Complex64) -> int:
    """Return how many rows of a series are there to their end: those to come are still zero."""
    ends = rows[:, -EMPTY_END_BYTES // 8 :].any(axis=1)
    filled = np.flatnonzero(ends)
    return int(filled[-1]) + 1 if filled.size else 0
