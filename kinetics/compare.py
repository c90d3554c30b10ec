"""`compare`: rate constants across runs: replicates, temperatures, orders."""

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import groupby
from math import isfinite, nan
from pathlib import Path
from typing import Any

from kinetics.errors import FitError, InputError, NothingToDoError
from kinetics.rates.across import (
    Rate,
    TemperatureFit,
    arrhenius,
    distinct_temperatures,
    eyring,
    replicates,
)
from kinetics.rates.fitting import Fit
from kinetics.rates.orders import InitialRate, order_from_initial_rates
from kinetics.rates.study import plain, quantity
from kinetics.rates.words import rounded
from kinetics.run import Run, load_run, study_run

# Temperatures that differ by less are one (as in `rates.across`).
_SAME_K = 0.5
# Starting concentrations must span this factor before an order is worth a word.
_SPAN = 1.5


@dataclass(frozen=True, eq=False)
class _One:
    """What a run brings to the comparison."""

    run: Run
    fit: Fit
    preferred: str | None
    rate: Rate
    initial: InitialRate | None


def compare(logbooks: Sequence[Path]) -> dict[str, Any]:
    """Compare the rate constants of several runs.

    One law is taken for all: the one that most runs prefer among those that every run was asked
    for (a choice recorded in a logbook counts as that run's preference).

    Raises
    ------
    InputError
        If there are fewer than two logbooks, one is not a logbook, or no law is common to all.
    NothingToDoError, FitError
        If a run has nothing to fit.
    """
    if len(logbooks) < 2:
        raise InputError("a comparison needs two logbooks at least")
    runs = [load_run(path) for path in logbooks]
    law = _common_law(runs)
    ones = [_of_run(run, law) for run in runs]
    rates = [one.rate for one in ones]
    units = {rate.unit for rate in rates}
    if len(units) > 1:
        raise InputError(
            f"the runs give k in different units ({', '.join(sorted(units))}): a reference "
            "concentration is stated in some of the sheets only"
        )
    confidence = min(one.run.sheet.kinetics.confidence for one in ones)
    document: dict[str, Any] = {
        "schema": 1,
        "law": law,
        "parameter": ones[0].fit.parameters[0].name,
        "unit": units.pop(),
        "confidence": confidence,
        "runs": [_run_document(one) for one in ones],
        "replicates": _replicates(rates, confidence),
        "arrhenius": None,
        "eyring": None,
        "order": _order(ones, confidence),
        "words": [],
    }
    if distinct_temperatures(rates) >= 2:
        for fitted in (arrhenius(rates, confidence), eyring(rates, confidence)):
            document[fitted.kind] = _temperature_document(fitted)
    document["words"] = _words(document, ones)
    return document


def compare_words(found: dict[str, Any]) -> list[str]:
    """Put a comparison in lines for people."""
    unit = found["unit"]
    lines = [f"{found['parameter']} in {unit}, law {found['law']}", ""]
    for run in found["runs"]:
        at = f"{run['temperature_k']:.2f} K" if run["temperature_k"] else "temperature unknown"
        ends = _ends(run["k"])
        lines.append(f"  {run['logbook']}: {rounded(run['k']['value'])} {ends} at {at}")
    for group in found["replicates"]:
        lines += [
            "",
            f"{group['runs']} runs at {group['temperature_k']:.1f} K: mean "
            f"{rounded(group['k']['value'])} {_ends(group['k'])} {unit}; single runs scatter by "
            f"{100 * group['between_sd']:.1f} % beyond their own errors",
        ]
    if found["arrhenius"]:
        energy, factor = found["arrhenius"]["energy_j_mol"], found["arrhenius"]["ln_factor"]
        lines += ["", f"Arrhenius: energy {_kj(energy)}; ln A {_plain(factor)}"]
    if found["eyring"]:
        energy, entropy = found["eyring"]["energy_j_mol"], found["eyring"]["entropy_j_mol_k"]
        lines.append(f"Eyring: enthalpy {_kj(energy)}; entropy {_plain(entropy)} J/(mol K)")
    if found["order"]:
        order = found["order"]
        lines += [
            "",
            f"order in {order['species']} from initial rates: {_plain(order['order'])}",
        ]
    return [*lines, "", *found["words"]]


def predicted_k(fitted: TemperatureFit, temperature_c: float) -> dict[str, float | None] | None:
    """Return k of a further run at another temperature, with its interval."""
    return quantity(fitted.predict(temperature_c + 273.15))


def _common_law(runs: Sequence[Run]) -> str:
    asked = [set(run.sheet.kinetics.laws) for run in runs]
    common = set.intersection(*asked)
    if not common:
        raise InputError(
            "no law stands in every run's sheet: "
            + "; ".join(f"{run.logbook}: {', '.join(run.sheet.kinetics.laws)}" for run in runs)
        )
    votes: dict[str, int] = dict.fromkeys(runs[0].sheet.kinetics.laws, 0)
    for run in runs:
        chosen = run.chosen_law or study_run(run).preferred
        if chosen in common and chosen in votes:
            votes[chosen] += 1
    return max((law for law in votes if law in common), key=lambda law: votes[law])


