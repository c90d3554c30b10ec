"""Tables of how good phases, integrals and joint fits are, against simulated truth.

``python tests/benchmarks/quantities.py [--scale 1.0] [--only TABLE ...]``

FIDs come from `demo_runs.simulate`, which shares no code with what is tested. Seeds differ from
those of the tests, but for the table of overlaps, which shares theirs. ``--scale 0.1`` makes a
tenth of the spectra. Invented data throughout.
"""

import argparse
import sys
from collections.abc import Callable, Iterator
from dataclasses import replace
from itertools import product
from pathlib import Path

import numpy as np
import numpy.typing as npt

ROOT = Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT))

from demo_runs.instrument import Instrument, Shim  # noqa: E402
from demo_runs.lines import Multiplet  # noqa: E402
from demo_runs.simulate import simulate_fid  # noqa: E402
from kinetics.measure import Measurement, Recipe, measure  # noqa: E402
from kinetics.signals.calibration import calibrate  # noqa: E402
from kinetics.signals.model import FollowPlan  # noqa: E402
from kinetics.spectra.fourier import transform  # noqa: E402
from kinetics.spectra.model import Raw  # noqa: E402
from kinetics.spectra.phase import fit_phase, line_phases  # noqa: E402
from tests.measured import INSTRUMENT, acquire, plan_of  # noqa: E402
from tests.signals import test_multiplet as overlap  # noqa: E402
from tests.signals import unassigned_runs as unnamed  # noqa: E402

Float64 = npt.NDArray[np.float64]
SEED = 70_000
HIGH_FIELD = replace(INSTRUMENT, frequency_mhz=400.0, spectral_width_hz=8000.0, points=16384)
LOW_FIELD = replace(INSTRUMENT, frequency_mhz=60.0, spectral_width_hz=1200.0)
USUAL = Shim(lorentz_hz=0.2, gauss_hz=0.3)
LOPSIDED = Shim(lorentz_hz=0.2, gauss_hz=0.4, tail_share=0.15, tail_hz=0.4)
LINES = [
    (Multiplet(3.1, 6, width_hz=0.8), 0.05),
    (Multiplet(7.2, 2, width_hz=0.9), 0.2),
    (Multiplet(5.6, 1, ((3, 5.0),), width_hz=0.9), 0.3),
    (Multiplet(1.2, 3, ((1, 5.0),), width_hz=0.9), 0.3),
]
HUMP = (Multiplet(4.8, 2, width_hz=400.0), 2.0)
WATER = (Multiplet(4.8, 2, width_hz=4.0), 0.5)
PLAN = plan_of((3.0, 3.2), (7.0, 7.4), (5.3, 5.9), (1.0, 1.4))


def _plan_for(instrument: Instrument) -> FollowPlan:
    if instrument.frequency_mhz > 200:
        return PLAN
    return plan_of((2.9, 3.3), (7.0, 7.4), (5.2, 6.0), (0.9, 1.5))


def _measured(raws: list[Raw], plan: FollowPlan, learn: int = 20) -> list[Measurement]:
    recipe = Recipe(1, plan, calibrate(raws[:learn], plan, 2))
    return [measure(raw, recipe) for raw in raws]


def _ratios(rows: list[Measurement]) -> Float64:
    values = np.array([row.integrals.values for row in rows])
    return np.asarray(values[:, 1:] / values[:, :1])


def _off(found: Float64, true: Float64) -> Float64:
    return np.abs((found - true + 180.0) % 360.0 - 180.0)


