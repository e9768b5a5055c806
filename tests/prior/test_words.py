"""The sentences say what the card says, with numbers that hold."""

from __future__ import annotations

import tomllib

import numpy as np
import pytest
from helpers import make_system

from bayes_sys.prior.cards import PriorCard, build_card, read_card
from bayes_sys.prior.effective import effective_card
from bayes_sys.prior.lines import Statement
from bayes_sys.prior.resolve import resolve
from bayes_sys.prior.words import correlation_reach, describe, scale_quantiles
from bayes_sys.system.system import System


def build(n_equations: int = 3) -> System:
    rng = np.random.default_rng(1)
    designs = [np.column_stack([np.ones(18), rng.standard_normal((18, 2)) + 5.0]) for _ in range(n_equations)]
    responses = 12 + 0.1 * rng.standard_normal((18, n_equations))
    return make_system(designs, responses, regressor_names=[["intercept", "heat", "price"]] * n_equations)


def card(coefficients: str, scales: str = 'family = "half_normal"\nscale = 1.0') -> PriorCard:
    text = f'name = "own"\n[coefficients]\n{coefficients}\n[scales]\n{scales}\n'
    text += "[correlation]\nconcentration = 2\n"
    return build_card(tomllib.loads(text))


@pytest.mark.parametrize(
    ("concentration", "n_equations", "expected"),
    [
        # Beta(1, 1): uniform on (−1, 1). Beta(2, 2) on (−1, 1) has cdf (2 + 3r − r³) / 4, solved for 0.95.
        (1.0, 2, 0.9),
        (2.0, 2, 0.7292994),
        # N = 4, concentration 1: a = 2 again.
        (1.0, 4, 0.7292994),
    ],
)
def test_the_reach_of_a_correlation_is_that_of_its_beta_law(
    concentration: float, n_equations: int, expected: float
) -> None:
    assert correlation_reach(concentration, n_equations) == pytest.approx(expected, abs=1e-6)


def test_the_reach_agrees_with_correlation_matrices_drawn_uniformly() -> None:
    # Concentration 1 is uniform over correlation matrices: draw N = 3 by rejection from the cube.
    r = np.random.default_rng(5).uniform(-1, 1, (3, 400_000))
    inside = 1 + 2 * r[0] * r[1] * r[2] - (r**2).sum(axis=0) > 0
    share = np.mean(np.abs(r[0][inside]) < correlation_reach(1.0, 3))
    assert share == pytest.approx(0.9, abs=5 * np.sqrt(0.09 / inside.sum()))


@pytest.mark.parametrize(
    ("statement", "middle", "high"),
    [
        (Statement("half_normal", {"scale": 2.0}), 2 * 0.6744898, 2 * 1.9599640),
        # df = 1 is half-Cauchy: scale · tan(π p / 2).
        (Statement("half_student_t", {"scale": 2.0, "df": 1.0}), 2.0, 2 * np.tan(0.475 * np.pi)),
        (Statement("exponential", {"mean": 2.0}), 2 * np.log(2), -2 * np.log(0.05)),
        (Statement("lognormal", {"median": 2.0, "spread": 0.5}), 2.0, 2 * np.exp(0.5 * 1.6448536)),
    ],
)
def test_quantiles_of_an_error_scale(statement: Statement, middle: float, high: float) -> None:
    assert scale_quantiles(statement) == (pytest.approx(middle, rel=1e-6), pytest.approx(high, rel=1e-6))


def test_a_scaled_card_is_told_in_a_few_sentences() -> None:
    units, slopes, levels, errors, correlation = describe(read_card("weakly-informative"), build())
    assert "spreads" in units
    assert "every slope lies with 95% probability within ±3.9." in slopes
    assert "every intercept (counted from the mean of the response" in levels and "±4.9" in levels
    assert "0.67 spreads of the response, and with 95% probability below 2.0" in errors
    assert (
        "any two of 3 equations lies within ±0.67 with 90% probability (LKJ, concentration 2)" in correlation
    )


def test_without_a_system_the_lines_speak_for_themselves() -> None:
    sentences = describe(read_card("pooled"))
    assert sentences[1].startswith("Slopes of one name are thought alike: they share a value that lies")
    assert "every intercept" in sentences[2] and "alike" not in sentences[2]
    assert "any two of 5 equations" in sentences[-1]


