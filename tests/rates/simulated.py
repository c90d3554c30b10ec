"""Small simulated runs for the tests of this package."""

import numpy as np

from kinetics.rates.question import Question
from kinetics.rates.series import Float64, Series, make_series

ONE = Question({"A": 1.0}, {"P": 1.0}, ("first-order", "second-order"))


def left(order: int, t: Float64) -> Float64:
    """Reactant left of 1, with k = 1."""
    return np.asarray(np.exp(-t) if order == 1 else 1.0 / (1.0 + t), np.float64)


def run(
    seed: int,
    order: int = 1,
    n: int = 30,
    end: float = 2.0,
    sd: float = 0.01,
    shared: float = 0.0,
    stated: bool = True,
) -> Series:
    """Reactant and product with independent noise, and noise of a shared reference."""
    rng = np.random.default_rng(seed)
    t = end * (np.arange(n) + 1) / n
    clean = np.c_[left(order, t), 1 - left(order, t)]
    values = clean * (1 + shared * rng.normal(size=(n, 1))) + sd * rng.normal(size=clean.shape)
    covariance = sd**2 * np.eye(2) + shared**2 * clean[:, :, None] * clean[:, None, :]
    if stated:
        return make_series(t, values, ["A", "P"], covariance=covariance)
    return make_series(t, values, ["A", "P"])
