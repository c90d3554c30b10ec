"""How often do the intervals of k hold the truth? A simulation study; prints a table.

    python tests/benchmarks/coverage_rates.py [--runs 1000] [--law first-order ...] [--noise ...]

Reactants and products are observed, 1 % noise of the starting amount, stated truly except for
the drift, which the program is not told of. Cells: law × noise × number of spectra × conversion
(of what the equilibrium allows). Beside the coverage: share of open intervals (counted apart),
share of runs with a warning about the noise, median half-width over t times the Cramér–Rao
standard error.
"""

import argparse
import sys
import time
from collections.abc import Iterator
from dataclasses import dataclass
from itertools import product as combinations

import numpy as np
from scipy.stats import t as student

from kinetics.errors import FitError
from kinetics.rates.diagnostics import noise_remarks
from kinetics.rates.estimate import Problem, estimate
from kinetics.rates.laws import law_named
from kinetics.rates.model import make_model
from kinetics.rates.profile import profile
from kinetics.rates.question import Question
from kinetics.rates.series import Float64, Series, make_series

LAWS = ("first-order", "second-order", "second-order-mixed", "first-order-reversible")
NOISES = ("independent", "shared", "heteroscedastic", "drift", "drift-unstated")
COUNTS = (8, 20, 60)
CONVERSIONS = (0.30, 0.75, 0.95)
SD = 0.01
DRIFT_RHO = 0.5
STARTS = {"A": 1.0, "B": 1.3, "P": 0.0}


@dataclass(frozen=True, slots=True)
class Cell:
    """What was counted in one cell."""

    law: str
    noise: str
    spectra: int
    conversion: float
    runs: int
    closed: int
    covered: int
    warned: int
    width: float

    @property
    def coverage(self) -> float:
        """Share of the closed intervals that hold the truth."""
        return self.covered / max(self.closed, 1)


def question_for(law: str) -> Question:
    """Return what is asked in a cell."""
    consumed = {"A": 1.0, "B": 1.0} if law == "second-order-mixed" else {"A": 1.0}
    return Question(consumed, {"P": 1.0}, (law,))


def rates_for(law: str) -> dict[str, float]:
    """Return the true rate parameters (time in units of 1/k)."""
    return {"k_forward": 1.0, "k_reverse": 0.25} if law.endswith("reversible") else {"k": 1.0}


def last_time(law: str, conversion: float) -> float:
    """Return when the limiting reactant has come to a share of what it can reach."""
    if law == "second-order":
        return conversion / (1 - conversion)
    if law == "second-order-mixed":
        d = STARTS["B"] - STARTS["A"]
        return float(np.log((STARTS["B"] - conversion) / (STARTS["B"] * (1 - conversion))) / d)
    return float(-np.log1p(-conversion) / (1.25 if law.endswith("reversible") else 1.0))


def truth(law: str, spectra: int, conversion: float) -> tuple[Series, Float64]:
    """Return the noiseless series of a cell and the true parameters."""
    times = np.linspace(0.0, last_time(law, conversion), spectra + 1)[1:]
    q = question_for(law)
    species = tuple(q.consumed) + tuple(q.formed)
    blank = make_series(times, np.ones((spectra, len(species))), species)
    model = make_model(law_named(law), blank, q)
    natural = [*rates_for(law).values(), *(STARTS[s] for s in model.free_start)]
    x = model.to_vector(np.maximum(np.array(natural), 0.0))
    values = np.real(model.predict(x, times, np.zeros(spectra)))
    return make_series(times, values, model.observed), np.array(natural)


def covariances(noise: str, clean: Float64) -> tuple[Float64, Float64]:
    """Return the stated covariance of each spectrum, and that drawn from (drift aside)."""
    count = clean.shape[1]
    eye = np.eye(count)
    if noise == "heteroscedastic":  # 3 % of each amount and a floor
        spread = (0.03 * clean) ** 2 + 0.002**2
        block = spread[:, :, None] * eye
    elif noise == "shared":
        block = (0.003**2) * eye + SD**2 * clean[:, :, None] * clean[:, None, :]
    elif noise == "drift":
        block = np.broadcast_to((0.5 * SD) ** 2 * eye, (clean.shape[0], count, count)).copy()
    else:
        block = np.broadcast_to(SD**2 * eye, (clean.shape[0], count, count)).copy()
    return block, block


def drawn(noise: str, clean: Float64, rng: np.random.Generator) -> tuple[Float64, Float64]:
    """Draw one run: noisy values and their stated covariance."""
    stated, true = covariances(noise, clean)
    draw = np.einsum("nij,nj->ni", np.linalg.cholesky(true), rng.normal(size=clean.shape))
    if noise == "drift":  # the reference wanders, on top of the stated noise
        draw = draw + clean * SD * wander(clean.shape[0], 1, rng)
    if noise == "drift-unstated":  # each line wanders by itself, as much as is stated for noise
        draw = SD * wander(clean.shape[0], clean.shape[1], rng)
    return clean + draw, stated


