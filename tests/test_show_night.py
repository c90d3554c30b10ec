"""What happened since a moment, and what changed between two spectra."""

import shutil
from datetime import timedelta
from pathlib import Path

import numpy as np
import pytest

from demo_runs.sheets import write_sheet
from kinetics.run import load_run
from kinetics.show_night import differences, happenings, last_review
from tests.recorded import STARTED, drop, recorded_run, take


def test_gap_events_and_remarks(tmp_path: Path) -> None:
    """Spectra 11 to 14 never arrive: one gap, between the right two; `since` cuts."""
    drop(tmp_path / "all", 24)
    kept = tmp_path / "run"
    kept.mkdir()
    for folder in (tmp_path / "all").iterdir():
        if int(folder.name) not in range(11, 15):
            shutil.copytree(folder, kept / folder.name)
    write_sheet(tmp_path / "sheet.toml", STARTED)
    take(kept, tmp_path / "sheet.toml", tmp_path / "run.logbook")
    run = load_run(tmp_path / "run.logbook")
    assert run.started is not None
    found = happenings(run, (), run.started)
    gaps = [h for h in found if h.kind == "gap"]
    assert len(gaps) == 1
    assert "between 10 and 15" in gaps[0].text
    assert (gaps[0].until - gaps[0].at).total_seconds() == pytest.approx(5 * 240, abs=5)
    assert [h.at for h in found] == sorted(h.at for h in found)
    assert {h.kind for h in found} >= {"event", "gap", "decision"}
    later = happenings(run, (), gaps[0].until + timedelta(seconds=1))
    assert not [h for h in later if h.kind == "gap"]


def test_difference_of_two_spectra(tmp_path: Path) -> None:
    run = load_run(recorded_run(tmp_path, 12))
    found = {d.what: d for d in differences(run, 0, run.measured.size - 1)}
    assert found["dunmarolide"].after < found["dunmarolide"].before
    assert found["dunmaral"].after > found["dunmaral"].before
    u = run.amounts.standard_uncertainty
    assert found["dunmaral"].u == pytest.approx(float(np.hypot(u[0, 1], u[-1, 1])))
    assert last_review(run) is None
