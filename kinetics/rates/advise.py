"""Remarks on a fit that need the law or the single spectra: outliers, constants that swap."""

import numpy as np

from kinetics.rates.estimate import Estimate, Problem
from kinetics.rates.model import Model
from kinetics.rates.robust import robust_refit, suspicious
from kinetics.remarks import Remark

_NAMED = 3  # outliers named by their label, the rest by number


def law_remarks(model: Model) -> list[Remark]:
    """Say what the observed species cannot tell about a law."""
    if model.law.name != "consecutive-first-order":
        return []
    reactant = model.mechanism.reactants[0][0]
    products = {name for name, _ in model.mechanism.products}
    middle = model.mechanism.intermediate
    tells = middle in model.observed and products & set(model.observed)
    if reactant in model.observed or tells:
        return []
    return [
        Remark(
            "constants-swap",
            f"{reactant} is not observed: k_1 and k_2 could be the other way round and the curve "
            "would be the same.",
            "Which of the two steps is the slow one cannot be said.",
            f"Follow {reactant} as well.",
        )
    ]


def outlier_remarks(problem: Problem, found: Estimate) -> list[Remark]:
    """Name spectra that lie far off the curve, and say what they do to the first rate."""
    if not suspicious(found):
        return []
    robust = robust_refit(problem, found)
    if robust.outliers.size == 0:
        return []
    labels = [problem.series.labels[i] for i in robust.outliers]
    named = ", ".join(labels[:_NAMED])
    if len(labels) > _NAMED:
        named += f" and {len(labels) - _NAMED} more"
    before = float(problem.model.to_natural(found.x)[0])
    after = float(problem.model.to_natural(robust.x)[0])
    shift = 100 * (after / before - 1) if before else np.inf
    return [
        Remark(
            "outliers",
            f"Far off the curve: {named}.",
            f"A fit that gives them little say moves {problem.model.names[0]} by {shift:+.2g} %.",
            "They stay in the fit; look at them, and set them aside if there is a reason.",
        )
    ]
