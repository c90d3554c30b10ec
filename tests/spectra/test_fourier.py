"""Transform: position, area and noise against closed forms."""

from dataclasses import replace

import numpy as np
import pytest

from demo_runs.lines import Multiplet
from demo_runs.simulate import area_hz
from kinetics.spectra.fourier import rotate, rotated, transform
from tests.measured import INSTRUMENT, acquire, raw


@pytest.mark.parametrize("ppm", [0.5, 3.0, 8.7])
@pytest.mark.parametrize("delay", [0.0, 67.984])
def test_a_line_stands_where_it_is_with_its_whole_area(ppm: float, delay: float) -> None:
    instrument = replace(INSTRUMENT, group_delay=delay)
    line = (Multiplet(ppm, 1, width_hz=1.0), 0.5)
    spectrum = transform(
        acquire([line], snr=None, instrument=instrument), broadening_hz=0.3, zero_fill=2
    )
    real = spectrum.values.real
    top = spectrum.axis.first_ppm + spectrum.axis.step_ppm * int(np.argmax(real))
    assert abs(top - ppm) < abs(spectrum.axis.step_ppm)
    hz = abs(spectrum.axis.step_ppm) * instrument.frequency_mhz
    expected = area_hz(instrument, 0.5 * instrument.sensitivity)
    assert real.sum() * hz == pytest.approx(expected, rel=0.005)


@pytest.mark.parametrize(("broadening", "zero_fill"), [(0.0, 1), (0.3, 2), (2.0, 4)])
def test_the_colour_of_noise_is_what_white_fids_show(broadening: float, zero_fill: int) -> None:
    rng = np.random.default_rng(1)
    spectra = []
    for _ in range(60):
        noise = rng.standard_normal((2048, 2)).view(np.complex128)[:, 0]
        found = transform(raw(noise, INSTRUMENT), broadening_hz=broadening, zero_fill=zero_fill)
        spectra.append(found.values.real)
    values = np.array(spectra)
    variance = (values**2).mean()
    for lag in (1, 2, 5, 20):
        seen = (values[:, lag:] * values[:, :-lag]).mean() / variance
        assert seen == pytest.approx(found.noise_correlation[lag], abs=0.02)


def test_rotation_undoes_itself_and_is_one_with_its_complex_form() -> None:
    rng = np.random.default_rng(2)
    values = rng.standard_normal((500, 2)).astype(np.float32).view(np.complex64)[:, 0]
    turned = rotated(values, 33.0, -20.0)
    assert np.allclose(turned.real, rotate(values, 33.0, -20.0), atol=1e-5)
    assert np.allclose(rotated(turned, -33.0, 20.0), values, atol=1e-5)
