"""Dimethyl sulfate hydrolysis: real 600 MHz raw folders against the authors' rate constants.

Source: Choi, Bose, Mathews, Mustoe, Lucks (2026), open data under CC BY 4.0, lying in
``../shared/data/dms_hydrolysis`` beside the checkout (its ORIGIN.md names the repository).
Published first-order k: 3.630e-3 1/s at 52 °C and 8.114e-3 1/s at 60 °C; other integration
windows move k by up to 8 % (ORIGIN.md).
"""

import csv
import io
import json
import re
from datetime import UTC, datetime
from pathlib import Path

import pytest

from tests.command import kinetics

DATA = Path(__file__).resolve().parents[3] / "shared" / "data" / "dms_hydrolysis"
HERE = Path(__file__).parent

pytestmark = pytest.mark.skipif(
    not DATA.is_dir(), reason=f"the open data set is not beside this checkout ({DATA})"
)

RUNS = [("run_52C", "dms_52.toml", 3.630e-3), ("run_60C", "dms_60.toml", 8.114e-3)]


def recorded(folder: Path) -> tuple[float, float]:
    """Start and end of an acquisition as its parameter file has them, Unix seconds."""
    text = (folder / "acqus").read_text(encoding="latin-1")
    found = [re.search(rf"##\${key}= (\d+)", text) for key in ("DATE_START", "DATE")]
    start, end = (float(m.group(1)) for m in found if m is not None)
    return start, end


@pytest.mark.parametrize(("run", "sheet", "published"), RUNS)
def test_k_and_times(run: str, sheet: str, published: float, tmp_path: Path) -> None:
    logbook = tmp_path / f"{run}.logbook"
    watched = kinetics("watch", DATA / run, "--sheet", HERE / sheet, "--logbook", logbook, "--once")
    assert watched.returncode == 0, watched.stderr
    fitted = json.loads(kinetics("fit", logbook, "--json").stdout)
    counts = fitted["spectra"]
    assert counts["measured"] + counts["doubtful"] == 18
    assert counts["unreadable"] == counts["set_aside"] == 0
    (fit,) = fitted["fits"]
    k = fit["parameters"]["k"]
    assert fit["law"] == "first-order"
    assert k["unit"] == "1/s"
    assert k["value"] == pytest.approx(published, rel=0.08)
    assert (k["high"] - k["low"]) / 2 / k["value"] < 0.05
    rows = list(csv.DictReader(io.StringIO(kinetics("table", logbook).stdout)))
    assert len(rows) == 18
    for row in rows:
        start, end = recorded(DATA / run / row["file"])
        clock = datetime.fromisoformat(row["clock"]).astimezone(UTC).timestamp()
        assert clock == pytest.approx((start + end) / 2, abs=0.001)
    first = min(recorded(DATA / run / row["file"])[0] for row in rows)
    assert float(rows[0]["time_s"]) == pytest.approx(
        sum(recorded(DATA / run / "1")) / 2 - first, abs=0.001
    )
