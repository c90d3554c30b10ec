"""Forecast, end-point, stall and choice of law, measured on simulated runs; prints figures.

    python tests/benchmarks/forecast_rates.py [--runs 1000] [--part forecast end choice change]

Reactant and product are observed with 1 % independent noise of the starting amount unless said
otherwise.
"""

import argparse
import time
from dataclasses import dataclass

import numpy as np
from scipy.stats import t as student

from kinetics.errors import FitError
from kinetics.rates.fitting import fit
from kinetics.rates.progress import changes, plateau, progress
from kinetics.rates.question import Question
from kinetics.rates.series import Float64, Series, make_series
from kinetics.rates.study import study

SD = 0.01
TARGET = 0.95
LAWS = ("first-order", "second-order")


def question(*laws: str, target: float | None = TARGET) -> Question:
    """Return what is asked."""
    return Question({"A": 1.0}, {"P": 1.0}, laws, target_conversion=target)


def left(law: str, t: Float64) -> Float64:
    """Return the reactant left, starting from 1 with k = 1."""
    return np.asarray(np.exp(-t) if law == "first-order" else 1.0 / (1.0 + t), np.float64)


def time_at(law: str, conversion: float) -> float:
    """Return when a conversion is reached."""
    return float(-np.log1p(-conversion)) if law == "first-order" else conversion / (1 - conversion)


def noisy(t: Float64, a: Float64, rng: np.random.Generator, rho: float = 0.0) -> Series:
    """Return a run with noise, AR(1) where `rho` is given."""
    fresh = rng.normal(size=(t.size, 2)) * np.sqrt(1 - rho**2)
    for i in range(1, t.size):
        fresh[i] += rho * fresh[i - 1] if i > 1 else rho * fresh[0] / np.sqrt(1 - rho**2)
    if rho:
        fresh[0] /= np.sqrt(1 - rho**2)
    values = np.c_[a, 1 - a] + SD * fresh
    return make_series(t, values, ["A", "P"], standard_uncertainty=SD)


@dataclass
class Forecasts:
    """Counts of a forecast study."""

    runs: int = 0
    covered: int = 0
    open_above: int = 0
    width: float = float("nan")


def forecasts(
    truth: str, laws: tuple[str, ...], runs: int, n: int = 40, seed: int = 1
) -> Forecasts:
    """Forecast the time of 95 % conversion at 40 % conversion."""
    rng = np.random.default_rng(seed)
    t = time_at(truth, 0.4) * (np.arange(n) + 1) / n
    goal = time_at(truth, TARGET)
    out, widths = Forecasts(), []
    for _ in range(runs):
        found = study(noisy(t, left(truth, t), rng), question(*laws)).forecast.time_s
        out.runs += 1
        low, high = (found.low, found.high)
        low = 0.0 if not np.isfinite(low) else low
        out.open_above += not np.isfinite(high)
        high = np.inf if not np.isfinite(high) else high
        out.covered += low <= goal <= high
        if np.isfinite(found.low) and np.isfinite(found.high):
            widths.append(0.5 * np.log(found.high / found.low))
    out.width = float(np.median(widths)) / ideal_width(truth, t) if widths else float("nan")
    return out


def ideal_width(truth: str, t: Float64) -> float:
    """Return t times the Cramér–Rao standard error of the logarithm of the forecast time."""
    from kinetics.rates.estimate import Problem, finished, whitener

    clean = make_series(
        t, np.c_[left(truth, t), 1 - left(truth, t)], ["A", "P"], standard_uncertainty=SD
    )
    f = fit(clean, truth, question(truth))
    problem = Problem(f.model, clean)
    e = finished(problem, f.estimate.x, whitener(problem.stated))
    covariance = e.covariance / e.scale
    goal = time_at(truth, TARGET)
    _, begin_slope = f.amount_at("A", 0.0)
    _, slope = f.amount_at("A", goal)
    rate = (f.amount_at("A", goal * 1.0001)[0] - f.amount_at("A", goal * 0.9999)[0]) / (2e-4 * goal)
    by = -(slope - (1 - TARGET) * begin_slope) / rate / goal
    return float(student.ppf(0.975, e.dof) * np.sqrt(by @ covariance @ by))


