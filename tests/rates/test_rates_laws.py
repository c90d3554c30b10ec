"""Each rate law against its rate equation, and in its limits."""

from decimal import Decimal, localcontext

import numpy as np
import pytest

from kinetics.errors import InputError
from kinetics.rates.laws import LAWS, law_named, mechanism_of, phi, unit_of
from kinetics.rates.question import Question, check_laws
from tests.rates.law_contract import LawContract

ONE = Question({"A": 1.0}, {"P": 1.0})
COUNTED = Question({"A": 2.0}, {"P": 3.0})


class TestZeroOrder(LawContract):
    law, question = "zero-order", COUNTED
    rates, start = {"k": 0.05}, {"A": 1.0, "P": 0.1}

    def velocity(self, r: dict[str, float], y: dict[str, float]) -> float:
        return r["k"] + 0.0 * y["A"]

    def test_stops_when_the_reactant_is_gone(self) -> None:
        found = self.closed({"k": 1.0}, self.start)
        assert found["A"][-1] == 0.0
        assert found["P"][-1] == pytest.approx(0.1 + 1.5)


class TestFirstOrder(LawContract):
    law, question = "first-order", COUNTED
    rates, start = {"k": 0.3}, {"A": 1.0, "P": 0.2}

    def velocity(self, r: dict[str, float], y: dict[str, float]) -> float:
        return r["k"] * y["A"]


class TestPseudoFirstOrder(LawContract):
    law, question = "pseudo-first-order", ONE
    rates, start = {"k_observed": 0.3}, {"A": 1.0, "P": 0.2}

    def velocity(self, r: dict[str, float], y: dict[str, float]) -> float:
        return r["k_observed"] * y["A"]


class TestSecondOrder(LawContract):
    law, question = "second-order", COUNTED
    rates, start = {"k": 0.7}, {"A": 1.2, "P": 0.0}

    def velocity(self, r: dict[str, float], y: dict[str, float]) -> float:
        return r["k"] * y["A"] ** 2


class TestSecondOrderMixed(LawContract):
    law, question = "second-order-mixed", Question({"A": 1.0, "B": 2.0}, {"P": 1.0})
    rates, start = {"k": 0.7}, {"A": 1.0, "B": 2.9, "P": 0.0}

    def velocity(self, r: dict[str, float], y: dict[str, float]) -> float:
        return r["k"] * y["A"] * y["B"]

    @pytest.mark.parametrize("excess", [0.0, 1e-14, 1e-9, 1e-5, -1e-9])
    def test_equal_and_nearly_equal_amounts(self, excess: float) -> None:
        start = {"A": 1.0, "B": 2.0 * (1.0 + excess), "P": 0.0}
        self.assert_agrees(self.rates, start)

    def test_nearly_equal_amounts_to_the_last_digits(self) -> None:
        """Against 50-digit arithmetic; the textbook form has lost every digit here."""
        question = Question({"A": 1.0, "B": 1.0}, {"P": 1.0})
        law = LAWS["second-order-mixed"]
        a, b, k, t = 1.0, 1.0 + 1e-12, 0.7, 3.0
        start = {"A": a, "B": b, "P": 0.0}
        found = law.amounts(mechanism_of(law, question), {"k": k}, start, np.array([t]))
        with localcontext() as context:
            context.prec = 50
            x, y = Decimal(a), Decimal(b)
            e = (Decimal(k) * (y - x) * Decimal(t)).exp()
            exact = float(x * y * (e - 1) / (y * e - x))
        assert abs(float(found["P"][0]) / exact - 1) < 4e-16


class TestNthOrder(LawContract):
    law, question = "nth-order", COUNTED
    rates, start = {"k": 0.4, "order": 1.7}, {"A": 1.1, "P": 0.0}

    def velocity(self, r: dict[str, float], y: dict[str, float]) -> float:
        return float(r["k"] * max(y["A"], 0.0) ** r["order"])

    @pytest.mark.parametrize("order", [0.5, 1.0 - 1e-9, 1.0, 1.0 + 1e-9, 2.0, 3.0])
    def test_orders_around_the_special_ones(self, order: float) -> None:
        self.assert_agrees({"k": 0.1, "order": order}, self.start)

    def test_half_order_ends_at_nothing_left(self) -> None:
        found = self.closed({"k": 1.0, "order": 0.5}, self.start)
        assert found["A"][-1] == 0.0


