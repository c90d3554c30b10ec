"""NIST's certified nonlinear fits that are kinetics, in matching digits.

Source: NIST Statistical Reference Datasets, from the lmfit 1.3.4 source distribution.
"""

from collections.abc import Callable

import numpy as np
import pytest

from kinetics.rates.estimate import Problem, estimate, finished, whitener
from kinetics.rates.fitting import Fit, fit
from kinetics.rates.laws import law_named
from kinetics.rates.model import make_model, starts
from kinetics.rates.question import Question
from kinetics.rates.series import make_series
from tests.published.conftest import Certified

PRODUCT_ONLY = Question({"A": 1.0}, {"P": 1.0}, known_start={"P": 0.0})


def digits(found: np.ndarray, wanted: np.ndarray) -> float:
    """Return the least number of matching digits (log relative error)."""
    error = np.abs(np.asarray(found) / wanted - 1)
    return float(np.min(-np.log10(np.maximum(error, 1e-16))))


def product_fit(data: Certified, law: str, question: Question = PRODUCT_ONLY) -> Fit:
    """Fit a growth curve of the product as NIST does: all points alike, independent."""
    return fit(make_series(data.x, data.y, ["P"]), law, question, as_stated=True)


def transformed(f: Fit, to: Callable[[np.ndarray], np.ndarray]) -> tuple[np.ndarray, np.ndarray]:
    """Carry natural parameters and their whole covariance over to NIST's (complex step)."""
    x, model = f.estimate.x, f.model
    slope = np.empty((to(model.to_natural(x)).size, x.size))
    for i in range(x.size):
        stepped = x.astype(complex)
        stepped[i] += 1e-30j
        slope[:, i] = np.imag(to(model.to_natural(stepped))) / 1e-30
    covariance = slope @ f.estimate.covariance @ slope.T
    return np.real(to(model.to_natural(x))), np.sqrt(np.diag(covariance))


@pytest.mark.parametrize("name", ["Misra1a", "BoxBOD"])
def test_first_order_growth(name: str, certified: Callable[[str], Certified]) -> None:
    data = certified(name)
    f = product_fit(data, "first-order")
    k, start = f.parameters
    assert digits(np.array([start.value, k.value]), data.parameters) >= 8
    errors = np.array([start.standard_error, k.standard_error])
    assert digits(errors, data.standard_deviations) >= 7
    assert f.estimate.chi2 == pytest.approx(data.residual_sum, rel=1e-9)


def test_second_order_growth(certified: Callable[[str], Certified]) -> None:
    data = certified("Misra1d")
    f = product_fit(data, "second-order")
    values, errors = transformed(f, lambda p: np.array([p[1], p[0] * p[1]]))
    assert digits(values, data.parameters) >= 8
    assert digits(errors, data.standard_deviations) >= 7


@pytest.mark.parametrize(("name", "order"), [("Misra1b", 1.5), ("Misra1c", 3.0)])
def test_growth_of_held_order(
    name: str, order: float, certified: Callable[[str], Certified]
) -> None:
    data = certified(name)
    series = make_series(data.x, data.y, ["P"])
    problem = Problem(make_model(law_named("nth-order"), series, PRODUCT_ONLY), series)
    w = whitener(problem.stated)
    found = []
    for begin in starts(problem.model, series):
        k, other, size = problem.model.to_natural(begin)
        moved = np.array([k * size ** (other - order), order, size])
        found.append(problem.search(problem.model.to_vector(moved), w, fixed=1))
    x, _ = min(found, key=lambda item: item[1])
    x, cost = problem.search(x, w, fixed=1)
    k, _, start = problem.model.to_natural(x)
    values = np.array([start, k * start ** (order - 1)])
    assert digits(values, data.parameters) >= 8
    assert cost == pytest.approx(data.residual_sum, rel=1e-9)
    free = [0, 2]
    slope = problem.jacobian(x)[:, 0, free]
    covariance = np.linalg.inv(slope.T @ slope) * cost / (data.x.size - 2)
    # b1 = A_0, b2 = k A_0^(n-1); the vector holds ln k and A_0 over the scale.
    by = np.array([[0.0, problem.model.scale], [values[1], values[1] * (order - 1) / x[2]]])
    errors = np.sqrt(np.diag(by @ covariance @ by.T))
    assert digits(errors, data.standard_deviations) >= 7


def test_certified_sums_give_the_differences_between_orders(
    certified: Callable[[str], Certified],
) -> None:
    """References: ΔAICc against order 3 is 15.567 (n = 1), 8.553 (1.5), 4.481 (2)."""
    third = certified("Misra1c").residual_sum
    n = certified("Misra1c").x.size
    for name, law, wanted in (
        ("Misra1a", "first-order", 15.567),
        ("Misra1d", "second-order", 4.481),
    ):
        f = product_fit(certified(name), law)
        assert n * np.log(f.estimate.chi2 / third) == pytest.approx(wanted, abs=1e-3)


def test_a_free_order_on_misra_is_not_identifiable(certified: Callable[[str], Certified]) -> None:
    data = certified("Misra1a")
    f = product_fit(data, "nth-order")
    order = f.parameter("order")
    assert np.isnan(order.high)
    assert any(r.code == "not-bounded" and r.subject == "order" for r in f.diagnostics.remarks)


def test_nth_order_decay(certified: Callable[[str], Certified]) -> None:
    """Bennett5 (−y): A = A_0 (1 + (n−1) k A_0^(n−1) t)^(−1/(n−1)), n = 1 + b3."""
    data = certified("Bennett5")
    series = make_series(data.x, -data.y, ["A"])
    f = fit(series, "nth-order", Question({"A": 1.0}), as_stated=True)

    def to_nist(p: np.ndarray) -> np.ndarray:
        k, order, start = p
        b2 = 1 / ((order - 1) * k * start ** (order - 1))
        return np.array([-start * b2 ** (1 / (order - 1)), b2, order - 1])

    values, errors = transformed(f, to_nist)
    assert digits(values, data.parameters) >= 8
    assert digits(errors, data.standard_deviations) >= 7
    order = f.parameter("order")
    assert order.value == pytest.approx(1.932185, abs=1e-6)
    assert order.standard_error == pytest.approx(0.0202723, abs=1e-7)


def test_autocatalysis(certified: Callable[[str], Certified]) -> None:
    """Rat42: y = b1/(1 + e^(b2 − b3 x)); S = b1, kS = b3, A_0/P_0 = e^b2."""
    data = certified("Rat42")
    question = Question({"A": 1.0}, {"P": 1.0})
    f = fit(make_series(data.x, data.y, ["P"]), "autocatalytic", question, as_stated=True)

    def to_nist(p: np.ndarray) -> np.ndarray:
        start = dict(zip(f.model.names, p, strict=True))
        total = start["A_0"] + start["P_0"]
        return np.array([total, np.log(start["A_0"] / start["P_0"]), start["k"] * total])

    values, errors = transformed(f, to_nist)
    assert digits(values, data.parameters) >= 8
    assert digits(errors, data.standard_deviations) >= 7


def test_estimate_with_noise_parts_leaves_certified_values_when_asked(
    certified: Callable[[str], Certified],
) -> None:
    data = certified("Misra1a")
    series = make_series(data.x, data.y, ["P"])
    problem = Problem(make_model(law_named("first-order"), series, PRODUCT_ONLY), series)
    plain = estimate(problem, as_stated=True)
    assert plain.whitener.rho == 0.0
    again = finished(problem, plain.x, whitener(problem.stated))
    assert np.allclose(again.covariance, plain.covariance, rtol=1e-12)
