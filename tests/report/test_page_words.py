from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from contents import make_content

from bayes_sys.report import words
from bayes_sys.report.content import RunContent


def pairs(*rows):
    return pd.DataFrame(rows, columns=["equation_a", "equation_b", "mean", "q5", "q95"])


def coefficients(*rows):
    columns = ["equation", "regressor", "mean", "q5", "q95", "shrinkage", "moved_se"]
    return pd.DataFrame(rows, columns=columns)


def test_the_strongest_correlation_is_named_with_its_interval():
    text = words.shared_shocks(pairs(("a", "b", 0.2, -0.2, 0.6), ("a", "c", -0.7, -0.9, -0.4)))
    assert text == (
        "1 of the 2 pairs of equations has correlated shocks of clear sign. The strongest correlation is "
        "between a and c: mean −0.70, between −0.90 and −0.40 with 90% probability."
    )


def test_wide_intervals_are_called_unclear_whatever_their_means():
    text = words.shared_shocks(pairs(("a", "b", 0.5, -0.1, 0.8), ("a", "c", 0.4, -0.2, 0.8)))
    assert text.startswith("The data do not show clearly") and "none of the 2" in text


def test_all_clear_and_one_pair_have_words_of_their_own():
    both = words.shared_shocks(pairs(("a", "b", 0.5, 0.1, 0.8), ("a", "c", 0.4, 0.2, 0.8)))
    assert both.startswith("All 2 pairs")
    assert words.shared_shocks(pairs(("a", "b", 0.3, -0.1, 0.7))).endswith("the data leave its sign open.")
    assert words.shared_shocks(pairs(("a", "b", 0.3, 0.1, 0.7))).endswith("its sign is clear.")


def test_signs_are_counted_by_regressor_and_the_constant_is_left_out():
    table = coefficients(
        ("a", "intercept", 5.0, 4.0, 6.0, 0.1, 0.0),
        ("a", "tariff", -0.4, -0.6, -0.2, 0.1, 0.0),
        ("b", "tariff", -0.2, -0.3, -0.1, 0.1, 0.0),
        ("a", "heat", 0.1, -0.1, 0.3, 0.1, 0.0),
        ("b", "heat", 0.2, 0.1, 0.3, 0.1, 0.0),
        ("a", "rain", 0.1, -0.1, 0.3, 0.1, 0.0),
    )
    text = words.signs(table)
    assert "tariff is clearly negative in all 2 equations (means −0.400 to −0.200)" in text
    assert "heat is clearly positive in 1 of 2 equations (mean 0.200)" in text
    assert "rain is of open sign in a (−0.100 to 0.300)" in text
    assert "intercept" not in text
    assert text.index("tariff") < text.index("heat") < text.index("rain"), "the clearest first"


def test_the_range_of_the_means_is_that_of_the_equations_spoken_of():
    rows = [("a", 1.2, 0.9, 1.5), ("b", 0.8, 0.4, 1.2), ("c", 0.1, -0.4, 0.6), ("d", -0.7, -0.9, -0.5)]
    table = coefficients(*((e, "price", *values, 0.1, 0.0) for e, *values in rows))
    assert words.signs(table) == (
        "Signs at 90%: price is clearly positive in 2 (means 0.800 to 1.20) and negative in 1 (mean −0.700) of "
        "4 equations."
    )
    assert "positive in 2 of 3 equations (means 0.800 to 1.20)" in words.signs(table[:3])


def crowd(n_equations, n_periods, n_coefficients):
    return pd.DataFrame(
        {
            "equation": np.repeat([f"u{i}" for i in range(n_equations)], n_coefficients),
            "n": n_periods,
        }
    )


def test_few_free_periods_are_said_to_leave_the_errors_to_the_prior():
    assert words.thin_errors(crowd(6, 10, 6)).startswith(
        "The equation with the most coefficients leaves 4 free periods against 6 equations, so the errors’ scales "
        "and correlations are decided in good part by the prior"
    )
    assert "in part by the prior" in words.thin_errors(crowd(4, 16, 5))
    assert "leaves no free period" in words.thin_errors(crowd(2, 4, 5))
    one = words.thin_errors(crowd(1, 5, 3))
    assert "the errors’ scale is" in one and "correlation" not in one and "against" not in one
    assert words.thin_errors(crowd(4, 17, 5)) == "", "three free periods an equation are enough"


