"""A temperature log joined to the spectra of a run.

The log is a text file with a header that names its columns ``time`` and ``celsius`` (others are
ignored), divided by comma, semicolon or tab; with the latter two a decimal comma is understood.
Times are ISO 8601; without an offset they are local to the run's zone, and the hour that comes
twice when summer time ends is told apart by the order of the rows.
"""

import re
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta
from pathlib import Path
from stat import S_ISREG
from zoneinfo import ZoneInfo

import numpy as np

from kinetics.errors import InputError
from kinetics.remarks import Remark
from kinetics.sheet import Sheet
from kinetics.spectra.clock import in_utc
from kinetics.spectra.model import Float64

# Activation energy by which a spread of temperature is judged, J/mol: common practice for organic
# reactions in solution is 50 to 100 kJ/mol.
TYPICAL_ENERGY = 80e3
_GAS_CONSTANT = 8.314462618
# A spread that moves k by more than this share is remarked on.
_MATTERS = 0.02
# A spectrum this long (s) outside the log, or inside a gap of it, has no temperature.
_REACH_S = 600.0
_MOST_BYTES = 16 << 20
_ABSOLUTE_ZERO_C = -273.15


@dataclass(frozen=True, slots=True, eq=False)
class TemperatureTrace:
    """A log: Unix time in s, ascending, shape (n,), and temperature in K, shape (n,)."""

    time_s: Float64
    kelvin: Float64

    def mean(self, start: datetime, end: datetime) -> float | None:
        """Return the mean over a span in K; None where the log has a gap or does not reach."""
        a, b = start.timestamp(), end.timestamp()
        at = np.linspace(a, b, 9)
        after = np.clip(np.searchsorted(self.time_s, at), 0, self.time_s.size - 1)
        before = np.clip(after - 1, 0, self.time_s.size - 1)
        reach = np.minimum(np.abs(self.time_s[after] - at), np.abs(self.time_s[before] - at))
        if np.any(reach > _REACH_S):
            return None
        return float(np.interp(at, self.time_s, self.kelvin).mean())


def read_log(text: str, zone: str) -> TemperatureTrace:
    """Read a temperature log; a last line that is still being written is left out.

    Raises
    ------
    InputError
        If it does not hold the two columns; the message says what was expected.
    """
    lines = [line for line in text.lstrip("\ufeff").splitlines(keepends=True) if line.strip()]
    if lines and not lines[-1].endswith(("\n", "\r")):
        lines.pop()
    if not lines:
        raise InputError("the temperature log is empty; expected columns time and celsius")
    divider = next((c for c in (";", "\t", ",") if c in lines[0]), ",")
    names = [name.strip().strip('"').lower() for name in lines[0].split(divider)]
    if "time" not in names or "celsius" not in names:
        raise InputError(
            f"the first line of the temperature log is {lines[0].strip()[:60]!r}; expected column "
            "names, among them time and celsius"
        )
    columns = names.index("time"), names.index("celsius")
    moments: list[float] = []
    kelvin: list[float] = []
    previous: datetime | None = None
    for number, line in enumerate(lines[1:], 2):
        cells = [cell.strip().strip('"') for cell in line.split(divider)]
        try:
            moment = datetime.fromisoformat(cells[columns[0]].replace("/", "-"))
            celsius = float(re.sub(",", ".", cells[columns[1]]))
        except (IndexError, ValueError):
            raise InputError(
                f"line {number} of the temperature log is {line.strip()[:60]!r}; expected a time "
                "as in 2026-03-03T19:00:00 and degrees Celsius"
            ) from None
        if not (np.isfinite(celsius) and _ABSOLUTE_ZERO_C < celsius < 1000):
            continue  # a sensor that was unplugged
        previous = in_utc(moment, ZoneInfo(zone), previous)
        moments.append(previous.timestamp())
        kelvin.append(celsius - _ABSOLUTE_ZERO_C)
    if not moments:
        raise InputError("the temperature log holds no temperature yet")
    order = np.argsort(moments, kind="stable")
    return TemperatureTrace(np.array(moments)[order], np.array(kelvin)[order])


