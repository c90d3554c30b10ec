"""A run, read from its logbook: times, amounts, fits. Follower, pages and commands all call this.

`load_run` reads the record once; everything else is derived from it without touching a file.
"""

from dataclasses import dataclass
from datetime import UTC, datetime
from functools import cached_property
from pathlib import Path
from zoneinfo import ZoneInfo

import numpy as np

from kinetics.errors import InputError, NothingToDoError
from kinetics.logbook.decisions import Decision, chosen_law, set_aside
from kinetics.logbook.view import Entry, LogbookView
from kinetics.measure import amount_rule
from kinetics.rates.question import Question
from kinetics.rates.series import Series
from kinetics.rates.study import Study, study
from kinetics.remarks import Remark
from kinetics.sheet import Event, Sheet, parse_sheet
from kinetics.signals.amounts import concentrations
from kinetics.signals.model import Concentrations
from kinetics.spectra.clock import ClockSettings, Timeline, in_utc, seconds_since, timeline
from kinetics.spectra.model import Float64, Stamp
from kinetics.temperature import Logged, join, remarks_on
from kinetics.unassigned import unassigned_remarks

STATES = ("measured", "doubtful", "set-aside", "unreadable")

# What a doubtful spectrum's remark may cost (phase, shim, a lost reference), as a further
# relative standard uncertainty of its amounts: it is fitted, but has little say.
DOUBTFUL_U = 0.05