def test_one_equation_is_held_against_least_squares_and_nothing_is_said_of_correlations():
    table = coefficients(
        ("only", "x", 0.0, -1.0, 1.0, 0.01, 0.01), ("only", "z", 0.0, -1.0, 1.0, 0.02, -0.04)
    )
    assert words.against_classics(table, RunContent()) == (
        "Every coefficient lies within 0.1 classical standard errors of the least-squares estimate."
    )
    assert words.who_decides(table).startswith("Given the errors’ scales, the data and not the prior")


def test_for_pooled_coefficients_the_prior_is_the_mean_they_share():
    table = pd.DataFrame({"equation": ["a", "b"], "regressor": ["x", "x"], "shrinkage": [0.7, 0.05]})
    text = words.who_decides(table, pools=True)
    assert "the mean they share, has the larger say on a.x" in text
    assert "own data" in text


def test_who_decides_is_read_off_the_shares():
    share = [0.05, 0.3, 0.7, 0.9]
    table = coefficients(*((f"u{i}", "x", 0.0, -1.0, 1.0, s, 0.0) for i, s in enumerate(share)))
    text = words.who_decides(table)
    assert text.startswith("Given the errors’ scales and correlations, the data decide 1 of 4 coefficients")
    assert "the prior has the larger say on u3.x and u2.x" in text
    assert words.who_decides(table.assign(shrinkage=[0.01, 0.02, 0.03, 0.08])).endswith("is at most 8%.")
    assert words.who_decides(table.assign(shrinkage=0.001)).endswith("is below 1%.")
    assert words.who_decides(table.assign(shrinkage=np.nan)) == ""
    assert "the data decide none of 4 coefficients" in words.who_decides(table.assign(shrinkage=0.3))


def test_distance_from_the_classics_counts_standard_errors_or_says_why_not():
    table = coefficients(("a", "x", 0.0, -1.0, 1.0, 0.1, -2.3), ("b", "x", 0.0, -1.0, 1.0, 0.1, np.nan))
    assert words.against_classics(table, RunContent()) == (
        "1 of 2 coefficients lies more than one classical standard error from the classical joint estimate "
        "(FGLS); the furthest is a.x, by 2.3."
    )
    empty = table.assign(moved_se=np.nan)
    content = RunContent(manifest={"reasons": {"fgls": "Too few periods."}})
    assert words.against_classics(empty, content).endswith("to compare with. Too few periods.")


@pytest.mark.parametrize(
    ("study", "form"),
    [
        ('[every_equation]\nresponse = "y"', "y is explained by price and heat, and a constant"),
        ('[equation.north]\nresponse = "z"', "z is explained by price and heat, and a constant"),
        (
            '[every_equation]\nresponse = "{equation}_y"',
            "north_y is explained by price and heat, and a constant",
        ),
        ("not = = toml", "the response is explained by price and heat, and a constant"),
    ],
)
def test_equations_are_said_in_words_from_study_and_table(study, form):
    content = replace(make_content(("north",), n_draws=4), study=study)
    assert words.equations_in_words(content) == [("north", form)]


def test_equations_of_one_form_are_said_once():
    assert [names for names, _ in words.equations_in_words(make_content(n_draws=4))] == [
        "north, south and east"
    ]


def test_a_failed_gate_forbids_the_numbers():
    assert "do not use" in words.gate_sentence({"passed": False})
    passed = {"passed": True, "rhat_max": 1.002, "ess_bulk_min": 2000, "ess_tail_min": 1500, "divergences": 0}
    assert "R-hat at most 1.002, at least 1,500 effective draws" in words.gate_sentence(passed)
    assert words.gate_sentence({}) == ""
