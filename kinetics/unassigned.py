"""The remarks on lines that no window names, from a run's logbook."""

from pathlib import Path

import numpy as np

from kinetics.logbook.view import Entry, LogbookView
from kinetics.remarks import Remark
from kinetics.sheet import Sheet
from kinetics.signals.unassigned import Unassigned, unassigned
from kinetics.spectra.model import Float64


def unassigned_remarks(
    logbook: Path, entries: tuple[Entry, ...], time_s: Float64, sheet: Sheet
) -> tuple[Remark, ...]:
    """Return a remark for each line outside all windows that grows or fades.

    Parameters
    ----------
    logbook
        Folder of the logbook.
    entries, time_s
        The measured spectra in order of time, and their times in s.
    sheet
        Of the run.
    """
    if len(entries) == 0:
        return ()
    with LogbookView(logbook) as view:
        picture = view.picture(entries)
        limits = (view.meta("picture") or "0 1").split()
    reference = sheet.reference.window if sheet.reference.kind == "signal" else None
    windows = tuple(s.window for s in sheet.signals) + ((reference,) if reference else ())
    known = [e.facts.get("frequency_mhz") for e in entries]
    frequency = next((float(value) for value in known if value), float("nan"))
    found = unassigned(
        picture,
        (float(limits[0]), float(limits[1])),
        windows,
        sheet.processing.exclude,
        reference,
        frequency,
    )
    protons = sheet.reference.protons if reference else float("nan")
    return tuple(_remark(one, entries, time_s, protons) for one in found)


def _remark(one: Unassigned, entries: tuple[Entry, ...], time_s: Float64, protons: float) -> Remark:
    grows = one.change > 0
    size = f"{100 * abs(one.change):.2g} % of the reference's height"
    if np.isfinite(protons):
        size += f", about {abs(one.change) * protons:.2g} of its {protons:g} protons if as narrow"
    return Remark(
        "unassigned-grows" if grows else "unassigned-fades",
        f"A line at {one.ppm:.2f} ppm that no window names has {'grown' if grows else 'faded'} "
        f"by {size} ({abs(one.sigma):.0f} standard deviations), first seen in the ten spectra "
        f"from {entries[one.first_row].source} ({time_s[one.first_row]:.0f} s) on.",
        "An impurity or intermediate takes part of the balance of matter with it."
        if grows
        else "Something nobody follows is used up.",
        "Look at the spectra there; if you can name it, add a window for it to the sheet.",
        subject=f"{one.ppm:.2f} ppm",
    )
