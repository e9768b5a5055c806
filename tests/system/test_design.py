"""Designs that no data could identify are refused, each by name; all others pass."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pytest
from helpers import make_system
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from bayes_sys.errors import DesignError
from bayes_sys.system.design import check_design
from bayes_sys.system.system import System

Array = NDArray[np.float64]

RNG_SEED = 7


def one_equation(
    columns: dict[str, Array], response: Array | None = None, *, intercept: bool = True
) -> System:
    """Return a system of one equation “alder”, with named columns."""
    n_periods = len(next(iter(columns.values())))
    if response is None:
        response = np.random.default_rng(RNG_SEED).standard_normal(n_periods)
    parts = ([np.ones(n_periods)] if intercept else []) + list(columns.values())
    names = (["intercept"] if intercept else []) + list(columns)
    return make_system([np.column_stack(parts)], response[:, None], ["alder"], [names])


def refusal(system: System) -> str:
    with pytest.raises(DesignError) as caught:
        check_design(system, source="demand.csv")
    assert caught.value.exit_code == 2
    assert "demand.csv" in caught.value.where
    assert caught.value.mend
    return str(caught.value)


def draws(n_periods: int, n_columns: int, seed: int = 11) -> list[Array]:
    return list(np.random.default_rng(seed).standard_normal((n_columns, n_periods)))


def names_all(text: str, words: Sequence[str]) -> bool:
    return all(f"“{word}”" in text for word in words)


def test_an_ordinary_system_passes() -> None:
    a, b, y1, y2 = draws(20, 4)
    ones = np.ones(20)
    check_design(make_system([np.column_stack([ones, a, b])] * 2, np.column_stack([y1, y2])), source="x.csv")


def test_a_constant_regressor_beside_an_intercept_is_named() -> None:
    a, _ = draws(18, 2)
    text = refusal(one_equation({"heat": a, "price": np.full(18, 3.5)}))
    assert names_all(text, ["alder", "price"]) and "3.5" in text and "intercept" in text


def test_a_column_constant_up_to_rounding_counts_as_constant() -> None:
    wobble = np.full(18, 0.3)
    wobble[::2] = 0.1 + 0.2
    assert wobble[0] != wobble[1]
    assert "“price”" in refusal(one_equation({"price": wobble}))


def test_a_constant_regressor_without_an_intercept_passes() -> None:
    check_design(one_equation({"level": np.full(18, 2.0)}, intercept=False), source="x.csv")


def test_a_column_of_zeros_is_refused_without_an_intercept_too() -> None:
    a, _ = draws(18, 2)
    text = refusal(one_equation({"heat": a, "reform": np.zeros(18)}, intercept=False))
    assert "“reform” is 0 in every period" in text


def test_a_regressor_held_twice_names_both() -> None:
    a, _ = draws(18, 2)
    text = refusal(one_equation({"heat": a, "warmth": a.copy()}))
    assert names_all(text, ["heat", "warmth", "alder"])


def test_a_regressor_held_twice_is_found_with_fewer_periods_than_coefficients() -> None:
    a, b, c = draws(3, 3)
    assert names_all(refusal(one_equation({"a": a, "b": b, "c": c, "d": b.copy()})), ["b", "d"])


def test_a_full_set_of_season_columns_beside_an_intercept_is_refused() -> None:
    seasons = {f"season_{k + 1}": (np.arange(40) % 4 == k).astype(float) for k in range(4)}
    text = refusal(one_equation(seasons))
    assert "“season_4” is an exact combination" in text
    assert names_all(text, ["season_1", "season_2", "season_3"]) and "the intercept" in text


def test_a_full_set_of_season_columns_without_an_intercept_passes() -> None:
    seasons = {f"season_{k + 1}": (np.arange(40) % 4 == k).astype(float) for k in range(4)}
    check_design(one_equation(seasons, intercept=False), source="x.csv")


def test_a_total_beside_its_parts_names_exactly_those_three() -> None:
    a, b, other = draws(30, 3)
    text = refusal(one_equation({"homes": a, "firms": b, "heat": other, "total": a + b}))
    assert "“total” is an exact combination of “homes” and “firms”:" in text
    assert "“heat”" not in text


@pytest.mark.parametrize("level", [0.0, 1e3, 1e6, 1e9])
@pytest.mark.parametrize("factor", [1e-6, 1.0, 1e6])
def test_a_rescaled_regressor_is_found_whatever_its_level_and_units(level: float, factor: float) -> None:
    a, _ = draws(30, 2)
    text = refusal(one_equation({"a": level + a, "b": factor * (level + a) + 4.0}))
    assert names_all(text, ["a", "b"])


def test_trend_and_calendar_year_are_the_same_direction() -> None:
    year = np.arange(2004.0, 2022.0)
    assert names_all(refusal(one_equation({"year": year, "trend": year - 2004.0})), ["year", "trend"])


def test_an_exact_multiple_without_an_intercept_does_not_speak_of_one() -> None:
    a, _ = draws(30, 2)
    assert "intercept" not in refusal(one_equation({"a": a, "b": 3.0 * a}, intercept=False))


@pytest.mark.parametrize("noise", [1e-2, 1e-4, 1e-6])
def test_regressors_that_nearly_move_together_pass(noise: float) -> None:
    a, b = draws(30, 2)
    near = a + noise * b
    assert np.corrcoef(a, near)[0, 1] > 0.9999
    check_design(one_equation({"a": a, "b": near}), source="x.csv")


def test_a_calendar_year_beside_its_square_passes() -> None:
    year = np.arange(2004.0, 2022.0)
    check_design(one_equation({"year": year, "square": year**2}), source="x.csv")


def test_a_tiny_spread_beside_a_high_level_passes() -> None:
    a, b, c = draws(30, 3)
    check_design(one_equation({"a": 1e9 + 1e-2 * a, "b": b, "c": c}), source="x.csv")


@pytest.mark.parametrize("n_periods", [2, 3, 4])
def test_fewer_periods_than_coefficients_pass(n_periods: int) -> None:
    a, b, c, d = draws(n_periods, 4)
    check_design(one_equation({"a": a, "b": b, "c": c, "d": d}), source="x.csv")


def test_as_many_periods_as_coefficients_still_tell_an_exact_combination() -> None:
    a, b = draws(4, 2)
    assert "“c”" in refusal(one_equation({"a": a, "b": b, "c": a - b}))


def test_the_response_among_its_own_regressors_is_refused_even_in_two_periods() -> None:
    y, a, b = draws(2, 3)
    text = refusal(one_equation({"a": a, "demand": y, "b": b}, y))
    assert "stands among its own regressors" in text and "“demand”" in text and "lag" in text


def test_a_rescaled_copy_of_the_response_is_recognised() -> None:
    y, a = draws(18, 2)
    text = refusal(one_equation({"a": a, "demand_in_litres": 1e6 * y + 12.0}, y))
    assert "“demand_in_litres” is the response “response” itself, rescaled" in text


def test_regressors_that_add_up_to_the_response_are_refused_with_another_message() -> None:
    a, b = draws(18, 2)
    text = refusal(one_equation({"homes": a, "firms": b}, a + b))
    assert "exactly" in text and "no error is left" in text and "“alder”" in text


def test_an_exact_fit_for_want_of_periods_passes() -> None:
    a, b = draws(3, 2)
    check_design(one_equation({"a": a, "b": b}, a + b), source="x.csv")


def test_a_constant_response_is_refused() -> None:
    a, _ = draws(18, 2)
    text = refusal(one_equation({"a": a}, np.full(18, 4.2)))
    assert "“response” is 4.2 in every period" in text


def test_a_single_period_is_refused() -> None:
    assert "only one period" in refusal(one_equation({"a": np.array([1.0])}, np.array([2.0])))


def test_a_single_equation_passes() -> None:
    a, _ = draws(10, 2)
    check_design(one_equation({"a": a}), source="x.csv")


def test_shares_that_sum_to_one_are_refused() -> None:
    y1, y2, *xs = draws(20, 5)
    responses = np.column_stack([y1, y2, 1.0 - y1 - y2])
    designs = [np.column_stack([np.ones(20), x]) for x in xs]
    text = refusal(make_system(designs, responses, ["a", "b", "c"]))
    assert names_all(text, ["a", "b", "c"]) and "identity" in text


def test_two_equations_with_one_response_are_refused() -> None:
    y1, y2, *xs = draws(20, 5)
    responses = np.column_stack([y1, y2, 100.0 * y1])
    designs = [np.column_stack([np.ones(20), x]) for x in xs]
    text = refusal(make_system(designs, responses, ["a", "b", "c"]))
    assert names_all(text, ["a", "c"]) and "“b”" not in text


def test_the_equation_at_fault_is_the_one_that_is_named() -> None:
    a, b, y1, y2 = draws(20, 4)
    ones = np.ones(20)
    designs = [np.column_stack([ones, a]), np.column_stack([ones, b, 2.0 * b])]
    text = refusal(make_system(designs, np.column_stack([y1, y2]), ["fine", "faulty"]))
    assert "equation “faulty”" in text and "“fine”" not in text


def test_an_intercept_alone_is_enough() -> None:
    (y,) = draws(12, 1)
    system = make_system([np.ones((12, 1))], y[:, None], ["alder"], [["intercept"]])
    check_design(system, source="x.csv")


def test_the_checks_cost_the_same_for_many_periods() -> None:
    # 200,000 periods: an exact total of three parts is still found through the factor of four chunks.
    a, b, c, y = draws(200_000, 4)
    text = refusal(one_equation({"a": a, "b": b, "c": c, "total": a + b + c}, y))
    assert "“total” is an exact combination of “a”, “b” and “c”" in text


@st.composite
def independent_columns(draw: st.DrawFn) -> tuple[dict[str, Array], np.random.Generator]:
    """Columns of very different levels and units, independent of each other; more periods than columns."""
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    n_columns = draw(st.integers(3, 6))
    n_periods = draw(st.integers(n_columns + 3, 40))
    levels = rng.choice([0.0, 1.0, 2000.0, 1e6], n_columns)
    units = 10.0 ** rng.integers(-2, 4, n_columns)
    values = levels + units * rng.standard_normal((n_periods, n_columns))
    return {f"x{k}": values[:, k] for k in range(n_columns)}, rng


@settings(max_examples=100, deadline=None)
@given(independent_columns(), st.booleans())
def test_independent_regressors_always_pass(
    drawn: tuple[dict[str, Array], np.random.Generator], intercept: bool
) -> None:
    columns, _ = drawn
    check_design(one_equation(columns, intercept=intercept), source="x.csv")


@settings(max_examples=100, deadline=None)
@given(independent_columns(), st.integers(1, 3))
def test_a_planted_combination_is_always_found_with_exactly_its_parts(
    drawn: tuple[dict[str, Array], np.random.Generator], n_parts: int
) -> None:
    columns, rng = drawn
    parts = sorted(rng.choice(sorted(columns), size=n_parts, replace=False))
    spreads = [np.std(columns[p]) for p in parts]
    # Weights of one to three in units of spread, so that no part vanishes beside the others.
    weights = rng.uniform(1.0, 3.0, n_parts) * rng.choice([-1.0, 1.0], n_parts) / spreads
    planted = sum(w * columns[p] for w, p in zip(weights, parts, strict=True))
    text = refusal(one_equation({**columns, "planted": planted}))
    assert "“planted” is an exact combination" in text
    assert names_all(text, parts)
    assert not any(f"“{other}”" in text for other in columns if other not in parts)
