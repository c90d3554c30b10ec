"""`check`: is the sheet right, and does it fit the first and the last spectrum of a folder?"""

from collections import Counter
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from kinetics.errors import InputError, NothingToDoError, NotYetError, UnreadableError
from kinetics.measure import Measurement, Recipe, amount_rule, follow_plan, measure
from kinetics.sheet import Sheet, read_sheet
from kinetics.signals.amounts import concentrations
from kinetics.signals.calibration import calibrate
from kinetics.signals.model import Concentrations, FollowPlan
from kinetics.spectra.arrival import Look, Source, look
from kinetics.spectra.clock import ClockSettings, Timeline, timeline
from kinetics.spectra.model import Float64, Raw
from kinetics.spectra.readers import read

_MOST_READ = 300  # of a longer run as many are read, spread evenly
_SEEN_SNR = 5.0  # as in the calibration: lower than this a line is not told from noise
_GAP = 3.0  # times the usual distance; the same rule as for a quiet instrument
_LISTED = 5  # files named one by one before the rest are counted
# Half a window's width beyond its edges a neighbour's tails still count (common practice).
_NEAR_PPM = 0.02


@dataclass(frozen=True, eq=False)
class _Folder:
    """What could be read of a run folder, in order of time."""

    raws: tuple[Raw, ...]
    line: Timeline
    unreadable: tuple[tuple[str, str], ...]
    found: int


def check(sheet_path: Path, run_folder: Path | None = None) -> Iterator[str]:
    """Check a run sheet, and a run folder against it; yield the findings line by line.

    Raises
    ------
    SheetError, InputError
        If the sheet is wrong or the folder is not there.
    NothingToDoError
        If the folder holds nothing that could be measured.
    """
    sheet, _ = read_sheet(sheet_path)
    plan = follow_plan(sheet)
    yield f"{sheet_path}: the sheet is right."
    yield from _sheet_words(sheet, plan)
    if run_folder is None:
        return
    yield ""
    seen = _looked_at(run_folder, sheet)
    found = _read(run_folder, sheet, seen)
    yield from _folder_words(run_folder, found, seen)
    if not found.raws:
        raise NothingToDoError(f"{run_folder}: holds no spectrum that can be measured (yet)")
    yield from _time_words(found)
    yield ""
    yield from _fit_words(sheet, plan, found)


def _sheet_words(sheet: Sheet, plan: FollowPlan) -> Iterator[str]:
    k = sheet.kinetics
    what = " + ".join(k.consumed) + " → " + (" + ".join(k.formed) or "(products not followed)")
    asked = ", ".join(k.laws) or "; ".join(k.scheme)
    yield f"  reaction   {what}; asked: {asked}"
    reference = sheet.reference
    if reference.kind == "signal":
        amount = (
            f"{reference.concentration:g} mol/L"
            if reference.concentration
            else "no concentration: results are ratios"
        )
        yield f"  reference  {reference.name or 'signal'}, {amount}"
    else:
        yield f"  reference  {reference.kind}"
    yield f"  amounts    in {sheet.amount_unit}, of {', '.join(sheet.species)}"
    names = _names(plan)
    for index, one in enumerate(plan.all):
        for other, name in list(zip(plan.all, names, strict=True))[index + 1 :]:
            (_, first), (second, high) = sorted([one.window, other.window])
            if second < first:
                yield (
                    f"  ! the windows of {names[index]} and {name} overlap by "
                    f"{min(first, high) - second:.3f} ppm: what stands there counts twice. "
                    "Make them narrower."
                )
            elif second - first < _NEAR_PPM:
                yield (
                    f"  ! the windows of {names[index]} and {name} are "
                    f"{second - first:.3f} ppm apart: each holds tails of the other "
                    "(taken into account, but a wider gap is safer)."
                )


def _names(plan: FollowPlan) -> list[str]:
    return [
        f"{'reference' if plan.reference is signal else signal.species} at {signal.centre:.2f} ppm"
        for signal in plan.all
    ]


