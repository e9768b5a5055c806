"""A card becomes the prior that it says, on the raw scale of the data."""

from __future__ import annotations

import tomllib
from typing import Any

import numpy as np
import pytest
from helpers import make_system
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from bayes_sys.errors import CardError, NotBuiltError
from bayes_sys.prior.cards import PriorCard, build_card, read_card
from bayes_sys.prior.law import PooledGroup, Prior
from bayes_sys.prior.resolve import prior_moments, resolve
from bayes_sys.prior.scaling import spread
from bayes_sys.system.system import System

Array = NDArray[np.float64]

T = 18
TIME = np.arange(1.0, T + 1)


def card(
    coefficients: str, *, scaled: bool, scales: str = 'family = "half_normal"\nscale = 1.0'
) -> PriorCard:
    text = f"[coefficients]\n{coefficients}\n[scales]\n{scales}\n[correlation]\nconcentration = 2.5\n"
    return build_card({"name": "own", "scaled": scaled, **tomllib.loads(text)})


def data(seed: int = 1, n_equations: int = 2) -> tuple[list[Array], Array]:
    """Return two regressors per equation and log responses of level 12 and spread 0.1."""
    rng = np.random.default_rng(seed)
    slopes = [rng.standard_normal((T, 2)) * [1.0, 30.0] + [4.0, 200.0] for _ in range(n_equations)]
    return slopes, 12.0 + 0.1 * rng.standard_normal((T, n_equations))


def build(slopes: list[Array], responses: Array, *, names: Any = None) -> System:
    designs = [np.column_stack([np.ones(len(responses)), x]) for x in slopes]
    return make_system(designs, responses, names, [["intercept", "heat", "price"]] * len(slopes))


def fitted_moments(prior: Prior, design: Array, block: slice) -> tuple[Array, Array]:
    """Return prior mean (T,) and covariance (T, T) of one equation's regression line; nothing pooled."""
    law = prior.coefficients
    raw = law.to_raw[block, block]
    covariance = raw @ np.diag(law.scale[block] ** 2) @ raw.T
    return design @ raw @ law.mean[block], design @ covariance @ design.T


NORMAL = 'family = "normal"\nscale = 2.0\n'
POOLED = 'family = "pooled"\nmean_scale = 2.0\nspread_scale = 0.5\n'


def test_a_card_on_the_raw_scale_is_taken_at_its_word() -> None:
    system = build(*data())
    prior = resolve(card(NORMAL + 'of.intercept.mean = 3.0\nof."b.price".scale = 0.1', scaled=False), system)
    np.testing.assert_array_equal(prior.coefficients.to_raw, np.eye(6))
    np.testing.assert_array_equal(prior.coefficients.mean, [3, 0, 0, 3, 0, 0])
    np.testing.assert_array_equal(prior.coefficients.scale, [2, 2, 2, 2, 2, 0.1])
    np.testing.assert_array_equal(prior.coefficients.group, [-1] * 6)
    assert prior.coefficients.groups == ()
    assert prior.correlation.concentration == 2.5


@pytest.mark.parametrize(
    ("scales", "size", "shape"),
    [
        ('family = "half_normal"\nscale = 0.7', 0.7, 0.0),
        ('family = "half_student_t"\nscale = 0.7\ndf = 4', 0.7, 4.0),
        ('family = "exponential"\nmean = 0.7', 0.7, 0.0),
        ('family = "lognormal"\nmedian = 0.7\nspread = 0.3', 0.7, 0.3),
    ],
)
def test_only_the_size_of_a_scale_family_is_scaled(scales: str, size: float, shape: float) -> None:
    slopes, responses = data()
    system = build(slopes, responses)
    spreads = np.array([spread(y, TIME) for y in responses.T])
    raw = resolve(card(NORMAL, scaled=False, scales=scales), system).scales
    scaled = resolve(card(NORMAL, scaled=True, scales=scales), system).scales
    np.testing.assert_array_equal(raw.size, [size, size])
    np.testing.assert_allclose(scaled.size, size * spreads, rtol=1e-14)
    for law in (raw, scaled):
        np.testing.assert_array_equal(law.shape, [shape, shape])
        assert law.family == (tomllib.loads(scales)["family"],) * 2


