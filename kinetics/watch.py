"""The follower: looks into the run folder, measures what is complete, puts it into the record.

One cycle is: look, read what is new and complete, measure, commit. All state is in the record,
so a follower that was killed goes on where the record stands.
"""

import logging
import os
import re
import time
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field, replace
from itertools import islice
from pathlib import Path

from kinetics.errors import InputError, NotYetError, UnreadableError
from kinetics.logbook.record import Record, Taken
from kinetics.measure import Recipe, follow_plan, measure
from kinetics.sheet import Sheet, fingerprint, parse_sheet, read_sheet
from kinetics.signals.calibration import Calibration, calibrate
from kinetics.signals.model import FollowPlan
from kinetics.spectra.arrival import Look, LookMemory, Source, look
from kinetics.spectra.model import Raw
from kinetics.spectra.readers.worker import Outcome, ReadingWorker
from kinetics.temperature import changed_text

log = logging.getLogger(__name__)

# The second calibration is made from this many spectra.
CALIBRATION_SPECTRA = 20
_BATCH = 16
# How far the picture of the whole run reaches beyond the windows, in ppm.
_PICTURE_MARGIN = 0.5


@dataclass(frozen=True, slots=True)
class Cycle:
    """What one cycle did.

    Attributes
    ----------
    taken
        Number of spectra put into the record.
    waiting
        (name, what is missing) of what is not complete yet.
    trouble
        Why the folder could not be looked at, in words; empty if it could.
    """

    taken: int
    waiting: tuple[tuple[str, str], ...]
    trouble: str


@dataclass(slots=True)
class _Work:
    """The sheet version in hand and the calibration spectra are measured with."""

    sheet_version: int
    sheet: Sheet
    plan: FollowPlan
    calibration_id: int | None = None
    calibration: Calibration | None = None
    # The first spectra have gone, so that no second calibration can be made from them.
    first_gone: bool = False
    # Spectra that came before any from which a calibration could be made.
    held_back: list[tuple[Source, Raw]] = field(default_factory=list)


