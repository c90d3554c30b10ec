"""Whole simulated runs: does the interval hold the true k, and is it as narrow as it can be?

``python tests/benchmarks/whole_runs.py [--runs 100] [--spectra 60]`` makes seeded first-order and
second-order runs of the demonstration's mixture (FIDs with noise, phase error, drift, coupling),
takes each from FIDs to k exactly as `kinetics.run` does, in memory, and prints for either law how
often the 95 % interval holds the truth and how wide it is

- over the interval of an ideal fit to the integrals (weights known, curve known): what the noise
  of the sums allows;
- over that of an ideal fit of the known lines to the FIDs themselves (Cramér–Rao), which no sum
  over a window can reach, since a window takes in noise where there is no line.

Invented data; nothing here is a measurement.
"""

import argparse
import sys
from collections.abc import Callable
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import numpy.typing as npt
from scipy.stats import t as student

ROOT = Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT))

from demo_runs import dunmarolide  # noqa: E402
from demo_runs.course import second_order  # noqa: E402
from demo_runs.scenario import Scenario  # noqa: E402
from demo_runs.simulate import SimulatedSpectrum, simulate_fid, simulate_run  # noqa: E402
from kinetics.measure import Recipe, amount_rule, follow_plan, measure  # noqa: E402
from kinetics.rates.fitting import fit  # noqa: E402
from kinetics.rates.question import Question  # noqa: E402
from kinetics.rates.series import make_series  # noqa: E402
from kinetics.sheet import Sheet, read_sheet  # noqa: E402
from kinetics.signals.amounts import concentrations  # noqa: E402
from kinetics.signals.calibration import calibrate  # noqa: E402
from tests.measured import raw_of  # noqa: E402

Float64 = npt.NDArray[np.float64]
STARTED = datetime(2026, 3, 3, 19, 0, tzinfo=UTC)
K_SECOND = 1.3e-4  # L/(mol s): about the demonstration's half-life with 2 A -> B


@dataclass(frozen=True)
class Outcome:
    """One run: relative error of k, relative half-widths, and whether the truth was held."""

    error: float
    half_width: float
    of_sums: float
    of_fids: float
    held: bool


def scenario_of(law: str, spectra: int) -> tuple[Scenario, float, Question]:
    """The mixture, its true k, and the question."""
    base = dunmarolide.demo()
    interval = 240 * 120 / spectra
    schedule = replace(base.schedule, count=spectra, interval_s=interval)
    base = replace(base, schedule=schedule)
    if law == "first-order":
        question = Question({"dunmarolide": 1}, {"dunmaral": 1}, laws=(law,))
        return base, dunmarolide.rate_constant(298.15), question
    course = second_order(dunmarolide.REACTANT, dunmarolide.PRODUCT, K_SECOND, dunmarolide.CHARGED)
    question = Question({"dunmarolide": 2}, {"dunmaral": 1}, laws=(law,))
    return replace(base, course=course), K_SECOND, question


def amounts_curve(law: str, k: float, start: float, times: Float64) -> Float64:
    """Reactant and product at `times`, shape (n, 2)."""
    if law == "first-order":
        left = start * np.exp(-k * times)
        return np.stack([left, start - left], axis=1)
    left = start / (1.0 + 2.0 * k * start * times)
    return np.stack([left, 0.5 * (start - left)], axis=1)


def ideal_half_width(law: str, k: float, times: Float64, covariance: Float64) -> float:
    """Relative half-width of k by an ideal fit (k, starting amounts) with known covariances."""
    start = np.array([k, dunmarolide.CHARGED, 0.0])

    def curve(p: Float64) -> Float64:
        both = amounts_curve(law, p[0], p[1], times)
        both[:, 1] += p[2]
        return both

    information = np.zeros((3, 3))
    slopes = []
    for index, step in enumerate((1e-5 * k, 1e-6, 1e-6)):
        move = np.eye(3)[index] * step
        slopes.append((curve(start + move) - curve(start - move)) / (2 * step))
    slope = np.stack(slopes, axis=2)
    for row, cov in zip(slope, covariance, strict=True):
        information += row.T @ np.linalg.solve(cov, row)
    error = float(np.sqrt(np.linalg.inv(information)[0, 0]))
    return float(student.ppf(0.975, 2 * times.size - 3)) * error / k


