"""The temperature log: its forms, the join to the spectra, and what is said about it."""

from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest

from kinetics.errors import InputError
from kinetics.run import load_run
from kinetics.table import rows
from kinetics.temperature import read_log
from tests.recorded import STARTED, drop, take

FORMS = {
    "comma": "time,celsius\n2026-03-03T20:00:00,25.0\n2026-03-03T20:10:00,26.0\n",
    "semicolon": "Time;Celsius;note\n2026-03-03 20:00:00;25,0;a\n2026-03-03 20:10:00;26,0;\n",
    "tab": "n\tcelsius\ttime\n1\t25,0\t2026-03-03T19:00:00Z\n2\t26,0\t2026-03-03T19:10:00Z\n",
}


@pytest.mark.parametrize("form", FORMS)
def test_forms(form: str) -> None:
    trace = read_log(FORMS[form], "Europe/Berlin")
    assert trace.mean(STARTED, STARTED + timedelta(minutes=10)) == pytest.approx(298.65)
    assert trace.mean(STARTED + timedelta(minutes=30), STARTED + timedelta(minutes=31)) is None


def test_the_hour_that_comes_twice() -> None:
    """In Berlin 02:30 comes twice on 25 October 2026: at 00:30 and at 01:30 UTC."""
    text = "time,celsius\n2026-10-25T02:30:00,20\n2026-10-25T02:59:00,21\n2026-10-25T02:30:00,22\n"
    trace = read_log(text, "Europe/Berlin")
    later = datetime(2026, 10, 25, 1, 30, tzinfo=UTC)
    assert trace.mean(later, later) == pytest.approx(295.15)


def test_a_line_that_is_being_written_is_left_out() -> None:
    assert read_log("time,celsius\n2026-03-03T20:00:00,25\n2026-03-0", "UTC").kelvin.size == 1


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("", "empty"),
        ("when,celsius\n", "expected column names"),
        ("time,celsius\nsoon,25\n", "line 2 .*expected a time"),
        ("time,celsius\n2026-03-03T20:00:00,nan\n", "no temperature yet"),
    ],
)
def test_a_wrong_log_is_told_in_words(text: str, said: str) -> None:
    with pytest.raises(InputError, match=said):
        read_log(text, "UTC")


def logbook(home: Path, log: str | None, more: str = "") -> Path:
    drop(home / "run", 12)
    demo = Path(__file__).parents[1] / "demo_runs" / "demo.toml"
    sheet = demo.read_text().replace("temperature_c = 25.0\n", "")
    sheet = sheet.replace("temperature_u_c = 0.3\n", "")
    sheet = sheet.replace("[time]\n", f'[temperature]\nlog = "bath.csv"\n\n[time]\n{more}')
    (home / "sheet.toml").write_text(sheet)
    if log is not None:
        (home / "bath.csv").write_text(log)
    take(home / "run", home / "sheet.toml", home / "x.logbook")
    return home / "x.logbook"


def ramp(per_hour: float) -> str:
    lines = [
        f"{(STARTED + timedelta(minutes=i)).isoformat()},{25.0 + per_hour * i / 60:.4f}"
        for i in range(-60, 1200)
    ]
    return "\n".join(["time,celsius", *lines, ""])


@pytest.mark.parametrize("lag_s", [0.0, 600.0])
def test_each_row_has_its_temperature(tmp_path: Path, lag_s: float) -> None:
    run = load_run(logbook(tmp_path, ramp(1.0), f"lag_s = {lag_s}\n"))
    for kelvin, start, end in zip(
        run.temperatures_k, run.timeline.start, run.timeline.end, strict=True
    ):
        assert kelvin is not None
        assert start is not None
        assert end is not None
        middle = start + (end - start) / 2 - timedelta(seconds=lag_s)
        expected = 298.15 + (middle - STARTED).total_seconds() / 3600
        assert kelvin == pytest.approx(expected, abs=0.002)
    assert "temperature-varies" in {remark.code for remark in run.remarks()}
    header, body = rows(run)
    column = header.index("temperature_c")
    assert float(body[3][column]) == pytest.approx((run.temperatures_k[3] or 0) - 273.15, abs=0.006)
    known = [t for t in run.temperatures_k if t is not None]
    assert run.temperature_k == pytest.approx(sum(known) / len(known))


def test_a_steady_bath_is_not_remarked_on(tmp_path: Path) -> None:
    run = load_run(logbook(tmp_path, ramp(0.0)))
    assert not [r for r in run.remarks() if r.code.startswith("temperature")]


def test_no_log_is_said(tmp_path: Path) -> None:
    run = load_run(logbook(tmp_path, None))
    (remark,) = [r for r in run.remarks() if r.code.startswith("temperature")]
    assert "there is no file bath.csv" in remark.seen
    assert run.temperature_k == pytest.approx(298.15, abs=1.0)
