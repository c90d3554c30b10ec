"""The live chart: a figure whose zoom survives new data. Everything drawn goes through it."""

from functools import lru_cache
from pathlib import Path
from typing import Any, cast

import plotly.graph_objects as go
import streamlit as st

from dashboard.charts.theme import Look


@lru_cache(maxsize=1)
def _script() -> str:
    return (Path(__file__).parent / "live_chart.js").read_text(encoding="utf-8")


@st.cache_resource
def _component() -> Any:
    return st.components.v2.component("kettlewatch_chart", js=_script(), isolate_styles=False)


def live_chart(
    figure: go.Figure, *, key: str, words: str, height: int, keep: str = "same"
) -> tuple[float, float] | None:
    """Draw a figure and return the visible x range once somebody has zoomed.

    Parameters
    ----------
    figure
        What to draw.
    key
        Identity of the chart on the page.
    words
        What it shows, for those who do not see it.
    height
        In pixels.
    keep
        Zoom is kept while this stays the same.
    """
    result = _mounted(figure, key, words, height, keep)
    found = cast(list[float] | None, getattr(result, "range", None))
    return None if not found else (float(found[0]), float(found[1]))


def selecting_chart(
    figure: go.Figure, *, key: str, words: str, height: int, keep: str = "same"
) -> list[str] | None:
    """Draw a figure whose points can be selected by dragging; otherwise as `live_chart`.

    Returns
    -------
    list of str or None
        `customdata` of the selected points, each once; None while nobody has selected.
    """
    figure.update_layout(dragmode="select")
    result = _mounted(figure, key, words, height, keep)
    found = cast(list[str] | None, getattr(result, "selected", None))
    return None if found is None else [str(name) for name in found]


def _mounted(figure: go.Figure, key: str, words: str, height: int, keep: str) -> Any:
    return _component()(
        key=key,
        data={
            "figure": figure.to_json(engine="orjson"),
            "words": words,
            "height": height,
            "keep": keep,
        },
        on_range_change=lambda: None,
        on_selected_change=lambda: None,
    )


def dressed(figure: go.Figure, look: Look, *, x_title: str, y_title: str) -> go.Figure:
    """Give a figure the common look."""
    axis = {
        "gridcolor": look.grid,
        "linecolor": look.grid,
        "zeroline": False,
        "tickfont": {"color": look.faint, "size": 12},
        "title": {"font": {"color": look.faint, "size": 13}, "standoff": 8},
        "ticks": "outside",
        "tickcolor": look.grid,
    }
    figure.update_layout(
        template="none",
        paper_bgcolor="rgba(0,0,0,0)",
        plot_bgcolor="rgba(0,0,0,0)",
        font={"family": "system-ui, sans-serif", "color": look.ink, "size": 13},
        margin={"l": 58, "r": 14, "t": 30, "b": 44},
        legend={"orientation": "h", "y": 1.02, "yanchor": "bottom", "x": 0, "font": {"size": 12}},
        hoverlabel={"bgcolor": look.paper, "font": {"color": look.ink}},
        dragmode="zoom",
        hovermode="closest",
    )
    figure.update_xaxes(**axis)
    figure.update_yaxes(**axis)
    figure.update_xaxes(title_text=x_title)
    figure.update_yaxes(title_text=y_title)
    return figure
