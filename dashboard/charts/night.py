"""The trend with a strip below it: what happened, by kind, on the same axis of time."""

import numpy as np
import plotly.graph_objects as go

from dashboard.charts.theme import SYMBOLS, Look
from dashboard.charts.trend import trend
from dashboard.words import inert, time_unit
from kinetics.rates.study import Study
from kinetics.run import Run
from kinetics.show_night import KINDS, Happening


def trend_with_strip(
    run: Run, study: Study | None, found: tuple[Happening, ...], since_s: float, look: Look
) -> go.Figure:
    """Draw the trend from a time on (s since the start), with the strip of happenings below."""
    figure = trend(run, study, look)
    times = run.time_s[run.measured]
    span = float(np.ptp(times)) if times.size > 1 else 60.0
    name, unit = time_unit(run.sheet.display.time, span)
    for place, kind in enumerate(KINDS):
        of_kind = [h for h in found if h.kind == kind]
        if not of_kind or run.started is None:
            continue
        x: list[float | None] = []
        y: list[str | None] = []
        words: list[str | None] = []
        for happening in of_kind:
            for moment in (happening.at, happening.until):
                x.append((moment - run.started).total_seconds() / unit)
                y.append(kind)
                words.append(inert(_short(happening.text)))
            x.append(None)  # lines join the ends of one happening only
            y.append(None)
            words.append(None)
        hue = look.hues[place % len(look.hues)]
        figure.add_scatter(
            x=x,
            y=y,
            yaxis="y2",
            mode="lines+markers",
            line={"color": hue, "width": 4},
            marker={"color": hue, "symbol": SYMBOLS[place % len(SYMBOLS)], "size": 8},
            text=words,
            hovertemplate=f"%{{x:.3g}} {name}: %{{text}}<extra>{kind}</extra>",
            showlegend=False,
        )
    figure.update_layout(
        yaxis={"domain": [0.36, 1.0]},
        yaxis2={
            "domain": [0.0, 0.28],
            "type": "category",
            "categoryorder": "array",
            "categoryarray": list(reversed(KINDS)),
            "gridcolor": look.grid,
            "tickfont": {"color": look.faint, "size": 11},
            "fixedrange": True,
        },
        margin={"l": 78},
    )
    figure.update_xaxes(anchor="y2")
    end = float(times.max()) if times.size else since_s + 60.0
    margin = 0.02 * max(end - since_s, 60.0)
    figure.update_xaxes(range=[(since_s - margin) / unit, (end + margin) / unit])
    return figure


def _short(text: str, most: int = 110) -> str:
    return text if len(text) <= most else text[: most - 1] + "…"
