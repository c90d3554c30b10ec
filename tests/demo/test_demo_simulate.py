"""FIDs: areas, phase, filter, shim, noise and runs against what they must be."""

import time
from datetime import UTC, datetime

import numpy as np
import pytest

from demo_runs import dunmarolide
from demo_runs.instrument import Instrument, Shim, filter_taps, noise_sd_for
from demo_runs.lines import Multiplet
from demo_runs.simulate import area_hz, simulate_fid, simulate_run

STARTED = datetime(2026, 3, 3, 18, 0, tzinfo=UTC)
DELAYS = [0.0, 20.0, 67.984, 76.5]


def spectrum_of(
    fid: np.ndarray, instrument: Instrument, *, zero_fill: int = 2
) -> tuple[np.ndarray, np.ndarray]:
    """Transform as a reader should: whole part rotated, fraction as first-order phase."""
    size = fid.size * zero_fill
    whole = int(instrument.group_delay)
    padded = np.zeros(size, complex)
    padded[: fid.size] = fid
    if whole == 0:
        padded[0] *= 0.5
    frequency = np.fft.fftfreq(size, instrument.dwell_s)
    fraction = (instrument.group_delay - whole) * instrument.dwell_s
    values = np.fft.fft(np.roll(padded, -whole)) * np.exp(2j * np.pi * frequency * fraction)
    return instrument.carrier_ppm + np.fft.fftshift(frequency) / instrument.frequency_mhz, (
        np.fft.fftshift(values)
    )


def integral_hz(ppm: np.ndarray, values: np.ndarray, window: tuple[float, float], mhz: float):
    inside = (ppm > window[0]) & (ppm < window[1])
    return values.real[inside].sum() * (ppm[1] - ppm[0]) * mhz


@pytest.mark.parametrize("delay", DELAYS)
@pytest.mark.parametrize("mhz", [60.0, 80.0, 400.0, 600.0])
def test_areas_are_amounts_times_protons(mhz: float, delay: float) -> None:
    instrument = Instrument(mhz, 20 * mhz, 5.0, int(80 * mhz), delay)
    lines = [
        (Multiplet(2.0, 3, ((1, 7.0),), width_hz=1.5), 0.4),
        (Multiplet(8.0, 1, ((2, 5.0), (1, 2.0)), width_hz=1.5), 0.3),
    ]
    ppm, values = spectrum_of(simulate_fid(instrument, lines, scans=4), instrument)
    for shift, expected in ((2.0, 1.2), (8.0, 0.3)):
        half = 3.0 - 1e-9
        found = integral_hz(ppm, values, (shift - half, shift + half), mhz)
        # What of the tails lies outside this window, and the other signal's inside it.
        width, reach = 1.5, half * mhz
        missing = 1 - 2 / np.pi * np.arctan(2 * reach / width)
        other = 1.5 - expected
        leaked = (np.arctan(2 * 9.0 * mhz / width) - np.arctan(2 * 3.0 * mhz / width)) / np.pi
        truth = area_hz(instrument, instrument.sensitivity * 4)
        want = truth * (expected * (1 - missing) + other * leaked)
        assert found == pytest.approx(want, rel=2e-3)


@pytest.mark.parametrize("zero_fill", [1, 2, 4])
@pytest.mark.parametrize("delay", DELAYS[1:])
def test_group_delay_is_undone_exactly(delay: float, zero_fill: int) -> None:
    """The delayed FID, read back, is the spectrum of the undelayed one, over 90 % of the width."""
    plain = Instrument(80.0, 1600.0, 5.0, 4096)
    filtered = Instrument(80.0, 1600.0, 5.0, 4096, delay)
    lines = [(Multiplet(s, 1, width_hz=4.0), 1.0) for s in (-3.4, 0.0, 5.01, 9.3, 13.4)]
    ppm, direct = spectrum_of(simulate_fid(plain, lines), plain, zero_fill=zero_fill)
    _, read = spectrum_of(simulate_fid(filtered, lines), filtered, zero_fill=zero_fill)
    flat = np.abs(ppm - 5.0) < (9.0 if delay > 50 else 7.0)
    worst = np.abs(read - direct)[flat].max() / np.abs(direct).max()
    assert worst < 2e-4