@dataclass(frozen=True, eq=False)
class Run:
    """A run as its logbook stands at one moment.

    Attributes
    ----------
    logbook
        Folder of the logbook.
    tick
        The record's counter when it was read.
    sheet, sheet_version, sheet_text
        The sheet that rules, its number, and its text.
    entries
        All spectra in order of time; those without a time at the end.
    timeline
        Start, middle and end of each entry, same order.
    decisions
        All decisions, oldest first.
    zone
        Time zone frozen in the logbook.
    temperature_log
        Text of the temperature log as the follower last saw it, None where there is none.
    """

    logbook: Path
    tick: int
    sheet: Sheet
    sheet_version: int
    sheet_text: str
    entries: tuple[Entry, ...]
    timeline: Timeline
    decisions: tuple[Decision, ...]
    zone: str
    temperature_log: str | None = None

    @cached_property
    def aside(self) -> dict[str, str]:
        """Source → reason of the spectra that are set aside."""
        return set_aside(self.decisions)

    @cached_property
    def states(self) -> tuple[str, ...]:
        """State of each entry, a decision to set it aside on top."""
        return tuple(
            "set-aside" if e.source in self.aside and e.state != "unreadable" else e.state
            for e in self.entries
        )

    def counts(self) -> dict[str, int]:
        """Number of spectra in each state."""
        return {state: self.states.count(state) for state in STATES}

    @cached_property
    def started(self) -> datetime | None:
        """When the reaction began, UTC; see `started_from` for where that comes from."""
        return self._start()[0]

    @property
    def started_from(self) -> str:
        """Where the start comes from, in words."""
        return self._start()[1]

    def _start(self) -> tuple[datetime | None, str]:
        zone = ZoneInfo(self.zone)
        if self.sheet.started is not None:
            return in_utc(self.sheet.started, zone), "started in the sheet"
        starts = [event.at for event in self.sheet.events if event.kind == "start"]
        if starts:
            return min(in_utc(at, zone) for at in starts), "the start event in the sheet"
        times = [t for t in self.timeline.start if t is not None]
        return (min(times), "the first acquisition's start") if times else (None, "nothing yet")

    @cached_property
    def time_s(self) -> Float64:
        """Time of each entry since the start, s, nan where unknown, shape (n,)."""
        return seconds_since(self.started, self.timeline.mid)

    @cached_property
    def measured(self) -> Float64:
        """Indices of the entries that have integrals and a time, ascending in time, shape (m,)."""
        good = [
            i
            for i, e in enumerate(self.entries)
            if e.integrals is not None and np.isfinite(self.time_s[i])
        ]
        return np.array(sorted(good, key=lambda i: float(self.time_s[i])), np.intp)

    @cached_property
    def amounts(self) -> Concentrations:
        """Amounts of `measured`, one row a spectrum."""
        rule = amount_rule(self.sheet)
        rows = [self.entries[i].integrals for i in self.measured]
        kept = [row for row in rows if row is not None]
        count = len(rule.species) + (rule.kind == "signal")
        values = np.array([row.values for row in kept]).reshape(-1, count)
        covariance = np.array([row.covariance for row in kept]).reshape(-1, count, count)
        return concentrations(values, covariance, rule, self._dilution())

    def _dilution(self) -> Float64 | None:
        """Starting volume over volume at each measured spectrum; None where nothing was added."""
        added = [e for e in self.sheet.events if e.volume_ml and e.kind in ("dose", "feed")]
        if self.sheet.vessel is None or not added or self.started is None:
            return None
        zone = ZoneInfo(self.zone)
        volume = np.full(self.measured.size, self.sheet.vessel.volume_ml)
        for event in added:
            at = (in_utc(event.at, zone) - self.started).total_seconds()
            volume[self.time_s[self.measured] > at] += event.volume_ml or 0.0
        return self.sheet.vessel.volume_ml / volume

    @cached_property
    def fitted(self) -> Float64:
        """Rows of `amounts` that are fitted: not set aside, with finite amounts. Shape (k,)."""
        good = [
            row
            for row, i in enumerate(self.measured)
            if self.states[i] != "set-aside" and np.all(np.isfinite(self.amounts.values[row]))
        ]
        return np.array(good, np.intp)

    def series(self) -> Series:
        """Return what is fitted.

        Raises
        ------
        NothingToDoError
            If no spectrum was measured.
        """
        rows = self.fitted
        if rows.size == 0:
            raise NothingToDoError(f"{self.logbook}: no spectrum has been measured yet")
        index = self.measured[rows]
        values = self.amounts.values[rows]
        covariance = self.amounts.covariance[rows].copy()
        doubtful = np.array([self.states[i] == "doubtful" for i in index])
        extra = np.where(doubtful[:, None], DOUBTFUL_U * values, 0.0) ** 2
        covariance[:, range(values.shape[1]), range(values.shape[1])] += extra
        return Series(
            time_s=self.time_s[index],
            acquisition_s=np.nan_to_num(self.timeline.acquisition_s[index]),
            species=self.amounts.species,
            values=values,
            covariance=covariance,
            systematic=self.amounts.systematic,
            unit=self.amounts.unit,
            labels=tuple(self.entries[i].source for i in index),
        )

    def question(self, laws: tuple[str, ...] | None = None) -> Question:
        """Return what the sheet (or the caller, by `laws`) asks of the data."""
        k = self.sheet.kinetics
        from_s, _ = self.fit_from
        return Question(
            consumed=dict(k.consumed),
            formed=dict(k.formed),
            intermediate=k.intermediate,
            scheme=k.scheme if laws is None else (),
            limiting=k.limiting,
            charged=dict(k.charged),
            laws=tuple(k.laws) if laws is None else laws,
            fit_from_s=from_s,
            fit_to_s=k.fit_to_s,
            fit_origin_s=0.0 if k.fit_from_s is not None else from_s or 0.0,
            confidence=k.confidence,
            target_conversion=k.target_conversion,
        )

    @property
    def fit_from(self) -> tuple[float | None, str]:
        """Where the fit begins (s; None: with the first spectrum), and why, in words."""
        if self.sheet.kinetics.fit_from_s is not None:
            return self.sheet.kinetics.fit_from_s, "fit_from_s in the sheet"
        if self.started is None:
            return None, "the first spectrum"
        zone = ZoneInfo(self.zone)
        later = [
            ((in_utc(event.at, zone) - self.started).total_seconds(), event.kind)
            for event in self.sheet.events
            if event.kind in ("start", "dose")
        ]
        at, kind = max(later, default=(0.0, ""))
        return (at, f"the last {kind}") if at > 0 else (None, "the first spectrum")

    @cached_property
    def _logged(self) -> Logged:
        """What the sheet's temperature log says, where it names one."""
        spans = self.timeline.start, self.timeline.end
        return join(self.temperature_log, self.sheet, self.zone, *spans)

    @cached_property
    def temperatures_k(self) -> tuple[float | None, ...]:
        """Temperature of each entry in K: the log's, else what the file recorded, else None."""
        if self._logged.kelvin is not None:
            return self._logged.kelvin
        seen = [entry.facts.get("temperature_k") for entry in self.entries]
        return tuple(float(t) if t else None for t in seen)

    @property
    def temperature_k(self) -> float | None:
        """Temperature of the run in K: the sheet's, else the mean of the spectra's."""
        if self.sheet.temperature_c is not None:
            return self.sheet.temperature_c + 273.15
        known = [t for t in self.temperatures_k if t is not None]
        return float(np.mean(known)) if known else None

    @property
    def chosen_law(self) -> str | None:
        """The law a person chose; None for the automatic choice."""
        return chosen_law(self.decisions)

    @cached_property
    def unassigned(self) -> tuple[Remark, ...]:
        """Remarks on lines outside all windows that grow or fade."""
        rows = self.measured
        seen = tuple(self.entries[i] for i in rows)
        return unassigned_remarks(self.logbook, seen, self.time_s[rows], self.sheet)

    def remarks(self) -> tuple[Remark, ...]:
        """Return what concerns the run as a whole: clock, temperature, receiver, unnamed lines."""
        out = [*self.timeline.remarks, *self.unassigned]
        if self.sheet.temperature is not None:
            out += remarks_on(self._logged, [self.temperatures_k[i] for i in self.measured])
        if self.sheet.reference.kind == "none":
            out.append(
                Remark(
                    "receiver-assumed-steady",
                    "There is no reference: integrals per scan are taken as they are.",
                    "Any drift of receiver or probe shows up as reaction.",
                    "Use a reference signal, or closure, where you can.",
                )
            )
        return tuple(out)