def _of_run(run: Run, law: str) -> _One:
    try:
        result = study_run(run, (law,))
    except (FitError, NothingToDoError) as why:
        raise type(why)(f"{run.logbook}: {why}") from None
    fit = result.best
    k = fit.parameters[0]
    temperature = run.temperature_k
    stated = run.sheet.temperature_u_c
    rate = Rate(
        run.logbook.name,
        k.value,
        k.standard_error,
        k.unit,
        nan if temperature is None else temperature,
        stated or 0.0,
    )
    return _One(run, fit, result.preferred, rate, _initial_rate(run, fit))


def _initial_rate(run: Run, fit: Fit) -> InitialRate | None:
    """Rate of the limiting species at the start by the fitted law, and its concentration."""
    name = run.question().limiting_species
    half = fit.half_life()
    if name is None or name not in fit.series.species or not isfinite(half.value):
        return None
    step = 1e-3 * half.value
    start, _ = fit.amount_at(name, 0.0)
    later, _ = fit.amount_at(name, step)
    rate = (start - later) / step
    if not (start > 0 and rate > 0):
        return None
    k = fit.parameters[0]
    return InitialRate(run.logbook.name, start, rate, rate * k.standard_error / k.value)


def _run_document(one: _One) -> dict[str, Any]:
    k = one.fit.parameters[0]
    return {
        "logbook": one.run.logbook.name,
        "title": one.run.sheet.title,
        "temperature_k": plain(one.rate.temperature_k),
        "temperature_u_k": one.rate.temperature_u_k,
        "preferred": one.preferred,
        "start": plain(one.initial.concentration) if one.initial else None,
        "k": {
            "value": plain(k.value),
            "standard_error": plain(k.standard_error),
            "low": plain(k.low),
            "high": plain(k.high),
        },
    }


def _replicates(rates: Sequence[Rate], confidence: float) -> list[dict[str, Any]]:
    known = sorted((r for r in rates if isfinite(r.temperature_k)), key=lambda r: r.temperature_k)
    out = []
    for _, group in groupby(known, key=lambda r: round(r.temperature_k / _SAME_K)):
        members = list(group)
        if len(members) < 2:
            continue
        pooled = replicates(members, confidence)
        out.append(
            {
                "temperature_k": sum(r.temperature_k for r in members) / len(members),
                "runs": pooled.runs,
                "logbooks": [r.run for r in members],
                "k": quantity(pooled.k),
                "between_sd": pooled.between_sd,
            }
        )
    return out


def _temperature_document(fitted: TemperatureFit) -> dict[str, Any]:
    second = "ln_factor" if fitted.kind == "arrhenius" else "entropy_j_mol_k"
    return {
        "energy_j_mol": quantity(fitted.energy_j_mol),
        second: quantity(fitted.second),
        "temperatures": fitted.temperatures,
        "between_sd": fitted.between_sd,
        "words": fitted.words,
        "k_at_25_c": predicted_k(fitted, 25.0),
    }


def _order(ones: Sequence[_One], confidence: float) -> dict[str, Any] | None:
    """Order from initial rates of runs at one temperature; None where they cannot tell."""
    rates = [one.initial for one in ones if one.initial is not None]
    known = [one.rate for one in ones]
    if len(rates) < len(ones) or distinct_temperatures(known) > 1:
        return None
    amounts = [rate.concentration for rate in rates]
    if max(amounts) < _SPAN * min(amounts):
        return None
    species = ones[0].run.question().limiting_species
    return {"species": species, "order": quantity(order_from_initial_rates(rates, confidence))}


def _words(found: dict[str, Any], ones: Sequence[_One]) -> list[str]:
    words = []
    for one in ones:
        if one.preferred is None:
            words.append(
                f"{one.run.logbook.name} by itself singles out no law (see `fit` for why); "
                f"{found['law']} is taken for all."
            )
    if found["arrhenius"]:
        words.append(found["arrhenius"]["words"])
        if any(one.rate.temperature_u_k == 0 for one in ones):
            words.append(
                "No uncertainty of the temperature is stated (temperature_u_c) in some sheets; "
                "half a kelvin matters more than most fits."
            )
    elif all(one.run.temperature_k is None for one in ones):
        words.append("No temperature is known: neither the sheets nor the files state one.")
    elif not found["replicates"]:
        words.append("These runs share no temperature and span none: there is little to compare.")
    for group in found["replicates"]:
        if group["runs"] == 2:
            words.append("Two replicates show that runs scatter, hardly how much.")
            break
    return words


def _ends(k: dict[str, Any]) -> str:
    low, high = k["low"], k["high"]
    if low is None or high is None:
        return "(one side open)"
    return f"({rounded(low, k['value'])} to {rounded(high, k['value'])})"


def _kj(energy: dict[str, Any]) -> str:
    value, low, high = (energy[key] for key in ("value", "low", "high"))
    if low is None or high is None:
        return f"{value / 1e3:.1f} kJ/mol (no interval)"
    return f"{value / 1e3:.1f} kJ/mol ({low / 1e3:.1f} to {high / 1e3:.1f})"


def _plain(q: dict[str, Any]) -> str:
    if q["low"] is None or q["high"] is None:
        return f"{q['value']:.3g} (no interval)"
    return f"{q['value']:.3g} ({q['low']:.3g} to {q['high']:.3g})"