def test_build_up_precedes_the_signal() -> None:
    instrument = Instrument(points=2048, group_delay=67.984)
    fid = np.abs(simulate_fid(instrument, [(Multiplet(5.3, 1), 1.0)]))
    assert fid[0] < 1e-3 * fid.max()
    assert 64 <= np.argmax(fid) <= 75
    assert filter_taps(67.984).sum() == pytest.approx(1.0, abs=1e-5)


def test_positive_offsets_lie_at_higher_ppm() -> None:
    instrument = Instrument(80.0, 1600.0, 5.0, 4096)
    ppm, values = spectrum_of(simulate_fid(instrument, [(Multiplet(7.25, 1), 1.0)]), instrument)
    assert ppm[np.argmax(values.real)] == pytest.approx(7.25, abs=0.003)


@pytest.mark.parametrize(("p0", "p1"), [(70.0, 0.0), (-160.0, 45.0), (10.0, -60.0)])
def test_phase_error_is_p0_plus_p1_times_the_offset(p0: float, p1: float) -> None:
    instrument = Instrument(80.0, 1600.0, 5.0, 16384)
    lines = [(Multiplet(s, 1), 1.0) for s in (0.0, 9.0)]
    bad = simulate_fid(instrument, lines, p0_deg=p0, p1_deg=p1)
    ppm, values = spectrum_of(bad, instrument)
    offset = (ppm - 5.0) * 80.0
    right = values * np.exp(-1j * np.deg2rad(p0 + p1 * offset / 1600.0))
    _, wanted = spectrum_of(simulate_fid(instrument, lines), instrument)
    for shift in (0.0, 9.0):
        near = np.abs(ppm - shift) < 0.05
        scale = wanted.real[near].max()
        np.testing.assert_allclose(right.real[near], wanted.real[near], atol=2e-3 * scale)


def test_shim_broadens_and_keeps_the_area() -> None:
    instrument = Instrument(80.0, 1600.0, 5.0, 8192)
    lines = [(Multiplet(5.0, 1, width_hz=1.0), 1.0)]
    shim = Shim(lorentz_hz=1.0, gauss_hz=1.0, tail_share=0.4, tail_hz=2.0)
    ppm, good = spectrum_of(simulate_fid(instrument, lines), instrument, zero_fill=4)
    _, bad = spectrum_of(simulate_fid(instrument, lines, shims=(shim,)), instrument, zero_fill=4)
    assert bad.real.sum() == pytest.approx(good.real.sum(), rel=1e-12)
    assert bad.real.max() < 0.5 * good.real.max()
    above, below = ppm > 5.01, ppm < 4.99
    assert bad.real[above].sum() > 1.1 * bad.real[below].sum()


def test_noise_is_white_and_as_wanted() -> None:
    instrument = Instrument(80.0, 1600.0, 5.0, 65536, noise_sd=3.0)
    fid = simulate_fid(instrument, [], scans=16, rng=np.random.default_rng(4))
    assert fid.real.std() == pytest.approx(12.0, rel=0.02)
    assert fid.imag.std() == pytest.approx(12.0, rel=0.02)
    both = np.mean(fid.real * fid.imag) / 144
    assert abs(both) < 4 / np.sqrt(65536)


def test_noise_for_a_wanted_ratio() -> None:
    instrument = Instrument(80.0, 1600.0, 5.0, 8192)
    signal = Multiplet(5.0, 6, width_hz=1.2)
    noise = noise_sd_for(instrument, protons_mol_l=0.3, width_hz=1.2, snr=100, scans=8)
    noisy = Instrument(80.0, 1600.0, 5.0, 8192, noise_sd=noise)
    weights = np.exp(-np.pi * 0.3 * np.arange(8192) / 1600.0)
    clean = simulate_fid(instrument, [(signal, 0.05)], scans=8) * weights
    only = simulate_fid(noisy, [], scans=8, rng=np.random.default_rng(1)) * weights
    _, line = spectrum_of(clean, instrument)
    _, floor = spectrum_of(only, instrument)
    assert line.real.max() / floor.real.std() == pytest.approx(100, rel=0.05)


