"""`plan`: before the run, how often and how long to measure, and how well k will then be known."""

from dataclasses import asdict
from pathlib import Path
from typing import Any

from kinetics.errors import InputError
from kinetics.rates.plan import Setup, advice, best_length_s, expected, spectra_for
from kinetics.rates.question import Question
from kinetics.rates.study import plain
from kinetics.rates.words import rounded
from kinetics.sheet import Sheet, read_sheet


def plan_run(
    sheet_path: Path,
    *,
    half_life_s: float,
    snr: float = 100.0,
    spectra: int = 40,
    acquisition_s: float = 0.0,
    length_s: float | None = None,
    precision: float = 0.02,
) -> dict[str, Any]:
    """Work out what a run will tell, for every law of the sheet in turn.

    Parameters
    ----------
    sheet_path
        The run sheet that will be used.
    half_life_s
        Expected half-life of the limiting species, s.
    snr
        Expected amount over its noise in one spectrum, of the limiting species at the start.
    spectra
        How many are planned.
    acquisition_s
        Length of one, s.
    length_s
        How long to measure, s; None: as long as makes k most certain.
    precision
        Wanted relative half-width of the interval of k.

    Returns
    -------
    Plain JSON values.

    Raises
    ------
    SheetError, InputError
        If the sheet is wrong, a number is not positive, or the sheet has no law to plan for.
    """
    sheet, _ = read_sheet(sheet_path)
    for name, value in (("half-life", half_life_s), ("snr", snr), ("precision", precision)):
        if not value > 0:
            raise InputError(f"--{name} must be positive, got {value:g}")
    if spectra < 4:
        raise InputError(f"--spectra must be 4 at least, got {spectra}")
    if not sheet.kinetics.laws:
        raise InputError(f"{sheet_path}: kinetics.scheme: a plan needs laws instead of a scheme")
    question = _question(sheet)
    setup = _setup(sheet, question, half_life_s, snr, acquisition_s)
    outlooks = []
    for law in question.laws:
        length = length_s or best_length_s(setup, question, law, spectra)
        found = expected(setup, question, law, spectra, length)
        wanted = spectra_for(setup, question, law, length, precision)
        outlooks.append(
            {
                "law": law,
                "spectra": spectra,
                "length_s": length,
                "interval_s": length / spectra,
                "conversion": found.conversion,
                "k": found.k,
                "unit": found.unit,
                "half_width": plain(found.half_width),
                "order_half_width": plain(found.order_half_width),
                "told_from": {name: plain(value) for name, value in found.told_from.items()},
                "spectra_for_precision": wanted,
                "words": list(advice(setup, found, wanted, precision)),
            }
        )
    return {
        "schema": 1,
        "title": sheet.title,
        "assumed": {**asdict(setup), "precision": precision, "confidence": question.confidence},
        "outlooks": outlooks,
    }


def plan_words(outlook: dict[str, Any]) -> list[str]:
    """Put the outlook in lines for people."""
    assumed = outlook["assumed"]
    lines = [
        outlook["title"] or "Plan",
        f"assumed: half-life {assumed['half_life_s']:g} s, start "
        + ", ".join(f"{name} {value:g}" for name, value in assumed["start"].items())
        + f" {assumed['unit']}, noise of one amount {assumed['noise_sd']:.2g} {assumed['unit']}",
    ]
    for one in outlook["outlooks"]:
        lines += [
            "",
            f"if the law is {one['law']} (k about {rounded(one['k'])} {one['unit']}): a spectrum "
            f"every {one['interval_s']:.0f} s for {one['length_s']:.0f} s",
            *(f"  {words}" for words in one["words"]),
        ]
    return lines


def _question(sheet: Sheet) -> Question:
    k = sheet.kinetics
    return Question(
        consumed=dict(k.consumed),
        formed=dict(k.formed),
        intermediate=k.intermediate,
        limiting=k.limiting,
        charged=dict(k.charged),
        laws=tuple(k.laws),
        confidence=k.confidence,
    )


def _setup(
    sheet: Sheet, question: Question, half_life_s: float, snr: float, acquisition_s: float
) -> Setup:
    limiting = question.limiting_species
    if limiting is None:
        raise InputError("a plan needs a species in kinetics.consumed")
    charged = sheet.kinetics.charged
    unit = sheet.amount_unit if charged else "ratio"
    full = charged.get(limiting, 1.0)
    if not full > 0:
        raise InputError(f"kinetics.charged.{limiting}: must be positive for a plan")
    start = {
        name: charged.get(name, full if name in question.consumed else 0.0)
        for name in sheet.species
        if name in question.consumed or name in question.formed or name == question.intermediate
    }
    return Setup(
        start=start,
        half_life_s=half_life_s,
        noise_sd=full / snr,
        acquisition_s=acquisition_s,
        unit=unit,
    )