def test_one_equation_has_no_correlation_to_speak_of() -> None:
    assert describe(read_card("vague"), build(1))[-1].startswith("There is one equation")


def test_two_equations_have_one_correlation() -> None:
    assert (
        "the errors of the two equations lies within ±0.90 with 90%"
        in describe(read_card("vague"), build(2))[-1]
    )


def test_an_effective_card_speaks_in_the_units_of_the_data() -> None:
    system, weak = build(), read_card("weakly-informative")
    prior = resolve(weak, system)
    sentences = describe(effective_card(prior, system, weak), system)
    assert sentences[0] == "The prior speaks in the units of the data."
    heat = next(s for s in sentences if "the slope of heat" in s)
    for name, scale in zip("abc", prior.coefficients.scale[1::3], strict=True):
        assert f"within ±{1.959964 * scale:.2g} ({name})" in heat
    level = next(s for s in sentences if "intercept" in s)
    low = prior.coefficients.mean[0] - 1.959964 * prior.coefficients.scale[0]
    assert f"between {low:.2f} and" in level and "the point the card names" in level


def test_pooled_coefficients_with_units_of_their_own_name_them() -> None:
    system, pooled = build(), read_card("pooled")
    sentences = describe(effective_card(resolve(pooled, system), system, pooled), system)
    heat = next(s for s in sentences if "slopes of heat" in s)
    assert heat.startswith("The slopes of heat are thought alike") and "in units of" in heat and "(c)" in heat


def test_pooled_scaled_intercepts_are_not_said_to_start_from_their_own_mean() -> None:
    text = 'family = "pooled"\nmean_scale = 2\nspread_scale = 1\nof.intercept.family = "pooled"'
    scaled = card(text).model_copy(update={"scaled": True})
    assert "the average of the responses' means" in describe(scaled, build())[2]


def test_exceptions_are_named() -> None:
    own = card('family = "normal"\nscale = 1.0\nof."b.heat" = { mean = -0.4, scale = 0.2 }')
    sentences = describe(own, build())
    heat = next(s for s in sentences if "slope of heat" in s)
    assert "within ±2.0 (a); between −0.79 and −0.01 (b); within ±2.0 (c)" in heat
    assert any("the slope of price lies" in s and "(a)" not in s for s in sentences)


def test_two_families_under_one_name_are_two_sentences() -> None:
    own = card(
        'family = "pooled"\nmean_scale = 2\nspread_scale = 1\n'
        'of.intercept = { family = "normal", scale = 1 }\n'
        'of."b.heat" = { family = "normal", scale = 3 }'
    )
    sentences = describe(own, build())
    assert any(s.startswith("The slopes of heat in a, c are thought alike") for s in sentences)
    assert any("the slope of heat in b lies with 95% probability within ±5.9" in s for s in sentences)


def test_a_coefficient_line_takes_up_what_the_lines_above_it_say() -> None:
    own = card(
        'family = "normal"\nscale = 1.0\nof.heat.scale = 3.0\nof."b.heat".mean = 1.0\nin.c.scale = 9.0'
    )
    sentences = describe(own)
    assert any(
        "the slope of heat in b lies with 95% probability between −4.9 and 6.9" in s for s in sentences
    )
    assert any("every slope in c lies with 95% probability within ±18" in s for s in sentences)
    assert "Where two of these sentences speak of one coefficient, the later one holds." in sentences


def test_heavy_tails_reach_further() -> None:
    # Student-t with 1 degree of freedom: 97.5% quantile tan(0.475 π) = 12.706 (any t table).
    sentences = describe(card('family = "student_t"\ndf = 1\nscale = 1'), build())
    assert "within ±13" in sentences[1]


def test_error_scales_of_single_equations_are_listed() -> None:
    own = card('family = "normal"\nscale = 1', 'family = "half_normal"\nscale = 1.0\nin.b.scale = 10.0')
    (errors,) = [s for s in describe(own, build()) if "standard deviation of the errors" in s]
    assert "0.67 and 2.0 (a); 6.7 and 20 (b); 0.67 and 2.0 (c)" in errors


def test_many_equations_are_cut_short() -> None:
    system = build(9)
    weak = read_card("weakly-informative")
    heat = next(
        s for s in describe(effective_card(resolve(weak, system), system, weak), system) if "of heat" in s
    )
    assert "(f); and so on." in heat and "(g)" not in heat
