"""Overnight: what happened since I left?"""

from datetime import UTC, datetime, timedelta

import numpy as np
import pandas as pd
import streamlit as st

from dashboard import choice, source
from dashboard.charts.live import live_chart
from dashboard.charts.night import trend_with_strip
from dashboard.charts.spectra import spectrum
from dashboard.charts.theme import look
from dashboard.words import duration, local
from kinetics.errors import KettlewatchError
from kinetics.logbook.view import LogbookView, StoryLine
from kinetics.rates.words import rounded
from kinetics.run import Run
from kinetics.show import drawn_spectrum
from kinetics.show_night import Happening, differences, happenings, last_review

_MOST_LINES = 200


def page() -> None:
    """Draw the page."""
    logbook = choice.chosen_logbook("Overnight", "What happened since I left?")
    run = choice.loaded(logbook)
    if run.measured.size == 0 or run.started is None:
        st.info("No spectrum has been measured yet; the page Report lists what was unreadable.")
        st.stop()
    since = _since(run, run.started)
    found = happenings(run, _story(run), since)
    study, why_not = source.study_of(run)
    if study is None:
        st.caption(f"No curve is drawn: {why_not}")
    with st.container(key="night"):
        live_chart(
            trend_with_strip(
                run,
                study,
                found,
                (since - run.started).total_seconds(),
                look(st.context.theme.type),
            ),
            key="night_chart",
            words="Amounts against time since you left, with a strip of what happened below",
            height=520,
            keep=f"{logbook.name} {since}",
        )
    _list(run, found)
    _changed(run, since)
    _step(run, since)
    _review(run)
    st.caption(choice.SAFETY)


def _story(run: Run) -> tuple[StoryLine, ...]:
    try:
        with LogbookView(run.logbook) as view:
            return view.story()
    except KettlewatchError as why:
        st.warning(f"What the follower said cannot be read: {why}")
        return ()


def _since(run: Run, started: datetime) -> datetime:
    """Ask from when on; the address keeps it."""
    last = max(t for t in run.timeline.mid if t is not None)
    options = {"the start of the run": started}
    reviewed = last_review(run)
    if reviewed is not None and reviewed < last:
        options = {"the last review": reviewed, **options}
    for hours in (2, 8, 14):
        if last - timedelta(hours=hours) > started:
            options[f"{hours} h before the last spectrum"] = last - timedelta(hours=hours)
    asked = _asked()
    if asked is not None and asked < last:
        same = [label for label, at in options.items() if abs((at - asked).total_seconds()) < 1]
        if not same:
            options = {"the time in the address": asked, **options}
    else:
        same = []
    labels = list(options)
    picked = st.selectbox(
        "Since",
        labels,
        index=labels.index(same[0]) if same else 0,
        format_func=lambda label: f"{label} ({local(options[label], run.zone)})",
        key=f"since {run.logbook.name}",
    )
    since = options[picked]
    st.query_params["since"] = since.isoformat()
    return since


def _asked() -> datetime | None:
    try:
        asked = datetime.fromisoformat(st.query_params.get("since", ""))
    except ValueError:
        return None
    return asked if asked.tzinfo else asked.replace(tzinfo=UTC)


def _list(run: Run, found: tuple[Happening, ...]) -> None:
    st.subheader("What happened", anchor=False)
    if not found:
        st.caption("Nothing beside spectra that were measured without a remark.")
        return
    rows = [
        {
            "when": local(h.at, run.zone),
            "how long": duration((h.until - h.at).total_seconds()) if h.until > h.at else "",
            "kind": h.kind,
            "what": h.text,
        }
        for h in found[-_MOST_LINES:]
    ]
    st.dataframe(pd.DataFrame(rows), hide_index=True, width="stretch", key="happened")
    if len(found) > _MOST_LINES:
        st.caption(f"The latest {_MOST_LINES} of {len(found)}; choose a later time for the rest.")


def _changed(run: Run, since: datetime) -> None:
    st.subheader("What changed", anchor=False)
    names = [run.entries[i].source for i in run.measured]
    if len(names) < 2:
        st.caption("Needs two spectra.")
        return
    begin = _first_row(run, since)
    left, right = st.columns(2)
    first = left.selectbox("From", range(len(names)), index=begin, format_func=names.__getitem__)
    second = right.selectbox(
        "To", range(len(names)), index=len(names) - 1, format_func=names.__getitem__
    )
    rows = []
    for d in differences(run, first, second):
        change = d.after - d.before
        known = bool(np.isfinite(d.u))
        rows.append(
            {
                "quantity": d.what,
                "from": f"{d.before:.4g}",
                "to": f"{d.after:.4g}",
                "change": rounded(change, change - d.u, change + d.u) if known else f"{change:.2g}",
                "± (1 sd)": f"{d.u:.1g}" if known else "",
                "unit": d.unit,
            }
        )
    st.dataframe(pd.DataFrame(rows), hide_index=True, width="stretch", key="changed")


def _first_row(run: Run, since: datetime) -> int:
    """Row of the first measured spectrum at or after a moment (the last one where none is)."""
    for row, index in enumerate(run.measured):
        at = run.timeline.mid[index]
        if at is not None and at >= since:
            return row
    return len(run.measured) - 1


def _step(run: Run, since: datetime) -> None:
    st.subheader("Spectrum by spectrum", anchor=False)
    rows = list(range(_first_row(run, since), len(run.measured)))
    if len(rows) < 2:
        st.caption("Only one spectrum since then; the page Now shows it.")
        return

    def named(row: int) -> str:
        index = run.measured[row]
        return f"{run.entries[index].source}, {local(run.timeline.mid[index], run.zone)}"

    row = st.select_slider(
        "Spectrum (arrow keys step once the handle is chosen)", rows, format_func=named, key="step"
    )
    index = run.measured[row]
    entry = run.entries[index]
    st.text(f"{entry.source}: {run.states[index]}")
    for remark in dict.fromkeys(entry.remarks):
        st.text(f"! {remark}")
    try:
        drawn = drawn_spectrum(run, entry)
    except KettlewatchError as why:
        st.warning(f"This spectrum cannot be drawn: {why}")
        return
    with st.container(key="stepped"):
        live_chart(
            spectrum(drawn, run, look(st.context.theme.type)),
            key="stepped_chart",
            words=f"Spectrum {row + 1} of {len(run.measured)} with the windows of the signals",
            height=340,
            keep=run.logbook.name,
        )


def _review(run: Run) -> None:
    st.subheader("Mark as reviewed", anchor=False)
    if message := st.session_state.pop("review_done", None):
        st.success(message)
    until = max(t for t in run.timeline.mid if t is not None)
    left, right = st.columns([1, 2])
    with left:
        name = choice.who("reviewed")
    note = right.text_input("Note", key="review_note", max_chars=400).strip()
    if st.button("Reviewed until the last spectrum", disabled=not name):
        trouble = choice.record(
            run.logbook,
            who=name,
            kind="reviewed",
            subjects=[until.isoformat()],
            new="",
            why=note,
        )
        if trouble:
            st.error(f"Nothing was recorded: {trouble}")
            return
        st.session_state["review_done"] = "The review stands in the record of decisions."
        st.rerun()
    if not name:
        st.caption("Needs your name; name and note are kept in the record of decisions.")