@dataclass(frozen=True, slots=True)
class Logged:
    """What a log says of the spectra of a run.

    Attributes
    ----------
    kelvin
        Mean temperature of each acquisition in K, None where the log does not cover it; None in
        all where the log cannot be used.
    problem
        Why it cannot be used, in words; empty if it can.
    """

    kelvin: tuple[float | None, ...] | None
    problem: str


def join(
    text: str | None,
    sheet: Sheet,
    zone: str,
    start: Sequence[datetime | None],
    end: Sequence[datetime | None],
) -> Logged:
    """Join the log that a sheet names to the spectra of a run.

    Parameters
    ----------
    text
        Text of the log; None: there is no such file.
    sheet
        Where [temperature] stands, or not.
    zone
        Time zone of stamps without an offset.
    start, end
        Of each acquisition.
    """
    asked = sheet.temperature
    if asked is None:
        return Logged(None, "")
    if text is None:
        return Logged(None, f"there is no file {asked.log} beside the sheet")
    # What is in the probe of a flow loop was in the vessel a while before.
    lag = timedelta(seconds=sheet.time.lag_s if asked.place == "vessel" else 0.0)
    try:
        trace = read_log(text, zone)
    except InputError as why:
        return Logged(None, str(why))
    spans = zip(start, end, strict=True)
    return Logged(
        tuple(None if a is None or b is None else trace.mean(a - lag, b - lag) for a, b in spans),
        "",
    )


def changed_text(path: Path, known: tuple[int, int] | None) -> tuple[str, tuple[int, int]] | None:
    """Return the text of a log with its size and time; None if those are as known.

    Raises
    ------
    OSError
        If it cannot be read, or is no file of a reasonable size.
    """
    facts = path.stat()
    now = facts.st_size, facts.st_mtime_ns
    if now == known:
        return None
    if not S_ISREG(facts.st_mode) or facts.st_size > _MOST_BYTES:
        raise OSError(f"{path} is no file of less than {_MOST_BYTES >> 20} MiB")
    return path.read_bytes().decode("utf-8", "replace"), now


def remarks_on(logged: Logged, measured: Sequence[float | None]) -> tuple[Remark, ...]:
    """Remark on a log and on the temperatures of the spectra that were measured, K."""
    return (*_on_log(logged), *_on_spread(measured))


def _on_spread(kelvin: Sequence[float | None]) -> tuple[Remark, ...]:
    """Remark where the temperatures of a run's spectra differ enough to matter to k."""
    known = [t for t in kelvin if t is not None]
    if len(known) < 2:
        return ()
    spread, mean = max(known) - min(known), float(np.mean(known))
    change = TYPICAL_ENERGY / (_GAS_CONSTANT * mean**2) * spread
    if change < _MATTERS:
        return ()
    return (
        Remark(
            "temperature-varies",
            f"The temperature of the spectra spans {spread:.2f} °C "
            f"({min(known) - 273.15:.2f} to {max(known) - 273.15:.2f} °C).",
            f"With a typical activation energy of 80 kJ/mol, k changes by {100 * change:.0f} % "
            "over that; the k given is one for all.",
            "Fit the range in which it was steady ([kinetics] fit_from_s, fit_to_s).",
        ),
    )


def _on_log(logged: Logged) -> tuple[Remark, ...]:
    """Remark on a log that cannot be used, or does not cover all spectra."""
    if logged.kelvin is None:
        return (
            Remark(
                "temperature-log-unusable",
                f"The temperature log cannot be used: {logged.problem}.",
                "The temperatures the files recorded themselves are shown instead.",
                "Put the file that [temperature] log names beside the sheet.",
            ),
        )
    missing = logged.kelvin.count(None)
    if not missing:
        return ()
    return (
        Remark(
            "temperature-log-incomplete",
            f"{missing} of {len(logged.kelvin)} spectra lie outside the temperature log, or in a "
            "gap of it.",
            "They have no temperature; the run's is the mean of the others.",
        ),
    )
