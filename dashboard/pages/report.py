"""Report: what do I hand over, and does it hold up?"""

import io
import json

import pandas as pd
import streamlit as st

from dashboard import choice, source
from dashboard.words import local
from kinetics.answers import fit_document
from kinetics.errors import KettlewatchError
from kinetics.report import report_html
from kinetics.run import Run
from kinetics.table import write_csv
from kinetics.verify import verify


def page() -> None:
    """Draw the page."""
    logbook = choice.chosen_logbook("Report", "What do I hand over, and does it hold up?")
    run = choice.loaded(logbook)
    _report(run)
    _verification(run)
    _decisions(run)
    st.caption(choice.SAFETY)


@st.cache_data(max_entries=4, show_spinner=False)
def _html(logbook: str, tick: int, _run: Run) -> str:
    del logbook, tick  # the key: one report a state of the logbook
    return report_html(_run)


def _report(run: Run) -> None:
    st.subheader("Report and data", anchor=False)
    name = run.logbook.name.removesuffix(".logbook")
    mark = (str(run.logbook), run.tick)
    if st.session_state.get("report_made") != mark:
        st.caption("The report is made from the record as it stands now.")
        if st.button("Make the report", type="primary"):
            st.session_state["report_made"] = mark
            st.rerun()
    else:
        try:
            with st.spinner("Making the report …"):
                text = _html(str(run.logbook), run.tick, run)
        except KettlewatchError as why:
            st.error(f"The report could not be made: {why}")
        else:
            st.download_button(
                "Download the report (HTML)", text, f"{name}.html", "text/html", type="primary"
            )
            with st.container(key="preview"):
                # The report carries no script and escapes every text; the frame runs none either.
                st.iframe(text, height=640)
    table = io.StringIO()
    write_csv(run, table)
    left, right = st.columns(2)
    left.download_button("Download the table (CSV)", table.getvalue(), f"{name}.csv", "text/csv")
    study, why_not = source.study_of(run)
    if study is None:
        right.caption(f"No fits to download: {why_not}")
    else:
        document = json.dumps(fit_document(run, study), indent=2, allow_nan=False)
        right.download_button(
            "Download the fits (JSON)", document, f"{name}.json", "application/json"
        )


def _verification(run: Run) -> None:
    st.subheader("Verification", anchor=False)
    st.caption(
        "Compares the raw files with the hashes in the record, follows the chain of decisions, "
        "and measures every spectrum again. A long run takes minutes."
    )
    if not st.button("Verify now"):
        return
    try:
        with st.spinner("Measuring every spectrum again …"):
            found = verify(run.logbook)
    except KettlewatchError as why:
        st.error(f"It could not be verified: {why}")
        return
    if found.found:
        st.error("Something differs. Keep the logbook and the run folder as they are, and ask why.")
    else:
        st.success("No difference was found in what could be compared.")
    for line in found.lines:
        st.text(line)


def _decisions(run: Run) -> None:
    st.subheader("Record of decisions", anchor=False)
    if not run.decisions:
        st.caption("No decision has been recorded for this run.")
        return
    rows = [
        {
            "number": str(d.id),
            "when": local(d.at, run.zone),
            "who": d.who,
            "kind": d.kind,
            "about": d.subject,
            "new": d.new,
            "why": d.why,
        }
        for d in reversed(run.decisions)
    ]
    st.dataframe(pd.DataFrame(rows), hide_index=True, width="stretch", key="decisions")
    st.caption("Newest first. Decisions are appended and chained by hashes, never changed.")
