"""The reasons that stand beside the numbers of the shipped cards hold."""

from __future__ import annotations

import re

import numpy as np
import pytest
from helpers import make_system
from scipy.special import ndtri

from bayes_sys.prior.cards import read_card
from bayes_sys.prior.resolve import resolve
from bayes_sys.prior.scaling import spread
from bayes_sys.prior.words import correlation_reach
from bayes_sys.shipped import card_names, priors_folder

NAMES = ("pooled", "vague", "weakly-informative")


def test_three_cards_are_shipped_and_each_is_explained() -> None:
    assert card_names() == NAMES
    page = (priors_folder() / "README.md").read_text(encoding="utf-8")
    for name in NAMES:
        assert f"| `{name}` |" in page
        assert read_card(name).name == name
        assert read_card(name).scaled
        assert read_card(name).summary


@pytest.mark.parametrize("name", NAMES)
def test_every_number_of_a_card_has_its_reason_beside_it(name: str) -> None:
    before = ""
    for line in (priors_folder() / f"{name}.toml").read_text(encoding="utf-8").splitlines():
        if re.match(r"\w+ = [\d.]+", line):
            assert "#" in line or before.startswith("#"), line
        before = line


@pytest.mark.parametrize("name", NAMES)
def test_the_error_scales_of_every_shipped_card_let_the_mean_of_an_exponential_exist(name: str) -> None:
    # E exp(σ z) = E exp(σ² / 2): finite under a half-normal of scale s if and only if s < 1 in the response's
    # units, because the tail is exp(−σ² / (2 s²)) up to powers of σ; never under a longer tail.
    responses = 12 + 0.1 * np.random.default_rng(1).standard_normal((18, 2))
    law = resolve(read_card(name), make_system([np.ones((18, 1))] * 2, responses)).scales
    assert law.family == ("half_normal", "half_normal")
    assert (law.size < 1).all()


def test_a_regressor_alone_has_a_slope_of_at_most_one() -> None:
    rng, time = np.random.default_rng(1), np.arange(18.0)
    for _ in range(50):
        x, y = rng.standard_normal((2, 18)).cumsum(axis=1)
        design = np.column_stack([np.ones(18), time, x])
        slope = np.linalg.lstsq(design, y)[0][2]
        assert abs(slope) * spread(x, time) / spread(y, time) <= 1 + 1e-9


@pytest.mark.parametrize(("n_periods", "step", "pulse"), [(10, 3.9, 3.2), (18, 3.9, 4.2), (40, 4.0, 6.3)])
def test_a_step_or_pulse_that_is_the_whole_movement_has_the_slope_the_cards_say(
    n_periods: int, step: float, pulse: float
) -> None:
    time = np.arange(float(n_periods))
    half = (time >= n_periods // 2) * 1.0
    one = (time == n_periods // 2) * 1.0
    assert 1 / spread(half, time) == pytest.approx(step, abs=0.06)
    assert 1 / spread(one, time) == pytest.approx(pulse, abs=0.06)
    assert 1 / spread(half, time) < 2 * 2.0, "within two standard deviations of the usual card"


@pytest.mark.parametrize(
    ("n_equations", "reaches"), [(2, (0.90, 0.73, 0.55)), (5, (0.67, 0.58, 0.48)), (10, (0.50, 0.46, 0.40))]
)
def test_the_table_of_correlations_is_right(n_equations: int, reaches: tuple[float, ...]) -> None:
    page = (priors_folder() / "README.md").read_text(encoding="utf-8")
    found = [f"±{correlation_reach(eta, n_equations):.2f}" for eta in (1.0, 2.0, 4.0)]
    assert found == [f"±{r:.2f}" for r in reaches]
    assert f"| {n_equations} | {' | '.join(found)} |" in page


def test_the_quantiles_in_the_comments_are_right() -> None:
    middle, high = ndtri(0.75), ndtri(0.975)
    weak = (priors_folder() / "weakly-informative.toml").read_text(encoding="utf-8")
    assert f"{middle:.2f} spreads" in weak and f"below {high:.2f}" in weak
    assert f"{-correlation_reach(2.0, 5):.2f} and {correlation_reach(2.0, 5):.2f}" in weak
    pooled = (priors_folder() / "pooled.toml").read_text(encoding="utf-8")
    assert f"middle {0.5 * middle:.2f}, 95 in 100 below {0.5 * high:.2f}" in pooled


def test_the_vague_card_pulls_least_squares_by_about_a_thousandth() -> None:
    rng = np.random.default_rng(3)
    x = rng.standard_normal(20)
    y = x / x.std(ddof=1) * np.sqrt(0.75) + 0.5 * rng.standard_normal(20)
    system = make_system([np.column_stack([np.ones(20), x])], y[:, None])
    scale = resolve(read_card("vague"), system).coefficients.scale[1]
    residual = 0.5 * spread(y, np.arange(20.0))
    information = ((x - x.mean()) ** 2).sum() / residual**2
    pull = 1 / (1 + information * scale**2)
    assert 0.00005 < pull < 0.001