def test_scaled_slopes_are_in_units_of_spread_over_spread() -> None:
    slopes, responses = data()
    prior = resolve(card(NORMAL + "mean = -0.5", scaled=True), build(slopes, responses)).coefficients
    for i in range(2):
        for j in range(2):
            unit = spread(responses[:, i], TIME) / spread(slopes[i][:, j], TIME)
            assert prior.scale[3 * i + 1 + j] == pytest.approx(2.0 * unit, rel=1e-13)
            assert prior.mean[3 * i + 1 + j] == pytest.approx(-0.5 * unit, rel=1e-13)


def test_a_log_response_of_level_12_is_not_pulled_to_zero() -> None:
    slopes, responses = data()
    system = build(slopes, responses)
    for name in ("vague", "weakly-informative"):
        prior = resolve(read_card(name), system)
        for i, equation in enumerate(system.equations):
            mean, covariance = fitted_moments(prior, equation.design, system.slice_of(i))
            np.testing.assert_allclose(mean, responses[:, i].mean(), rtol=1e-12)
            at_the_means = (
                equation.design.mean(axis=0)
                @ prior.coefficients.to_raw[system.slice_of(i), system.slice_of(i)]
            )
            sd = np.sqrt((at_the_means**2) @ prior.coefficients.scale[system.slice_of(i)] ** 2)
            width = {"vague": 10.0, "weakly-informative": 2.5}[name]
            assert sd == pytest.approx(width * spread(responses[:, i], TIME), rel=1e-10)
            assert np.all(np.diag(covariance) > 0)


def test_where_a_regressor_lies_does_not_matter_to_the_line_it_draws() -> None:
    slopes, responses = data()
    here = build(slopes, responses)
    there = build([x + np.array([1000.0, 0.0]) for x in slopes], responses)
    for name in ("vague", "weakly-informative"):
        for i in range(2):
            block = here.slice_of(i)
            mean, covariance = fitted_moments(resolve(read_card(name), here), here.equations[i].design, block)
            moved, spread_out = fitted_moments(
                resolve(read_card(name), there), there.equations[i].design, block
            )
            np.testing.assert_allclose(moved, mean, rtol=1e-12)
            # 1000 of a spread of 1 costs three digits of sixteen, squared.
            np.testing.assert_allclose(spread_out, covariance, rtol=1e-6, atol=1e-9)


@settings(max_examples=40, deadline=None)
@given(
    units=st.tuples(*[st.floats(1e-4, 1e4)] * 3),
    shift=st.floats(-1e3, 1e3),
    name=st.sampled_from(["vague", "weakly-informative", "pooled"]),
)
def test_a_scaled_card_says_the_same_in_any_units(
    units: tuple[float, float, float], shift: float, name: str
) -> None:
    slopes, responses = data()
    before = resolve(read_card(name), build(slopes, responses))
    changed = build([x * units[:2] for x in slopes], responses * units[2] + shift)
    after = resolve(read_card(name), changed)
    per_coefficient = np.tile([units[2], units[2] / units[0], units[2] / units[1]], 2)
    means, sds = prior_moments(before)
    moved_means, moved_sds = prior_moments(after)
    np.testing.assert_allclose(moved_sds, sds * per_coefficient, rtol=1e-6)
    expected = means * per_coefficient + np.tile([shift, 0.0, 0.0], 2)
    np.testing.assert_allclose(moved_means, expected, rtol=1e-6, atol=1e-9 * units[2])
    np.testing.assert_allclose(after.scales.size, before.scales.size * units[2], rtol=1e-6)


def test_an_offset_of_a_scaled_intercept_is_in_spreads_of_the_response() -> None:
    slopes, responses = data()
    line = NORMAL + "of.intercept = { mean = 1.5, scale = 0.5 }"
    prior = resolve(card(line, scaled=True), build(slopes, responses)).coefficients
    size = spread(responses[:, 1], TIME)
    assert prior.mean[3] == pytest.approx(responses[:, 1].mean() + 1.5 * size, rel=1e-13)
    assert prior.scale[3] == pytest.approx(0.5 * size, rel=1e-13)


