"""Time: what stamps mean, zones, the hour that comes twice, lag, and stamps that are missing."""

from datetime import UTC, datetime, timedelta, timezone

import numpy as np
import pytest

from kinetics.spectra.clock import ClockSettings, timeline
from kinetics.spectra.model import Stamp


def stamp(
    start: datetime | None = None,
    end: datetime | None = None,
    seconds: float | None = None,
    modified: datetime | None = None,
) -> Stamp:
    return Stamp(start, end, seconds, modified, "")


AT = datetime(2026, 3, 3, 12, 0, tzinfo=UTC)


@pytest.mark.parametrize(
    "given",
    [
        stamp(AT, AT + timedelta(seconds=60)),
        stamp(AT, None, 60.0),
        stamp(None, AT + timedelta(seconds=60), 60.0),
        stamp(AT.astimezone(timezone(timedelta(hours=-7))), None, 60.0),
    ],
)
def test_the_time_of_a_point_is_the_middle(given: Stamp) -> None:
    line = timeline([given], ["1"], ClockSettings())
    assert line.mid == (AT + timedelta(seconds=30),)
    assert line.acquisition_s == pytest.approx([60.0])
    assert line.remarks == ()


def test_lag_is_taken_off() -> None:
    line = timeline([stamp(AT, None, 60.0)], ["1"], ClockSettings(lag_s=12.0))
    assert line.mid == (AT + timedelta(seconds=18),)


def test_a_night_across_the_change_to_winter_time() -> None:
    """In Berlin 02:00 to 03:00 comes twice on 25 October 2026; every quarter of an hour."""
    true = [
        datetime(2026, 10, 24, 23, 0, tzinfo=UTC) + timedelta(minutes=15 * i) for i in range(20)
    ]
    # Berlin is UTC+2 until 01:00 UTC, then UTC+1; the stamps carry no offset.
    local = [
        (t + timedelta(hours=2 if t < datetime(2026, 10, 25, 1, tzinfo=UTC) else 1)).replace(
            tzinfo=None
        )
        for t in true
    ]
    assert len(set(local)) < len(local)
    line = timeline(
        [stamp(t, None, 60.0) for t in local],
        [str(i) for i in range(20)],
        ClockSettings(zone="Europe/Berlin"),
    )
    assert list(line.start) == true
    assert line.remarks == ()


@pytest.mark.parametrize("hour", [0, 1])
def test_spectra_hours_apart_are_told_by_when_their_file_was_written(hour: int) -> None:
    """02:30 in Berlin is 00:30 or 01:30 UTC; every two hours the order does not tell which."""
    true = datetime(2026, 10, 25, hour, 30, tzinfo=UTC)
    local = datetime(2026, 10, 25, 2, 30)
    given = [
        stamp(true - timedelta(hours=4), None, 60.0),
        stamp(local, None, 60.0, true + timedelta(seconds=75)),
    ]
    line = timeline(given, ["1", "2"], ClockSettings(zone="Europe/Berlin"))
    assert line.start[1] == true
    # Copied later, the file's time tells nothing: the first of the two is taken.
    copied = [given[0], stamp(local, None, 60.0, true + timedelta(days=2))]
    line = timeline(copied, ["1", "2"], ClockSettings(zone="Europe/Berlin"))
    assert line.start[1] == datetime(2026, 10, 25, 0, 30, tzinfo=UTC)


def test_missing_stamps_fall_back_and_say_so() -> None:
    given = [stamp(AT, None, 60.0), stamp(None, None, 60.0, AT + timedelta(seconds=200))]
    line = timeline(given, ["1", "2"], ClockSettings())
    assert line.mid[1] == AT + timedelta(seconds=170)
    assert [r.code for r in line.remarks] == ["time-from-file"]
    nothing = timeline([stamp()], ["1"], ClockSettings())
    assert nothing.mid == (None,)
    assert np.isnan(nothing.acquisition_s).all()


def test_a_clock_that_runs_backwards_is_remarked_on() -> None:
    given = [stamp(AT + timedelta(seconds=s), None, 10.0) for s in (0, 100, 50, 150)]
    line = timeline(given, list("1234"), ClockSettings())
    assert [r.code for r in line.remarks] == ["time-runs-backwards"]


def test_an_unknown_length_is_remarked_on() -> None:
    line = timeline([stamp(AT), stamp(AT + timedelta(seconds=60))], ["1", "2"], ClockSettings())
    assert [r.code for r in line.remarks] == ["acquisition-length-unknown"]
    told = timeline([stamp(AT)], ["1"], ClockSettings(acquisition_s=20.0))
    assert told.mid == (AT + timedelta(seconds=10),)


def test_counted_by_interval_in_natural_order() -> None:
    given = [stamp(AT, None, 10.0), stamp(), stamp()]
    settings = ClockSettings(source="interval", interval_s=60.0, acquisition_s=10.0)
    line = timeline(given, ["9", "10", "11"], settings)
    assert [(t - AT).total_seconds() for t in line.mid if t] == [5.0, 65.0, 125.0]
    assert [r.code for r in line.remarks] == ["time-by-interval"]
