from __future__ import annotations

import json
import time

import numpy as np
import pytest
import scipy.stats
from helpers import make_system

from bayes_sys.classical.check import Check, addressed, for_people, p_value
from bayes_sys.classical.estimators import classical_estimates
from bayes_sys.classical.examination import examination_rows, examine
from bayes_sys.study.periods import Periods

VERDICTS = {"fine", "note", "warning"}


def system_of(seed: int, counts: tuple[int, ...], n_periods: int, *, shared: float = 1.0, periods=None):
    rng = np.random.default_rng(seed)
    designs = [np.column_stack([np.ones(n_periods), rng.normal(size=(n_periods, p - 1))]) for p in counts]
    shocks = rng.normal(size=(n_periods, len(counts))) + shared * rng.normal(size=(n_periods, 1))
    responses = np.column_stack([d.sum(axis=1) for d in designs]) + shocks
    return make_system(designs, responses, periods=periods)


def checks_of(system, **options) -> dict[tuple[str, str], Check]:
    found = examine(system, classical_estimates(system), **options)
    keyed = {(c.name, c.equation): c for c in found}
    assert len(keyed) == len(found)
    return keyed


def test_every_check_has_a_verdict_and_a_sentence_and_goes_into_json():
    for system in (
        system_of(1, (3, 4), 30),
        system_of(2, (4,) * 5, 18),
        system_of(3, (4, 3), 4),
        system_of(4, (2,), 20),
    ):
        checks = examine(system, classical_estimates(system), simulations=200)
        for check in checks:
            assert check.verdict in VERDICTS
            assert check.sentence.endswith(".")
            assert check.equation in {"", *system.names}
        rows = json.loads(json.dumps(examination_rows(checks), allow_nan=False))
        assert list(rows[0]) == ["name", "equation", "figure", "threshold", "verdict", "sentence"]


def test_a_figure_that_is_not_finite_becomes_empty():
    row = examination_rows([Check("x", "", float("nan"), float("inf"), "fine", "s.")])[0]
    assert row["figure"] is None
    assert row["threshold"] is None


def test_fewer_periods_than_coefficients_is_a_warning_and_no_error():
    checks = checks_of(system_of(5, (2, 6), 5))
    assert checks["periods", "b"].verdict == "warning"
    assert checks["periods", "a"].verdict == "note"
    assert checks["likelihood_maximum", ""].verdict == "note"
    assert "“b”" in checks["likelihood_maximum", ""].sentence
    assert checks["shared_shocks_lm", ""].figure is None


def test_no_maximum_of_the_likelihood_says_that_the_posterior_exists():
    check = checks_of(system_of(6, (4,) * 5, 18), simulations=200)["likelihood_maximum", ""]
    assert (check.figure, check.threshold, check.verdict) == (21.0, 18.0, "note")
    assert "no maximum" in check.sentence
    assert "posterior exists" in check.sentence


def test_the_ratio_is_left_out_with_the_reason_where_there_is_no_maximum():
    checks = checks_of(system_of(6, (4,) * 5, 18), simulations=200)
    assert checks["shared_shocks_lr", ""].figure is None
    assert "no maximum" in checks["shared_shocks_lr", ""].sentence
    assert ("shared_shocks_lr_simulated", "") not in checks
    assert checks["shared_shocks_lm_simulated", ""].figure is not None


def test_a_singular_residual_covariance_is_a_warning():
    rng = np.random.default_rng(7)
    common = np.column_stack([np.ones(10), rng.normal(size=(10, 5))])
    check = checks_of(make_system([common] * 5, rng.normal(size=(10, 5))))["equations_and_periods", ""]
    assert (check.figure, check.threshold, check.verdict) == (5.0, 4.0, "warning")


def test_many_equations_for_the_free_periods_are_noted():
    assert checks_of(system_of(7, (3, 3), 30), simulations=0)["equations_and_periods", ""].verdict == "fine"
    crowded = checks_of(system_of(7, (3,) * 6, 18), simulations=0)["equations_and_periods", ""]
    assert crowded.verdict == "note"
    assert crowded.sentence.startswith("6 equations with 15 free periods each")