def _looked_at(folder: Path, sheet: Sheet) -> Look:
    if not folder.exists():
        raise InputError(f"{folder}: there is no such run folder")
    if not folder.is_dir():
        raise InputError(f"{folder}: is a file; expected the folder that the spectra arrive in")
    first = look(folder, sheet.files.include, sheet.files.exclude, None)
    # A second look at once: what stands still between the two counts as complete here.
    second = look(folder, sheet.files.include, sheet.files.exclude, first.memory)
    if second.trouble:
        raise InputError(f"{folder}: {second.trouble}")
    return second


def _read(folder: Path, sheet: Sheet, seen: Look) -> _Folder:
    raws: list[Raw] = []
    unreadable: list[tuple[str, str]] = []
    for source in _spread(seen.complete):
        try:
            raws.extend(read(folder, source))
        except (UnreadableError, NotYetError) as why:
            unreadable.append((source.name, str(why)))
    line = timeline(
        [raw.stamp for raw in raws],
        [raw.source for raw in raws],
        ClockSettings(
            zone=sheet.time.zone or "UTC",
            source=sheet.time.source,
            interval_s=sheet.time.interval_s,
            acquisition_s=sheet.time.acquisition_s,
            lag_s=sheet.time.lag_s,
        ),
    )
    known = [i for i in range(len(raws)) if line.mid[i] is not None]
    order = sorted(known, key=lambda i: line.mid[i]) or list(range(len(raws)))  # type: ignore[arg-type, return-value]
    return _Folder(
        tuple(raws[i] for i in order), line.ordered(order), tuple(unreadable), len(seen.complete)
    )


def _spread(sources: Sequence[Source]) -> list[Source]:
    if len(sources) <= _MOST_READ:
        return list(sources)
    picked = np.unique(np.linspace(0, len(sources) - 1, _MOST_READ).round().astype(int))
    return [sources[i] for i in picked]


def _folder_words(folder: Path, found: _Folder, seen: Look) -> Iterator[str]:
    yield f"{folder}: {found.found} complete"
    if found.found > _MOST_READ:
        yield f"  read       {len(found.raws)} of them, spread evenly"
    for title, listed in (("not yet", seen.waiting), ("unreadable", found.unreadable)):
        for name, why in listed[:_LISTED]:
            yield f"  {title:10s} {name}: {why}"
        if len(listed) > _LISTED:
            yield f"  {title:10s} and {len(listed) - _LISTED} more"
    if not found.raws:
        return
    for title, values in (
        ("format", [raw.format for raw in found.raws]),
        ("nucleus", [raw.nucleus or "not recorded" for raw in found.raws]),
        ("field", [_mhz(raw) for raw in found.raws]),
        ("points", [f"{raw.data.size} ({raw.domain} domain)" for raw in found.raws]),
        ("scans", [str(raw.scans) for raw in found.raws]),
    ):
        counted = Counter(values)
        words = ", ".join(
            value if len(counted) == 1 else f"{value} ({number})"
            for value, number in counted.most_common(_LISTED)
        )
        yield f"  {title:10s} {words}"
        if len(counted) > 1 and title in ("nucleus", "field", "points"):
            yield f"  ! not all the same {title}: do several runs share this folder? See [files]."


def _mhz(raw: Raw) -> str:
    return f"{raw.frequency_mhz:.2f} MHz" if raw.frequency_mhz else "not recorded"


