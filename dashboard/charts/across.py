"""Several runs in one figure: ln k against 1/T, and what is left against time."""

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import plotly.graph_objects as go

from dashboard.charts.live import dressed
from dashboard.charts.theme import SYMBOLS, Look, with_alpha
from dashboard.words import inert, time_unit
from kinetics.show_across import Course, TemperatureCurve


def temperature_plot(
    found: Mapping[str, Any], curve: TemperatureCurve, look: Look, *, eyring: bool
) -> go.Figure:
    """Draw k (for Eyring k/T) against 1000/T on a logarithmic axis, with line and band."""
    figure = go.Figure()
    hue = look.hues[0]
    x = 1000.0 / curve.temperature_k
    over = curve.temperature_k if eyring else np.ones_like(x)
    figure.add_scatter(
        x=np.concatenate((x, x[::-1])),
        y=np.concatenate((curve.low / over, (curve.high / over)[::-1])),
        fill="toself",
        fillcolor=with_alpha(hue, 0.2),
        line={"width": 0},
        hoverinfo="skip",
        showlegend=False,
    )
    figure.add_scatter(
        x=x,
        y=curve.k / over,
        mode="lines",
        line={"color": hue, "width": 1.6},
        hoverinfo="skip",
        showlegend=False,
    )
    for place, run in enumerate(r for r in found["runs"] if r["temperature_k"] is not None):
        kelvin, k = run["temperature_k"], run["k"]
        by = kelvin if eyring else 1.0
        value = k["value"] / by
        bars = (
            {
                "type": "data",
                "symmetric": False,
                "array": [k["high"] / by - value],
                "arrayminus": [value - k["low"] / by],
                "thickness": 1.2,
                "width": 4,
            }
            if k["low"] is not None and k["high"] is not None
            else None
        )
        figure.add_scatter(
            x=[1000.0 / kelvin],
            y=[value],
            error_y=bars,
            mode="markers",
            name=inert(run["logbook"].removesuffix(".logbook")),
            marker=_marker(place, look),
            hovertemplate=f"{kelvin:.2f} K, %{{y:.3g}}<extra></extra>",
        )
    unit = inert(found["unit"])
    name = f"k/T / ({unit} K⁻¹)" if eyring else f"k / ({unit})"
    dressed(figure, look, x_title="1000 K / T", y_title=name)
    figure.update_yaxes(type="log", exponentformat="power")
    return figure


def overlay(courses: Sequence[tuple[str, Course]], asked: str | None, look: Look) -> go.Figure:
    """Draw what is left of the limiting species of several runs against time."""
    figure = go.Figure()
    span = max(float(c.time_s.max(initial=60.0)) for _, c in courses)
    name, unit = time_unit(asked, span)
    for place, (label, one) in enumerate(courses):
        figure.add_scatter(
            x=one.time_s / unit,
            y=one.share,
            mode="markers",
            name=inert(label),
            marker=_marker(place, look),
            hovertemplate=f"%{{x:.4g}} {name}, %{{y:.3f}}<extra>{inert(label)}</extra>",
        )
    return dressed(
        figure, look, x_title=f"time since the fit's start / {name}", y_title="amount / start"
    )


def _marker(place: int, look: Look) -> dict[str, object]:
    # Symbol turns with the colour and once more with each round, so that no two runs are alike.
    turn = place + place // len(look.hues)
    return {
        "color": look.hues[place % len(look.hues)],
        "symbol": SYMBOLS[turn % len(SYMBOLS)],
        "size": 8,
    }