def test_shared_shocks_are_found_and_their_absence_too():
    names = (
        "shared_shocks_lm",
        "shared_shocks_lm_simulated",
        "shared_shocks_lr",
        "shared_shocks_lr_simulated",
    )
    shared = checks_of(system_of(8, (3, 3), 40, shared=2.0))
    alone = checks_of(system_of(10, (3, 3), 40, shared=0.0))
    for name in names:
        assert shared[name, ""].figure < 0.01
        assert shared[name, ""].verdict == "fine"
        assert alone[name, ""].figure > 0.05
        assert alone[name, ""].verdict == "note"


def test_the_same_seed_gives_the_same_examination():
    system = system_of(9, (3, 3), 20)
    benchmark = classical_estimates(system)
    assert examine(system, benchmark, seed=3) == examine(system, benchmark, seed=3)
    without = {c.name for c in examine(system, benchmark, simulations=0)}
    assert not any(name.endswith("_simulated") for name in without)


def test_identical_regressors_are_said_to_give_least_squares():
    rng = np.random.default_rng(11)
    common = np.column_stack([np.ones(20), rng.normal(size=20)])
    check = checks_of(make_system([common] * 3, rng.normal(size=(20, 3))))["identical_regressors", ""]
    assert (check.figure, check.verdict) == (3.0, "note")
    assert "equals least squares" in check.sentence


def test_regressors_that_span_the_same_space_count_as_identical():
    rng = np.random.default_rng(12)
    x = rng.normal(size=20)
    designs = [np.column_stack([np.ones(20), x]), np.column_stack([np.ones(20), 3.0 - 2.0 * x])]
    check = checks_of(make_system(designs, rng.normal(size=(20, 2))))["identical_regressors", ""]
    assert check.figure == 2.0


def test_the_equation_contained_in_all_others_is_named():
    rng = np.random.default_rng(13)
    large = np.column_stack([np.ones(20), rng.normal(size=(20, 3))])
    check = checks_of(make_system([large, large[:, :2]], rng.normal(size=(20, 2))))[
        "identical_regressors", ""
    ]
    assert check.figure == 1.0
    assert "“b”" in check.sentence
    assert checks_of(system_of(13, (2, 3), 20))["identical_regressors", ""].verdict == "fine"


def test_nearly_the_same_regressors_are_not_identical():
    rng = np.random.default_rng(13)
    x = rng.normal(size=30)
    designs = [np.column_stack([np.ones(30), x + e]) for e in (0.0, 0.01 * rng.normal(size=30))]
    check = checks_of(make_system(designs, rng.normal(size=(30, 2))), simulations=0)[
        "identical_regressors", ""
    ]
    assert (check.figure, check.verdict) == (0.0, "fine")


@pytest.mark.parametrize("rho", [0.6, 0.9])
def test_the_gain_with_orthogonal_regressors_is_the_bound(rho):
    # Zellner (1962): orthogonal regressors attain the ratio sqrt(1 - rho²) of standard errors.
    rng = np.random.default_rng(14)
    columns, _ = np.linalg.qr(rng.normal(size=(30, 6)))
    errors = columns[:, 4:] @ np.linalg.cholesky(np.array([[1.0, rho], [rho, 1.0]])).T
    checks = checks_of(make_system([columns[:, :2], columns[:, 2:4]], errors), simulations=0)
    expected = 1.0 - np.sqrt(1.0 - rho**2)
    assert checks["joint_gain", ""].figure == pytest.approx(expected, rel=1e-9)
    assert checks["joint_gain_bound", ""].figure == pytest.approx(expected, rel=1e-9)


def test_a_collinear_regressor_is_named():
    rng = np.random.default_rng(15)
    x = rng.normal(size=30)
    design = np.column_stack([np.ones(30), rng.normal(size=30), x, x + 1e-3 * rng.normal(size=30)])
    system = make_system([design], rng.normal(size=(30, 1)), regressor_names=[("intercept", "u", "v", "w")])
    checks = checks_of(system)
    assert checks["variance_inflation", "a"].verdict == "warning"
    assert (
        "“v”" in checks["variance_inflation", "a"].sentence
        or "“w”" in checks["variance_inflation", "a"].sentence
    )
    assert checks["condition_number", "a"].verdict == "note"


