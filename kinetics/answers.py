"""The answer of a run, as the JSON of ``fit --json`` and as lines for people."""

from typing import Any

import numpy as np

from kinetics.rates.study import Study, document
from kinetics.rates.words import rounded, with_interval
from kinetics.run import Run
from kinetics.version import __version__


def fit_document(run: Run, result: Study) -> dict[str, Any]:
    """Return the JSON document of ``fit --json``."""
    counts = run.counts()
    return {
        "schema": 1,
        "run": {
            "title": run.sheet.title,
            "experiment": run.sheet.experiment,
            "temperature_k": run.temperature_k,
            "sheet_version": run.sheet_version,
            "program_version": __version__,
        },
        "spectra": {
            "measured": counts["measured"],
            "doubtful": counts["doubtful"],
            "set_aside": counts["set-aside"],
            "unreadable": counts["unreadable"],
        },
        **document(result),
        "remarks": [str(remark) for remark in run.remarks()],
    }


def fit_words(run: Run, result: Study) -> list[str]:
    """Return what ``fit`` prints for people."""
    counts = run.counts()
    lines = [
        run.sheet.title or run.logbook.name,
        "spectra: " + ", ".join(f"{n} {state}" for state, n in counts.items() if n),
        "",
    ]
    percent = f"{100 * result.question.confidence:g} %"
    for f in result.fits:
        lines.append(
            f"{f.law}   {f.equation}   weight {result.weights[f.law]:.3f}   {f.points} spectra"
        )
        lines += [f"    {with_interval(p)}" for p in f.parameters]
        half = f.half_life()
        if np.isfinite(half.value):
            ends = f"({rounded(half.low, half.value)} to {rounded(half.high, half.value)})"
            lines.append(f"    half-life {rounded(half.value, half.low, half.high)} s {ends}")
        lines += [f"    ! {remark}" for remark in f.diagnostics.remarks]
    lines += ["", result.verdict, f"Intervals: {percent}, profile likelihood."]
    if result.best.series.systematic:
        lines.append(
            f"Beside them, {100 * result.best.series.systematic:.2g} % standard uncertainty of the "
            "reference's concentration: it scales amounts and second-order constants, "
            "not first-order ones."
        )
    lines.append(
        "An interval is that of this run; replicate runs usually scatter more (runs of the same "
        "reaction have been seen to differ by 10 %)."
    )
    lines += [f"! {remark}" for remark in run.remarks()]
    return lines
