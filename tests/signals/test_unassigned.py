"""Lines that no window names: seen within ten spectra, and not where there are none."""

import numpy as np
import pytest

from kinetics.signals.unassigned import unassigned
from tests.signals import unassigned_runs as runs


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_one_per_cent_is_seen_within_ten_spectra(seed: int) -> None:
    raws = runs.spectra(seed, 80, impurity=0.01)[:50]  # it is there from spectrum 40 on
    seen = runs.found(raws)
    assert [one.ppm for one in seen] == [pytest.approx(runs.IMPURITY_PPM, abs=0.01)]
    assert seen[0].first_row == 40
    # 1 % of 0.4 mol/L against 6 protons of 0.05 mol/L: 1.33 % of the area, less a wider line.
    assert seen[0].change == pytest.approx(0.0133, rel=0.5)


@pytest.mark.parametrize("seed", [11, 12, 13, 14])
def test_clean_runs_stay_without_a_remark(seed: int) -> None:
    assert runs.found(runs.spectra(seed, 60, impurity=0.0)) == ()


def test_fading_moving_and_satellites() -> None:
    rng = np.random.default_rng(5)
    cells, low, high = 2000, 0.0, 10.0
    ppm = high - (high - low) / cells * (np.arange(cells) + 0.5)

    def line(at: float) -> np.ndarray:
        return np.exp(-0.5 * ((ppm - at) / 0.008) ** 2)

    rows = rng.normal(0, 1, (60, cells))
    going = np.linspace(0, 1, 60)[:, None]
    rows += 300 * line(3.0) + 200 * (1 - going) * line(7.0)  # reference, reactant
    rows += 30 * (1 - going) * line(5.0)  # fades
    rows += 40 * (1 - going) * line(8.5) + 40 * going * line(8.53)  # moves
    rows += 200 * going * 0.0055 * line(7.0 + 1.0) * 8  # no satellite: eight times too high
    for name, frequency in (("with", 80.0), ("without", float("nan"))):
        seen = unassigned(
            rows.astype(np.float32),
            (low, high),
            ((2.9, 3.1), (6.9, 7.1)),
            (),
            (2.9, 3.1),
            frequency,
        )
        places = sorted(round(one.ppm, 1) for one in seen)
        assert places == [5.0, 8.0], name
        assert {round(one.ppm, 1): one.change < 0 for one in seen} == {5.0: True, 8.0: False}


def test_too_few_spectra_say_nothing() -> None:
    assert unassigned(np.zeros((15, 500), np.float32), (0, 5), (), (), None, 80.0) == ()