def test_an_exact_combination_of_regressors_is_a_warning():
    rng = np.random.default_rng(15)
    x = rng.normal(size=(20, 2))
    design = np.column_stack([np.ones(20), x, 1.0 + x[:, 0] - x[:, 1]])
    checks = checks_of(make_system([design, x], rng.normal(size=(20, 2))))
    assert checks["condition_number", "a"].verdict == "warning"
    assert checks["condition_number", "a"].figure is None
    assert "cannot tell apart" in checks["likelihood_maximum", ""].sentence


@pytest.mark.parametrize("unit", [1e-150, 1e150])
def test_units_of_the_response_do_not_change_the_examination(unit):
    system = system_of(28, (3, 3), 30)
    other = make_system([e.design for e in system.equations], system.responses * unit)
    found = checks_of(other, simulations=200)
    for key, check in checks_of(system, simulations=200).items():
        assert found[key].verdict == check.verdict
        assert found[key].figure == pytest.approx(check.figure, rel=1e-6)


def test_an_equation_without_any_regressor_is_examined_too():
    rng = np.random.default_rng(29)
    design = np.column_stack([np.ones(20), rng.normal(size=20)])
    checks = checks_of(make_system([np.empty((20, 0)), design], rng.normal(size=(20, 2))), simulations=200)
    assert checks["breusch_godfrey", "a"].figure is not None
    assert checks["likelihood_maximum", ""].verdict == "fine"


def test_a_large_level_is_noted_but_not_held_against_the_slopes():
    years = np.arange(2004.0, 2024.0)
    system = make_system(
        [np.column_stack([np.ones(20), years])], np.random.default_rng(1).normal(size=(20, 1))
    )
    checks = checks_of(system)
    assert checks["condition_number", "a"].verdict == "note"
    assert checks["variance_inflation", "a"].verdict == "fine"
    assert checks["variance_inflation", "a"].figure == pytest.approx(1.0)


def test_an_exact_fit_is_a_warning_and_ends_the_residual_checks():
    rng = np.random.default_rng(16)
    design = np.column_stack([np.ones(20), rng.normal(size=(20, 2))])
    responses = np.column_stack([design @ [1.0, 2.0, 3.0], rng.normal(size=20)])
    checks = checks_of(make_system([design, design[:, :2]], responses))
    assert checks["exact_fit", "a"].verdict == "warning"
    assert ("breusch_godfrey", "a") not in checks
    assert ("breusch_godfrey", "b") in checks


def test_a_response_that_never_varies_is_a_warning():
    rng = np.random.default_rng(17)
    design = np.column_stack([np.ones(20), rng.normal(size=20)])
    checks = checks_of(
        make_system([design, design], np.column_stack([np.full(20, 3.0), rng.normal(size=20)]))
    )
    assert checks["exact_fit", "a"].verdict == "warning"


def test_an_outlying_period_is_named_by_its_label():
    system = system_of(18, (2,), 24)
    responses = system.responses.copy()
    responses[9, 0] += 30.0
    labels = tuple(f"{2000 + t // 4}-Q{t % 4 + 1}" for t in range(24))
    periods = Periods("quarter", np.arange(8000, 8024), labels)
    system = make_system([e.design for e in system.equations], responses, periods=periods)
    check = checks_of(system)["outlying_period", "a"]
    assert check.verdict == "note"
    # Bonferroni over 24 periods, two-sided 5%, Student t with 24 - 2 - 1 degrees of freedom.
    assert check.threshold == pytest.approx(scipy.stats.t.isf(0.05 / 48, 21))
    assert "2002-Q2" in check.sentence


def test_a_far_regressor_value_is_named_by_its_period():
    rng = np.random.default_rng(19)
    x = rng.normal(size=25)
    x[3] = 40.0
    system = make_system([np.column_stack([np.ones(25), x])], rng.normal(size=(25, 1)))
    check = checks_of(system)["leverage", "a"]
    assert check.verdict == "note"
    assert check.sentence.startswith("The regressors of 4 ")


def test_a_pulse_is_said_to_be_fitted_exactly():
    rng = np.random.default_rng(20)
    pulse = np.zeros(20)
    pulse[11] = 1.0
    system = make_system([np.column_stack([np.ones(20), pulse])], rng.normal(size=(20, 1)))
    check = checks_of(system)["leverage", "a"]
    assert check.verdict == "note"
    assert "12 has a coefficient to itself" in check.sentence


