"""Laws compared, verdict, outcome, forecast, balance, and the document."""

import json
from dataclasses import replace

import numpy as np
import pytest

from kinetics.errors import FitError, InputError
from kinetics.rates.fitting import fit
from kinetics.rates.outcome import balance
from kinetics.rates.question import Question
from kinetics.rates.series import make_series
from kinetics.rates.study import document, study, with_law_first
from kinetics.rates.words import rounded, with_interval
from tests.rates.simulated import ONE, run


@pytest.mark.parametrize("order", [1, 2])
def test_the_right_order_is_singled_out_at_three_quarters(order: int) -> None:
    end = 1.4 if order == 1 else 3.0
    found = study(run(1, order=order, n=20, end=end), ONE)
    law = ("first-order", "second-order")[order - 1]
    assert found.preferred == law == found.best.law
    assert found.weights[law] > 0.95
    assert f"single out {law}" in found.verdict


def test_at_a_tenth_conversion_the_data_cannot_tell_and_it_says_what_would() -> None:
    found = study(run(2, n=12, end=0.1), ONE)
    assert found.preferred is None
    assert "cannot tell between" in found.verdict
    assert "75 %" in found.verdict
    assert "starting concentration" in found.verdict
    assert sum(found.weights.values()) == pytest.approx(1.0)


def test_no_verdict_on_correlated_residuals() -> None:
    t = np.linspace(0.1, 4.0, 60)
    wave = 0.03 * np.sin(4 * t)
    s = make_series(t, np.exp(-t) + wave, ["A"], standard_uncertainty=0.003)
    found = study(s, replace(ONE, laws=("first-order",)))
    assert found.preferred is None
    assert "correlated" in found.verdict


def test_forecast_unites_the_laws_in_play() -> None:
    q = replace(ONE, target_conversion=0.9)
    s = run(3, n=12, end=0.25)
    both = study(s, q).forecast.time_s
    alone = study(s, replace(q, laws=("first-order",))).forecast.time_s
    other = study(s, replace(q, laws=("second-order",))).forecast.time_s
    assert both.low == pytest.approx(min(alone.low, other.low))
    assert both.high == pytest.approx(max(alone.high, other.high))
    assert both.low < np.log(10) < both.high


def test_outcome_refers_to_the_charge_where_it_is_known() -> None:
    q = replace(ONE, charged={"A": 1.25}, laws=("first-order",))
    found = study(run(4, n=40), q).outcome
    assert found.basis == "charged"
    assert found.conversion.value == pytest.approx(1 - np.exp(-2) / 1.25, abs=0.01)
    made = found.yields["P"]
    assert made.low < (1 - np.exp(-2)) / 1.25 < made.high
    assert found.selectivity["P"].value == pytest.approx(made.value / found.conversion.value)


def test_conversion_from_the_fitted_start_and_no_charge() -> None:
    found = study(run(5, n=40), ONE).outcome
    assert found.basis == "fitted start"
    assert found.conversion.low < 1 - np.exp(-2) < found.conversion.high


def test_balance_closes_or_shows_what_is_missing() -> None:
    s = run(6, n=40, sd=0.002)
    closed = balance(s, replace(ONE, charged={"A": 1.0}))
    assert closed is not None
    assert closed.mean == pytest.approx(1.0, abs=0.002)
    lost = replace(s, values=s.values * np.array([1.0, 0.8]))
    found = balance(lost, replace(ONE, charged={"A": 1.0}))
    assert found is not None
    assert found.worst == pytest.approx(1 - 0.2 * (1 - np.exp(-2)), abs=0.01)
    assert balance(s, replace(ONE, formed={})) is None


def test_document_is_plain_json_with_null_for_what_cannot_be_had() -> None:
    found = document(study(run(7), replace(ONE, target_conversion=0.98)))
    text = json.dumps(found, allow_nan=False)
    assert json.loads(text) == found
    first = found["fits"][0]
    assert set(first["parameters"]["k"]) >= {
        "value",
        "standard_error",
        "low",
        "high",
        "unit",
        "interval",
    }
    assert first["half_life_s"]["low"] < first["half_life_s"]["value"]
    assert found["progress"]["state"] == "running"
    assert document(study(run(7), ONE))["forecast"]["time_s"] is None


def test_a_law_that_cannot_be_fitted_is_named_and_no_verdict_is_given() -> None:
    s = make_series([1.0, 2.0, 3.0], [0.37, 0.13, 0.05], ["A"], standard_uncertainty=0.01)
    q = Question({"A": 1.0}, laws=("first-order", "nth-order"))
    found = study(s, q)
    assert found.preferred is None
    assert "nth-order" in found.failed
    with pytest.raises(FitError):
        study(s.select(np.array([0])), q)


def test_same_curve_laws_are_refused() -> None:
    with pytest.raises(InputError, match="same curve"):
        study(run(8), replace(ONE, laws=("first-order", "pseudo-first-order")))


def test_a_chosen_law_goes_in_front_and_leaves_the_preference() -> None:
    found = study(run(9, n=20, end=1.4), ONE)
    chosen = with_law_first(found, "second-order")
    assert chosen.best.law == "second-order"
    assert chosen.preferred == found.preferred == "first-order"


def test_numbers_carry_the_digits_their_intervals_leave() -> None:
    assert rounded(2.01234e-4, 1.99e-4, 2.03e-4) == "2.012e-4"
    k = fit(run(10), "first-order", ONE).parameter("k")
    assert "no upper bound" in with_interval(replace(k, high=float("nan")))
    assert "not bounded" in with_interval(replace(k, high=float("nan"), low=float("nan")))


def test_weights_do_not_depend_on_the_unit_of_amounts() -> None:
    s = run(11, n=15, end=0.4)
    milli = make_series(
        s.time_s, 1000 * s.values, s.species, covariance=1e6 * s.covariance, unit="ratio"
    )
    a, b = study(s, ONE).weights, study(milli, ONE).weights
    assert a["first-order"] == pytest.approx(b["first-order"], rel=1e-6)
