"""From what the files of a run say about time to the time of each spectrum.

The time of a point is the middle of its acquisition, less the lag of a flow loop. Stamps without
an offset are local; the hour that comes twice when summer time ends is told apart by the order
of the spectra.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from typing import Literal
from zoneinfo import ZoneInfo

import numpy as np

from kinetics.remarks import Remark
from kinetics.spectra.arrival import natural_key
from kinetics.spectra.model import Float64, Stamp


@dataclass(frozen=True, slots=True)
class ClockSettings:
    """What the sheet says about time; see [time] there."""

    zone: str = "UTC"
    source: Literal["recorded", "file", "interval"] = "recorded"
    interval_s: float | None = None
    acquisition_s: float | None = None
    lag_s: float = 0.0


@dataclass(frozen=True, slots=True, eq=False)
class Timeline:
    """Times of the spectra of a run.

    Attributes
    ----------
    start, mid, end
        UTC, one a spectrum, None where unknown. `mid` has the lag taken off.
    acquisition_s
        Length of each acquisition in s, nan where unknown, shape (n,).
    remarks
        What is to be said about the clock wherever a rate constant is shown.
    """

    start: tuple[datetime | None, ...]
    mid: tuple[datetime | None, ...]
    end: tuple[datetime | None, ...]
    acquisition_s: Float64
    remarks: tuple[Remark, ...]

    def ordered(self, order: Sequence[int]) -> "Timeline":
        """Return the timeline in another order of the spectra."""
        return Timeline(
            tuple(self.start[i] for i in order),
            tuple(self.mid[i] for i in order),
            tuple(self.end[i] for i in order),
            self.acquisition_s[np.asarray(order, np.intp)],
            self.remarks,
        )


def timeline(stamps: Sequence[Stamp], names: Sequence[str], settings: ClockSettings) -> Timeline:
    """Find the times of the spectra of a run.

    Parameters
    ----------
    stamps
        What the files say.
    names
        Sources; their natural order counts where times are missing or ambiguous.
    settings
        [time] of the sheet.
    """
    order = sorted(range(len(stamps)), key=lambda i: natural_key(names[i]))
    if settings.source == "interval" and settings.interval_s is not None:
        spans, remarks = _by_interval(stamps, order, settings)
    else:
        spans, remarks = _by_stamp(stamps, order, settings)
    lag = timedelta(seconds=settings.lag_s)
    mid = tuple(None if s is None else s[0] + (s[1] - s[0]) / 2 - lag for s in spans)
    known = [
        settings.acquisition_s
        if settings.acquisition_s is not None
        else (np.nan if s is None else (s[1] - s[0]).total_seconds())
        for s in spans
    ]
    return Timeline(
        tuple(None if s is None else s[0] for s in spans),
        mid,
        tuple(None if s is None else s[1] for s in spans),
        np.array(known, np.float64),
        tuple(remarks),
    )


Span = tuple[datetime, datetime]


def _by_interval(
    stamps: Sequence[Stamp], order: Sequence[int], settings: ClockSettings
) -> tuple[list[Span | None], list[Remark]]:
    step = timedelta(seconds=settings.interval_s or 0.0)
    origin = datetime(1970, 1, 1, tzinfo=UTC)
    if order:
        span = _recorded(stamps[order[0]], settings)[0] or _from_file(stamps[order[0]], settings)
        origin = span[0] if span else origin
    spans: list[Span | None] = [None] * len(stamps)
    for place, index in enumerate(order):
        length = timedelta(seconds=settings.acquisition_s or stamps[index].duration_s or 0.0)
        spans[index] = (origin + place * step, origin + place * step + length)
    return spans, [
        Remark(
            "time-by-interval",
            f"Times are counted: one spectrum every {settings.interval_s:g} s, by the order of "
            "their names.",
            "A missing spectrum or a pause shifts all later points.",
            "Use recorded times where the files have them.",
        )
    ]


def _by_stamp(
    stamps: Sequence[Stamp], order: Sequence[int], settings: ClockSettings
) -> tuple[list[Span | None], list[Remark]]:
    spans: list[Span | None] = [None] * len(stamps)
    fallen_back = short = 0
    previous: datetime | None = None
    backwards = 0
    for index in order:
        span, certain = (None, True)
        if settings.source == "recorded":
            span, certain = _recorded(stamps[index], settings, previous)
        if span is None:
            span = _from_file(stamps[index], settings)
            fallen_back += span is not None
        if span is not None:
            backwards += previous is not None and span[0] < previous - timedelta(seconds=1)
            previous = span[0]
        short += not certain
        spans[index] = span
    remarks = []
    if fallen_back:
        remarks.append(
            Remark(
                "time-from-file",
                f"{fallen_back} of {len(stamps)} spectra carry no time of their own: when their "
                "file was last written was taken as the end of the acquisition.",
                "Copying or late writing shifts points, and with them k.",
                'Export with times, or give [time] source = "interval".',
            )
        )
    if short:
        remarks.append(
            Remark(
                "acquisition-length-unknown",
                f"{short} of {len(stamps)} spectra do not say how long they took; the one time "
                "they carry was taken as it is.",
                "Points are off by half an acquisition, all alike if the length does not change.",
                "Give [time] acquisition_s.",
            )
        )
    if backwards:
        remarks.append(
            Remark(
                "time-runs-backwards",
                f"The recorded time steps back {backwards} times along the names of the spectra.",
                "They are ordered by time; if the clock was set, k is wrong.",
                "Check the instrument's clock.",
            )
        )
    return spans, remarks


def _recorded(
    stamp: Stamp, settings: ClockSettings, after: datetime | None = None
) -> tuple[Span | None, bool]:
    """Start and end by the recorded stamp, and whether both are certain."""
    length = settings.acquisition_s or stamp.duration_s
    zone = ZoneInfo(settings.zone)
    gap = timedelta(seconds=length or 0.0)
    near = None if stamp.modified is None else stamp.modified - gap
    start = None if stamp.start is None else in_utc(stamp.start, zone, after, near)
    end = None if stamp.end is None else in_utc(stamp.end, zone, start or after, stamp.modified)
    if start is not None and end is not None:
        return (start, end), True
    if start is not None:
        return (start, start + gap), length is not None
    if end is not None:
        return (end - gap, end), length is not None
    return None, True


# A file time this close to one of the two readings of an ambiguous stamp tells them apart.
_WRITTEN_WITHIN = timedelta(minutes=20)


def in_utc(
    moment: datetime,
    zone: ZoneInfo,
    after: datetime | None = None,
    written: datetime | None = None,
) -> datetime:
    """Give a local moment its zone; return it in UTC.

    Parameters
    ----------
    moment
        With an offset, or local to `zone`.
    zone
        Of moments without an offset.
    after
        Of the two hours when summer time ends, the one is taken that does not lie before this.
    written
        When the file was written: tells the two hours apart where the order does not (spectra
        hours apart), if it lies close to one of them.
    """
    if moment.tzinfo is not None:
        return moment.astimezone(UTC)
    first = moment.replace(tzinfo=zone, fold=0).astimezone(UTC)
    second = moment.replace(tzinfo=zone, fold=1).astimezone(UTC)
    if second <= first:
        return first
    if after is not None and first < after - timedelta(seconds=1):
        return second
    if written is not None and abs(written - second) < _WRITTEN_WITHIN:
        return second
    return first


def _from_file(stamp: Stamp, settings: ClockSettings) -> Span | None:
    if stamp.modified is None:
        return None
    length = timedelta(seconds=settings.acquisition_s or stamp.duration_s or 0.0)
    return stamp.modified - length, stamp.modified


def seconds_since(start: datetime | None, moments: tuple[datetime | None, ...]) -> Float64:
    """Return seconds from a start, nan where a moment is unknown, shape (n,)."""
    return np.array(
        [np.nan if t is None or start is None else (t - start).total_seconds() for t in moments],
        np.float64,
    )