class TestFirstOrderReversible(LawContract):
    law, question = "first-order-reversible", COUNTED
    rates, start = {"k_forward": 0.3, "k_reverse": 0.1}, {"A": 1.0, "P": 0.2}

    def velocity(self, r: dict[str, float], y: dict[str, float]) -> float:
        return r["k_forward"] * y["A"] - r["k_reverse"] * y["P"]

    def test_no_reverse_is_first_order(self) -> None:
        found = self.closed({"k_forward": 0.3, "k_reverse": 0.0}, self.start)
        first = LAWS["first-order"]
        wanted = first.amounts(mechanism_of(first, COUNTED), {"k": 0.3}, self.start, self.times)
        assert np.allclose(found["A"], wanted["A"], rtol=1e-15)


class TestAutocatalytic(LawContract):
    law, question = "autocatalytic", Question({"A": 1.0}, {"P": 2.0})
    rates, start = {"k": 0.9}, {"A": 1.0, "P": 0.02}

    def velocity(self, r: dict[str, float], y: dict[str, float]) -> float:
        return r["k"] * y["A"] * y["P"]


class TestConsecutiveFirstOrder(LawContract):
    law = "consecutive-first-order"
    question = Question({"A": 1.0}, {"P": 1.0}, intermediate="B")
    rates, start = {"k_1": 0.5, "k_2": 0.2}, {"A": 1.0, "B": 0.1, "P": 0.0}

    def change(self, r: dict[str, float], y: dict[str, float]) -> dict[str, float]:
        first, second = r["k_1"] * y["A"], r["k_2"] * y["B"]
        return {"A": -first, "B": first - second, "P": second}

    @pytest.mark.parametrize("second", [0.5, 0.5 * (1 + 1e-13), 0.5 * (1 + 1e-7), 5.0])
    def test_equal_and_nearly_equal_constants(self, second: float) -> None:
        self.assert_agrees({"k_1": 0.5, "k_2": second}, self.start)


def test_phi_is_smooth_through_zero() -> None:
    x = np.array([-1e-3, -1e-5, -1e-7, 0.0, 1e-7, 0.99e-5, 1.01e-5, 1e-3])
    with localcontext() as context:
        context.prec = 50
        exact = [1.0 if v == 0 else float((1 - (-Decimal(v)).exp()) / Decimal(v)) for v in x]
    assert phi(x) == pytest.approx(exact, rel=3e-16)


def test_units_say_what_amounts_are() -> None:
    second = law_named("second-order")
    assert unit_of("k", second, "mol/L") == "L/(mol s)"
    assert unit_of("k", second, "ratio") == "1/(ratio s)"
    assert unit_of("A_0", second, "mol/L") == "mol/L"
    assert unit_of("k", law_named("zero-order"), "mol/L") == "mol/(L s)"


def test_laws_that_are_one_curve_are_refused_together() -> None:
    with pytest.raises(InputError, match="the same curve"):
        check_laws(Question({"A": 1.0}, laws=("first-order", "pseudo-first-order")))


@pytest.mark.parametrize(
    ("law", "question", "words"),
    [
        ("second-order-mixed", ONE, "two species in consumed"),
        ("autocatalytic", Question({"A": 1.0}), "species in formed"),
        ("consecutive-first-order", ONE, "needs intermediate"),
        ("first-order", Question({}), "species in consumed"),
    ],
)
def test_a_law_says_what_it_lacks(law: str, question: Question, words: str) -> None:
    with pytest.raises(InputError, match=words):
        mechanism_of(law_named(law), question)
    with pytest.raises(InputError, match="no rate law"):
        law_named("third-order")