def test_an_intercept_stated_at_a_point_has_its_prior_there() -> None:
    system = build(*data())
    line = NORMAL + "of.intercept = { mean = 7.0, scale = 0.3, at = { heat = 4.0 } }"
    prior = resolve(card(line, scaled=False), system)
    np.testing.assert_array_equal(prior.coefficients.to_raw[0], [1.0, -4.0, 0.0, 0.0, 0.0, 0.0])
    there = np.array([1.0, 4.0, 0.0]) @ prior.coefficients.to_raw[:3, :3]
    assert there @ prior.coefficients.mean[:3] == 7.0
    assert np.sqrt(there**2 @ prior.coefficients.scale[:3] ** 2) == pytest.approx(0.3)
    # At the origin: 7 − 4 b, b ~ N(0, 2²).
    mean, sd = prior_moments(prior)
    assert (mean[0], sd[0]) == (7.0, pytest.approx(np.sqrt(0.3**2 + 16 * 4)))


def test_without_an_intercept_slopes_stay_as_they_are() -> None:
    slopes, responses = data()
    without = make_system(slopes, responses, regressor_names=[["heat", "price"]] * 2)
    prior = resolve(card(NORMAL, scaled=True), without).coefficients
    whole = resolve(card(NORMAL, scaled=True), build(slopes, responses)).coefficients
    np.testing.assert_array_equal(prior.to_raw, np.eye(4))
    np.testing.assert_array_equal(prior.scale, whole.scale[[1, 2, 4, 5]])


def test_pooled_slopes_share_their_mean_in_spreads() -> None:
    slopes, responses = data(n_equations=3)
    system = build(slopes, responses)
    law = resolve(read_card("pooled"), system).coefficients
    assert law.groups == (PooledGroup("heat", 0.0, 2.0, 0.5), PooledGroup("price", 0.0, 2.0, 0.5))
    np.testing.assert_array_equal(law.group, [-1, 0, 1] * 3)
    assert np.isnan(law.mean[law.pooled]).all() and np.isfinite(law.mean[~law.pooled]).all()
    for i in range(3):
        units = [spread(responses[:, i], TIME) / spread(slopes[i][:, j], TIME) for j in range(2)]
        start = system.slice_of(i).start
        np.testing.assert_allclose(np.diag(law.to_raw)[start : start + 3], [1.0, *units], rtol=1e-13)
        means = slopes[i].mean(axis=0)
        np.testing.assert_allclose(law.to_raw[start, start + 1 : start + 3], -means * units, rtol=1e-13)


def test_a_unit_of_a_pooled_slope_multiplies_the_scaled_one() -> None:
    slopes, responses = data()
    system = build(slopes, responses)
    plain = resolve(
        card(POOLED + f"of.intercept = {{ {NORMAL.strip().replace(chr(10), ', ')} }}", scaled=True), system
    )
    doubled = resolve(
        card(
            POOLED + f"of.intercept = {{ {NORMAL.strip().replace(chr(10), ', ')} }}\nin.b.unit = 2.0",
            scaled=True,
        ),
        system,
    )
    ratio = np.diag(doubled.coefficients.to_raw) / np.diag(plain.coefficients.to_raw)
    np.testing.assert_allclose(ratio, [1, 1, 1, 1, 2, 2])


def test_pooled_moments_are_those_of_a_simulation() -> None:
    system = build(*data(n_equations=3))
    prior = resolve(read_card("pooled"), system)
    law, rng, draws = prior.coefficients, np.random.default_rng(11), 400_000
    stated = np.where(law.pooled, 0.0, law.mean) + np.where(law.pooled, 0.0, law.scale) * rng.standard_normal(
        (draws, 9)
    )
    for index, group in enumerate(law.groups):
        shared = group.mean + group.mean_scale * rng.standard_normal(draws)
        spread_out = np.abs(group.spread_scale * rng.standard_normal(draws))
        for k in np.flatnonzero(law.group == index):
            stated[:, k] = shared + spread_out * rng.standard_normal(draws)
    raw = stated @ law.to_raw.T
    mean, sd = prior_moments(prior)
    # Monte Carlo error of a mean is sd / sqrt(draws), of an sd about sd / sqrt(2 draws): five of each.
    np.testing.assert_array_less(np.abs(raw.mean(axis=0) - mean), 5 * sd / np.sqrt(draws))
    np.testing.assert_allclose(raw.std(axis=0), sd, rtol=5 / np.sqrt(2 * draws) * 1.5)


