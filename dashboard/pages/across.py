"""Across runs: do my runs agree, and what does temperature or amount change?"""

from math import nan
from pathlib import Path
from typing import Any

import pandas as pd
import streamlit as st

from dashboard import choice, source
from dashboard.charts.across import overlay, temperature_plot
from dashboard.charts.live import live_chart
from dashboard.charts.theme import look
from dashboard.words import pretty, unit
from kinetics.compare import compare
from kinetics.errors import KettlewatchError
from kinetics.rates.fitting import Quantity
from kinetics.rates.words import rounded
from kinetics.report_words import value_and_interval
from kinetics.show_across import course, temperature_curve, temperature_fit


def page() -> None:
    """Draw the page."""
    st.title("Across runs")
    st.caption("Do my runs agree, and what does temperature or amount change?")
    found = source.logbooks()
    if len(found) < 2:
        st.info(
            "A comparison needs two logbooks in this folder. The page Runs says how to start one."
        )
        st.stop()
    picked = _picked(list(found))
    if len(picked) < 2:
        st.info("Choose two runs or more of the same reaction.")
        st.stop()
    paths = [found[name] for name in picked]
    try:
        ticks = tuple(source.pulse(path).tick for path in paths)
        with st.spinner("Fitting every run with one law …"):
            document = _compared(tuple(map(str, paths)), ticks)
    except KettlewatchError as why:
        st.error(f"These runs cannot be compared: {why}")
        st.caption("Take a run out of the choice above, or look at it alone on the page Rates.")
        st.stop()
    _table(document)
    _answers(document)
    _temperature(document)
    _overlay(document, paths, ticks)
    st.caption(choice.SAFETY)


def _picked(names: list[str]) -> list[str]:
    """Ask which runs; the address keeps the choice, so that it can be passed on."""
    if "across" not in st.session_state:
        asked = st.query_params.get_all("runs")
        st.session_state["across"] = [name for name in asked if name in names]
    st.session_state["across"] = [n for n in st.session_state["across"] if n in names]
    picked = st.multiselect("Runs to compare", names, key="across", placeholder="two or more")
    st.query_params["runs"] = picked
    return list(picked)


@st.cache_data(max_entries=8, show_spinner=False)
def _compared(paths: tuple[str, ...], ticks: tuple[int, ...]) -> dict[str, Any]:
    del ticks  # part of the key: a comparison holds for one state of each logbook
    return compare([Path(path) for path in paths])


def _table(document: dict[str, Any]) -> None:
    st.subheader("One law for all", anchor=False)
    k_unit = unit(document["unit"])
    rows = []
    for run in document["runs"]:
        k, kelvin = run["k"], run["temperature_k"]
        ends = "open on one side"
        if k["low"] is not None and k["high"] is not None:
            low, high = rounded(k["low"], k["high"]), rounded(k["high"], k["low"])
            ends = f"{pretty(low)} to {pretty(high)}"
        rows.append(
            {
                "run": run["logbook"].removesuffix(".logbook"),
                "temperature": "not known" if kelvin is None else f"{kelvin - 273.15:.2f} °C",
                f"{document['parameter']} / {k_unit}": pretty(
                    rounded(k["value"], *(v for v in (k["low"], k["high"]) if v is not None))
                ),
                "interval": ends,
                "law it prefers alone": run["preferred"] or "cannot tell",
            }
        )
    st.dataframe(pd.DataFrame(rows), hide_index=True, width="stretch", key="across_table")
    st.caption(
        f"{document['law']} for all of them; {100 * document['confidence']:g} % intervals, each "
        "of its run alone. Replicate runs usually scatter more."
    )


def _answers(document: dict[str, Any]) -> None:
    k_unit = unit(document["unit"])
    for group in document["replicates"]:
        value, ends = _said(group["k"])
        st.text(
            f"{group['runs']} runs at {group['temperature_k'] - 273.15:.1f} °C: mean "
            f"{document['parameter']} = {value} {k_unit}{ends}; single runs scatter by "
            f"{100 * group['between_sd']:.1f} % beyond their own errors."
        )
    for kind, first, second in (
        ("arrhenius", "activation energy", "ln A"),
        ("eyring", "activation enthalpy", "activation entropy"),
    ):
        fitted = document[kind]
        if fitted is None:
            continue
        energy, e_ends = _said(fitted["energy_j_mol"], 1e-3)
        other = fitted["ln_factor"] if kind == "arrhenius" else fitted["entropy_j_mol_k"]
        value, ends = _said(other)
        of = "" if kind == "arrhenius" else " J/(mol K)"
        st.text(f"{first}: {energy} kJ/mol{e_ends}; {second}: {value}{of}{ends}.")
    if document["order"]:
        value, ends = _said(document["order"]["order"])
        st.text(f"Order in {document['order']['species']} from initial rates: {value}{ends}.")
    for words in document["words"]:
        st.text(f"! {words}")


def _said(q: dict[str, float | None], factor: float = 1.0) -> tuple[str, str]:
    """Write a quantity of the document, and its interval in brackets where it has one."""
    text, ends = value_and_interval(
        Quantity(*(_number(q[k]) for k in ("value", "low", "high"))), factor
    )
    return text, f" ({ends})"


def _number(value: float | None) -> float:
    return nan if value is None else value


def _temperature(document: dict[str, Any]) -> None:
    st.subheader("k against temperature", anchor=False)
    if document["arrhenius"] is None:
        st.caption("Needs runs at two temperatures at least, half a kelvin apart or more.")
        return
    kinds = {"Arrhenius": "arrhenius", "Eyring": "eyring"}
    named = st.radio("Drawn after", list(kinds), horizontal=True, key="across_kind")
    fitted = temperature_fit(document, kinds[named])
    if fitted is None:
        return
    with st.container(key="temperature"):
        live_chart(
            temperature_plot(
                document,
                temperature_curve(fitted),
                look(st.context.theme.type),
                eyring=named == "Eyring",
            ),
            key="temperature_chart",
            words=f"Rate constants against inverse temperature after {named}, with line and band",
            height=380,
            keep=named,
        )
    st.caption("The band is that of the mean line; a further single run may lie outside it.")


def _overlay(document: dict[str, Any], paths: list[Path], ticks: tuple[int, ...]) -> None:
    st.subheader("Courses laid together", anchor=False)
    courses, asked = [], None
    for path, tick, run_words in zip(paths, ticks, document["runs"], strict=True):
        run = source.run_at(path, tick)
        asked = asked or run.sheet.display.time
        one = course(run, run_words["start"])
        if one is None:
            st.caption(
                "One run is left out below: its limiting species is not seen in the spectra."
            )
        else:
            courses.append((path.name.removesuffix(".logbook"), one))
    if not courses:
        return
    with st.container(key="overlay"):
        live_chart(
            overlay(courses, asked, look(st.context.theme.type)),
            key="overlay_chart",
            words="What is left of the limiting species of each run against time",
            height=380,
            keep=" ".join(name for name, _ in courses),
        )
