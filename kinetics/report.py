"""`report`: a run in one HTML file that can be read, printed and kept without anything else.

Everything is gathered as plain values here and laid out by `templates/report.html.j2`, which
escapes every text it is given. The page carries no script and asks for nothing outside itself.
"""

from dataclasses import replace
from datetime import UTC, datetime
from math import isfinite
from pathlib import Path

import jinja2
import numpy as np

from kinetics import report_figures as figures
from kinetics.errors import FitError, InputError, LogbookError, NothingToDoError
from kinetics.logbook.view import Entry, LogbookView
from kinetics.measure import follow_plan
from kinetics.rates.fitting import Fit
from kinetics.rates.laws import law_named, mechanism_of, unit_of
from kinetics.rates.study import Study, with_law_first
from kinetics.remarks import Remark
from kinetics.report_record import (
    Facts,
    aside_of,
    events_of,
    record_of,
    table_of,
    time_of,
    unreadable_of,
)
from kinetics.report_words import (
    Scale,
    clock,
    methods,
    pretty,
    ranges,
    scale_of,
    unit_words,
    value_and_interval,
)
from kinetics.run import Run, study_run
from kinetics.show import Drawn, drawn_spectrum
from kinetics.signals.quality import LOST_REFERENCE_SNR
from kinetics.table import save_text
from kinetics.version import __version__

# A window is enlarged with this part of its width on either side.
_AROUND = 0.5
_CAUTIONS = (
    "This is not a safety interlock, and no decision about heating, cooling, dosing or release "
    "may hang on it alone. Follow the site's procedure.",
    "A conversion that stalls while feed goes on means that reactant accumulates, and with it the "
    "heat that it can still give off. Act by the site's procedure, not by this page.",
    "An interval speaks of this run alone. It is not reproducibility: replicate runs usually "
    "scatter more (runs of the same reaction have been seen to differ by 10 %).",
    "A law that fits is not a mechanism, and a forecast holds only while nothing changes: "
    "temperature, catalyst, mixing, feed.",
)


def save_report(run: Run, path: Path) -> None:
    """Write the report of a run as one HTML file, whole or not at all.

    Raises
    ------
    InputError
        If the file cannot be written.
    """
    save_text(path, report_html(run))