def fid_covariance(spectrum: SimulatedSpectrum, scenario: Scenario) -> Float64:
    """Covariance (2, 2) of reactant and product by an ideal fit of known lines to the FID."""
    truth, noise = spectrum.truth, spectrum.instrument.noise_sd * np.sqrt(spectrum.scans)

    def variance(lines: tuple[object, ...]) -> float:
        fid = simulate_fid(
            spectrum.instrument,
            [(line, 1.0) for line in lines],  # type: ignore[misc]
            scans=spectrum.scans,
            shims=truth.shims,
        )
        return float(noise**2 / np.sum(np.abs(fid) ** 2))

    names = (dunmarolide.REACTANT, dunmarolide.PRODUCT)
    own = {species.name: variance(species.signals) for species in scenario.species}
    standing = next(s for s, _ in scenario.standing if s.name == scenario.reference)
    relative = variance(standing.signals) / dunmarolide.REFERENCE_AMOUNT**2
    amounts = np.array([truth.amounts[name] for name in names])
    return np.diag([own[name] for name in names]) + relative * np.outer(amounts, amounts)


def one_run(law: str, seed: int, spectra: int, sheet: Sheet) -> Outcome:
    """Simulate, measure and fit one run."""
    scenario, k, question = scenario_of(law, spectra)
    made = list(simulate_run(scenario, seed=seed, started=STARTED))
    raws = [raw_of(spectrum) for spectrum in made]
    plan, rule = follow_plan(sheet), amount_rule(sheet)
    recipe = Recipe(1, plan, calibrate(raws[:20], plan, 2))
    rows = [measure(raw, recipe).integrals for raw in raws]
    amounts = concentrations(
        np.array([row.values for row in rows]), np.array([row.covariance for row in rows]), rule
    )
    times = np.array([spectrum.truth.time_s for spectrum in made])
    length = np.array([(s.end - s.start).total_seconds() for s in made])
    series = make_series(
        times,
        amounts.values,
        amounts.species,
        covariance=amounts.covariance,
        acquisition_s=length,
    )
    found = fit(series, law, question).parameters[0]
    fids = np.array([fid_covariance(spectrum, scenario) for spectrum in made])
    return Outcome(
        error=found.value / k - 1.0,
        half_width=(found.high - found.low) / 2 / k,
        of_sums=ideal_half_width(law, k, times, amounts.covariance),
        of_fids=ideal_half_width(law, k, times, fids),
        held=found.low <= k <= found.high,
    )


def study(
    law: str, runs: int, spectra: int, told: Callable[[str], None] = lambda _line: None
) -> list[Outcome]:
    """Make `runs` seeded runs of a law."""
    sheet, _ = read_sheet(ROOT / "demo_runs" / "demo.toml")
    out = []
    for seed in range(runs):
        out.append(one_run(law, 1000 + seed, spectra, sheet))
        told(f"  {law} {seed + 1}/{runs}: error {100 * out[-1].error:+.2f} %")
    return out


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--runs", type=int, default=100)
    parser.add_argument("--spectra", type=int, default=60)
    parser.add_argument("--loud", action="store_true")
    options = parser.parse_args()
    print("law           runs  held  median half-width  / of sums  / of FIDs  mean error, sd (%)")
    for law in ("first-order", "second-order"):
        outcomes = study(
            law, options.runs, options.spectra, print if options.loud else lambda _: None
        )
        width = np.median([o.half_width for o in outcomes])
        sums = np.median([o.half_width / o.of_sums for o in outcomes])
        fids = np.median([o.half_width / o.of_fids for o in outcomes])
        errors = 100 * np.array([o.error for o in outcomes])
        print(
            f"{law:13s} {len(outcomes):4d}  {sum(o.held for o in outcomes):4d}  "
            f"{100 * width:14.3f} %  {sums:9.2f}  {fids:9.2f}   "
            f"{errors.mean():+.3f}, {errors.std():.3f}",
            flush=True,
        )


if __name__ == "__main__":
    main()