def test_pooled_moments_in_closed_form() -> None:
    system = make_system(
        [np.arange(6.0)[:, None] ** 2] * 2,
        np.random.default_rng(1).standard_normal((6, 2)),
        regressor_names=[["x"], ["x"]],
    )
    prior = resolve(
        card(
            'family = "pooled"\nmean = 3.0\nmean_scale = 0.4\nspread_scale = 0.3\nin.b.unit = 10.0',
            scaled=False,
        ),
        system,
    )
    mean, sd = prior_moments(prior)
    np.testing.assert_allclose(mean, [3.0, 30.0])
    np.testing.assert_allclose(sd, [0.5, 5.0])


def test_moments_of_an_intercept_remember_that_pooled_slopes_of_one_equation_differ_in_name() -> None:
    # Intercept at the origin: a − 4 b1 − 200 b2; the slopes belong to different groups, so variances add.
    system = build(*data())
    line = (
        'family = "pooled"\nmean_scale = 0.4\nspread_scale = 0.3\n'
        'of.intercept = { family = "normal", scale = 2.0, at = { heat = 4.0, price = 200.0 } }'
    )
    _, sd = prior_moments(resolve(card(line, scaled=False), system))
    assert sd[0] == pytest.approx(np.sqrt(4.0 + (16 + 40_000) * 0.25))


def test_scaled_pooled_intercepts_are_compared_on_the_responses_own_scale() -> None:
    slopes, responses = data(n_equations=2)
    responses = responses + np.array([0.0, 3.0])
    system = build(slopes, responses)
    line = NORMAL + f"[coefficients.of.intercept]\n{POOLED}mean = 1.0"
    prior = resolve(card(line, scaled=True), system)
    size = np.sqrt(np.mean([spread(y, TIME) ** 2 for y in responses.T]))
    (group,) = prior.coefficients.groups
    assert group.mean == pytest.approx(responses.mean() + size, rel=1e-12)
    assert (group.mean_scale, group.spread_scale) == (pytest.approx(2 * size), pytest.approx(0.5 * size))
    np.testing.assert_array_equal(np.diag(prior.coefficients.to_raw), np.ones(6))
    means = slopes[1].mean(axis=0)
    np.testing.assert_allclose(prior.coefficients.to_raw[3, 4:], -means, rtol=1e-13)


def test_a_unit_of_a_scaled_pooled_intercept_is_refused() -> None:
    line = NORMAL + f"[coefficients.of.intercept]\n{POOLED}unit = 2.0"
    with pytest.raises(CardError, match=r"gives the pooled “a.intercept” a unit.*Take the “unit” out"):
        resolve(card(line, scaled=True), build(*data()))


def test_student_t_coefficients_are_refused_until_they_are_built() -> None:
    line = NORMAL + '[coefficients.of.heat]\nfamily = "student_t"\ndf = 4'
    with pytest.raises(
        NotBuiltError, match=r"“own”.*“a.heat” the family “student_t”.*not built yet.*“normal”"
    ):
        resolve(card(line, scaled=False), build(*data()))


def test_fitted_estimates_are_not_used() -> None:
    # The same series, paired differently: spreads and means stay, every least-squares estimate changes.
    slopes, responses = data()
    turned = [x[::-1].copy() for x in slopes]
    for name in ("vague", "weakly-informative", "pooled"):
        one, other = (resolve(read_card(name), build(x, responses)) for x in (slopes, turned))
        np.testing.assert_allclose(one.coefficients.to_raw, other.coefficients.to_raw, rtol=1e-10, atol=1e-12)
        np.testing.assert_allclose(one.coefficients.scale, other.coefficients.scale, rtol=1e-10)
        np.testing.assert_allclose(one.scales.size, other.scales.size, rtol=1e-10)


def test_one_equation_resolves() -> None:
    slopes, responses = data(n_equations=1)
    assert resolve(read_card("weakly-informative"), build(slopes, responses)).scales.size.shape == (1,)
