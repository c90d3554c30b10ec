"""Figures of the report, drawn with matplotlib as SVG that stands inside a page.

No text of the user is ever drawn: species, windows and events carry symbols, letters and numbers,
which the page explains. So nothing in a figure needs escaping, and no font must know a name.
"""

import io
import re
import threading
from collections.abc import Callable, Sequence
from typing import Any

import matplotlib as mpl
import numpy as np
from markupsafe import Markup, escape
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from kinetics.rates.fitting import Fit
from kinetics.rates.study import IN_PLAY_DELTA, Study
from kinetics.report_words import Scale
from kinetics.run import Run, event_times
from kinetics.show import Drawn
from kinetics.spectra.model import Float64

# Hues by Okabe & Ito (Color Universal Design, 2008); symbol and dash tell species apart in grey.
_HUES = ("#0072B2", "#D55E00", "#009E73", "#A04A80", "#2A6F8F", "#8A5A00")
_MARKERS = ("o", "s", "^", "D", "v", "p")
_DASHES = ("-", "--", ":", "-.", (0, (6, 2, 2, 2)), (0, (8, 3)))
_INK, _FAINT, _RULE = "#1d2733", "#5d6b7a", "#d5dbe1"
_STYLE: Any = {
    "svg.fonttype": "none",
    "svg.hashsalt": "report",
    "text.parse_math": False,
    "font.family": "sans-serif",
    "font.sans-serif": ["DejaVu Sans"],
    "font.size": 8.5,
    "axes.edgecolor": _FAINT,
    "axes.labelcolor": _INK,
    "axes.linewidth": 0.7,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "xtick.color": _FAINT,
    "ytick.color": _FAINT,
    "xtick.labelcolor": _INK,
    "ytick.labelcolor": _INK,
    "text.color": _INK,
    "legend.frameon": False,
    "path.simplify": True,
}
# matplotlib's settings are global to the process, and pages are drawn from several threads.
_LOCK = threading.Lock()
_WIDTH_IN = 7.0
_CURVE_POINTS = 240
# Above this number of spectra bars are a smear and points are drawn as one picture.
MOST_BARS = 600
# Panels of residuals: that of the best law and of others in play.
_MOST_PANELS = 3
_STEMS = {
    "o": '<circle cx="18" cy="6" r="3.4"/>',
    "s": '<rect x="15" y="3" width="6" height="6"/>',
    "^": '<path d="M18 2 L21.8 9 L14.2 9 Z"/>',
    "D": '<path d="M18 2 L22 6 L18 10 L14 6 Z"/>',
    "v": '<path d="M18 10 L21.8 3 L14.2 3 Z"/>',
    "p": '<path d="M18 2 L21.8 4.8 L20.4 9.2 L15.6 9.2 L14.2 4.8 Z"/>',
}
_STROKES = ("", "5 2.5", "1.5 2", "6 2 1.5 2", "6 2 2 2", "8 3")