@pytest.mark.parametrize(("kind", "lag"), [("year", 1), ("quarter", 4), ("month", 12)])
def test_errors_that_carry_over_are_found_at_the_lag_of_the_calendar(kind, lag):
    rng = np.random.default_rng(21)
    n = 80
    errors = rng.normal(size=n)
    for t in range(lag, n):
        errors[t] += 0.8 * errors[t - lag]
    periods = Periods(kind, np.arange(n), tuple(str(t) for t in range(n)))
    system = make_system(
        [np.column_stack([np.ones(n), rng.normal(size=n)])], errors[:, None], periods=periods
    )
    check = checks_of(system)["breusch_godfrey", "a"]
    assert check.verdict == "warning"
    assert check.figure < 0.01


def test_the_own_lag_as_regressor_sends_the_reader_to_the_other_test():
    rng = np.random.default_rng(22)
    y = np.cumsum(rng.normal(size=31))
    system = make_system([np.column_stack([np.ones(30), y[:-1]])], y[1:, None])
    assert "Breusch-Godfrey" in checks_of(system)["durbin_watson", "a"].sentence


def test_a_size_of_errors_that_follows_a_regressor_is_found():
    rng = np.random.default_rng(23)
    x = rng.uniform(0.1, 3.0, size=200)
    system = make_system([np.column_stack([np.ones(200), x])], (rng.normal(size=200) * x)[:, None])
    assert checks_of(system)["heteroskedasticity", "a"].verdict == "warning"


def test_one_equation_has_no_checks_between_equations():
    names = {name for name, equation in checks_of(system_of(24, (3,), 20)) if not equation}
    assert names == {"likelihood_maximum"}


def test_a_large_system_says_why_the_ratio_is_not_simulated():
    system = system_of(25, (7,) * 20, 160)
    checks = checks_of(system)
    assert checks["shared_shocks_lr_simulated", ""].figure is None
    assert "too long" in checks["shared_shocks_lr_simulated", ""].sentence
    assert checks["shared_shocks_lm_simulated", ""].figure is not None


def test_the_examination_is_quick_at_ordinary_sizes():
    # Measured 0.04 s and 0.9 s on a busy machine; the bound only catches a change of order.
    for counts, n_periods in (((4,) * 5, 18), ((4,) * 6, 40)):
        system = system_of(26, counts, n_periods)
        benchmark = classical_estimates(system)
        start = time.perf_counter()
        examine(system, benchmark)
        assert time.perf_counter() - start < 10.0


def test_people_read_each_test_of_shared_shocks_once_with_both_p_values():
    checks = checks_of(system_of(10, (3, 3), 40, shared=0.3), simulations=200)
    rows = examination_rows(checks.values())
    shown = {row["name"]: row for row in for_people(rows)}
    assert {row["name"] for row in rows} - shown.keys() == {"shared_shocks_lm", "shared_shocks_lr"}
    for name in ("shared_shocks_lm", "shared_shocks_lr"):
        both, sentence = checks[f"{name}_simulated", ""], shown[f"{name}_simulated"]["sentence"]
        assert p_value(both.figure) in sentence
        assert f"{p_value(checks[name, ''].figure)} from the chi-square distribution" in sentence


def test_a_test_that_could_not_be_simulated_is_shown_by_its_approximation():
    rows = [
        {"name": "shared_shocks_lr", "equation": "", "figure": 0.2},
        {"name": "shared_shocks_lr_simulated", "equation": "", "figure": None},
    ]
    assert for_people(rows) == rows


def test_a_sentence_is_said_once_with_the_equations_it_speaks_of():
    rows = [{"equation": e, "sentence": s} for e, s in (("u1", "A."), ("", "B."), ("u2", "A."), ("u2", "C."))]
    assert addressed(rows) == ["u1, u2: A.", "B.", "u2: C."]


def test_no_check_advises_what_this_version_refuses():
    rng = np.random.default_rng(3)
    carried = np.cumsum(rng.normal(size=(60, 2)), axis=0)
    sentence = checks_of(make_system([np.ones((60, 1))] * 2, carried))["breusch_godfrey", "a"].sentence
    assert "carry over" in sentence and "errors with autocorrelation" not in sentence
