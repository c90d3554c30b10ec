"""Which run a page is about, and who decides: asked for in the same way on every page."""

from pathlib import Path

import streamlit as st

from dashboard import source
from kinetics.errors import KettlewatchError
from kinetics.logbook.connection import open_writable, transaction
from kinetics.logbook.decisions import append
from kinetics.logbook.view import Following
from kinetics.run import Run

SAFETY = (
    "This page is no safety interlock. A stall while feeding means accumulation. Follow the "
    "site's procedure before anything is heated, dosed, quenched or ended."
)


def chosen_logbook(title: str, question: str) -> Path:
    """Draw a page's title and the choice of run; stop the page where there is none."""
    st.title(title)
    st.caption(question)
    found = source.logbooks()
    if not found:
        st.info("No logbook here yet. The page Runs says how to start one.")
        st.stop()
    names = list(found)
    asked = st.query_params.get("run") or st.session_state.get("run")
    index = names.index(asked) if asked in names else 0
    name = names[index] if len(names) == 1 else st.selectbox("Run", names, index=index)
    st.session_state["run"] = name
    st.query_params["run"] = name
    return found[name]


def loaded(logbook: Path) -> Run:
    """Return the run with its title and state drawn; stop the page where nothing is to be seen."""
    try:
        beat = source.pulse(logbook)
        with st.spinner("Reading the logbook …"):
            run = source.run_at(logbook, beat.tick)
    except KettlewatchError as why:
        st.error(f"{why}. `python -m kinetics verify LOGBOOK` says more.")
        st.stop()
    st.text(run.sheet.title or logbook.name)
    _stale(beat.following)
    if not run.entries:
        st.info("No spectrum has been taken yet. The page Now shows the first when it is complete.")
        st.stop()
    return run


def _stale(following: Following) -> None:
    if following.holder is not None and not following.alive:
        st.warning(
            "The follower ended without saying so, and what is shown may be old. Nothing is lost: "
            "start it again with the same command and it goes on where it stood."
        )


def who(key: str) -> str:
    """Ask for the name of whoever decides; remembered while the browser tab is open."""
    known = str(st.session_state.get("name", ""))
    name = str(st.text_input("Your name", value=known, key=f"who_{key}", max_chars=80)).strip()
    if name:
        st.session_state["name"] = name
    return name


def record(
    logbook: Path, *, who: str, kind: str, subjects: list[str], new: str, why: str
) -> str | None:
    """Append one decision a subject, all or none; return in words why it failed, else None."""
    try:
        connection = open_writable(logbook)
        try:
            with transaction(connection):
                for subject in subjects:
                    append(connection, who=who, kind=kind, subject=subject, new=new, why=why)
        finally:
            connection.close()
    except KettlewatchError as error:
        return str(error)
    return None