def letter(index: int) -> str:
    """Return the letter of a window: A … Z, AA, AB, …"""
    head = "" if index < 26 else letter(index // 26 - 1)
    return head + chr(ord("A") + index % 26)


def key(index: int) -> Markup:
    """Return line and symbol of a species as a small picture."""
    place = index % len(_HUES)
    dash = f' stroke-dasharray="{_STROKES[place]}"' if _STROKES[place] else ""
    return Markup(
        f'<svg class="key" viewBox="0 0 36 12" aria-hidden="true"><line x1="1" x2="35" y1="6" '
        f'y2="6" stroke="{_HUES[place]}" stroke-width="1.4"{dash}/>'
        f'<g fill="{_HUES[place]}">{_STEMS[_MARKERS[place]]}</g></svg>'
    )


def trend_figure(run: Run, study: Study | None, scale: Scale) -> Markup:
    """Draw amounts against time with the best law and its band."""

    def draw(figure: Figure) -> None:
        axes = figure.subplots()
        if study is not None:
            _curves(axes, run, study.best, scale)
        states = np.array([run.states[i] for i in run.measured])
        inside = np.isin(np.arange(run.measured.size), run.fitted)
        if study is not None:
            labels = set(study.best.series.labels)
            inside &= np.array([run.entries[i].source in labels for i in run.measured], bool)
        time = run.time_s[run.measured] / scale.second
        values = scale.factor * run.amounts.values
        errors = scale.factor * run.amounts.standard_uncertainty
        for column in range(len(run.amounts.species)):
            for kind, rows in (
                ("fitted", inside & (states == "measured")),
                ("doubtful", inside & (states == "doubtful")),
                ("outside", ~inside & (states != "set-aside")),
                ("set-aside", states == "set-aside"),
            ):
                if rows.any():
                    _points(axes, time[rows], values[rows, column], errors[rows, column],
                            column, kind, run.measured.size)  # fmt: skip
        _limit(axes, values, values[states == "measured"])
        for number, (seconds, _) in enumerate(event_times(run), 1):
            axes.axvline(seconds / scale.second, color=_FAINT, lw=0.8, ls=(0, (1, 2)), zorder=0)
            axes.annotate(
                str(number), (seconds / scale.second, 1.0), (0, 2), fontsize=7.5, ha="center",
                xycoords=("data", "axes fraction"), textcoords="offset points", color=_FAINT,
            )  # fmt: skip
        _dress(axes, scale.amount)
        axes.set_xlabel(f"time since the start / {scale.time}")

    return _svg(draw, 3.5, "trend", "Amounts of the species against time, with the fitted curve")


def _points(
    axes: Axes, x: Float64, y: Float64, u: Float64, column: int, kind: str, count: int
) -> None:
    place = column % len(_HUES)
    hue = _FAINT if kind == "set-aside" else _HUES[place]
    marker = "x" if kind == "set-aside" else _MARKERS[place]
    hollow = kind == "doubtful"
    axes.errorbar(
        x,
        y,
        yerr=u if count <= MOST_BARS else None,
        fmt=marker,
        ms=3.6 if count < 150 else 2.6,
        color=hue,
        mfc="white" if hollow else hue,
        mew=0.9 if hollow or kind == "set-aside" else 0.0,
        alpha=0.4 if kind == "outside" else 1.0,
        elinewidth=0.7,
        rasterized=count > MOST_BARS,
    )


def _curves(axes: Axes, run: Run, fit: Fit, scale: Scale) -> None:
    begin = min(fit.model.origin_s, float(fit.series.time_s[0]))
    times = np.linspace(max(begin, fit.model.origin_s), fit.series.time_s[-1], _CURVE_POINTS)
    values, low, high = (scale.factor * part for part in fit.curve(times))
    for column, species in enumerate(fit.model.observed):
        place = run.amounts.species.index(species) % len(_HUES)
        x, hue = times / scale.second, _HUES[place]
        axes.fill_between(x, low[:, column], high[:, column], color=hue, alpha=0.2, lw=0)
        axes.plot(x, values[:, column], color=hue, lw=1.2, ls=_DASHES[place])


def in_play(study: Study) -> tuple[Fit, ...]:
    """Return the fit shown first and those that the data cannot tell from the likeliest."""
    likeliest = min(f.aicc for f in study.fits)
    near = [f for f in study.fits[1:] if not f.aicc - likeliest > IN_PLAY_DELTA]
    return (study.best, *near)[:_MOST_PANELS]


def residual_figure(run: Run, study: Study, scale: Scale) -> Markup:
    """Draw observed less fitted amounts, one panel a law that is in play."""
    fits = in_play(study)
    states = {entry.source: run.states[i] for i, entry in enumerate(run.entries)}

    def draw(figure: Figure) -> None:
        panels = figure.subplots(len(fits), 1, sharex=True, squeeze=False)[:, 0]
        for axes, fit in zip(panels, fits, strict=True):
            x, rest = fit.series.time_s / scale.second, scale.factor * fit.estimate.residuals
            for column, species in enumerate(fit.model.observed):
                source = fit.model.columns[column]
                u = scale.factor * np.sqrt(fit.series.covariance[:, source, source])
                place = run.amounts.species.index(species)
                _points(axes, x, rest[:, column], u, place, "fitted", x.size)
            sound = np.array([states[label] == "measured" for label in fit.series.labels], bool)
            _limit(axes, rest, rest[sound])
            axes.axhline(0.0, color=_INK, lw=0.8)
            axes.set_title(fit.law, loc="left", fontsize=8.5)
            _dress(axes, f"residual / {scale.amount}" if len(scale.amount) < 9 else "residual")
        panels[-1].set_xlabel(f"time since the start / {scale.time}")

    height = 0.6 + 1.5 * len(fits)
    return _svg(draw, height, "residuals", "Observed less fitted amounts against time")


def spectra_figure(spectra: Sequence[Drawn]) -> Markup:
    """Draw whole spectra one above the other, their windows shaded and lettered."""

    def draw(figure: Figure) -> None:
        panels = figure.subplots(len(spectra), 1, sharex=True, squeeze=False)[:, 0]
        for axes, drawn, name in zip(panels, spectra, ("first", "last"), strict=False):
            for index, (_, low, high) in enumerate(drawn.windows):
                axes.axvspan(low, high, color=_RULE, alpha=0.7, lw=0, zorder=0)
                axes.annotate(
                    letter(index), (0.5 * (low + high), 1.0), (0, 2 + 8 * (index % 2)),
                    xycoords=("data", "axes fraction"), textcoords="offset points",
                    ha="center", fontsize=7.5, color=_FAINT,
                )  # fmt: skip
            axes.plot(drawn.ppm, drawn.intensities, color=_INK, lw=0.6)
            axes.set_ylim(-0.08, 1.12)
            axes.set_yticks([])
            axes.set_ylabel(name)
            axes.spines["left"].set_visible(False)
        panels[-1].set_xlim(spectra[0].ppm.max(), spectra[0].ppm.min())
        panels[-1].set_xlabel("δ / ppm")

    height = 0.6 + 1.6 * len(spectra)
    return _svg(draw, height, "spectra", "First and last spectrum with the windows shaded")


def window_figure(pairs: Sequence[Sequence[Drawn]]) -> Markup:
    """Draw each window enlarged: the first spectrum as a full line, the last one dashed."""

    def draw(figure: Figure) -> None:
        cells = figure.subplots(-(-len(pairs) // 4), 4, squeeze=False).ravel()
        for index, (axes, drawn) in enumerate(zip(cells, pairs, strict=False)):
            for place, part in enumerate(drawn):
                _, low, high = part.windows[index]
                for edge in (low, high):
                    axes.axvline(edge, color=_FAINT, lw=0.7, ls=_DASHES[place])
                axes.plot(part.ppm, part.intensities, color=_HUES[place], lw=0.9,
                          ls=_DASHES[place])  # fmt: skip
            axes.set_xlim(drawn[0].ppm.max(), drawn[0].ppm.min())
            axes.set_title(letter(index), loc="left", fontsize=8.5)
            axes.locator_params(axis="x", nbins=3)
            axes.set_yticks([])
            axes.spines["left"].set_visible(False)
        for axes in cells[len(pairs) :]:
            axes.set_visible(False)

    height = 0.3 + 1.45 * -(-len(pairs) // 4)
    return _svg(draw, height, "windows", "Each window enlarged, first and last spectrum")


def outside(values: Float64, sound: Float64) -> tuple[float, float, int]:
    """Return the limits that show all sound values, and how many others lie beyond them."""
    good = sound[np.isfinite(sound)]
    if good.size == 0:
        return -np.inf, np.inf, 0
    low, high = float(good.min()), float(good.max())
    room = 0.3 * max(high - low, 1e-12)
    low, high = low - room, high + room
    return low, high, int(np.count_nonzero((values < low) | (values > high)))


def _limit(axes: Axes, values: Float64, sound: Float64) -> None:
    """Keep what a lost reference makes of a spectrum from flattening all the others."""
    low, high, beyond = outside(values, sound)
    if beyond:
        axes.set_ylim(low, high)


def _dress(axes: Axes, label: str) -> None:
    axes.set_ylabel(label)
    axes.grid(axis="y", color=_RULE, lw=0.6)
    axes.set_axisbelow(True)


def _svg(draw: Callable[[Figure], None], height_in: float, name: str, words: str) -> Markup:
    """Draw a figure and make it fit to stand in a page beside others."""
    buffer = io.StringIO()
    with _LOCK, mpl.rc_context(_STYLE):
        figure = Figure(figsize=(_WIDTH_IN, height_in), layout="constrained", dpi=200)
        draw(figure)
        figure.savefig(buffer, format="svg")
    text = buffer.getvalue()
    text = text[text.index("<svg") :]
    text = re.sub(r"<metadata>.*?</metadata>|<style .*?</style>", "", text, flags=re.DOTALL)
    text = re.sub(r"font: ([\d.]+px)[^;\"]*", r"font: \1 system-ui, sans-serif", text)
    # Several figures in one page: names inside one must not meet those of another.
    text = re.sub(r'\bid="', f'id="{name}-', text)
    text = re.sub(r'href="#', f'href="#{name}-', text)
    text = re.sub(r"url\(#", f"url(#{name}-", text)
    head = re.sub(r' (?:width|height)="[^"]*"', "", text[: text.index(">")])
    return Markup(f'{head} role="img" aria-label="{escape(words)}"{text[text.index(">") :]}')
