"""Run sheets of the simulated runs, with the moments of a certain run filled in."""

from dataclasses import dataclass
from datetime import datetime, timedelta
from pathlib import Path

DEMO_SHEET = Path(__file__).with_name("demo.toml")
_TITLE_KEY = "title = "


@dataclass(frozen=True, slots=True)
class SheetEvent:
    """An event to be written into a sheet: kind as in the sheet, when, and its text."""

    kind: str
    at: datetime
    text: str


def demo_events(started: datetime) -> tuple[SheetEvent, ...]:
    """Return the events of the demonstration, given when the reaction began."""
    return (
        SheetEvent("start", started, "acid added, 0.5 mL of 0.02 M, mixed and into the magnet"),
        SheetEvent(
            "note",
            started + timedelta(seconds=9000),
            "trolley bumped the magnet, lock found again by itself",
        ),
    )


def sheet_text(
    template: str, started: datetime, events: tuple[SheetEvent, ...], title: str | None = None
) -> str:
    """Return a sheet with `started` and events put into a template that has neither.

    Parameters
    ----------
    template
        TOML text of a sheet; its comment lines above the title are replaced.
    started
        When the reaction began, timezone-aware.
    events
        Added at the end.
    title
        Replaces the template's title; None keeps it.
    """
    if started.tzinfo is None:
        raise ValueError("started needs an offset, e.g. datetime(…, tzinfo=UTC)")
    rows = template.splitlines()
    first = next(i for i, row in enumerate(rows) if row.startswith(_TITLE_KEY))
    rows = rows[first:]
    if title is not None:
        rows[0] = f'title = "{title}"'
    rows.insert(1, f"started = {_stamp(started)}")
    lines = ["# Run sheet of a simulated run; everything in it is invented.", "", *rows]
    for event in events:
        lines += [
            "",
            "[[events]]",
            f'kind = "{event.kind}"',
            f"at = {_stamp(event.at)}",
            f'text = "{event.text}"',
        ]
    return "\n".join(lines) + "\n"


def write_sheet(path: Path, started: datetime) -> None:
    """Write the demonstration's sheet for a run whose reaction began at `started`.

    It belongs beside the run folder, not into it.
    """
    template = DEMO_SHEET.read_text(encoding="utf-8")
    text = sheet_text(template, started.replace(microsecond=0), demo_events(started))
    path.write_text(text, encoding="utf-8")


def _stamp(moment: datetime) -> str:
    return moment.replace(microsecond=0).isoformat()