def wander(count: int, columns: int, rng: np.random.Generator) -> Float64:
    """Draw AR(1) noise of unit variance."""
    fresh = rng.normal(size=(count, columns)) * np.sqrt(1 - DRIFT_RHO**2)
    out = np.empty_like(fresh)
    out[0] = fresh[0] / np.sqrt(1 - DRIFT_RHO**2)
    for i in range(1, count):
        out[i] = DRIFT_RHO * out[i - 1] + fresh[i]
    return out


def bound(noise: str, clean: Series, natural: Float64, law: str) -> float:
    """Return t times the Cramér–Rao standard error of ln k."""
    spectra, count = clean.values.shape
    stated, _ = covariances(noise, clean.values)
    whole = np.zeros((spectra, count, spectra, count))
    whole[np.arange(spectra), :, np.arange(spectra), :] = stated
    lag = DRIFT_RHO ** np.abs(np.subtract.outer(np.arange(spectra), np.arange(spectra)))
    if noise == "drift":
        v = clean.values
        whole += SD**2 * np.einsum("na,nm,mb->namb", v, lag, v)
    if noise == "drift-unstated":
        whole = SD**2 * np.einsum("nm,ab->namb", lag, np.eye(count))
    full = whole.reshape(spectra * count, spectra * count)
    model = make_model(law_named(law), clean, question_for(law))
    x = model.to_vector(natural)
    j = model.jacobian(x, clean.time_s, np.zeros(spectra)).reshape(-1, model.size)
    information = j.T @ np.linalg.solve(full, j)
    se = float(np.sqrt(np.linalg.inv(information)[0, 0]))
    return se * float(student.ppf(0.975, spectra * count - model.size))


def cell(law: str, noise: str, spectra: int, conversion: float, runs: int, seed: int = 1) -> Cell:
    """Simulate one cell."""
    clean, natural = truth(law, spectra, conversion)
    q = question_for(law)
    rng = np.random.default_rng([seed, LAWS.index(law), NOISES.index(noise), spectra])
    closed = covered = warned = 0
    widths = []
    k = next(iter(rates_for(law).values()))
    for _ in range(runs):
        values, stated = drawn(noise, clean.values, rng)
        series = make_series(clean.time_s, values, clean.species, covariance=stated)
        problem = Problem(make_model(law_named(law), series, q), series)
        try:
            found = estimate(problem)
        except FitError:
            continue
        warned += bool(noise_remarks(found))
        p = profile(problem, found, 0, 0.95)
        if np.isfinite(p.low) and np.isfinite(p.high):
            closed += 1
            covered += p.low <= k <= p.high
            widths.append(0.5 * np.log(p.high / p.low))
    width = float(np.median(widths)) / bound(noise, clean, natural, law) if widths else np.nan
    return Cell(law, noise, spectra, conversion, runs, closed, covered, warned, width)


def cells(options: argparse.Namespace) -> Iterator[Cell]:
    """Simulate all cells asked for."""
    for law, noise, n, c in combinations(options.law, options.noise, COUNTS, CONVERSIONS):
        yield cell(law, noise, n, c, options.runs, options.seed)


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--runs", type=int, default=1000)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--law", nargs="*", default=LAWS)
    parser.add_argument("--noise", nargs="*", default=NOISES)
    options = parser.parse_args()
    began = time.perf_counter()
    done = []
    print("law                     noise             n  conv  open%  cover%  warned%  width/bound")
    for c in cells(options):
        done.append(c)
        print(
            f"{c.law:23s} {c.noise:15s} {c.spectra:3d}  {c.conversion:.2f}  "
            f"{100 * (1 - c.closed / c.runs):5.1f}  {100 * c.coverage:6.1f}  "
            f"{100 * c.warned / c.runs:7.1f}  {c.width:11.2f}"
        )
        sys.stdout.flush()
    for noise in options.noise:
        part = [c for c in done if c.noise == noise]
        total = sum(c.closed for c in part)
        print(
            f"{noise}: pooled {100 * sum(c.covered for c in part) / max(total, 1):.2f} %, lowest "
            f"{100 * min(c.coverage for c in part):.1f} %, warned "
            f"{100 * sum(c.warned for c in part) / sum(c.runs for c in part):.1f} %"
        )
    print(f"{time.perf_counter() - began:.0f} s")


if __name__ == "__main__":
    main()
