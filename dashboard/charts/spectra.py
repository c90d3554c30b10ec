"""One spectrum with its windows, and the picture of the whole run."""

import numpy as np
import plotly.graph_objects as go

from dashboard.charts.live import dressed
from dashboard.charts.theme import Look, with_alpha
from dashboard.words import inert, time_unit
from kinetics.run import Run
from kinetics.show import Drawn, Picture


def spectrum(drawn: Drawn, run: Run, look: Look) -> go.Figure:
    """Draw one spectrum; the windows are shaded in the colours of their species."""
    figure = go.Figure()
    figure.add_scatter(
        x=drawn.ppm.astype(np.float32),
        y=drawn.intensities.astype(np.float32),
        mode="lines",
        line={"color": look.ink, "width": 1},
        hovertemplate="%{x:.3f} ppm<extra></extra>",
        showlegend=False,
    )
    order = list(run.amounts.species)
    shapes, notes = [], []
    for name, low, high in drawn.windows:
        hue = look.hues[order.index(name) % len(look.hues)] if name in order else look.faint
        shapes.append(
            {
                "type": "rect",
                "xref": "x",
                "yref": "paper",
                "x0": low,
                "x1": high,
                "y0": 0,
                "y1": 1,
                "fillcolor": with_alpha(hue, 0.16),
                "line": {"width": 0},
                "layer": "below",
            }
        )
        notes.append(
            {
                "x": 0.5 * (low + high),
                "yref": "paper",
                "y": 1.0,
                "yanchor": "top",
                "text": inert(name),
                "showarrow": False,
                "textangle": -90,
                "font": {"size": 11, "color": hue},
            }
        )
    dressed(figure, look, x_title="shift / ppm", y_title="intensity")
    figure.update_layout(shapes=shapes, annotations=notes)
    figure.update_xaxes(autorange="reversed")
    figure.update_yaxes(range=[-0.06, 1.12], showticklabels=False, ticks="")
    return figure


def whole_run(picture: Picture, run: Run, look: Look) -> go.Figure:
    """Draw all spectra of a run as one image: shift across, time upwards."""
    span = float(np.ptp(picture.time_s)) if picture.time_s.size > 1 else 60.0
    name, unit = time_unit(run.sheet.display.time, span)
    figure = go.Figure()
    figure.add_heatmap(
        x=picture.ppm.astype(np.float32),
        y=(picture.time_s / unit).astype(np.float32),
        z=picture.shades,
        colorscale=[list(stop) for stop in look.scale],
        zmin=0,
        zmax=255,
        showscale=False,
        hovertemplate=f"%{{x:.3f}} ppm, %{{y:.3g}} {name}<extra></extra>",
    )
    dressed(figure, look, x_title="shift / ppm", y_title=f"time since start / {name}")
    figure.update_xaxes(autorange="reversed", showgrid=False)
    figure.update_yaxes(showgrid=False)
    return figure
