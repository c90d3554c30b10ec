"""The typical-shift table (common practice) and its hints."""

import pytest

from kinetics.signals.typical_shifts import TYPICAL, hint_words, shift_hints, solvent_hint


@pytest.mark.parametrize(
    ("window", "kind"),
    [
        ((9.6, 9.8), "aldehyde C–H"),
        ((1.3, 1.1), "CH, CH2 or CH3 on saturated carbon"),
        ((3.6, 3.7), "CH next to oxygen (alcohol, ether)"),
        ((7.2, 7.3), "aromatic C–H"),
    ],
)
def test_everyday_windows(window: tuple[float, float], kind: str) -> None:
    assert kind in [one.kind for one in shift_hints(window, exchanging=False)]


def test_what_no_chart_covers_has_no_hint() -> None:
    assert shift_hints((14.0, 15.0)) == ()
    assert hint_words((14.0, 15.0)) == ""


def test_exchanging_protons_can_be_asked_for() -> None:
    kinds = shift_hints((3.0, 3.2), exchanging=True)
    assert kinds
    assert all(kind.exchanging for kind in kinds)


def test_solvent_lines() -> None:
    assert "7.26" in solvent_hint((7.3, 7.2), "cdcl3")
    assert "water in DMSO-d6" in solvent_hint((3.30, 3.40), "dmso d6").replace("W", "w")
    assert solvent_hint((3.0, 3.1), "D2O") == ""
    assert solvent_hint((3.0, 3.1), "something else") == ""
    assert hint_words((4.7, 4.9), "D2O").endswith("Water in D2O usually stands at 4.79 ppm.")


def test_the_table_is_sound() -> None:
    assert all(kind.low < kind.high for kind in TYPICAL)
    assert len({kind.kind for kind in TYPICAL}) == len(TYPICAL)