def report_html(run: Run, made: datetime | None = None) -> str:
    """Return the report of a run as an HTML page.

    Parameters
    ----------
    run
        The run; without a successful fit the report says why there is none.
    made
        Moment it is dated with, UTC; None: now.
    """
    scale = scale_of(run)
    study, why = _studied(run)
    with LogbookView(run.logbook) as view:
        record = record_of(run, view)
    environment = jinja2.Environment(
        loader=jinja2.PackageLoader("kinetics"),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    return environment.get_template("report.html.j2").render(
        title=run.sheet.title or run.logbook.name,
        made=clock(made or datetime.now(UTC), "UTC"),
        version=__version__,
        scale=scale,
        cautions=_CAUTIONS,
        asked=_asked(run),
        answer=None if study is None else _answer(run, study, scale),
        why=why,
        species=[(name, figures.key(i)) for i, name in enumerate(run.sheet.species)],
        trend=figures.trend_figure(run, study, scale) if run.measured.size else None,
        beyond=_beyond(run),
        bars=run.measured.size <= figures.MOST_BARS,
        residuals=None if study is None else figures.residual_figure(run, study, scale),
        spectra=_spectra(run),
        quality=_quality(run),
        events=events_of(run, scale),
        aside=aside_of(run),
        unreadable=unreadable_of(run),
        methods=methods(run, study),
        time=time_of(run),
        record=record,
        sheet_text=run.sheet_text,
        table=table_of(run, scale),
    )


def _studied(run: Run) -> tuple[Study | None, str]:
    """The study, a law that a person chose in front, or else why there is none."""
    try:
        return with_law_first(study_run(run), run.chosen_law), ""
    except NothingToDoError:
        return None, "No spectrum has been measured that could be fitted."
    except (FitError, InputError) as error:
        return None, str(error)


def _asked(run: Run) -> Facts:
    sheet, k = run.sheet, run.sheet.kinetics
    kelvin = run.temperature_k
    temperature = ""
    if kelvin is not None:
        source = "by the sheet" if sheet.temperature_c is not None else "mean of the spectra's own"
        u = f" ± {sheet.temperature_u_c:g}" if sheet.temperature_u_c else ""
        temperature = f"{kelvin - 273.15:.2f}{u} °C ({kelvin:.2f} K), {source}"
    laws = []
    for name in k.laws:
        law = law_named(name)
        units = [
            f"{rate}: {unit_words(unit_of(rate, law, sheet.amount_unit))}" for rate in law.rates
        ]
        laws.append({"name": name, "equation": law.equation, "units": "; ".join(units),
                     "where": _symbols(run, name)})  # fmt: skip
    return {
        "experiment": sheet.experiment,
        "solvent": sheet.solvent,
        "temperature": temperature,
        "reaction": _reaction(run),
        "limiting": run.question().limiting_species,
        "charged": [(name, f"{amount:g} mol/L") for name, amount in k.charged.items()],
        "reference": _reference(run),
        "laws": laws,
        "scheme": list(k.scheme),
        "range": (
            f"from {run.fit_from[1]}"
            + (f" ({run.fit_from[0]:g} s)" if run.fit_from[0] is not None else "")
            + (f" to {k.fit_to_s:g} s" if k.fit_to_s is not None else " to the last spectrum")
        ),
        "confidence": f"{100 * k.confidence:g} %",
        "target": None if k.target_conversion is None else f"{100 * k.target_conversion:g} %",
    }


def _symbols(run: Run, name: str) -> list[tuple[str, str]]:
    """What [A], [B] and [P] stand for in the equation of a law."""
    law = law_named(name)
    try:
        mechanism = mechanism_of(law, run.question())
    except InputError:
        return []
    out = [("A", mechanism.reactants[0][0])]
    if mechanism.intermediate is not None:
        out.append(("B", mechanism.intermediate))
    elif "[B]" in law.equation:
        out.append(("B", mechanism.reactants[1][0]))
    if "[P]" in law.equation:
        out.append(("P", mechanism.products[0][0]))
    return out


def _reaction(run: Run) -> str:
    k = run.sheet.kinetics

    def side(species: dict[str, float]) -> str:
        return " + ".join(n if c == 1 else f"{c:g} {n}" for n, c in species.items())

    middle = f" → {k.intermediate}" if k.intermediate else ""
    return f"{side(k.consumed)}{middle} → {side(k.formed) or '…'}"


def _reference(run: Run) -> str:
    reference = run.sheet.reference
    if reference.kind == "closure":
        return "closure: the weighted sum of all species equals what was charged"
    if reference.kind == "none":
        return "none: integrals per scan as they are, the receiver taken as steady"
    words = [reference.name or "reference", f"{reference.protons:g} H"]
    if reference.window is not None:
        words.append(f"{reference.window[1]:g} to {reference.window[0]:g} ppm")
    if reference.concentration is None:
        return ", ".join([*words, "no concentration given: amounts are ratios to it"])
    u = reference.concentration_u
    spread = f" ± {u:g} (standard uncertainty)" if u is not None else ""
    return ", ".join([*words, f"{reference.concentration:g}{spread} mol/L"])


def _answer(run: Run, study: Study, scale: Scale) -> Facts:
    reached, forecast = study.outcome, study.forecast
    conversion = value_and_interval(reached.conversion, 100)
    yields = [
        (name, value_and_interval(q, 100), value_and_interval(reached.selectivity[name], 100))
        for name, q in reached.yields.items()
    ]
    time = value_and_interval(forecast.time_s, 1 / scale.second)
    choice = next((d for d in reversed(run.decisions) if d.kind == "law" and d.new), None)
    chosen = run.chosen_law is not None and study.best.law == run.chosen_law
    last = float(study.best.series.time_s[-1]) / scale.second
    return {
        "verdict": pretty(study.verdict),
        "chosen": (run.chosen_law, choice.who, choice.why) if chosen and choice else None,
        "preferred": study.preferred,
        "fits": [_fit(f, study, scale) for f in study.fits],
        "failed": list(study.failed.items()),
        "systematic": f"{100 * study.best.series.systematic:.2g} %"
        if study.best.series.systematic
        else "",
        "conversion": conversion,
        "basis": "the amount charged" if reached.basis == "charged" else "the fitted start",
        "at": f"{last:.4g} {scale.time}",
        "yields": yields,
        "target": f"{100 * forecast.target_conversion:g} %"
        if isfinite(forecast.target_conversion)
        else None,
        "reached": forecast.reached,
        "time": (f"{time[0]} {scale.time}", time[1]) if time[1] or time[0] != "—" else None,
        "balance": study.balance,
        "remarks": [str(r) for r in (*study.remarks, *run.remarks())],
    }


def _fit(fit: Fit, study: Study, scale: Scale) -> Facts:
    half = fit.half_life()
    other = f" ({half.value / scale.second:.4g} {scale.time})" if scale.time != "s" else ""
    text, interval = value_and_interval(half)
    return {
        "law": fit.law,
        "equation": fit.equation,
        "points": fit.points,
        "weight": f"{study.weights[fit.law]:.3f}",
        "residual": f"{scale.factor * fit.residual_sd:.3g} {scale.amount}",
        "parameters": [
            (p.name, *value_and_interval(p), unit_words(p.unit), p.name in fit.model.law.rates)
            for p in fit.parameters
        ],
        "half": (f"{text} s{other}", interval) if isfinite(half.value) else None,
        "remarks": [str(remark) for remark in fit.diagnostics.remarks],
    }


def _spectra(run: Run) -> Facts | None:
    """First and last spectrum: of those that are fitted where there are any."""
    rows = run.measured[run.fitted] if run.fitted.size else run.measured
    if rows.size == 0:
        return None
    entries = [run.entries[i] for i in dict.fromkeys((int(rows[0]), int(rows[-1])))]
    try:
        whole = [drawn_spectrum(run, entry) for entry in entries]
        windows = []
        for _, low, high in whole[0].windows:
            margin = _AROUND * (high - low)
            part = (low - margin, high + margin)
            windows.append([drawn_spectrum(run, e, part, 600) for e in entries])
        common = run.sheet.reference.kind == "signal" and all(
            e.integrals is not None and e.integrals.heights[0] >= LOST_REFERENCE_SNR
            for e in entries
        )
        if common:
            windows = _to_reference(windows)
    except LogbookError as error:
        return {"names": [e.source for e in entries], "why": str(error), "signals": []}
    return {
        "names": [e.source for e in entries],
        "why": "",
        "whole": figures.spectra_figure(whole),
        "windows": figures.window_figure(windows),
        "common": common,
        "corrected": run.sheet.processing.baseline != "none",
        "signals": _signals(run, entries),
    }


def _to_reference(windows: list[list[Drawn]]) -> list[list[Drawn]]:
    """Draw all spectra to the same height of the reference, which is their first window."""
    tops = [max(float(d.intensities.max(initial=0.0)), 1e-6) for d in windows[0]]
    return [
        [
            replace(d, intensities=d.intensities / np.float32(top))
            for d, top in zip(row, tops, strict=True)
        ]
        for row in windows
    ]


def _signals(run: Run, entries: list[Entry]) -> list[Facts]:
    plan = follow_plan(run.sheet)
    out = []
    for index, signal in enumerate(plan.all):
        moved, heights = [], []
        for entry in entries:
            if entry.integrals is not None:
                moved.append(f"{entry.integrals.offsets_ppm[index]:+.4f}")
                heights.append(f"{entry.integrals.heights[index]:.0f}")
        out.append(
            {
                "letter": figures.letter(index),
                "species": signal.species,
                "reference": signal is plan.reference,
                "window": f"{signal.window[1]:.3f} to {signal.window[0]:.3f}",
                "protons": f"{signal.protons:g}",
                "moved": moved,
                "heights": heights,
            }
        )
    return out


def _beyond(run: Run) -> int:
    """How many values of doubtful or set-aside spectra the trend leaves out."""
    states = np.array([run.states[i] for i in run.measured])
    if not states.size:
        return 0
    values = run.amounts.values
    return figures.outside(values, values[states == "measured"])[2]


def _quality(run: Run) -> Facts:
    counts = run.counts()
    groups: dict[tuple[str, str], list[int]] = {}
    latest: dict[tuple[str, str], Remark] = {}
    for number, entry in enumerate(run.entries, 1):
        for remark in dict.fromkeys(entry.remarks):
            which = (remark.code, remark.subject)
            groups.setdefault(which, []).append(number)
            latest[which] = remark
    groups = {which: sorted(set(numbers)) for which, numbers in groups.items()}
    frequent = sorted(groups, key=lambda which: (not latest[which].doubtful, -len(groups[which])))
    typical = ""
    sound = [row for row in run.fitted if run.states[run.measured[row]] == "measured"]
    if sound:
        u = run.amounts.standard_uncertainty[sound]
        top = float(np.abs(run.amounts.values[sound]).max())
        typical = f"{100 * float(np.median(u)) / max(top, 1e-300):.2g} %"
    return {
        "counts": [(state, number) for state, number in counts.items()],
        "total": len(run.entries),
        "remarks": [
            {
                "text": str(latest[which]),
                "subject": latest[which].subject,
                "doubtful": latest[which].doubtful,
                "often": len(groups[which]),
                "which": ranges(groups[which]),
            }
            for which in frequent
        ],
        "typical": typical,
        "run": [str(remark) for remark in run.remarks()],
    }
