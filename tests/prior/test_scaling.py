"""Spreads and units are what they are said to be, whatever the location and scale of the data."""

from __future__ import annotations

import numpy as np
import pytest
from helpers import make_system
from numpy.typing import NDArray

from bayes_sys.errors import CardError
from bayes_sys.prior.scaling import equation_units, plain_deviation, spread
from bayes_sys.study.periods import Periods
from bayes_sys.system.system import System

Array = NDArray[np.float64]


def one(columns: list[Array], response: Array, periods: Periods | None = None) -> System:
    """Return a system of one equation with an intercept."""
    design = np.column_stack([np.ones(len(response)), *columns])
    names = ["intercept", *(f"x{k}" for k in range(len(columns)))]
    return make_system([design], response[:, None], ["alder"], [names], periods=periods)


def test_a_spread_is_the_standard_deviation_about_the_least_squares_line() -> None:
    rng = np.random.default_rng(1)
    values, time = rng.standard_normal(23).cumsum(), np.arange(23.0)
    line = np.polynomial.Polynomial.fit(time, values, 1)(time)
    assert spread(values, time) == pytest.approx(np.std(values - line, ddof=1), rel=1e-12)


def test_a_spread_by_hand() -> None:
    # 1, 2, 1 about its flat line 4/3: residuals -1/3, 2/3, -1/3, sum of squares 2/3, over n - 1 = 2.
    assert spread(np.array([1.0, 2.0, 1.0]), np.arange(3.0)) == pytest.approx(np.sqrt(1 / 3), rel=1e-14)


def test_a_trend_added_changes_no_spread() -> None:
    values, time = np.random.default_rng(2).standard_normal(15), np.arange(2004.0, 2019.0)
    assert spread(values + 40.0 - 3.0 * time, time) == pytest.approx(spread(values, time), rel=1e-10)


def test_the_trend_is_taken_along_the_calendar_not_along_the_rows() -> None:
    time = np.array([0.0, 1.0, 2.0, 7.0, 8.0])
    assert spread(3.0 * time + 1.0, time) == 0.0
    assert spread(3.0 * time + 1.0, np.arange(5.0)) > 0.0


@pytest.mark.parametrize("values", [np.full(9, 1e6), 1e6 + 1e-3 * np.arange(9.0), 2004.0 + np.arange(9.0)])
def test_constants_and_trends_have_no_spread_however_large_their_level(values: Array) -> None:
    assert spread(values, np.arange(9.0)) == 0.0


def test_a_trend_that_was_summed_up_step_by_step_has_no_spread_in_spite_of_rounding() -> None:
    assert spread(np.full(2000, 0.1).cumsum(), np.arange(2000.0)) == 0.0


def test_a_constant_has_no_deviation_in_spite_of_rounding() -> None:
    assert plain_deviation(np.full(7, 0.1) * 3.0) == 0.0
    assert plain_deviation(np.array([5.0])) == 0.0


def test_slope_units_are_response_spread_over_regressor_spread() -> None:
    rng = np.random.default_rng(3)
    x, y, time = rng.standard_normal(20) * 7.0, rng.standard_normal(20) * 0.1 + 12.0, np.arange(20.0)
    (units,) = equation_units(one([x], y))
    assert units.response == pytest.approx(spread(y, time))
    np.testing.assert_allclose(units.slopes, [spread(y, time), spread(y, time) / spread(x, time)], rtol=1e-13)
    np.testing.assert_allclose([units.centre, *units.means], [y.mean(), 0.0, x.mean()], rtol=1e-13)


def test_zeros_and_ones_count_as_spread_one() -> None:
    rng = np.random.default_rng(4)
    step = (np.arange(20) >= 12).astype(float)
    (units,) = equation_units(one([step, 2 * step], y := rng.standard_normal(20)))
    size = spread(y, np.arange(20.0))
    assert units.slopes[1] == pytest.approx(size)
    assert units.slopes[2] == pytest.approx(size / spread(2 * step, np.arange(20.0))), "0 and 2 are no dummy"


def test_a_trend_column_is_measured_with_the_trend_left_in_on_both_sides() -> None:
    trend = np.arange(18.0)
    y = 0.03 * trend + 0.02 * np.random.default_rng(5).standard_normal(18)
    (units,) = equation_units(one([trend], y))
    assert units.slopes[1] == pytest.approx(np.std(y, ddof=1) / np.std(trend, ddof=1), rel=1e-12)
    assert 0.03 / units.slopes[1] == pytest.approx(1.0, abs=0.05), "a trend that is the whole response is 1"


def test_a_response_that_is_a_trend_is_measured_by_its_standard_deviation() -> None:
    x = np.random.default_rng(6).standard_normal(9)
    (units,) = equation_units(one([x], 5.0 + np.arange(9.0)))
    assert units.response == pytest.approx(np.std(np.arange(9.0), ddof=1))


def test_two_periods_are_measured_by_their_standard_deviation() -> None:
    (units,) = equation_units(one([np.array([3.0, 7.0])], np.array([1.0, 2.0])))
    assert units.response == pytest.approx(np.sqrt(0.5))
    assert units.slopes[1] == pytest.approx(np.sqrt(0.5) / np.sqrt(8.0))


def test_a_regressor_that_never_moves_is_measured_by_its_size() -> None:
    y = np.random.default_rng(7).standard_normal(9)
    system = make_system([np.full((9, 1), -5.0)], y[:, None], ["alder"], [["level"]])
    assert equation_units(system)[0].slopes[0] == pytest.approx(spread(y, np.arange(9.0)) / 5.0)


def test_an_equation_without_intercept_has_the_same_slope_units() -> None:
    rng = np.random.default_rng(8)
    x, y = rng.standard_normal(12), rng.standard_normal(12)
    without = make_system([x[:, None]], y[:, None], ["alder"], [["x0"]])
    assert equation_units(without)[0].slopes[0] == equation_units(one([x], y))[0].slopes[1]


def test_units_come_from_the_periods_in_use() -> None:
    rng = np.random.default_rng(9)
    x, y = rng.standard_normal(12), rng.standard_normal(12)
    gaps = np.where(np.arange(12) == 4, np.nan, y)
    periods = Periods("integer", np.delete(np.arange(12), 4), tuple(str(i) for i in range(12) if i != 4))
    (short,) = equation_units(one([np.delete(x, 4)], np.delete(y, 4), periods))
    design = np.column_stack([np.ones(12), x])
    whole = make_system([design], y[:, None], ["alder"], [["intercept", "x0"]])
    (found,) = equation_units(
        System(whole.title, whole.equations, whole.periods, gaps[:, None], whole.factor)
    )
    np.testing.assert_allclose(found.slopes, short.slopes, rtol=1e-13)
    np.testing.assert_allclose(found.means, short.means, rtol=1e-13)


@pytest.mark.parametrize("periods", [1, 8])
def test_a_response_that_never_moves_is_refused(periods: int) -> None:
    x = np.random.default_rng(10).standard_normal(periods)
    expected = rf"“response” of “alder” does not vary over the {periods} period\(s\).*scaled = false"
    with pytest.raises(CardError, match=expected):
        equation_units(one([x], np.full(periods, 3.3)))
