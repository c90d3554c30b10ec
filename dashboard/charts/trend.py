"""Amounts against time: points with error bars, the fitted curve with its band, what was done."""

from zoneinfo import ZoneInfo

import numpy as np
import plotly.graph_objects as go

from dashboard.charts.live import dressed
from dashboard.charts.theme import DASHES, SYMBOLS, Look, with_alpha
from dashboard.words import amount_unit, inert, time_unit
from kinetics.rates.study import Study
from kinetics.run import Run, event_times

_CURVE_POINTS = 240
# Above this number of points error bars are a smear; their typical size is said in words instead.
_MOST_BARS = 600
_AHEAD = 0.12  # the curve runs on by this part of the span


def trend(run: Run, study: Study | None, look: Look) -> go.Figure:
    """Draw the trend of a run.

    Parameters
    ----------
    run, study
        The run, and its study where there is one.
    look
        Colours.
    """
    figure = go.Figure()
    times = run.time_s[run.measured]
    span = float(np.ptp(times)) if times.size > 1 else 60.0
    t_name, t_unit = time_unit(run.sheet.display.time, span)
    charged = max(run.sheet.kinetics.charged.values(), default=0.0)
    y_name, factor = amount_unit(run.sheet.display.amount, run.amounts.unit, charged)
    errors = run.amounts.standard_uncertainty
    states = np.array([run.states[i] for i in run.measured])
    names = [run.entries[i].source for i in run.measured]
    if study is not None:
        _curves(figure, run, study, look, t_unit, factor)
    for column, species in enumerate(run.amounts.species):
        hue = look.hues[column % len(look.hues)]
        for group, opacity, shape in (
            ("measured", 1.0, SYMBOLS[column % len(SYMBOLS)]),
            ("doubtful", 0.55, "x-thin-open"),
            ("set-aside", 0.35, "line-ew-open"),
        ):
            rows = np.flatnonzero(states == group)
            if rows.size == 0:
                continue
            bars = (
                {
                    "type": "data",
                    "array": factor * errors[rows, column],
                    "thickness": 1,
                    "width": 0,
                    "color": with_alpha(hue, 0.45),
                }
                if rows.size <= _MOST_BARS
                else None
            )
            figure.add_scatter(
                x=times[rows] / t_unit,
                y=factor * run.amounts.values[rows, column],
                error_y=bars,
                mode="markers",
                name=inert(species) if group == "measured" else f"{inert(species)}, {group}",
                marker={"color": hue, "symbol": shape, "size": 7, "line": {"width": 1.4}},
                opacity=opacity,
                text=[inert(names[r]) for r in rows],
                hovertemplate=f"%{{text}}<br>%{{x:.4g}} {t_name}, %{{y:.4g}} {y_name}"
                f"<extra>{inert(species)}</extra>",
            )
    _events(figure, run, look, t_unit)
    return dressed(figure, look, x_title=f"time since start / {t_name}", y_title=y_name)


def _curves(
    figure: go.Figure, run: Run, study: Study, look: Look, t_unit: float, factor: float
) -> None:
    fit = study.best
    begin = max(fit.model.origin_s, 0.0)
    end = float(run.time_s[run.measured].max())
    times = np.linspace(begin, end + _AHEAD * (end - begin), _CURVE_POINTS)
    values, low, high = fit.curve(times)
    for column, species in enumerate(fit.model.observed):
        place = run.amounts.species.index(species) % len(look.hues)
        figure.add_scatter(
            x=np.concatenate((times, times[::-1])) / t_unit,
            y=factor * np.concatenate((low[:, column], high[::-1, column])),
            fill="toself",
            fillcolor=with_alpha(look.hues[place], 0.22),
            line={"width": 0},
            hoverinfo="skip",
            showlegend=False,
        )
        figure.add_scatter(
            x=times / t_unit,
            y=factor * values[:, column],
            mode="lines",
            line={"color": look.hues[place], "width": 1.6, "dash": DASHES[place]},
            hoverinfo="skip",
            showlegend=False,
        )


def _events(figure: go.Figure, run: Run, look: Look, t_unit: float) -> None:
    shapes: list[dict[str, object]] = []
    notes: list[dict[str, object]] = []
    for seconds, event in event_times(run):
        x = seconds / t_unit
        shapes.append(
            {
                "type": "line",
                "xref": "x",
                "yref": "paper",
                "x0": x,
                "x1": x,
                "y0": 0,
                "y1": 1,
                "line": {"color": look.faint, "width": 1, "dash": "dot"},
            }
        )
        notes.append(
            {
                "x": x,
                "yref": "paper",
                "y": 1,
                "yanchor": "top",
                "xanchor": "left",
                "text": inert(_short(event.text or event.kind)),
                "yshift": -15 * (len(notes) % 3),
                "showarrow": False,
                "font": {"size": 11, "color": look.faint},
            }
        )
    figure.update_layout(shapes=shapes, annotations=notes)


def _short(text: str, most: int = 26) -> str:
    """Cut an event's text to what fits beside its line."""
    return text if len(text) <= most else text[: most - 1].rstrip(" ,;") + "…"


def clock_range(run: Run) -> str:
    """Return first and last moment of the run in its zone, in words."""
    zone = ZoneInfo(run.zone)
    known = [t for t in run.timeline.mid if t is not None]
    if not known:
        return ""
    first, last = min(known).astimezone(zone), max(known).astimezone(zone)
    return f"{first:%a %d %b %H:%M} to {last:%a %d %b %H:%M} {last.tzname()}"
