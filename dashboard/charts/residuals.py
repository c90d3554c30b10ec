"""Residuals of a fit against time: what a law leaves unexplained, in standard deviations."""

import numpy as np
import plotly.graph_objects as go

from dashboard.charts.live import dressed
from dashboard.charts.theme import SYMBOLS, Look
from dashboard.words import inert, time_unit
from kinetics.rates.fitting import Fit
from kinetics.run import Run


def residual_plot(run: Run, fit: Fit, look: Look) -> go.Figure:
    """Draw the whitened residuals of a fit, one symbol a species.

    Each point carries the name of its spectrum as `customdata`, so that it can be selected.
    """
    times, labels = fit.series.time_s, fit.series.labels
    span = float(np.ptp(times)) if times.size > 1 else 60.0
    name, unit = time_unit(run.sheet.display.time, span)
    figure = go.Figure()
    whitened = fit.estimate.whitened
    for column, species in enumerate(fit.model.observed):
        figure.add_scatter(
            x=times / unit,
            y=whitened[:, column],
            mode="markers",
            name=inert(species),
            marker={
                "color": look.hues[column % len(look.hues)],
                "symbol": SYMBOLS[column % len(SYMBOLS)],
                "size": 7,
            },
            customdata=list(labels),
            text=[inert(label) for label in labels],
            hovertemplate=f"%{{text}}<br>%{{x:.4g}} {name}, %{{y:.2f}} sd"
            f"<extra>{inert(species)}</extra>",
        )
    figure = dressed(figure, look, x_title=f"time since start / {name}", y_title="residual / sd")
    figure.update_layout(
        shapes=[
            {"type": "line", "xref": "paper", "x0": 0, "x1": 1, "y0": y, "y1": y, "line": line}
            for y, line in (
                (0, {"color": look.faint, "width": 1}),
                (-2, {"color": look.faint, "width": 1, "dash": "dot"}),
                (2, {"color": look.faint, "width": 1, "dash": "dot"}),
            )
        ]
    )
    return figure