def _time_words(found: _Folder) -> Iterator[str]:
    times = [t for t in found.line.start if t is not None]
    if len(times) < 2:
        yield "  time       not recorded for two spectra or more; see [time] in the sheet"
        return
    seconds = np.array([(t - times[0]).total_seconds() for t in times])
    steps = np.diff(seconds)
    usual = float(np.median(steps))
    yield (
        f"  time       {times[0]:%Y-%m-%d %H:%M:%S} to {times[-1]:%Y-%m-%d %H:%M:%S} UTC, "
        f"{_short(seconds[-1])} s; one every {_short(usual)} s"
    )
    length = _acquisition(found)
    if np.isfinite(length):
        yield f"  length     {_short(length)} s each (middle of it is the time of a point)"
    gaps = np.flatnonzero(steps > _GAP * usual)
    for gap in gaps[:_LISTED]:
        yield f"  gap        {_short(steps[gap])} s after {times[gap]:%H:%M:%S} UTC"
    if gaps.size > _LISTED:
        yield f"  gap        and {gaps.size - _LISTED} more"
    for remark in found.line.remarks:
        yield f"  ! {remark}"


def _acquisition(found: _Folder) -> float:
    lengths = found.line.acquisition_s[np.isfinite(found.line.acquisition_s)]
    return float(np.median(lengths)) if lengths.size else float("nan")


def _fit_words(sheet: Sheet, plan: FollowPlan, found: _Folder) -> Iterator[str]:
    try:
        calibration = calibrate(found.raws[:1], plan)
        recipe = Recipe(1, plan, calibration)
        ends = [measure(raw, recipe) for raw in (found.raws[0], found.raws[-1])]
    except UnreadableError as why:
        raise NothingToDoError(
            f"{found.raws[0].source}: does not fit the sheet: {why}. Look at the spectrum and "
            "the windows."
        ) from None
    yield f"signals, first spectrum ({found.raws[0].source}) and last ({found.raws[-1].source}):"
    for index, (name, signal) in enumerate(zip(_names(plan), plan.all, strict=True)):
        snr = [float(m.integrals.heights[index]) for m in ends]
        words = " and ".join("nothing" if s < _SEEN_SNR else f"S/N {s:.0f}" for s in snr)
        yield f"  {name}: {words}"
        if max(snr) < _SEEN_SNR:
            yield (
                f"  ! no signal stands in {signal.window[0]:g} to {signal.window[1]:g} ppm at "
                "either end: is the window right?"
            )
    for remark in {str(r): None for m in ends for r in m.remarks}:
        yield f"  ! {remark}"
    yield from _change_words(sheet, found, ends)


def _change_words(sheet: Sheet, found: _Folder, ends: Sequence[Measurement]) -> Iterator[str]:
    amounts = _amounts(sheet, ends)
    name = sheet.kinetics.limiting or next(iter(sheet.kinetics.consumed), "")
    if name not in amounts.species or len(found.raws) < 2:
        return
    column = amounts.species.index(name)
    begin, end = (float(v) for v in amounts.values[:, column])
    start, stop = found.line.mid[0], found.line.mid[-1]
    length = _acquisition(found)
    if not (begin > 0 and start is not None and stop is not None):
        return
    span = (stop - start).total_seconds()
    yield (
        f"  {name}: {_short(begin)} → {_short(max(end, 0.0))} {amounts.unit} in {_short(span)} s"
    )
    left = float(np.clip(end / begin, 0.01, 1.0))
    if left > 0.98:
        yield "  ! hardly any change between the first and the last spectrum."
        return
    half_life = span * np.log(2.0) / -np.log(left)
    if length > 0.1 * half_life:
        yield (
            f"  ! an acquisition ({_short(length)} s) is not short against the change (half in "
            f"about {_short(half_life)} s): the law is averaged over it, but fewer scans a "
            "spectrum would tell more."
        )


def _amounts(sheet: Sheet, ends: Sequence[Measurement]) -> Concentrations:
    values: Float64 = np.array([m.integrals.values for m in ends])
    covariance: Float64 = np.array([m.integrals.covariance for m in ends])
    return concentrations(values, covariance, amount_rule(sheet))


def _short(value: float) -> str:
    """Three figures, and no decimals from 100 on."""
    return f"{value:.0f}" if abs(value) >= 100 else f"{value:.3g}"
