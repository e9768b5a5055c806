"""Responses that explain each other in the same period are refused in a circle and noted in a row."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
import pytest

from bayes_sys.errors import DesignError
from bayes_sys.study.read import make_study
from bayes_sys.system.align import build_system
from bayes_sys.system.system import System

LAG = [{"lag": 1}]


def market(n_periods: int = 24) -> pd.DataFrame:
    """Return three invented series of a market, one row a period, and columns made from them outside."""
    rng = np.random.default_rng(17)
    names = ("quantity", "price", "stock", "income", "cost", "deflator")
    table = pd.DataFrame({name: np.exp(0.3 * rng.standard_normal(n_periods)) for name in names})
    table.insert(0, "year", np.arange(1990, 1990 + n_periods))
    table["price_in_cents"] = 100 * table["price"]
    table["price_above_par"] = 3 * table["price"] - 100
    table["quantity_below_plan"] = 7 - table["quantity"] / 3
    return table


def build(regressors: dict[str, list[str]], derive: dict[str, Any] | None = None, **responses: str) -> System:
    """Return the system of the named equations; each has its own name as response unless said otherwise."""
    equations = {n: {"response": responses.get(n, n), "regressors": r} for n, r in regressors.items()}
    content = {"data": {"period": "year", "from": 1994}, "derive": derive or {}, "equation": equations}
    return build_system(make_study(content), market())


def refusal(*args: Any, **kwargs: Any) -> str:
    with pytest.raises(DesignError) as caught:
        build(*args, **kwargs)
    assert caught.value.exit_code == 2 and "lag = 1" in caught.value.mend
    assert "simultaneous equations" in str(caught.value)
    return str(caught.value)


def test_two_equations_with_each_others_response_are_refused() -> None:
    text = refusal({"quantity": ["income", "price"], "price": ["cost", "quantity"]})
    assert "“quantity” uses the response of “price” in the same period (as “price”)" in text
    assert "the other way round (as “quantity”)" in text


@pytest.mark.parametrize("copy", ["price_in_cents", "price_above_par"])
def test_a_rescaled_or_shifted_copy_is_the_response_still(copy: str) -> None:
    text = refusal({"quantity": ["income", copy], "price": ["cost", "quantity_below_plan"]})
    assert copy in text and "quantity_below_plan" in text


@pytest.mark.parametrize(
    "steps",
    [
        ["log"],
        ["diff"],
        [{"rolling_mean": 3}],
        [{"over": "deflator"}, "log"],
        [{"scale": 0.01}, {"power": 2.0}],
        ["standardise"],
    ],
)
def test_a_derived_regressor_of_the_same_period_is_the_response_still(steps: list[Any]) -> None:
    derive = {"made": {"from": "price", "steps": steps}, "log_price": {"from": "price", "steps": ["log"]}}
    refusal({"quantity": ["income", "made"], "price": ["cost", "quantity"]}, derive, price="log_price")


def test_a_response_that_enters_through_a_second_column_is_found() -> None:
    derive = {"real_cost": {"from": "cost", "steps": [{"over": "quantity"}]}}
    refusal({"quantity": ["price"], "price": ["real_cost"]}, derive)


def test_a_circle_of_three_is_refused_and_told_link_by_link() -> None:
    text = refusal({"quantity": ["price"], "price": ["stock"], "stock": ["quantity", "cost"]})
    assert "used in a circle" in text
    for one, other in (("quantity", "price"), ("price", "stock"), ("stock", "quantity")):
        assert f"“{one}” that of “{other}”" in text


@pytest.mark.parametrize(
    "derived", [LAG, ["log", {"lag": 2}], [{"lag": 1}, "diff"], [{"over": "cost"}, *LAG]]
)
def test_a_lag_anywhere_on_the_way_breaks_the_circle(derived: list[Any]) -> None:
    derive = {"earlier": {"from": "price", "steps": derived}}
    system = build({"quantity": ["income", "earlier"], "price": ["cost", "quantity"]}, derive)
    assert sum("one-way chain" in note for note in system.notes) == 1


def test_a_one_way_chain_is_built_with_a_note() -> None:
    system = build({"quantity": ["income", "price"], "price": ["cost"], "stock": ["quantity"]})
    (note,) = [n for n in system.notes if "FGLS" in n]
    assert "“quantity” uses the response of “price” in the same period (as “price”)" in note
    assert "“stock” uses the response of “quantity”" in note and "not consistent" in note


def test_a_common_deflator_is_no_use_of_a_response() -> None:
    derive = {
        "real_quantity": {"from": "quantity", "steps": [{"over": "deflator"}]},
        "real_stock": {"from": "stock", "steps": [{"over": "deflator"}]},
        "real_cost": {"from": "cost", "steps": [{"over": "deflator"}]},
    }
    regressors = {"quantity": ["real_cost"], "stock": ["real_cost"]}
    assert build(regressors, derive, quantity="real_quantity", stock="real_stock").notes == ()


def test_a_regressor_made_from_the_response_itself_is_noted() -> None:
    derive = {"log_quantity": {"from": "quantity", "steps": ["log"]}}
    system = build({"quantity": ["quantity", "income"]}, derive, quantity="log_quantity")
    (note,) = system.notes
    assert "“quantity” explains “log_quantity” with “quantity”" in note and "explains itself" in note


def test_lags_of_the_own_response_need_no_note() -> None:
    derive = {"quantity_1": {"from": "quantity", "steps": LAG}}
    notes = build({"quantity": ["quantity_1", "income"]}, derive).notes
    assert not any("itself" in note for note in notes)


def long_market(**derive: Any) -> System:
    """Return two towns, one row a town and year, whose regressors are the columns derived here."""
    rng = np.random.default_rng(3)
    table = pd.DataFrame({"year": list(range(20)) * 2, "town": ["alder"] * 20 + ["birch"] * 20})
    table["bread"], table["flour"] = rng.standard_normal(40), rng.standard_normal(40)
    alder, birch = (table.loc[table["town"] == t, "bread"].to_numpy() for t in ("alder", "birch"))
    table["elsewhere"] = np.concatenate([birch, alder])
    content = {
        "data": {"period": "year", "unit": "town"},
        "derive": derive,
        "every_equation": {"response": "bread", "regressors": ["flour", *derive]},
    }
    if not derive:
        content["every_equation"]["regressors"].append("elsewhere")
    return build_system(make_study(content), table)


def test_each_others_response_in_one_column_of_a_long_table_is_found_by_its_values() -> None:
    with pytest.raises(DesignError, match=r"“alder” uses .* “birch” .*simultaneous"):
        long_market()


def test_like_named_columns_of_different_units_are_different_series() -> None:
    neighbour = {"elsewhere_1": {"from": "elsewhere", "steps": LAG}}
    assert not any("same period" in note for note in long_market(**neighbour).notes)


def test_another_units_column_is_followed_to_that_unit() -> None:
    rng = np.random.default_rng(4)
    table = pd.DataFrame({"year": list(range(20)) * 2, "town": ["alder"] * 20 + ["birch"] * 20})
    table["bread"], table["flour"] = np.exp(rng.standard_normal(40)), rng.standard_normal(40)
    content = {
        "data": {"period": "year", "unit": "town"},
        "derive": {
            "in_alder": {"from": "bread", "of_unit": "alder", "steps": ["log"]},
            "in_birch": {"from": "bread", "of_unit": "birch", "steps": ["log"]},
        },
        "every_equation": {"response": "bread"},
        "equation": {"alder": {"regressors": ["in_birch"]}, "birch": {"regressors": ["in_alder"]}},
    }
    with pytest.raises(DesignError, match="simultaneous"):
        build_system(make_study(content), table)
    content["equation"]["birch"] = {"regressors": ["flour"]}
    assert any("one-way chain" in note for note in build_system(make_study(content), table).notes)


def test_names_written_with_the_equation_are_followed_when_borrowed() -> None:
    table = market().rename(columns={"quantity": "a_sales", "price": "b_sales"})
    content = {
        "data": {"period": "year"},
        "derive": {"{equation}_log": {"from": "{equation}_sales", "steps": ["log"]}},
        "every_equation": {"response": "{equation}_sales"},
        "equation": {"a": {"regressors": ["b_log"]}, "b": {"regressors": ["a_log"]}},
    }
    with pytest.raises(DesignError, match="simultaneous"):
        build_system(make_study(content), table)
