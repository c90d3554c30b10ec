"""Whole runs whose clock is awkward: winter time, several folders, interleaved runs, no stamps."""

import json
import os
import re
import shutil
from datetime import UTC, datetime, timedelta
from pathlib import Path
from zoneinfo import ZoneInfo

import pytest

from demo_runs import dunmarolide
from demo_runs.sheets import write_sheet
from demo_runs.simulate import SimulatedSpectrum, simulate_run
from demo_runs.write import write
from kinetics.answers import fit_document
from kinetics.run import load_run, study_run
from tests.recorded import take

BERLIN = ZoneInfo("Europe/Berlin")
# Summer time ends in Berlin on 25 October 2026 at 01:00 UTC, in the middle of the run.
COUNT = 24


def spectra(started: datetime) -> list[SimulatedSpectrum]:
    return list(simulate_run(dunmarolide.demo(), seed=5, started=started, count=COUNT))


def started() -> datetime:
    middle = spectra(datetime(2026, 10, 24, 20, 0, tzinfo=UTC))[COUNT // 2].start
    change = datetime(2026, 10, 25, 1, 0, tzinfo=UTC)
    late = change - (middle - datetime(2026, 10, 24, 20, 0, tzinfo=UTC))
    return late.replace(microsecond=0)


def write_text(folder: Path, started: datetime, form: str) -> None:
    """Two-column text whose stamps carry the offset, are local without one, or are missing."""
    folder.mkdir(parents=True)
    for spectrum in spectra(started):
        path = write(spectrum, folder, "text")
        text = path.read_text()
        moment = spectrum.start
        if form == "local":
            stamp = f"# acquired = {moment.astimezone(BERLIN).replace(tzinfo=None).isoformat()}"
        elif form == "utc":
            stamp = f"# acquired = {moment.isoformat()}"
        else:
            stamp = "# nothing = said"
        text, found = re.subn(r"^# acquired = .*$", stamp, text, flags=re.M)
        assert found == 1
        path.write_text(text)
        os.utime(path, (spectrum.end.timestamp(), spectrum.end.timestamp()))


def k_of(home: Path, started: datetime, zone: str, more: str = "") -> dict[str, float]:
    write_sheet(home / "sheet.toml", started)
    sheet = (home / "sheet.toml").read_text()
    sheet = sheet.replace('[time]\nzone = "UTC"\n', f'{more}[time]\nzone = "{zone}"\n')
    assert zone in sheet
    (home / "sheet.toml").write_text(sheet)
    take(home / "run", home / "sheet.toml", home / "x.logbook")
    run = load_run(home / "x.logbook")
    assert run.counts()["measured"] + run.counts()["doubtful"] == COUNT, run.counts()
    fits = fit_document(run, study_run(run, ("first-order",)))["fits"]
    k: dict[str, float] = json.loads(json.dumps(fits[0]["parameters"]["k"]))
    return k


@pytest.fixture(scope="module")
def reference(tmp_path_factory: pytest.TempPathFactory) -> dict[str, float]:
    """The rate constant with stamps in UTC."""
    home = tmp_path_factory.mktemp("utc")
    write_text(home / "run", started(), "utc")
    return k_of(home, started(), "UTC")


def test_winter_time_gives_the_same_k_as_utc(tmp_path: Path, reference: dict[str, float]) -> None:
    write_text(tmp_path / "run", started(), "local")
    local = [spectrum.start.astimezone(BERLIN) for spectrum in spectra(started())]
    assert local[0].utcoffset() != local[-1].utcoffset(), "the run spans the change"
    found = k_of(tmp_path, started(), "Europe/Berlin")
    assert found["value"] == pytest.approx(reference["value"], rel=1e-9)
    assert found["standard_error"] == pytest.approx(reference["standard_error"], rel=1e-6)


def test_times_of_files_where_none_is_recorded(tmp_path: Path, reference: dict[str, float]) -> None:
    write_text(tmp_path / "run", started(), "none")
    found = k_of(tmp_path, started(), "Europe/Berlin")
    assert abs(found["value"] - reference["value"]) < 0.1 * reference["standard_error"]
    codes = {remark.code for remark in load_run(tmp_path / "x.logbook").remarks()}
    assert "time-from-file" in codes


def test_a_run_in_two_folders_with_another_one_between(
    tmp_path: Path, reference: dict[str, float]
) -> None:
    """A restart went on in a second folder; a colleague's run lies in both, interleaved."""
    write_text(tmp_path / "run", started(), "utc")
    (tmp_path / "later").mkdir()
    files = sorted((tmp_path / "run").iterdir())
    for place, path in enumerate(files):
        home = tmp_path / ("run" if place < COUNT // 2 else "later")
        path.rename(home / f"A-{path.name}")
    other = tmp_path / "other"
    write_text(other, started() + timedelta(hours=2), "utc")
    for place, path in enumerate(sorted(other.iterdir())):
        home = tmp_path / ("run" if place % 2 else "later")
        shutil.copy2(path, home / f"B-{path.name}")
    files_table = '[files]\nalso = ["later"]\ninclude = ["*A-*"]\nexclude = ["*B-*"]\n\n'
    found = k_of(tmp_path, started(), "UTC", files_table)
    assert found["value"] == pytest.approx(reference["value"], rel=1e-6)
    run = load_run(tmp_path / "x.logbook")
    assert [e.source for e in run.entries][-1].startswith("later/A-")
