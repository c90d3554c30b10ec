"""What happened since a moment: events, gaps, spectra that need a look, decisions, following.

Everything is read from the record as it stands; nothing is measured or fitted here.
"""

from collections.abc import Iterable
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from math import hypot

import numpy as np

from kinetics.logbook.view import StoryLine
from kinetics.run import Run, event_times

# A pause counts as a gap when it is this many times the usual one between two spectra.
_GAP_FACTOR = 2.5
KINDS = ("event", "gap", "remark", "unreadable", "decision", "follower")


@dataclass(frozen=True, slots=True)
class Happening:
    """One thing that happened.

    Attributes
    ----------
    at, until
        When it began and ended, UTC; the same for a moment.
    kind
        One of `KINDS`.
    text
        What, in words; may hold text from files.
    """

    at: datetime
    until: datetime
    kind: str
    text: str


@dataclass(frozen=True, slots=True)
class Difference:
    """One quantity at two times; `u` is the standard uncertainty of the change, nan if unknown."""

    what: str
    unit: str
    before: float
    after: float
    u: float


def happenings(run: Run, story: Iterable[StoryLine], since: datetime) -> tuple[Happening, ...]:
    """Return what happened at or after a moment, oldest first.

    A remark that stands on neighbouring spectra is one happening from the first to the last.

    Parameters
    ----------
    run
        The run.
    story
        The record's story, for what the follower said.
    since
        UTC.
    """
    out = [*_events(run), *_gaps(run), *_remarks(run), *_unreadable(run)]
    out += [
        Happening(d.at, d.at, "decision", f"{d.who}: {d.kind} {d.subject} {d.new} {d.why}".strip())
        for d in run.decisions
    ]
    out += [
        Happening(line.at, line.at, "follower", line.text)
        for line in story
        if line.spectrum is None
        and line.kind in ("following", "stopped", "trouble", "trouble-over")
    ]
    return tuple(sorted((h for h in out if h.until >= since), key=lambda h: (h.at, h.kind)))


def _events(run: Run) -> Iterable[Happening]:
    if run.started is None:
        return
    for seconds, event in event_times(run):
        at = run.started + timedelta(seconds=seconds)
        volume = f", {event.volume_ml:g} mL" if event.volume_ml else ""
        yield Happening(at, at, "event", f"{event.kind}{volume}: {event.text}".rstrip(": "))


def _gaps(run: Run) -> Iterable[Happening]:
    times = run.time_s[run.measured]
    if times.size < 4 or run.started is None:
        return
    steps = np.diff(times)
    usual = float(np.median(steps))
    for place in np.flatnonzero(steps > _GAP_FACTOR * usual):
        begin, end = (run.started + timedelta(seconds=float(times[place + i])) for i in (0, 1))
        yield Happening(
            begin,
            end,
            "gap",
            f"{steps[place] / 60:.0f} min without a spectrum; usually one every {usual / 60:.1f} "
            f"min. Missing: between {run.entries[run.measured[place]].source} and "
            f"{run.entries[run.measured[place + 1]].source}",
        )


def _remarks(run: Run) -> Iterable[Happening]:
    """Remarks of spectra, neighbours with the same one joined."""
    open_ones: dict[tuple[str, str], tuple[int, datetime, datetime, int, str]] = {}
    for place, index in enumerate(run.measured):
        at = run.timeline.mid[index]
        if at is None:
            continue
        for remark in dict.fromkeys(run.entries[index].remarks):
            which = (remark.code, remark.subject)
            before = open_ones.get(which)
            text = f"{remark.subject}: {remark}" if remark.subject else str(remark)
            if before is not None and before[0] in (place - 1, place):
                open_ones[which] = (place, before[1], at, before[3] + 1, text)
                continue
            if before is not None:
                yield _joined(before)
            open_ones[which] = (place, at, at, 1, text)
    for rest in open_ones.values():
        yield _joined(rest)


def _joined(found: tuple[int, datetime, datetime, int, str]) -> Happening:
    _, begin, end, count, text = found
    return Happening(
        begin, end, "remark", text if count == 1 else f"{count} spectra; the last: {text}"
    )


def _unreadable(run: Run) -> Iterable[Happening]:
    for entry in run.entries:
        if entry.state == "unreadable":
            yield Happening(
                entry.arrived, entry.arrived, "unreadable", f"{entry.source}: {entry.reason}"
            )


def differences(run: Run, first: int, second: int) -> tuple[Difference, ...]:
    """Return what changed from one measured spectrum to another.

    Parameters
    ----------
    run
        The run.
    first, second
        Rows of `run.measured`.
    """
    unit = {"ratio": "per reference proton", "per scan": "per scan"}.get(run.amounts.unit, "mol/L")
    values, u = run.amounts.values, run.amounts.standard_uncertainty
    out = [
        Difference(
            name,
            unit,
            float(values[first, c]),
            float(values[second, c]),
            hypot(float(u[first, c]), float(u[second, c])),
        )
        for c, name in enumerate(run.amounts.species)
    ]
    before, after = (run.measured[row] for row in (first, second))
    warm, warmer = run.temperatures_k[before], run.temperatures_k[after]
    if warm is not None and warmer is not None:
        out.append(Difference("temperature", "°C", warm - 273.15, warmer - 273.15, float("nan")))
    one, other = run.entries[before], run.entries[after]
    out.append(Difference("line width", "Hz", one.line_width_hz, other.line_width_hz, float("nan")))
    return tuple(out)


def last_review(run: Run) -> datetime | None:
    """Return until when the run was reviewed last, UTC; None if never."""
    for decision in reversed(run.decisions):
        if decision.kind == "reviewed":
            try:
                until = datetime.fromisoformat(decision.subject)
            except ValueError:
                continue
            return until if until.tzinfo else until.replace(tzinfo=UTC)
    return None
