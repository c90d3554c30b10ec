"""Now: is it going as it should?"""

from datetime import UTC, datetime
from math import isfinite
from pathlib import Path

import streamlit as st

from dashboard import source
from dashboard.cards import Card, cards
from dashboard.charts.live import live_chart
from dashboard.charts.spectra import spectrum, whole_run
from dashboard.charts.theme import look
from dashboard.charts.trend import clock_range, trend
from dashboard.words import ago, constant, duration, local, percent
from kinetics.errors import KettlewatchError
from kinetics.logbook.view import Following
from kinetics.rates.study import Study
from kinetics.rates.words import rounded
from kinetics.run import Run
from kinetics.show import drawn_spectrum, picture
from kinetics.trust import trust


def page() -> None:
    """Draw the page."""
    found = source.logbooks()
    if not found:
        st.title("Now")
        st.info("No logbook here yet. The page Runs says how to start one.")
        st.stop()
    names = list(found)
    asked = st.query_params.get("run") or st.session_state.get("run")
    if len(names) > 1:
        index = names.index(asked) if asked in names else 0
        name = st.selectbox("run", names, index=index, label_visibility="collapsed")
    else:
        name = names[0]
    st.session_state["run"] = name
    st.query_params["run"] = name
    _live(found[name])


@st.fragment(run_every=2)
def _live(logbook: Path) -> None:
    try:
        beat = source.pulse(logbook)
        run = source.run_at(logbook, beat.tick)
    except KettlewatchError as why:
        st.warning(str(why))
        return
    st.subheader(run.sheet.title or logbook.name, anchor=False)
    _state(run, beat.following)
    if run.measured.size == 0:
        st.info(
            "No spectrum has been measured yet. The first appears here when it is complete; "
            "`python -m kinetics check SHEET RUN_FOLDER` says what is in the folder."
        )
        return
    study, why_not = source.study_of(run)
    _answers(run, study, why_not)
    colours = look(st.context.theme.type)
    with st.container(key="trend"):
        live_chart(
            trend(run, study, colours),
            key="trend_chart",
            words=f"Amounts of {', '.join(run.amounts.species)} against time with fitted curves",
            height=440,
            keep=run.logbook.name,
        )
    _verdict(run, study)
    left, right = st.columns(2, gap="medium")
    last = run.entries[run.measured[-1]]
    with left, st.container(key="last"):
        st.subheader("Last spectrum", anchor=False)
        st.caption(f"{last.source}, {run.states[run.measured[-1]]}, arrived {ago(last.arrived)}")
        live_chart(
            spectrum(drawn_spectrum(run, last), run, colours),
            key="last_chart",
            words="The last spectrum with the windows of the signals",
            height=340,
            keep=run.logbook.name,
        )
    with right, st.container(key="whole"):
        st.subheader("The run so far", anchor=False)
        st.caption(f"every spectrum, time upwards; {clock_range(run)}")
        live_chart(
            whole_run(picture(run), run, colours),
            key="whole_chart",
            words="All spectra of the run as an image",
            height=340,
            keep=run.logbook.name,
        )
    _trust(run, study)


def _state(run: Run, following: Following) -> None:
    counts = run.counts()
    spectra = ", ".join(f"{n} {state}" for state, n in counts.items() if n) or "no spectrum"
    last = max((e.arrived for e in run.entries), default=None)
    parts = [spectra, f"last one {ago(last)}" if last else ""]
    if following.alive:
        state = following.holder.state if following.holder else ""
        parts.insert(0, "followed now" if state in ("following", "starting") else state)
    elif following.holder is None:
        parts.insert(0, "not followed now")
    st.caption(" · ".join(p for p in parts if p))
    if following.holder is not None and not following.alive:
        st.warning(
            f"The follower (process {following.holder.pid} on {following.holder.host}) ended "
            f"without saying so; its last sign was {ago(following.holder.beat)}. Nothing is lost: "
            "start it again with the same command and it goes on where it stood."
        )


def _answers(run: Run, study: Study | None, why_not: str) -> None:
    if study is None:
        st.info(f"Not fitted yet: {why_not}")
        return
    best, forecast = study.best, study.forecast
    shown = [p for p in best.parameters if p.name in best.model.law.rates]
    answers = []
    for p in shown:
        value, ends = constant(p)
        answers.append(
            Card("How fast?", f"{p.name} = {value}", ends, f"{best.law}: {best.equation}")
        )
    half = best.half_life()
    if isfinite(half.value):
        # To the minute both ends are often the same; the seconds tell.
        ends = f"{rounded(half.low, half.value)} to {rounded(half.high, half.value)} s"
        limiting = f"of {study.outcome.limiting}, from the fit's start"
        answers.append(Card("Half-life", duration(half.value), ends, limiting))
    value, ends = percent(study.outcome.conversion)
    answers.append(
        Card(
            "How far?",
            value,
            ends,
            f"conversion of {study.outcome.limiting} ({study.outcome.basis})",
        )
    )
    if isfinite(forecast.target_conversion):
        answers.append(_when(run, study))
    cards(answers, 100 * study.question.confidence)


def _when(run: Run, study: Study) -> Card:
    forecast = study.forecast
    label = f"{100 * forecast.target_conversion:g} % conversion"
    if forecast.reached:
        return Card("When done?", "reached", label, "follow the site's procedure")
    at = forecast.time_s
    if not isfinite(at.value) or run.started is None:
        return Card("When done?", "cannot be said", label, "the law does not get there")
    done = run.started.timestamp() + at.value
    left = done - datetime.now(UTC).timestamp()
    high = duration(at.high) if isfinite(at.high) else "open"
    head = f"in {duration(left)}" if left > 0 else f"at {duration(at.value)}"
    clock = local(datetime.fromtimestamp(done, UTC), run.zone)
    return Card(
        "When done?", head, f"{duration(at.low)} to {high} after the start", f"{label}, {clock}"
    )


def _verdict(run: Run, study: Study | None) -> None:
    if study is None:
        return
    st.markdown("**What the data say**")
    st.text(study.verdict)
    if study.forecast.reached:
        st.caption(
            "The end of a reaction is decided by the site's procedure. This program is no safety "
            "interlock; a reaction that stalls while something is being fed accumulates it."
        )
    if run.chosen_law is not None:
        st.caption(f"{run.chosen_law} was chosen by a person; see the record of decisions.")


def _trust(run: Run, study: Study | None) -> None:
    found = trust(run, study)
    with st.expander(f"Can I trust it? {found.headline}", expanded=bool(found.concerns)):
        for words in found.concerns:
            st.text(f"! {words}")
        for words in found.supports:
            st.text(f"  {words}")
        st.text(
            "  An interval is that of this run. Replicate runs usually scatter more than one run's "
            "interval says."
        )
