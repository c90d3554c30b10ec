"""Rates: which law do the data speak for, and how well is its constant known?"""

from math import isfinite

import pandas as pd
import streamlit as st

from dashboard import choice, source
from dashboard.charts.live import selecting_chart
from dashboard.charts.residuals import residual_plot
from dashboard.charts.theme import look
from dashboard.words import constant, duration
from kinetics.rates.fitting import Fit
from kinetics.rates.study import Study
from kinetics.run import Run


def page() -> None:
    """Draw the page."""
    logbook = choice.chosen_logbook(
        "Rates", "Which law do the data speak for, and how well is its constant known?"
    )
    run = choice.loaded(logbook)
    with st.spinner("Fitting the laws …"):
        study, why_not = source.study_of(run)
    selected: list[str] | None = None
    if study is None:
        st.info(f"Not fitted: {why_not} Spectra that were set aside can be brought back below.")
    else:
        _verdict(study)
        _laws(study)
        selected = _residuals(run, study)
    _set_aside(run, selected)
    _bring_back(run)


def _verdict(study: Study) -> None:
    st.subheader("Verdict", anchor=False)
    st.text(study.verdict)
    st.text(study.progress.words)
    for change in study.changes:
        st.text(f"! {change.words}")
    st.caption(choice.SAFETY)


def _laws(study: Study) -> None:
    st.subheader("Laws side by side", anchor=False)
    rows = []
    for fit in study.fits:
        half = fit.half_life()
        for n, p in enumerate(p for p in fit.parameters if p.name in fit.model.law.rates):
            value, ends = constant(p)
            rows.append(
                {
                    "law": fit.law if n == 0 else "",
                    "weight": f"{study.weights[fit.law]:.3f}" if n == 0 else "",
                    "constant": f"{p.name} = {value}",
                    "interval": ends,
                    "half-life": duration(half.value) if n == 0 and isfinite(half.value) else "",
                    "residual sd": f"{fit.residual_sd:.2g}" if n == 0 else "",
                    "spectra": str(fit.points) if n == 0 else "",
                }
            )
    st.dataframe(pd.DataFrame(rows), hide_index=True, width="stretch", key="laws")
    st.caption(
        f"{100 * study.question.confidence:g} % intervals of this run alone; the weight is the "
        "share of support (Akaike) among the laws asked for, not the chance that a law is true."
    )
    for law, why in study.failed.items():
        st.text(f"{law} could not be fitted: {why}")


def _residuals(run: Run, study: Study) -> list[str] | None:
    st.subheader("What the law leaves unexplained", anchor=False)
    names = [fit.law for fit in study.fits]
    law = st.selectbox("Law", names, key="residual_law") if len(names) > 1 else names[0]
    fit: Fit = study.by_law(law) or study.best
    with st.container(key="residuals"):
        selected = selecting_chart(
            residual_plot(run, fit, look(st.context.theme.type)),
            key="residual_chart",
            words=f"Residuals of {law} against time in standard deviations",
            height=320,
            keep=f"{run.logbook.name} {run.tick}",
        )
    st.caption("Drag over points to select their spectra; two in three should lie within ± 1 sd.")
    for remark in fit.diagnostics.remarks:
        st.text(f"! {remark}")
    return selected


def _set_aside(run: Run, selected: list[str] | None) -> None:
    st.subheader("Set spectra aside", anchor=False)
    if message := st.session_state.pop("aside_done", None):
        st.success(message)
    open_ones = [run.entries[i].source for i in run.measured if run.states[i] != "set-aside"]
    mark = (str(run.logbook), selected)
    if selected is not None and st.session_state.get("aside_seen") != mark:
        st.session_state["aside_seen"] = mark
        st.session_state["aside_pick"] = selected
    known = set(open_ones)
    st.session_state["aside_pick"] = [
        source for source in st.session_state.get("aside_pick", []) if source in known
    ]
    picked = st.multiselect(
        "Spectra to set aside", open_ones, key="aside_pick", placeholder="drag above, or type"
    )
    _decision(run, picked, "out", "Set aside")


def _bring_back(run: Run) -> None:
    st.subheader("Set aside now", anchor=False)
    if not run.aside:
        st.caption("None. Every spectrum with integrals is fitted.")
        return
    for name, why in run.aside.items():
        st.text(f"{name}: {why}")
    kept = [s for s in st.session_state.get("back_pick", []) if s in run.aside]
    st.session_state["back_pick"] = kept
    picked = st.multiselect("Spectra to bring back", list(run.aside), key="back_pick")
    _decision(run, picked, "in", "Bring back")


def _decision(run: Run, picked: list[str], new: str, label: str) -> None:
    left, right = st.columns([1, 2])
    with left:
        name = choice.who(new)
    why = right.text_input("Reason", key=f"why_{new}", max_chars=400).strip()
    ready = bool(picked and name and why)
    if st.button(label, disabled=not ready, key=f"do_{new}"):
        trouble = choice.record(
            run.logbook, who=name, kind="set-aside", subjects=picked, new=new, why=why
        )
        if trouble:
            st.error(f"Nothing was changed: {trouble}")
            return
        verb = "set aside" if new == "out" else "brought back"
        st.session_state["aside_done"] = f"{len(picked)} {verb} by {name}; the laws are refitted."
        st.rerun()
    if not ready:
        st.caption("Needs a selection, your name and a reason; all three are kept in the record.")
