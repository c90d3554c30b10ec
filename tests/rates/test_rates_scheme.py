"""Mass-action schemes: reading, integrating, fitting."""

import numpy as np
import pytest

from kinetics.errors import InputError
from kinetics.rates.fitting import fit
from kinetics.rates.laws import LAWS, mechanism_of
from kinetics.rates.question import Question
from kinetics.rates.scheme import parse_scheme, solve
from kinetics.rates.series import make_series
from kinetics.rates.study import document, study

TIMES = np.linspace(0.0, 6.0, 13)


def test_steps_are_read_as_chemists_write_them() -> None:
    scheme = parse_scheme(["2 A -> D", "A + B <-> C", "C -> A+E"])
    assert scheme.species == ("A", "D", "B", "C", "E")
    assert scheme.rates == ("k_1", "k_2", "k_2_reverse", "k_3")
    assert [s.order for s in scheme.steps] == [2, 2, 1, 1]
    assert scheme.changes()[0].tolist() == [-2, 1, 0, 0, 0]
    assert not scheme.is_linear


@pytest.mark.parametrize(
    ("line", "words"),
    [
        ("A + B", "expected one arrow"),
        ("A -> B -> C", "expected one arrow"),
        ("A + B + C -> D", "order 3"),
        ("-> B", "is not a species"),
        ("A -> 0 B", "counts no molecule"),
        ("A <-> B + C + D", "order 3"),
    ],
)
def test_what_is_not_a_step_is_shown(line: str, words: str) -> None:
    with pytest.raises(InputError, match=words):
        parse_scheme([line])
    with pytest.raises(InputError, match="holds no step"):
        parse_scheme([])


@pytest.mark.parametrize(
    ("lines", "rates", "start", "law", "question", "law_rates"),
    [
        (
            ["A -> B", "B -> P"],
            [0.5, 0.2],
            {"A": 1.0, "B": 0.1, "P": 0.0},
            "consecutive-first-order",
            Question({"A": 1.0}, {"P": 1.0}, intermediate="B"),
            {"k_1": 0.5, "k_2": 0.2},
        ),
        (
            ["A <-> P"],
            [0.4, 0.1],
            {"A": 1.0, "P": 0.2},
            "first-order-reversible",
            Question({"A": 1.0}, {"P": 1.0}),
            {"k_forward": 0.4, "k_reverse": 0.1},
        ),
        (
            ["A + B -> P"],
            [0.8],
            {"A": 1.0, "B": 1.4, "P": 0.0},
            "second-order-mixed",
            Question({"A": 1.0, "B": 1.0}, {"P": 1.0}),
            {"k": 0.8},
        ),
        (
            ["A + P -> 2 P"],
            [0.9],
            {"A": 1.0, "P": 0.05},
            "autocatalytic",
            Question({"A": 1.0}, {"P": 1.0}),
            {"k": 0.9},
        ),
    ],
)
def test_schemes_agree_with_the_closed_laws(
    lines: list[str],
    rates: list[float],
    start: dict[str, float],
    law: str,
    question: Question,
    law_rates: dict[str, float],
) -> None:
    scheme = parse_scheme(lines)
    begin = np.array([start[s] for s in scheme.species])
    found, _, _ = solve(scheme, np.array(rates), begin, TIMES)
    wanted = LAWS[law].amounts(mechanism_of(LAWS[law], question), law_rates, start, TIMES)
    for column, name in enumerate(scheme.species):
        assert np.allclose(found[:, column], wanted[name], rtol=1e-7, atol=1e-8)


@pytest.mark.parametrize("lines", [["A <-> B", "B -> C"], ["A + B <-> C", "2 C -> D"]])
def test_sensitivities_match_central_differences(lines: list[str]) -> None:
    scheme = parse_scheme(lines)
    rates = np.linspace(0.3, 0.9, len(scheme.rates))
    start = np.linspace(1.0, 0.2, len(scheme.species))
    _, by_rates, by_start = solve(scheme, rates, start, TIMES)
    h = 1e-4

    def moved(r: np.ndarray, s: np.ndarray) -> np.ndarray:
        return solve(scheme, r, s, TIMES)[0]

    for j in range(rates.size):
        step = h * np.eye(rates.size)[j]
        rough = (moved(rates + step, start) - moved(rates - step, start)) / (2 * h)
        assert np.allclose(by_rates[:, :, j], rough, atol=2e-5)
    for j in range(start.size):
        step = h * np.eye(start.size)[j]
        rough = (moved(rates, start + step) - moved(rates, start - step)) / (2 * h)
        assert np.allclose(by_start[:, :, j], rough, atol=2e-5)


def test_a_scheme_is_fitted_with_units_intervals_and_outcome() -> None:
    scheme = parse_scheme(["A + B -> C", "C -> D"])
    t = np.linspace(0.3, 8.0, 16)
    truth, _, _ = solve(scheme, np.array([0.7, 0.3]), np.array([1.0, 1.2, 0.0, 0.0]), t)
    rng = np.random.default_rng(1)
    values = truth[:, [0, 2, 3]] + 0.005 * rng.normal(size=(16, 3))
    s = make_series(t, values, ["A", "C", "D"], standard_uncertainty=0.005)
    q = Question({"A": 1.0}, {"D": 1.0}, scheme=scheme.text, charged={"B": 1.2})
    found = study(s, q)
    k_1, k_2 = found.best.parameter("k_1"), found.best.parameter("k_2")
    assert k_1.unit == "L/(mol s)"
    assert k_2.unit == "1/s"
    assert k_1.low < 0.7 < k_1.high
    assert k_2.low < 0.3 < k_2.high
    assert found.outcome.conversion.value == pytest.approx(1 - truth[-1, 0], abs=0.02)
    assert document(found)["fits"][0]["equation"] == "A + B -> C; C -> D"


def test_a_first_order_scheme_gives_what_the_law_gives() -> None:
    rng = np.random.default_rng(2)
    t = np.linspace(0.1, 3, 20)
    values = np.c_[np.exp(-t), 1 - np.exp(-t)] + 0.01 * rng.normal(size=(20, 2))
    s = make_series(t, values, ["A", "P"], standard_uncertainty=0.01, acquisition_s=0.1)
    q = Question({"A": 1.0}, {"P": 1.0}, scheme=("A -> P",))
    by_scheme, by_law = (
        fit(s, "scheme", q).parameter("k_1"),
        fit(s, "first-order", q).parameter("k"),
    )
    for name in ("value", "standard_error", "low", "high"):
        assert getattr(by_scheme, name) == pytest.approx(getattr(by_law, name), rel=1e-6)


def test_a_species_that_stands_in_no_step_is_named() -> None:
    q = Question({"Z": 1.0}, scheme=("A -> P",))
    with pytest.raises(InputError, match="Z in consumed"):
        fit(make_series([1, 2, 3, 4], [1, 0.5, 0.3, 0.2], ["A"]), "scheme", q)