def test_the_matrix_product_is_the_plain_sum_of_waves() -> None:
    instrument = Instrument(80.0, 1600.0, 5.0, 1000)
    fid = simulate_fid(instrument, [(Multiplet(6.0, 2, ((1, 8.0),), width_hz=2.0), 0.5)])
    t = np.arange(1000) / 1600.0
    waves = [np.exp((2j * np.pi * f - 2 * np.pi) * t) for f in (76.0, 84.0)]
    np.testing.assert_allclose(fid, 500.0 * sum(waves), rtol=0, atol=1e-8)


def test_a_large_fid_is_quick() -> None:
    instrument = Instrument(400.0, 8000.0, 5.0, 32768, 67.984, noise_sd=1.0)
    lines = [(Multiplet(0.3 * i, 1, width_hz=1.0), 0.1) for i in range(30)]
    rng = np.random.default_rng(0)
    simulate_fid(instrument, lines, rng=rng)
    took = []
    for _ in range(5):
        begun = time.perf_counter()
        simulate_fid(instrument, lines, rng=rng)
        took.append(time.perf_counter() - begun)
    # Some 10 ms; the direct sum of waves takes 50 ms and more. Room for a busy machine.
    assert min(took) < 0.05


def test_a_run_is_the_same_from_the_same_seed_and_its_subsets_too() -> None:
    run = dunmarolide.finished()
    whole = list(simulate_run(run, seed=5, started=STARTED, count=4))
    part = list(simulate_run(run, seed=5, started=STARTED, count=60, only={2, 4}))
    other = next(simulate_run(run, seed=6, started=STARTED))
    assert [s.number for s in part] == [2, 4]
    assert part[0].fid.tobytes() == whole[1].fid.tobytes()
    assert part[1].truth == whole[3].truth
    assert not np.array_equal(other.fid, whole[0].fid)


def test_truth_of_the_demo_is_the_true_law() -> None:
    run = dunmarolide.demo()
    spectra = list(simulate_run(run, seed=1, started=STARTED, only={1, 60, 61, 120}))
    for spectrum in spectra:
        truth = spectrum.truth
        middle = spectrum.start + (spectrum.end - spectrum.start) / 2
        assert (middle - STARTED).total_seconds() == truth.time_s
        left = 0.4 * np.exp(-dunmarolide.K_25C * truth.time_s)
        assert truth.amounts_mid["dunmarolide"] == pytest.approx(left, rel=1e-12)
        assert truth.amounts["dunmarolide"] == pytest.approx(left, rel=1e-4)
        assert spectrum.start.microsecond == 0
    assert spectra[-1].truth.amounts["dunmarolide"] / 0.4 == pytest.approx(0.05, abs=0.002)
    assert spectra[0].truth.amounts["unknown"] == 0
    assert 0.007 < spectra[-1].truth.amounts["unknown"] < 0.008
    assert (spectra[2].start - spectra[1].start).total_seconds() == 240


def test_the_finished_night_has_a_pause_and_a_bad_shim() -> None:
    run = dunmarolide.finished()
    numbers = {1, 21, 34, 35}
    spectra = list(simulate_run(run, seed=1, started=STARTED, only=numbers))
    assert (spectra[3].start - spectra[2].start).total_seconds() == 360 + 2700
    assert len(spectra[1].truth.shims) == 2
    assert len(spectra[0].truth.shims) == 1


def test_a_naive_start_is_refused() -> None:
    with pytest.raises(ValueError, match="offset"):
        next(simulate_run(dunmarolide.demo(), seed=1, started=datetime(2026, 3, 3, 18)))


def test_lines_in_a_run_stand_where_the_truth_says() -> None:
    run = dunmarolide.demo()
    spectrum = next(simulate_run(run, seed=3, started=STARTED, only={50}))
    instrument, truth = spectrum.instrument, spectrum.truth
    ppm, values = spectrum_of(spectrum.fid, instrument, zero_fill=8)
    offset = (ppm - instrument.carrier_ppm) * instrument.frequency_mhz
    angle = truth.p0_deg + truth.p1_deg * offset / instrument.spectral_width_hz
    real = (values * np.exp(-1j * np.deg2rad(angle))).real
    for label in ("reference", "neighbour"):
        place = truth.positions_ppm[label]
        near = np.abs(ppm - place) < 0.1
        # The shim's tail moves the top by a fraction of a line-width.
        assert ppm[near][np.argmax(real[near])] == pytest.approx(place, abs=0.005)
