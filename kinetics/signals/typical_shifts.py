"""Typical 1H shifts, as a hint when a window is to be named. A hint never decides anything.

Ranges are common practice: those of the correlation charts found in any laboratory. Solvent shifts
are those of the tables after Gottlieb (1997) and Fulmer (2010).
"""

from dataclasses import dataclass

# Windows are at most this far from a residual solvent line to be told of it, in ppm.
_SOLVENT_NEAR = 0.05


@dataclass(frozen=True, slots=True)
class TypicalShift:
    """One kind of proton.

    Attributes
    ----------
    kind
        In words.
    low, high
        Usual range in ppm.
    exchanging
        Whether the proton sits on O, N or S: its shift wanders with concentration, temperature
        and pH, its line is often broad, and it usually shows no splitting.
    """

    kind: str
    low: float
    high: float
    exchanging: bool = False


TYPICAL: tuple[TypicalShift, ...] = (
    TypicalShift("Si–CH3", -0.1, 0.4),
    TypicalShift("CH, CH2 or CH3 on saturated carbon", 0.7, 1.6),
    TypicalShift("CH3 or CH2 next to C=C", 1.6, 2.3),
    TypicalShift("CH3 or CH2 next to C=O (ketone, aldehyde, acid, ester, amide)", 2.0, 2.7),
    TypicalShift("CH2 or CH3 on an aromatic ring", 2.2, 3.0),
    TypicalShift("≡C–H", 1.8, 3.1),
    TypicalShift("CH next to sulfur", 2.0, 3.2),
    TypicalShift("CH next to nitrogen (amine)", 2.2, 3.2),
    TypicalShift("CH next to nitrogen (amide, ammonium)", 2.8, 4.0),
    TypicalShift("CH next to halogen", 2.7, 4.5),
    TypicalShift("CH next to oxygen (alcohol, ether)", 3.3, 4.2),
    TypicalShift("CH next to oxygen of an ester", 3.6, 4.8),
    TypicalShift("CH between two oxygens (acetal)", 4.4, 6.0),
    TypicalShift("CH next to a nitro group", 4.2, 4.8),
    TypicalShift("=C–H (alkene)", 4.6, 6.6),
    TypicalShift("=C–H conjugated with C=O", 5.7, 7.6),
    TypicalShift("aromatic C–H, electron-rich ring", 6.0, 7.2),
    TypicalShift("aromatic C–H", 6.8, 8.2),
    TypicalShift("aromatic C–H, electron-poor ring or next to ring nitrogen", 7.8, 9.2),
    TypicalShift("formyl C–H of an ester or amide", 7.9, 8.3),
    TypicalShift("aldehyde C–H", 9.3, 10.4),
    TypicalShift("OH of an alcohol", 0.5, 4.5, exchanging=True),
    TypicalShift("NH of an amine", 0.5, 5.0, exchanging=True),
    TypicalShift("SH of a thiol", 1.0, 2.5, exchanging=True),
    TypicalShift("OH of a phenol", 4.0, 10.0, exchanging=True),
    TypicalShift("NH of an amide", 5.0, 9.0, exchanging=True),
    TypicalShift("OH of a carboxylic acid", 9.5, 13.0, exchanging=True),
)

# Residual 1H line of the solvent, and water in it, ppm.
SOLVENTS: dict[str, tuple[float | None, float]] = {
    "CDCl3": (7.26, 1.56),
    "acetone-d6": (2.05, 2.84),
    "DMSO-d6": (2.50, 3.33),
    "C6D6": (7.16, 0.40),
    "CD3CN": (1.94, 2.13),
    "CD3OD": (3.31, 4.87),
    "D2O": (None, 4.79),
}


def shift_hints(
    window: tuple[float, float], *, exchanging: bool | None = None
) -> tuple[TypicalShift, ...]:
    """Return the kinds of proton that usually stand in a window, the closest first.

    Parameters
    ----------
    window
        Limits in ppm, in either order.
    exchanging
        True for those on O, N and S only, False for those on carbon only, None for all.

    Notes
    -----
    Closest is the kind whose range the window's middle lies deepest in, narrow ranges before wide
    ones: a wide range says little. Nothing is returned where no range covers the middle.
    """
    middle = 0.5 * (window[0] + window[1])
    fitting = [
        kind
        for kind in TYPICAL
        if kind.low <= middle <= kind.high and exchanging in (None, kind.exchanging)
    ]
    return tuple(sorted(fitting, key=lambda kind: _distance(kind, middle)))


def _distance(kind: TypicalShift, ppm: float) -> float:
    return (kind.high - kind.low) + abs(ppm - 0.5 * (kind.low + kind.high))


def solvent_hint(window: tuple[float, float], solvent: str) -> str:
    """Return a sentence where a solvent's own line or its water stands in or beside a window.

    Parameters
    ----------
    window
        Limits in ppm, in either order.
    solvent
        As in the sheet or the files; unknown ones give no hint.

    Returns
    -------
    The sentence, or an empty string.
    """
    known = {_plain(name): name for name in SOLVENTS}
    name = known.get(_plain(solvent))
    if name is None:
        return ""
    low, high = sorted(window)
    residual, water = SOLVENTS[name]
    for place, what in ((residual, f"the residual line of {name}"), (water, f"water in {name}")):
        if place is not None and low - _SOLVENT_NEAR <= place <= high + _SOLVENT_NEAR:
            return f"{what[0].upper()}{what[1:]} usually stands at {place:.2f} ppm."
    return ""


def _plain(name: str) -> str:
    return "".join(c for c in name.lower() if c.isalnum())


def hint_words(window: tuple[float, float], solvent: str = "", most: int = 4) -> str:
    """Return the hints for a window as one line for people; empty where there are none."""
    kinds = shift_hints(window)[:most]
    parts = []
    if kinds:
        parts.append("Usual here: " + "; ".join(kind.kind for kind in kinds) + ".")
    extra = solvent_hint(window, solvent)
    return " ".join([*parts, extra] if extra else parts)
