"""`table`: one row a spectrum, as CSV."""

import csv
import io
import os
from datetime import datetime
from pathlib import Path
from typing import TextIO

import numpy as np

from kinetics.errors import InputError
from kinetics.run import Run


def rows(run: Run) -> tuple[list[str], list[list[str]]]:
    """Return the header and the rows, every cell as text; what cannot be had is empty."""
    species = run.amounts.species
    header = ["file", "state", "time_s", "clock", "temperature_c"]
    for name in species:
        header += [name, f"{name}_u"]
    header += ["unit", "remarks"]
    place = {int(entry): row for row, entry in enumerate(run.measured)}
    errors = run.amounts.standard_uncertainty
    out = []
    for i, entry in enumerate(run.entries):
        kelvin = run.temperatures_k[i]
        celsius = run.sheet.temperature_c if kelvin is None else kelvin - 273.15
        cells = [
            entry.source,
            run.states[i],
            _number(float(run.time_s[i]), ".3f"),
            _clock(run.timeline.mid[i]),
            "" if celsius is None else f"{celsius:.2f}",
        ]
        row = place.get(i)
        for column in range(len(species)):
            if row is None:
                cells += ["", ""]
            else:
                cells += [
                    _number(float(run.amounts.values[row, column]), ".9g"),
                    _number(float(errors[row, column]), ".3g"),
                ]
        words = [str(remark) for remark in entry.remarks]
        words += [entry.reason] if entry.reason else []
        if run.states[i] == "set-aside":
            words.append(f"set aside: {run.aside[entry.source]}")
        cells += [run.amounts.unit, " | ".join(words)]
        out.append(cells)
    return header, out


def write_csv(run: Run, to: TextIO) -> None:
    """Write the table to an open text file."""
    header, body = rows(run)
    writer = csv.writer(to, lineterminator="\n")
    writer.writerow(header)
    writer.writerows([_inert(cell) for cell in row] for row in body)


def save_csv(run: Run, path: Path) -> None:
    """Write the table to a file, whole or not at all.

    Raises
    ------
    InputError
        If it cannot be written.
    """
    buffer = io.StringIO()
    write_csv(run, buffer)
    save_text(path, buffer.getvalue())


def save_text(path: Path, text: str) -> None:
    """Write a file beside its place and move it there.

    Raises
    ------
    InputError
        If it cannot be written.
    """
    part = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        part.write_text(text, encoding="utf-8", newline="")
        part.replace(path)
    except OSError as why:
        part.unlink(missing_ok=True)
        raise InputError(f"{path}: cannot be written ({why.strerror})") from None


def _number(value: float, form: str) -> str:
    return format(value, form) if np.isfinite(value) else ""


def _clock(moment: datetime | None) -> str:
    return "" if moment is None else moment.strftime("%Y-%m-%dT%H:%M:%S.%f")[:-3] + "Z"


def _inert(cell: str) -> str:
    """Keep a spreadsheet from taking untrusted text for a formula."""
    return f"'{cell}" if cell[:1] in ("=", "@", "\t") else cell
