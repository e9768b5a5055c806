from __future__ import annotations

import numpy as np
import pytest
from helpers import integer_periods, make_system
from numpy.testing import assert_allclose
from trees import make_tree

from bayes_sys.posterior import checks
from bayes_sys.study.periods import Periods


def noise(n_periods, seed, n_equations=1):
    return np.random.default_rng(seed).normal(size=(n_periods, n_equations))


def checked(errors, *, scale=1.0, seed=7, periods=None, prior_sd=10.0):
    n_periods, n_equations = errors.shape
    design = np.column_stack([np.ones(n_periods), np.linspace(-1, 1, n_periods)])
    system = make_system([design] * n_equations, design @ [[2.0], [1.0]] + errors, periods=periods)
    tree = make_tree(system, scales=np.full(n_equations, scale), prior_sd=prior_sd, wobble=0.05)
    return checks.predictive_checks(tree, system, seed)


def figure(table, statistic, equation="a"):
    return table.set_index(["equation", "statistic"]).loc[(equation, statistic)]


def test_data_from_the_model_itself_are_in_line():
    table = checked(noise(60, 3, 2))
    assert list(table) == checks.COLUMNS
    assert len(table) == 8 and (table["verdict"] == "in line").all()
    assert table["tail_probability"].between(0.025, 0.975).all()
    assert (table["q5"] <= table["q50"]).all() and (table["q50"] <= table["q95"]).all()


def test_errors_that_carry_over_are_found():
    errors = noise(60, 4)
    for t in range(1, 60):
        errors[t] += 0.8 * errors[t - 1]
    found = figure(checked(errors, scale=errors.std()), "residual autocorrelation")
    assert found["verdict"] == "surprising" and found["tail_probability"] < 0.01 and found["observed"] > 0.4
    assert "carry over" in found["sentence"]


def test_errors_that_swing_to_and_fro_are_found():
    errors = noise(60, 4) * 0.3 + np.where(np.arange(60) % 2, 1.0, -1.0)[:, None]
    found = figure(checked(errors), "residual autocorrelation")
    assert found["verdict"] == "surprising" and found["tail_probability"] > 0.99


def test_one_wild_period_is_found():
    errors = noise(60, 5)
    errors[20] = 8.0
    found = figure(checked(errors, scale=1.2), "largest residual")
    assert found["verdict"] == "surprising" and "most extreme period" in found["sentence"]


def test_a_tame_largest_residual_is_no_reason_to_worry():
    errors = np.where(np.random.default_rng(1).random((60, 1)) < 0.5, 0.7, -0.7)
    found = figure(checked(errors, scale=0.7), "largest residual")
    assert found["tail_probability"] > 0.975 and found["verdict"] == "in line"


@pytest.mark.parametrize(("scale", "words"), [(3.0, "closer to the fit"), (0.4, "further from the fit")])
def test_an_error_scale_held_away_from_the_data_is_found(scale, words):
    found = figure(checked(noise(60, 6), scale=scale), "residual spread")
    assert found["verdict"] == "surprising" and words in found["sentence"]


def test_a_band_too_narrow_or_too_wide_is_found():
    narrow = figure(checked(noise(60, 6), scale=0.4), "share inside the 90% band")
    wide = figure(checked(noise(60, 6), scale=3.0), "share inside the 90% band")
    assert narrow["observed"] < 0.75 and "Fewer points" in narrow["sentence"]
    assert wide["observed"] == 1.0 and "More points" in wide["sentence"]


def test_replicated_outcomes_fall_inside_the_band_nine_times_in_ten():
    found = figure(checked(noise(400, 8)), "share inside the 90% band")
    # 400 outcomes: one replicate's share has a standard error of 0.015
    assert_allclose(found["q50"], 0.9, atol=0.01)
    # and the scale itself moves by 5% from draw to draw, which moves the share by 2 phi(z) z 5%
    moves = 2 * np.exp(-(1.645**2) / 2) / np.sqrt(2 * np.pi) * 1.645 * 0.05
    assert_allclose(found["q95"] - found["q5"], 2 * 1.645 * np.hypot(0.015, moves), rtol=0.1)


def test_autocorrelation_of_white_noise_spreads_as_one_over_the_root_of_the_periods():
    found = figure(checked(noise(400, 8)), "residual autocorrelation")
    # Bartlett 1946: standard error 1 / sqrt(T) under independence
    assert_allclose((found["q95"] - found["q5"]) / (2 * 1.645), 1 / 20, rtol=0.1)


def test_a_gap_breaks_the_pair_of_neighbours():
    assert list(checks.neighbours(np.array([1, 2, 3, 6, 7, 9]))) == [1, 1, 0, 1, 0]
    errors = np.array([[1.0, 1.0, 1.0, -50.0, -50.0, 7.0]])
    pairs = checks.neighbours(np.array([1, 2, 3, 6, 7, 9]))
    assert_allclose(checks.autocorrelation(errors, (errors, errors), pairs), 1.0)


def test_a_series_without_neighbours_has_no_autocorrelation_and_says_so():
    ordinals = np.arange(0, 40, 2)
    table = checked(noise(20, 2), periods=Periods("integer", ordinals, tuple(map(str, ordinals))))
    found = figure(table, "residual autocorrelation")
    assert np.isnan(found["observed"]) and found["verdict"] == "not available"
    assert "too short" in found["sentence"]


def test_same_seed_gives_the_same_figures_and_another_seed_others():
    errors = noise(30, 2)
    one, same, other = (checked(errors, seed=s) for s in (1, 1, 2))
    assert one.equals(same)
    assert not one["q95"].equals(other["q95"])


def test_periods_without_an_outcome_are_left_out():
    errors = noise(40, 9)
    errors[5] = np.nan
    design = np.ones((40, 1))
    full = np.delete(errors, 5, axis=0)
    ordinals = np.delete(np.arange(1, 41), 5)
    short = make_system(
        [np.ones((39, 1))], full, periods=Periods("integer", ordinals, tuple(map(str, ordinals)))
    )
    tree = make_tree(short)
    holed = make_system([design], errors, periods=integer_periods(40))
    one, other = checks.predictive_checks(tree, holed, 3), checks.predictive_checks(tree, short, 3)
    assert_allclose(one["observed"], other["observed"])
    assert_allclose(one["tail_probability"], other["tail_probability"])


def test_long_series_are_cut_into_pieces_without_changing_what_is_found(monkeypatch):
    whole = checked(noise(50, 11))
    monkeypatch.setattr(checks, "CHUNK_CELLS", 120)
    pieces = checked(noise(50, 11))
    assert_allclose(whole["observed"], pieces["observed"])
