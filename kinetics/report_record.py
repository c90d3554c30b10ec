"""What a report says of a run's record: events, story, decisions, times, hashes, amounts."""

import hashlib
import platform
from collections import Counter
from datetime import datetime
from math import isfinite
from typing import Any

import numpy as np
import scipy

from kinetics.logbook import codec
from kinetics.logbook.decisions import Decision, broken_links
from kinetics.logbook.view import LogbookView
from kinetics.report_words import Scale, clock, plus_minus
from kinetics.run import Run, event_times
from kinetics.sheet import fingerprint
from kinetics.version import __version__

Facts = dict[str, Any]

# A longer table is thinned to about this many rows; whatever is not plainly measured stays.
MOST_ROWS = 600


def events_of(run: Run, scale: Scale) -> list[Facts]:
    """Return the events of the sheet, in order of time, numbered as in the trend."""
    return [
        {
            "number": number,
            "at": f"{seconds / scale.second:.4g} {scale.time}",
            "kind": event.kind,
            "volume": "" if event.volume_ml is None else f"{event.volume_ml:g} mL",
            "text": event.text,
        }
        for number, (seconds, event) in enumerate(event_times(run), 1)
    ]


def aside_of(run: Run) -> list[Facts]:
    """Return the spectra that are set aside: who said so, when, and why."""
    out = []
    for number, entry in enumerate(run.entries, 1):
        if run.states[number - 1] == "set-aside":
            by = next(
                d
                for d in reversed(run.decisions)
                if d.kind == "set-aside" and d.subject == entry.source
            )
            out.append({"number": number, "source": entry.source, "why": run.aside[entry.source],
                        "who": by.who, "at": clock(by.at, run.zone)})  # fmt: skip
    return out


def unreadable_of(run: Run) -> list[Facts]:
    """Return the files that could not be read, by reason."""
    reasons: dict[str, list[str]] = {}
    for entry in run.entries:
        if entry.state == "unreadable":
            reasons.setdefault(entry.reason, []).append(entry.source)
    return [{"why": why, "files": files} for why, files in reasons.items()]


def time_of(run: Run) -> Facts:
    """Return where the times of a run come from."""
    stamps = Counter(e.stamp.meaning for e in run.entries if e.stamp is not None)
    length = run.timeline.acquisition_s[np.isfinite(run.timeline.acquisition_s)]
    known = [t for t in run.timeline.mid if t is not None]
    return {
        "zone": run.zone,
        "started": clock(run.started, run.zone),
        "started_from": run.started_from,
        "first": clock(min(known, default=None), run.zone),
        "last": clock(max(known, default=None), run.zone),
        "source": {
            "recorded": "times recorded in the files",
            "file": "when each file was last written",
            "interval": f"counted, {run.sheet.time.interval_s or 0:g} s from start to start",
        }[run.sheet.time.source],
        "stamps": stamps.most_common(),
        "length": f"{np.median(length):.4g} s (median)" if length.size else "unknown",
        "lag": f"{run.sheet.time.lag_s:g} s" if run.sheet.time.lag_s else "",
        "remarks": [str(remark) for remark in run.timeline.remarks],
    }


def combined_hash(run: Run) -> str:
    """Return the SHA-256 over the hashes of all spectra, sorted, each followed by a line feed."""
    lines = sorted(f"{entry.sha256}\n" for entry in run.entries)
    return hashlib.sha256("".join(lines).encode()).hexdigest()


def record_of(run: Run, view: LogbookView) -> Facts:
    """Return story, decisions, versions and hashes."""
    used = Counter(e.calibration for e in run.entries if e.calibration)
    calibrations = []
    for row in view.connection.execute(
        "SELECT id, sheet_version, version, program_version, at, data FROM calibrations"
    ):
        if row["id"] in used:
            learned = len(codec.calibration_from_bytes(row["data"]).learned_from)
            calibrations.append(
                f"no. {row['version']}, learned from {learned} "
                f"{'spectrum' if learned == 1 else 'spectra'}, with sheet version "
                f"{row['sheet_version']} and program {row['program_version']}, "
                f"{clock(datetime.fromisoformat(row['at']), run.zone)}: {used[row['id']]} spectra"
            )
    last = run.decisions[-1] if run.decisions else None
    return {
        "story": [(clock(s.at, run.zone), s.kind, s.text) for s in view.story()],
        "decisions": [_decision(d, run.zone) for d in run.decisions],
        "broken": list(broken_links(view.connection)),
        "sheets": [
            (s.version, clock(s.at, run.zone), s.who, s.why, s.sha256) for s in view.sheets()
        ],
        "sheet_version": run.sheet_version,
        "sheet_hash": fingerprint(run.sheet_text),
        "program": __version__,
        "libraries": f"Python {platform.python_version()}, numpy {np.__version__}, "
        f"scipy {scipy.__version__}",
        "calibrations": calibrations,
        "hashes": len(run.entries),
        "combined": combined_hash(run),
        "last_decision": None if last is None else (last.id, last.hash),
        "tick": run.tick,
        "logbook": run.logbook.name,
    }


def _decision(d: Decision, zone: str) -> Facts:
    """Lay out a decision; hashes of sheets by their first digits, whole ones stand elsewhere."""
    old, new = (f"{v[:12]}…" if d.kind == "sheet" and v else v for v in (d.old, d.new))
    return {
        "number": d.id,
        "at": clock(d.at, zone),
        "who": d.who,
        "kind": d.kind,
        "subject": d.subject,
        "old": old or "—",
        "new": new or "—",
        "why": d.why,
    }


def table_of(run: Run, scale: Scale) -> Facts:
    """Return amounts, one row a spectrum; of a long run every so many plainly measured ones."""
    # Amounts are not asked for where there are none.
    errors = run.amounts.standard_uncertainty if run.measured.size else None
    place = {int(entry): row for row, entry in enumerate(run.measured)}
    every = max(-(-len(run.entries) // MOST_ROWS), 1)
    body = []
    for i, entry in enumerate(run.entries):
        plain = run.states[i] == "measured" and not entry.remarks
        if plain and i % every and i != len(run.entries) - 1:
            continue
        row = place.get(i)
        cells = ["—"] * len(run.sheet.species)
        if row is not None and errors is not None:
            cells = [
                plus_minus(scale.factor * float(v), scale.factor * float(u))
                for v, u in zip(run.amounts.values[row], errors[row], strict=True)
            ]
        seconds = float(run.time_s[i])
        kelvin = run.temperatures_k[i]
        body.append(
            {
                "number": i + 1,
                "source": entry.source,
                "state": run.states[i],
                "time": f"{seconds / scale.second:.4f}" if isfinite(seconds) else "—",
                "celsius": f"{float(kelvin) - 273.15:.2f}" if kelvin else "",
                "amounts": cells,
            }
        )
    return {"rows": body, "every": every, "shown": len(body), "total": len(run.entries)}