def phase(scale: float) -> None:
    """Share of spectra with every signal within 2° (in brackets 5°)."""
    print("  MHz  S/N  hump   first spectra   series     2° (5°), %")
    count = max(int(60 * scale), 6)
    for instrument, snr, hump in product(
        (LOW_FIELD, HIGH_FIELD), (20.0, 100.0, 1000.0), (False, True)
    ):
        places = np.array([3.1, 7.2, 5.6, 1.2]) - instrument.carrier_ppm
        where = places * instrument.frequency_mhz / instrument.spectral_width_hz
        lines = [*LINES, *([HUMP, WATER] if hump else [])]
        rng = np.random.default_rng(SEED)
        first, series = [], []
        for p1 in (-60.0, -20.0, 20.0, 60.0):
            raws, truth = [], []
            for _ in range(count // 4 + 1):
                p0 = float(rng.uniform(-180, 180))
                seed = int(rng.integers(2**31))
                raws.append(
                    acquire(
                        lines, snr=snr, seed=seed, p0=p0, p1=p1, instrument=instrument, shim=USUAL
                    )
                )
                truth.append(-p0 - p1 * where)
                spectrum = transform(raws[-1], broadening_hz=0.3, zero_fill=2)
                found = fit_phase(line_phases(raws[-1], spectrum))
                if found is not None:
                    first.append(_off(found.p0_deg - found.p1_deg * where, truth[-1]).max())
            for row, true in zip(_measured(raws, _plan_for(instrument)), truth, strict=True):
                series.append(_off(row.record.p0_deg - row.record.p1_deg * where, true).max())
        cells = [
            f"{100 * np.mean(np.array(x) < 2):4.0f} ({100 * np.mean(np.array(x) < 5):3.0f})"
            for x in (first, series)
        ]
        print(f"{instrument.frequency_mhz:5.0f} {snr:5.0f}  {hump!s:5}  {cells[0]:>12}  {cells[1]}")


def bias(scale: float) -> None:
    """Bias of integral ratios of isolated signals, %."""
    print("  MHz  hump  shim        bias of three ratios, %")
    true = np.array([0.4, 0.3, 0.9]) / 0.3
    count = max(int(24 * scale), 4)
    for instrument, hump, (name, shim) in product(
        (LOW_FIELD, HIGH_FIELD), (False, True), (("usual", USUAL), ("lop-sided", LOPSIDED))
    ):
        lines = [*LINES, *([HUMP, WATER] if hump else [])]
        raws = [
            acquire(lines, snr=2000, seed=SEED + i, p0=30, p1=15, instrument=instrument, shim=shim)
            for i in range(count)
        ]
        off = 100 * (_ratios(_measured(raws, _plan_for(instrument))).mean(axis=0) / true - 1)
        print(f"{instrument.frequency_mhz:5.0f}  {hump!s:5} {name:10} {np.round(off, 2)}")
    for instrument, window in ((HIGH_FIELD, (3.9, 4.9)), (LOW_FIELD, (3.8, 5.0))):
        broad = Multiplet(4.4, 1, width_hz=40.0)
        base = plan_of((2.9, 3.3), window)
        plan = replace(base, signals=(replace(base.signals[0], exchanging=True),))
        raws = [
            acquire([LINES[0], (broad, 0.3)], snr=2000, seed=SEED + i, instrument=instrument)
            for i in range(count)
        ]
        rows = _measured(raws, plan)
        off = 100 * (_ratios(rows).mean() / (0.3 / 0.3) - 1)
        codes = sorted({remark.code for row in rows for remark in row.remarks})
        print(f"{instrument.frequency_mhz:5.0f}  OH of 40 Hz: {off:6.2f} %, remarks {codes}")


def pulls(scale: float) -> None:
    """Error of ratios over their stated uncertainty, reference S/N 100."""
    count = max(int(2000 * scale), 60)
    true = np.array([0.4, 0.3, 0.9]) / 0.3
    rng = np.random.default_rng(SEED)
    pull: list[Float64] = []
    for start in range(0, count, 200):
        raws = [
            acquire(LINES, snr=100, seed=SEED + start + i, p0=float(rng.uniform(-180, 180)))
            for i in range(min(200, count - start))
        ]
        for row in _measured(raws, _plan_for(LOW_FIELD)):
            values, covariance = row.integrals.values, row.integrals.covariance
            ratio = values[1:] / values[0]
            slope = np.column_stack((-ratio / values[0], np.eye(ratio.size) / values[0]))
            error = np.sqrt(np.diag(slope @ covariance @ slope.T))
            pull.append((ratio - true) / error)
    table = np.array(pull)
    print(
        f"  {len(table)} spectra: mean {np.round(table.mean(0), 3)} sd {np.round(table.std(0), 3)}"
    )


def drift(scale: float) -> None:
    """All lines slide by 0.2 ppm with a jump of 0.12 ppm."""
    count = max(int(100 * scale), 24)
    shifts = np.linspace(0, 0.2, count) + 0.12 * (np.arange(count) >= count // 2)
    raws = [
        acquire(LINES, snr=500, seed=SEED + i, shift=float(s), p0=10) for i, s in enumerate(shifts)
    ]
    found = _ratios(_measured(raws, _plan_for(LOW_FIELD))) / (np.array([0.4, 0.3, 0.9]) / 0.3) - 1
    half = count // 2
    step = 100 * (found[half:].mean(axis=0) - found[:half].mean(axis=0))
    print(
        f"  worst ratio {100 * np.abs(found).max():.2f} %, "
        f"bias {np.round(100 * found.mean(0), 2)} %,"
        f" after the jump {np.round(step, 2)} %"
    )


def _bound(share: float, shim: Shim, noise: float) -> Float64:
    """Cramér–Rao bound of the two areas, relative, for all of shifts, couplings, width free."""

    def fid(x: Float64) -> npt.NDArray[np.complex128]:
        a = Multiplet(1.22 + x[2], 3, ((2, 7.0 + x[4]),), width_hz=0.6 + x[6])
        b = Multiplet(1.22 + overlap.APART + x[3], 3, ((2, 7.0 + x[5]),), width_hz=0.6 + x[7])
        amounts = (0.2 * share * (1 + x[0]), 0.2 * (1 - share) * (1 + x[1]))
        return simulate_fid(overlap.LOW_FIELD, [(a, amounts[0]), (b, amounts[1])], shims=(shim,))

    steps = np.array([1e-3, 1e-3, 1e-5, 1e-5, 1e-4, 1e-4, 1e-4, 1e-4])
    slopes = np.array(
        [(fid(s * e) - fid(-s * e)) / (2 * s) for s, e in zip(steps, np.eye(8), strict=True)]
    )
    information = (slopes.conj() @ slopes.T).real / noise**2
    return np.asarray(np.sqrt(np.diag(np.linalg.inv(information))[:2]))


def overlapping(scale: float) -> None:
    """Two triplets 4 Hz apart at 60 MHz: joint fit, and a sum beside it."""
    count = max(int(200 * scale), 30)
    print("  shim  major:minor  bias, %              noise over bound    bias of sums, %")
    for (name, shim), share in product((("good", overlap.GOOD), ("bad", overlap.BAD)), (0.95, 0.5)):
        raws = [
            replace(raw, sha256=f"{SEED}{i}")
            for i, raw in enumerate(overlap.raws(share, count, shim, snr=300.0))
        ]
        rows = _measured(raws, overlap.plan())
        off = 100 * (_ratios(rows).mean(axis=0) / overlap.truth(share) - 1)
        values = np.array([row.integrals.values[1:] for row in rows])
        spread = values.std(axis=0) / values.mean(axis=0)
        noise = float(np.median(np.abs(raws[0].data[-500:].real))) / 0.6745
        sums = _ratios(_measured(raws[:30], overlap.replace_method(overlap.plan(), "sum")))
        beside = 100 * (sums.mean(axis=0) / overlap.truth(share) - 1)
        print(
            f"  {name:5} {100 * share:3.0f}:{100 - 100 * share:<3.0f}     {np.round(off, 2)!s:20} "
            f"{np.round(spread / _bound(share, shim, noise), 2)!s:18} {np.round(beside, 1)}"
        )


def unnamed_lines(scale: float) -> None:
    """A singlet of 1 % that appears at half time; false remarks in clean runs."""
    runs = max(int(50 * scale), 4)
    seen = sum(
        any(abs(one.ppm - unnamed.IMPURITY_PPM) < 0.02 for one in unnamed.found(raws[:50]))
        for raws in (unnamed.spectra(SEED + i, 80, impurity=0.01) for i in range(runs))
    )
    false = sum(
        len(unnamed.found(unnamed.spectra(2 * SEED + i, 80, impurity=0.0))) for i in range(runs)
    )
    print(
        f"  seen within ten spectra in {seen} of {runs} runs; "
        f"false remarks in as many clean ones: {false}"
    )


TABLES: dict[str, Callable[[float], None]] = {
    "phase": phase,
    "bias": bias,
    "pulls": pulls,
    "drift": drift,
    "overlap": overlapping,
    "unnamed": unnamed_lines,
}


def _chosen(names: list[str]) -> Iterator[tuple[str, Callable[[float], None]]]:
    for name, table in TABLES.items():
        if not names or name in names:
            yield name, table


def main() -> None:
    """Print the tables."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--scale", type=float, default=1.0)
    parser.add_argument("--only", nargs="*", default=[], choices=list(TABLES))
    options = parser.parse_args()
    for name, table in _chosen(options.only):
        print(f"{name}: {table.__doc__}")
        table(options.scale)


if __name__ == "__main__":
    main()