class Follower:
    """Follows one run folder into one logbook.

    Parameters
    ----------
    folder
        The run folder; never written to.
    sheet_path
        The run sheet.
    record
        The writable logbook; the caller holds its lease.
    progress
        Called with (done, total) while a backlog is worked through.
    stopping
        Whether to stop soon: asked between batches, since a backlog may take minutes.
    """

    def __init__(
        self,
        folder: Path,
        sheet_path: Path,
        record: Record,
        progress: Callable[[int, int], None] | None = None,
        stopping: Callable[[], bool] = lambda: False,
    ) -> None:
        self.folder, self.sheet_path, self.record = folder, sheet_path, record
        self._stopping = stopping
        self._progress = progress or (lambda _done, _total: None)
        self._memories: dict[str, LookMemory] = {}
        self._border = ReadingWorker()
        self._temperature_log: tuple[int, int] | None = None
        # What reading found not to be complete after all.
        self._not_yet: list[tuple[str, str]] = []
        self._signatures = record.known_signatures()
        # Rows of one file are recorded as name#1, name#2, …; they stand and fall with the file.
        for name, signature in list(self._signatures.items()):
            self._signatures.setdefault(re.sub(r"#\d+$", "", name), signature)
        record.remember("zone", local_zone())
        record.remember("run_folder", str(folder.resolve()))
        self._work = self._sheet_in_force()

    # -- sheet -------------------------------------------------------------------------------

    def _sheet_in_force(self) -> _Work:
        """Take up a changed sheet file; return the work by the newest sheet of the record."""
        sheet, text = read_sheet(self.sheet_path)
        seen, newest = self.record.meta("sheet_file"), self.record.newest_sheet()
        digest, file_name = fingerprint(text), str(self.sheet_path)
        file_changed = seen != digest
        if newest is not None and file_changed and seen is not None:
            in_record = fingerprint(newest[1])
            if in_record not in (seen, digest):
                raise InputError(
                    f"{file_name}: the sheet was changed both here and in the logbook (version "
                    f"{newest[0]}); make the file equal to one of them first"
                )
        if newest is None or (file_changed and fingerprint(newest[1]) != digest):
            version = self.record.add_sheet(
                text,
                who=os.environ.get("USER") or os.environ.get("USERNAME") or "follower",
                why="first sheet" if newest is None else "the sheet file was changed",
                origin=file_name,
            )
            log.info("sheet version %d from %s", version, self.sheet_path)
        if file_changed:
            self.record.set_meta("sheet_file", digest)
        version, text, origin = self.record.newest_sheet() or (0, text, file_name)
        sheet = parse_sheet(text, origin)
        plan = follow_plan(sheet)
        ends = [limit for signal in plan.all for limit in signal.window]
        self._picture = self.record.picture_range(
            min(ends) - _PICTURE_MARGIN, max(ends) + _PICTURE_MARGIN
        )
        return self._resumed(_Work(version, sheet, plan))

    def _resumed(self, work: _Work) -> _Work:
        """Take up the calibration that the record already has for a sheet."""
        known = self.record.calibrations(work.sheet_version)
        if known:  # the newest, complete or not: a follower killed half-way goes on with it
            work.calibration_id, work.calibration, _ = known[max(known)]
        return work

    # -- one cycle ---------------------------------------------------------------------------

    def cycle(self) -> Cycle:
        """Look once and measure what is new and complete.

        Raises
        ------
        LogbookError
            If the record cannot be written; what was not put down is taken by a later cycle.
        """
        self.record.check_place()
        newest = self.record.newest_sheet()
        if newest is not None and (
            newest[0] != self._work.sheet_version or self._sheet_file_changed()
        ):
            self._work = self._sheet_in_force()
        self._keep_temperature_log()
        self._catch_up()
        looks = [(prefix, root, self._look(prefix, root)) for prefix, root in self._roots()]
        fresh = [
            (prefix, root, source)
            for prefix, root, seen in looks
            for source in seen.complete
            if self._signatures.get(prefix + source.name) != source.signature
        ]
        taken = 0
        self._not_yet = []
        for batch in _batches(fresh, self._room):
            if self._stopping():
                break
            taken += self._take(batch)
            self._progress(taken, len(fresh))
        waiting = tuple(
            (prefix + name, why) for prefix, _, seen in looks for name, why in seen.waiting
        ) + tuple(self._not_yet)
        trouble = "; ".join(seen.trouble for _, _, seen in looks if seen.trouble)
        return Cycle(taken, waiting, trouble)

    def __enter__(self) -> "Follower":
        return self

    def __exit__(self, *_: object) -> None:
        self._border.close()

    def finish(self) -> int:
        """End a finite job: spectra that never could be calibrated on become unreadable.

        Returns
        -------
        Number of spectra put down.
        """
        held = self._work.held_back
        batch = [
            self._unreadable(
                source.signature, raw, "no line stands out of its noise, nor of any before it"
            )
            for source, raw in held
        ]
        if batch:
            self._put(batch)
        self._work.held_back = []
        return len(batch)

    def _keep_temperature_log(self) -> None:
        """Copy the temperature log into the record, so that a logbook needs no other file."""
        asked = self._work.sheet.temperature
        if asked is None:
            return
        try:
            found = changed_text(self.sheet_path.parent / asked.log, self._temperature_log)
        except OSError as why:
            log.debug("temperature log: %s", why)
            return
        if found is not None:
            text, self._temperature_log = found
            self.record.set_meta("temperature_log", text)

    def _sheet_file_changed(self) -> bool:
        try:
            text = self.sheet_path.read_text(encoding="utf-8")
        except OSError:
            return False  # a sheet that went away is not a changed sheet
        seen = self.record.meta("sheet_file")
        return seen is not None and seen != fingerprint(text)

    def _roots(self) -> list[tuple[str, Path]]:
        """The run folder and those that continue it, with the prefix their sources carry."""
        also = self._work.sheet.files.also
        return [("", self.folder)] + [(f"{name}/", self.folder.parent / name) for name in also]

    def _look(self, prefix: str, root: Path) -> Look:
        files = self._work.sheet.files
        seen = look(root, files.include, files.exclude, self._memories.get(prefix))
        self._memories[prefix] = seen.memory
        return seen

    def _room(self) -> int:
        """How many spectra the next batch may hold: a calibration falls on a batch's end."""
        if self._work.calibration is None:
            return 1
        if self._work.calibration.version == 1:
            done = self.record.count_measured(self._work.calibration_id or 0)
            return max(min(_BATCH, CALIBRATION_SPECTRA - done), 1)
        return _BATCH

    # -- taking ------------------------------------------------------------------------------

    def _take(self, batch: Sequence[tuple[str, Path, Source]]) -> int:
        taken: list[Taken] = []
        seen: dict[str, str] = {}
        held_back = list(self._work.held_back)
        outcomes = self._border.read_all([(root, source) for _, root, source in batch])
        try:
            for (prefix, root, source), outcome in zip(batch, outcomes, strict=True):
                taken.extend(self._measured(prefix, root, source, outcome))
                if not isinstance(outcome, NotYetError):
                    seen[prefix + source.name] = source.signature
            self._put(taken)
        except BaseException:
            # Nothing of the batch is in the record: all of it is still to be taken.
            self._work.held_back = held_back
            raise
        self._signatures.update(seen)
        self._maybe_recalibrate()
        return len(taken)

    def _measured(
        self, prefix: str, root: Path, source: Source, outcome: Outcome
    ) -> Iterator[Taken]:
        name = prefix + source.name
        if isinstance(outcome, NotYetError):
            log.info("%s is not complete yet: %s", name, outcome)
            self._not_yet.append((name, str(outcome)))
            return
        if isinstance(outcome, UnreadableError):
            digest = source.fallback_hash(root)
            yield Taken(None, name, digest, source.signature, None, str(outcome))
            return
        for raw in outcome:
            yield from self._one(source, _renamed(raw, prefix))

    def _one(self, source: Source, raw: Raw) -> Iterator[Taken]:
        work = self._work
        if work.calibration is None and not self._start_calibration(raw):
            work.held_back.append((source, raw))
            return
        for earlier_source, earlier in work.held_back:
            yield self._row(earlier_source.signature, earlier)
        work.held_back = []
        yield self._row(source.signature, raw)

    def _row(self, signature: str, raw: Raw) -> Taken:
        assert self._work.calibration is not None
        recipe = Recipe(self._work.sheet_version, self._work.plan, self._work.calibration)
        try:
            measurement = measure(raw, recipe)
        except UnreadableError as why:
            return self._unreadable(signature, raw, str(why))
        return Taken(raw, raw.source, raw.sha256, signature, measurement)

    @staticmethod
    def _unreadable(signature: str, raw: Raw, why: str) -> Taken:
        return Taken(raw, raw.source, raw.sha256, signature, None, why)

    def _put(self, batch: Sequence[Taken]) -> None:
        if batch:
            self.record.take(batch, self._work.calibration_id, self._picture)
        for item in batch:
            if item.measurement is None:
                log.warning("%s: unreadable: %s", item.source, item.reason)
            else:
                log.info("%s: %s", item.source, item.measurement.state)

    # -- calibrations ------------------------------------------------------------------------

    def _start_calibration(self, raw: Raw) -> bool:
        """Make the first calibration of a sheet from one spectrum; False if it does not serve."""
        work = self._work
        try:
            calibration = calibrate([raw], work.plan)
        except UnreadableError as why:
            log.warning("%s cannot serve as the first spectrum: %s", raw.source, why)
            return False
        work.calibration_id = self.record.add_calibration(work.sheet_version, calibration)
        work.calibration = calibration
        if not self.record.has_measurements():
            self.record.complete_calibration(work.calibration_id)
        return True

    def _maybe_recalibrate(self) -> None:
        """Make the second calibration once twenty spectra have been measured with the first."""
        work = self._work
        if work.calibration is None or work.calibration.version != 1 or work.first_gone:
            return
        first = self.record.first_measured(work.calibration_id or 0, CALIBRATION_SPECTRA)
        if len(first) < CALIBRATION_SPECTRA:
            return
        raws = [raw for raw in (self._again(*entry) for entry in first) if raw is not None]
        if not raws:
            work.first_gone = True
            return
        calibration = calibrate(raws, work.plan, version=2)
        identifier = self.record.add_calibration(work.sheet_version, calibration)
        log.info("calibration made from the first %d spectra", len(raws))
        work.calibration, work.calibration_id = calibration, identifier
        self._catch_up()

    def _catch_up(self) -> None:
        """Measure with the calibration in hand whatever has not been, beside the old results."""
        work = self._work
        if work.calibration is None:
            again = (self._again(*entry) for entry in self.record.readable())
            if not any(raw is not None and self._start_calibration(raw) for raw in again):
                return
        identifier = work.calibration_id or 0
        if self.record.is_complete(identifier):
            self._maybe_recalibrate()  # where a follower was killed just before it
            return
        rest = iter(self.record.unmeasured(identifier))
        while chunk := list(islice(rest, _BATCH)):
            if self._stopping():
                return
            batch = []
            for _, source, sha256 in chunk:
                raw = self._again(source, sha256)
                if raw is not None:
                    batch.append(self._row(self._signatures.get(source, ""), raw))
            self._put([item for item in batch if item.measurement is not None])
        self.record.complete_calibration(identifier)
        self._maybe_recalibrate()

    def _again(self, source: str, sha256: str) -> Raw | None:
        """Read a raw spectrum once more; None if it has gone or changed."""
        for prefix, root in reversed(self._roots()):
            if source.startswith(prefix):
                try:
                    lies = Source.named(root, source.removeprefix(prefix))
                    for raw in self._border.read(root, lies):
                        if raw.sha256 == sha256:
                            return _renamed(raw, prefix)
                except (UnreadableError, NotYetError, OSError) as why:
                    log.warning("%s cannot be read again: %s", source, why)
        log.warning("%s has gone or changed; its earlier result stays", source)
        return None


def _renamed(raw: Raw, prefix: str) -> Raw:
    return replace(raw, source=prefix + raw.source) if prefix else raw


def _batches(
    items: Sequence[tuple[str, Path, Source]], room: Callable[[], int]
) -> Iterator[Sequence[tuple[str, Path, Source]]]:
    start = 0
    while start < len(items):
        stop = start + room()
        yield items[start:stop]
        start = stop


def local_zone() -> str:
    """Return the name of this machine's time zone, UTC if it has none."""
    name = os.environ.get("TZ", "").lstrip(":")
    if not name:
        try:
            parts = Path("/etc/localtime").resolve().parts
            name = "/".join(parts[parts.index("zoneinfo") + 1 :])
        except (OSError, ValueError):
            name = time.tzname[0]
    try:
        from zoneinfo import ZoneInfo

        ZoneInfo(name)
    except (KeyError, ValueError, OSError):
        return "UTC"
    return name
