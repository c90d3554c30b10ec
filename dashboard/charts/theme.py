"""Colours, symbols and dashes: one set for light and dark.

The hues are those of Okabe & Ito (Color Universal Design, 2008), which people with the common
forms of colour blindness tell apart; symbol and dash tell series apart without any colour.
"""

from dataclasses import dataclass

HUES = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#56B4E9", "#E69F00")
HUES_DARK = ("#56B4E9", "#FF8A4C", "#2ECFA1", "#E39BC4", "#9AD1F2", "#F2C14E")
SYMBOLS = ("circle", "diamond-open", "square", "triangle-up-open", "cross", "star-open")
DASHES = ("solid", "dash", "dot", "dashdot", "longdash", "longdashdot")


@dataclass(frozen=True, slots=True)
class Look:
    """Colours of one theme."""

    ink: str
    faint: str
    grid: str
    paper: str
    hues: tuple[str, ...]
    warn: str
    scale: tuple[tuple[float, str], ...]


LIGHT = Look(
    ink="#1d2733",
    faint="#5d6b7a",
    grid="#dde3e8",
    paper="#ffffff",
    hues=HUES,
    warn="#B45309",
    scale=((0.0, "#ffffff"), (0.35, "#9cc4d8"), (0.7, "#2f7899"), (1.0, "#0b2c3d")),
)
DARK = Look(
    ink="#e6ebf0",
    faint="#9fb0c0",
    grid="#2f3b47",
    paper="#141c24",
    hues=HUES_DARK,
    warn="#F2C14E",
    scale=((0.0, "#141c24"), (0.35, "#24566e"), (0.7, "#5fb0cf"), (1.0, "#f2fbff")),
)


def look(kind: str | None) -> Look:
    """Return the colours of ``"dark"``, or else of the light theme."""
    return DARK if kind == "dark" else LIGHT


def with_alpha(colour: str, alpha: float) -> str:
    """Return a ``#rrggbb`` colour as rgba()."""
    red, green, blue = (int(colour[i : i + 2], 16) for i in (1, 3, 5))
    return f"rgba({red},{green},{blue},{alpha})"