def end_points(runs: int, half_lives: float = 10.0, n: int = 80, seed: int = 2) -> dict[str, float]:
    """Follow first-order runs to the end; when is the end called, and how early?"""
    rng = np.random.default_rng(seed)
    t = half_lives * np.log(2) * (np.arange(n) + 1) / n
    true_index = int(np.searchsorted(t, np.log(1 / 0.02)))
    delays, early, never = [], 0, 0
    for _ in range(runs):
        s = noisy(t, left("first-order", t), rng)
        called = first_call(s)
        if called is None:
            never += 1
        else:
            early += called < true_index
            delays.append(called - true_index)
    return {
        "early_%": 100 * early / runs,
        "never_%": 100 * never / runs,
        "median_delay": float(np.median(delays)) if delays else float("nan"),
    }


def first_call(s: Series) -> int | None:
    """Return the first spectrum at which the run is called over or levelled off."""
    before = False
    for i in range(9, s.size):
        p = plateau(s.select(np.arange(i + 1)))
        now = p is not None and p.reached
        if now and before:
            return i
        before = now
    return None


def stalls(runs: int, n: int = 80, seed: int = 3) -> dict[str, float]:
    """Runs that stop dead at 30 to 80 % conversion: are they ever called over?"""
    rng = np.random.default_rng(seed)
    t = 6 * np.log(2) * (np.arange(n) + 1) / n
    q = question("first-order")
    over = noticed = 0
    for _ in range(runs):
        stop = time_at("first-order", rng.uniform(0.3, 0.8))
        s = noisy(t, left("first-order", np.minimum(t, stop)), rng)
        states = {progress(s.select(np.arange(i + 1)), q).state for i in range(40, n, 8)}
        over += "over" in states
        found = changes(fit(s, "first-order", q))
        noticed += bool(found) and found[0].kind == "rate"
    return {"called_over_%": 100 * over / runs, "stall_noticed_%": 100 * noticed / runs}


def change_alarms(runs: int, n: int = 60, seed: int = 4) -> dict[str, float]:
    """False alarms without a change; and how often a 5 % step of the reference is named."""
    rng = np.random.default_rng(seed)
    t = 3 * (np.arange(n) + 1) / n
    q = question("first-order")
    false = named = misnamed = 0
    for _ in range(runs):
        s = noisy(t, left("first-order", t), rng)
        false += bool(changes(fit(s, "first-order", q)))
        values = s.values * np.where(np.arange(n) >= n // 2, 1.05, 1.0)[:, None]
        found = changes(
            fit(make_series(t, values, ["A", "P"], standard_uncertainty=SD), "first-order", q)
        )
        named += bool(found) and found[0].kind == "reference"
        misnamed += bool(found) and found[0].kind != "reference"
    return {
        "false_alarm_%": 100 * false / runs,
        "step_named_%": 100 * named / runs,
        "step_misnamed_%": 100 * misnamed / runs,
    }


def choices(
    truth: str, conversion: float, runs: int, rho: float, n: int = 20, seed: int = 5
) -> dict[str, float]:
    """How often is an order singled out, rightly and wrongly?"""
    rng = np.random.default_rng(seed)
    t = time_at(truth, conversion) * (np.arange(n) + 1) / n
    right = wrong = 0
    for _ in range(runs):
        try:
            preferred = study(
                noisy(t, left(truth, t), rng, rho), question(*LAWS, target=None)
            ).preferred
        except FitError:
            continue
        right += preferred == truth
        wrong += preferred not in (None, truth)
    return {"right_%": 100 * right / runs, "wrong_%": 100 * wrong / runs}


def main() -> None:
    """Print the figures."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--runs", type=int, default=1000)
    parser.add_argument("--part", nargs="*", default=["forecast", "end", "choice", "change"])
    options = parser.parse_args()
    began = time.perf_counter()
    if "forecast" in options.part:
        for truth in LAWS:
            for laws in ((truth,), LAWS):
                f = forecasts(truth, laws, options.runs)
                print(
                    f"forecast at 40 %, truth {truth}, laws {len(laws)}: covered "
                    f"{100 * f.covered / f.runs:.1f} %, open above "
                    f"{100 * f.open_above / f.runs:.1f} %, half-width/ideal {f.width:.2f}",
                    flush=True,
                )
    if "choice" in options.part:
        for truth in LAWS:
            for conversion in (0.3, 0.5, 0.75):
                for rho in (0.0, 0.6):
                    found = choices(truth, conversion, options.runs, rho)
                    print(
                        f"choice, truth {truth}, {conversion:.2f}, rho {rho}: {found}", flush=True
                    )
    if "change" in options.part:
        print("change", change_alarms(options.runs), flush=True)
    if "end" in options.part:
        print("stall", stalls(options.runs), flush=True)
        print("end-point", end_points(options.runs), flush=True)
    print(f"{time.perf_counter() - began:.0f} s")


if __name__ == "__main__":
    main()
