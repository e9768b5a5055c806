"""The effective card, written and read again, is the same prior."""

from __future__ import annotations

import tomllib
from typing import Any

import numpy as np
import pytest
from helpers import make_system
from hypothesis import given, settings
from hypothesis import strategies as st

from bayes_sys.prior.cards import PriorCard, build_card, read_card
from bayes_sys.prior.effective import card_text, effective_card
from bayes_sys.prior.law import Prior
from bayes_sys.prior.resolve import resolve
from bayes_sys.system.system import System

T = 15


@pytest.fixture(scope="module")
def system() -> System:
    rng = np.random.default_rng(2)
    heat, price = rng.standard_normal(T) * 3 + 20, rng.standard_normal(T) * 0.2 + 1000
    ones, trend, step = np.ones(T), np.arange(float(T)), (np.arange(T) > 8) * 1.0
    designs = [np.column_stack(c) for c in ([ones, heat, price], [ones, heat, trend, step], [price, heat])]
    names = [["intercept", "heat", "price"], ["intercept", "heat", "trend", "step"], ["price", "heat"]]
    responses = rng.standard_normal((T, 3)) * [0.1, 40.0, 1.0] + [12.0, -300.0, 0.0]
    return make_system(designs, responses, ["alder", "St. John", 'quo"te'], names)


def assert_same(found: Prior, expected: Prior) -> None:
    """Two priors agree; a point that went through a unit and back may differ in the last bit."""
    assert found.coefficients.groups == expected.coefficients.groups
    assert found.scales.family == expected.scales.family
    assert found.correlation == expected.correlation
    np.testing.assert_allclose(found.coefficients.to_raw, expected.coefficients.to_raw, rtol=1e-15, atol=0)
    for name in ("mean", "scale", "group"):
        np.testing.assert_array_equal(getattr(found.coefficients, name), getattr(expected.coefficients, name))
    np.testing.assert_array_equal(found.scales.size, expected.scales.size)
    np.testing.assert_array_equal(found.scales.shape, expected.scales.shape)


def own(**tables: Any) -> PriorCard:
    base: dict[str, Any] = {
        "name": "own",
        "scaled": True,
        "coefficients": {"family": "normal", "scale": 2.0},
        "scales": {"family": "half_student_t", "scale": 1.0, "df": 4.0},
        "correlation": {"concentration": 3.0},
    }
    return build_card({**base, **tables})


POOLED_INTERCEPTS = {
    "family": "pooled",
    "mean_scale": 1.0,
    "spread_scale": 0.3,
    "of": {"intercept": {"family": "pooled", "mean": 0.5, "mean_scale": 3.0, "spread_scale": 2.0}},
}
MIXED_SCALES = {
    "family": "lognormal",
    "median": 0.5,
    "spread": 0.4,
    "in": {"alder": {"family": "exponential", "mean": 2.0}},
}
AT = {"family": "normal", "scale": 2.0, "of": {"intercept": {"mean": 3.0, "at": {"heat": 0.1}}}}


@pytest.mark.parametrize(
    "card",
    [
        *(pytest.param(read_card(name), id=name) for name in ("vague", "weakly-informative", "pooled")),
        pytest.param(own(), id="half_student_t"),
        pytest.param(own(scales=MIXED_SCALES), id="mixed scales"),
        pytest.param(own(coefficients=POOLED_INTERCEPTS), id="pooled intercepts"),
        pytest.param(own(coefficients=AT, scaled=False), id="raw, stated at a point"),
    ],
)
def test_the_effective_card_reproduces_the_run_through_its_text(card: PriorCard, system: System) -> None:
    prior = resolve(card, system)
    effective = effective_card(prior, system, card)
    assert not effective.scaled
    read = build_card(tomllib.loads(card_text(effective)))
    assert read == effective
    assert_same(resolve(read, system), prior)


def test_the_effective_card_of_an_effective_card_is_itself(system: System) -> None:
    card = read_card("weakly-informative")
    once = effective_card(resolve(card, system), system, card)
    twice = effective_card(resolve(once, system), system, once)
    assert (twice.coefficients, twice.scales, twice.correlation) == (
        once.coefficients,
        once.scales,
        once.correlation,
    )


def test_tables_without_a_scale_are_kept(system: System) -> None:
    card = own(autocorrelation={"mean": 0.2}, tails={"rate": 0.2})
    effective = effective_card(resolve(card, system), system, card)
    assert (effective.autocorrelation, effective.tails) == (card.autocorrelation, card.tails)


def test_the_text_reads_from_the_general_to_the_particular(system: System) -> None:
    card = read_card("pooled")
    text = card_text(effective_card(resolve(card, system), system, card))
    headings = [line for line in text.splitlines() if line.startswith("[")]
    assert headings[:3] == ["[coefficients.of.heat]", "[coefficients.of.price]", "[coefficients.of.trend]"]
    assert headings.index('[coefficients.of."St. John.intercept"]') < headings.index("[scales]")
    assert headings[-1] == "[correlation]"
    assert text.startswith('name = "pooled"\nsummary = ')


def test_the_shipped_cards_read_back_from_their_text() -> None:
    for name in ("vague", "weakly-informative", "pooled"):
        card = read_card(name)
        assert build_card(tomllib.loads(card_text(card))) == card


positive = st.floats(1e-300, 1e300)
number = st.floats(-1e300, 1e300)
label = st.text(st.characters(exclude_categories=["Cs", "Cc"]), min_size=1, max_size=12).filter(
    lambda name: not name.startswith("*.")
)


@st.composite
def cards(draw: st.DrawFn) -> PriorCard:
    normal = st.fixed_dictionaries({"family": st.just("normal"), "mean": number, "scale": positive})
    pooled = st.fixed_dictionaries(
        {"family": st.just("pooled"), "mean_scale": positive, "spread_scale": positive},
        optional={"unit": positive},
    )
    line = st.one_of(normal, pooled, st.fixed_dictionaries({}, optional={"mean": number, "scale": positive}))
    point = st.dictionaries(label, number, max_size=2)
    intercept = st.fixed_dictionaries({"scale": positive, "at": point})
    of = draw(st.dictionaries(label, line, max_size=3)) | draw(
        st.one_of(st.just({}), st.fixed_dictionaries({"intercept": intercept}))
    )
    return build_card(
        {
            "name": draw(label),
            "coefficients": {**draw(normal), "of": of, "in": draw(st.dictionaries(label, line, max_size=2))},
            "scales": {"family": "half_normal", "scale": draw(positive)},
            "correlation": {"concentration": draw(positive)},
        }
    )


@settings(max_examples=100, deadline=None)
@given(card=cards())
def test_any_card_survives_its_own_text_to_the_last_bit(card: PriorCard) -> None:
    read = build_card(tomllib.loads(card_text(card)))
    assert read == card
    assert repr(read) == repr(card)
