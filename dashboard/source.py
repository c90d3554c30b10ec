"""Where pages get their runs: the logbooks of one folder, read once per change."""

import os
from dataclasses import dataclass
from pathlib import Path

import streamlit as st

from kinetics.errors import FitError, KettlewatchError, NothingToDoError
from kinetics.logbook.connection import FILE_NAME
from kinetics.logbook.view import Following, LogbookView
from kinetics.rates.study import Study, with_law_first
from kinetics.run import Run, load_run, study_run

FOLDER_VARIABLE = "KETTLEWATCH_LOGBOOKS"
# A live fit is redone when the number of spectra has grown by this share, or a decision was made.
_REFIT_GROWTH = 0.01


@dataclass(frozen=True, slots=True)
class Pulse:
    """What changes while a run is looked at: the record's counter and the follower."""

    tick: int
    following: Following


def folder() -> Path:
    """Return the folder of logbooks the dashboard was started with."""
    return Path(os.environ.get(FOLDER_VARIABLE, "."))


def logbooks() -> dict[str, Path]:
    """Return name → path of the logbooks found, newest record first."""
    root = folder()
    places = [root, *sorted(root.glob("*.logbook"))] if root.is_dir() else []
    found = [p for p in places if (p / FILE_NAME).is_file()]
    found.sort(key=lambda p: (p / FILE_NAME).stat().st_mtime, reverse=True)
    return {p.name.removesuffix(".logbook"): p for p in found}


def pulse(logbook: Path) -> Pulse:
    """Look at a logbook's counter and follower; cheap.

    Raises
    ------
    KettlewatchError
        If the logbook cannot be read.
    """
    with LogbookView(logbook) as view:
        return Pulse(view.tick(), view.following())


@st.cache_resource(max_entries=6, show_spinner=False)
def run_at(logbook: Path, tick: int) -> Run:
    """Return a run as it stood at a tick (or later)."""
    del tick
    return load_run(logbook)


@dataclass(slots=True)
class _LastStudy:
    signature: tuple[object, ...]
    points: int
    study: Study


@st.cache_resource(max_entries=32, show_spinner=False)
def _last_study(logbook: Path) -> list[_LastStudy]:
    del logbook
    return []


def study_of(run: Run) -> tuple[Study | None, str]:
    """Return the study of a run, and in words why there is none.

    While a run grows the last study serves until there is one per cent more to fit.
    """
    signature = (run.sheet_version, len(run.decisions), run.chosen_law)
    points = int(run.fitted.size)
    kept = _last_study(run.logbook)
    if kept and kept[0].signature == signature:
        grown = points - kept[0].points
        if grown == 0 or 0 < grown < _REFIT_GROWTH * kept[0].points:
            return kept[0].study, ""
    try:
        found = with_law_first(study_run(run), run.chosen_law)
    except (FitError, NothingToDoError) as why:
        return None, str(why)
    except KettlewatchError as why:
        return None, str(why)
    kept[:] = [_LastStudy(signature, points, found)]
    return found, ""
