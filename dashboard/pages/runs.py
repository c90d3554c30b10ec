"""Runs: which of mine needs me?"""

from datetime import UTC, datetime

import pandas as pd
import streamlit as st

from dashboard import source
from dashboard.words import ago, percent
from kinetics.errors import KettlewatchError
from kinetics.rates.words import rates_in_words


def page() -> None:
    """Draw the page."""
    st.title("Runs")
    st.caption(f"Which of mine needs me? Logbooks in {source.folder()}")
    _list()


@st.fragment(run_every=5)
def _list() -> None:
    found = source.logbooks()
    if not found:
        st.info(
            "No logbook here yet. Start following a run folder in a terminal:\n\n"
            "`python -m kinetics watch RUN_FOLDER --sheet SHEET.toml --logbook NAME.logbook`\n\n"
            "or see the demonstration: `python -m dashboard demo`."
        )
        return
    rows, names = [], list(found)
    for name, path in found.items():
        try:
            beat = source.pulse(path)
            run = source.run_at(path, beat.tick)
        except KettlewatchError as why:
            rows.append({"run": name, "title": "", "state": str(why)})
            continue
        study, why_not = source.study_of(run)
        last = max((e.arrived for e in run.entries), default=None)
        counts = run.counts()
        needs = []
        if beat.following.holder is not None and not beat.following.alive:
            needs.append("follower died")
        if counts["doubtful"]:
            needs.append(f"{counts['doubtful']} doubtful")
        if counts["unreadable"]:
            needs.append(f"{counts['unreadable']} unreadable")
        if study is not None and study.preferred is None:
            needs.append("no law singled out")
        conversion = "" if study is None else percent(study.outcome.conversion)[0]
        rows.append(
            {
                "run": name,
                "title": run.sheet.title,
                "state": "followed now" if beat.following.alive else "not followed",
                "spectra": str(sum(counts.values())),
                "last spectrum": ago(last, datetime.now(UTC)),
                "conversion": conversion,
                "rate": why_not if study is None else rates_in_words(study.best),
                "needs attention": ", ".join(needs) or "—",
            }
        )
    table = pd.DataFrame(rows)
    picked = st.dataframe(
        table,
        hide_index=True,
        width="stretch",
        on_select="rerun",
        selection_mode="single-row",
        key="runs",
    )
    chosen = picked.selection.rows
    if chosen:
        st.query_params["run"] = names[chosen[0]]
        st.session_state["run"] = names[chosen[0]]
        st.switch_page("now")
    st.caption("Choose a row to open the run.")
