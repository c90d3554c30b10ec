"""Can the numbers be trusted? What speaks for and against them, most important first."""

from collections import Counter
from dataclasses import dataclass

import numpy as np

from kinetics.rates.study import Study
from kinetics.remarks import Remark
from kinetics.run import Run

# A balance within 3 % is what careful integration at moderate S/N gives (common practice).
_BALANCE_OFF = 0.05


@dataclass(frozen=True, slots=True)
class Trust:
    """A summary in words.

    Attributes
    ----------
    headline
        One short sentence.
    concerns
        What speaks against the numbers.
    supports
        What speaks for them.
    """

    headline: str
    concerns: tuple[str, ...]
    supports: tuple[str, ...]


def grouped_remarks(run: Run) -> list[tuple[Remark, int]]:
    """Return each kind of remark once, with the number of spectra it was made on."""
    counts: Counter[tuple[str, str]] = Counter()
    example: dict[tuple[str, str], Remark] = {}
    for entry in run.entries:
        for remark in entry.remarks:
            key = (remark.code, remark.subject)
            counts[key] += 1
            example[key] = remark  # the latest: its numbers are what holds now
    return [(example[key], number) for key, number in counts.most_common()]


def trust(run: Run, study: Study | None) -> Trust:
    """Weigh what is known about a run."""
    counts = run.counts()
    total = sum(counts.values())
    concerns: list[str] = []
    supports: list[str] = []
    if counts["doubtful"]:
        concerns.append(f"{counts['doubtful']} of {total} spectra are doubtful.")
    if counts["unreadable"]:
        concerns.append(f"{counts['unreadable']} of {total} files could not be read.")
    concerns += [str(remark) for remark in run.remarks()]
    for remark, number in grouped_remarks(run)[:6]:
        concerns.append(f"In {number} of {total} spectra: {remark}")
    if study is not None:
        concerns += [str(remark) for remark in study.remarks]
        if study.balance is not None:
            words = (
                f"Matter found over matter expected: {study.balance.mean:.3f} in the mean, "
                f"{study.balance.worst:.3f} at worst."
            )
            off = abs(study.balance.mean - 1) > _BALANCE_OFF
            (concerns if off else supports).append(words)
        if not study.best.diagnostics.correlated:
            supports.append("The points scatter about the curve without pattern.")
    if run.fitted.size:
        values = run.amounts.values[run.fitted]
        spread = np.median(run.amounts.standard_uncertainty[run.fitted] / np.abs(values).max())
        supports.append(
            f"A typical point is good to {100 * float(spread):.2g} % of the largest amount."
        )
    heavy = counts["doubtful"] > 0.2 * max(total, 1) or (
        study is not None and study.best.diagnostics.correlated
    )
    headline = (
        "Look before you rely on it"
        if heavy
        else "Sound, with remarks"
        if concerns
        else "Nothing speaks against it"
    )
    return Trust(headline, tuple(concerns), tuple(supports))
