"""Noise of spectra that arrived processed: found as it was made."""

import numpy as np
import pytest

from kinetics.spectra.coloured import noise_correlation
from kinetics.spectra.fourier import transform
from tests.measured import INSTRUMENT, raw


@pytest.mark.parametrize(("broadening", "zero_fill"), [(0.0, 1), (0.3, 2), (1.0, 1), (0.3, 4)])
def test_the_noise_of_a_window_sum(broadening: float, zero_fill: int) -> None:
    rng = np.random.default_rng(3)
    spectra = []
    for _ in range(20):
        noise = rng.standard_normal((4096, 2)).view(np.complex128)[:, 0]
        made = transform(raw(noise, INSTRUMENT), broadening_hz=broadening, zero_fill=zero_fill)
        spectra.append(np.asarray(made.values.real, np.float32))
    found, true = noise_correlation(spectra), made.noise_correlation

    def of_sum(correlation: "np.ndarray[tuple[int], np.dtype[np.float64]]") -> float:
        lags = np.arange(80)
        return float(correlation[np.abs(lags[:, None] - lags)].sum())

    assert np.sqrt(of_sum(found) / of_sum(true)) == pytest.approx(1.0, abs=0.12)


def test_short_spectra_count_as_white() -> None:
    found = noise_correlation([np.ones(100, np.float32)])
    assert found[0] == 1.0
    assert not found[1:].any()