def load_run(logbook: Path) -> Run:
    """Read a run from its logbook.

    Raises
    ------
    InputError, LogbookError
        If there is no logbook, it cannot be read, or holds no sheet.
    """
    with LogbookView(logbook) as view:
        stamp = view.tick()
        sheets = {s.version: s for s in view.sheets()}
        if not sheets:
            raise InputError(f"{logbook}: the logbook holds no run sheet yet")
        active = view.active_calibration()
        version = max(sheets) if active is None else active[1]
        sheet = parse_sheet(sheets[version].text, f"{logbook}, sheet version {version}")
        entries, decisions = view.entries(), view.decisions()
        zone = sheet.time.zone or view.meta("zone") or "UTC"
        temperature_log = view.meta("temperature_log")
    line = _timeline(entries, sheet, zone)
    order = _time_order(line, entries)
    return Run(
        logbook=logbook,
        tick=stamp,
        sheet=sheet,
        sheet_version=version,
        sheet_text=sheets[version].text,
        entries=tuple(entries[i] for i in order),
        timeline=line.ordered(order),
        decisions=decisions,
        zone=zone,
        temperature_log=temperature_log,
    )


def study_run(run: Run, laws: tuple[str, ...] | None = None) -> Study:
    """Fit a run.

    Raises
    ------
    NothingToDoError, FitError, InputError
        If there is nothing to fit, the data do not allow it, or the laws exclude each other.
    """
    return study(run.series(), run.question(laws))


def _timeline(entries: tuple[Entry, ...], sheet: Sheet, zone: str) -> Timeline:
    missing = Stamp(None, None, None, None, "unreadable")
    settings = ClockSettings(
        zone=zone,
        source=sheet.time.source,
        interval_s=sheet.time.interval_s,
        acquisition_s=sheet.time.acquisition_s,
        lag_s=sheet.time.lag_s,
    )
    return timeline(
        [missing if e.stamp is None else e.stamp for e in entries],
        [e.source for e in entries],
        settings,
    )


def _time_order(line: Timeline, entries: tuple[Entry, ...]) -> list[int]:
    far = datetime.max.replace(tzinfo=UTC)
    return sorted(range(len(entries)), key=lambda i: (line.mid[i] or far, i))


def event_times(run: Run) -> list[tuple[float, Event]]:
    """Return (s since the start, event) of the sheet's events, in order of time."""
    if run.started is None:
        return []
    zone = ZoneInfo(run.zone)
    pairs = [
        ((in_utc(event.at, zone) - run.started).total_seconds(), event)
        for event in run.sheet.events
    ]
    return sorted(pairs, key=lambda pair: pair[0])
