"""The triangular factor holds exactly what the data hold."""

from __future__ import annotations

import tracemalloc
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from bayes_sys.system.moments import Factor, factorise

Array = NDArray[np.float64]


@st.composite
def systems(draw: st.DrawFn) -> tuple[list[Array], Array]:
    """Designs that share some columns, and responses; more or fewer periods than columns."""
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    n_periods = draw(st.integers(1, 40))
    n_equations = draw(st.integers(1, 4))
    pool = rng.standard_normal((n_periods, 6)) * 10.0 ** rng.integers(-3, 4, 6)
    pool[:, 0] = 1.0
    widths = [draw(st.integers(1, 6)) for _ in range(n_equations)]
    designs = [pool[:, np.sort(rng.choice(6, size=width, replace=False))] for width in widths]
    return designs, rng.standard_normal((n_periods, n_equations))


def columns_of(designs: list[Array], responses: Array, factor: Factor) -> Array:
    """Return the data columns in the order of the factor's columns, shape (n_periods, n_columns)."""
    data = np.full((factor.n_periods, factor.triangle.shape[1]), np.nan)
    for design, where in zip(designs, factor.design, strict=True):
        data[:, where] = design
    data[:, factor.response] = responses
    return data


@settings(max_examples=60, deadline=None)
@given(systems())
def test_cross_products_of_the_factor_are_those_of_the_data(system: tuple[list[Array], Array]) -> None:
    designs, responses = system
    factor = factorise(designs, responses)
    data = columns_of(designs, responses, factor)
    # A backward-stable factor: error of each entry at rounding, relative to the lengths of the two columns.
    lengths = np.linalg.norm(data, axis=0)
    error = np.abs(factor.triangle.T @ factor.triangle - data.T @ data) / np.outer(lengths, lengths)
    assert error.max() < 1e-13


@settings(max_examples=60, deadline=None)
@given(systems(), st.integers(1, 17))
def test_factoring_in_chunks_changes_nothing_but_signs(
    system: tuple[list[Array], Array], chunk_rows: int
) -> None:
    designs, responses = system
    whole = factorise(designs, responses).triangle
    chunked = factorise(designs, responses, chunk_rows=chunk_rows).triangle
    assert whole.shape == chunked.shape
    full_rank = (
        whole.shape[0] == whole.shape[1] and np.linalg.cond(whole / np.linalg.norm(whole, axis=0)) < 1e4
    )
    if full_rank:  # the triangle is unique up to the signs of its rows
        signs = np.sign(np.diag(whole) * np.diag(chunked))[:, None]
        assert np.abs(whole - signs * chunked).max() / np.abs(whole).max() < 1e-10
    scale = np.outer(np.linalg.norm(whole, axis=0), np.linalg.norm(whole, axis=0))
    assert (np.abs(whole.T @ whole - chunked.T @ chunked) / scale).max() < 1e-13


@settings(max_examples=60, deadline=None)
@given(systems(), st.integers(0, 2**32 - 1))
def test_residuals_through_the_factor_have_the_cross_product_of_the_residuals(
    system: tuple[list[Array], Array], seed: int
) -> None:
    designs, responses = system
    factor = factorise(designs, responses)
    coefficients = np.random.default_rng(seed).standard_normal(sum(d.shape[1] for d in designs))
    parts = np.split(coefficients, np.cumsum([d.shape[1] for d in designs])[:-1])
    residuals = responses - np.column_stack([d @ b for d, b in zip(designs, parts, strict=True)])
    through = factor.residuals(coefficients)
    terms = [np.linalg.norm(d, axis=0) @ np.abs(b) for d, b in zip(designs, parts, strict=True)]
    size = np.linalg.norm(responses, axis=0) + np.array(terms)
    error = np.abs(through.T @ through - residuals.T @ residuals) / np.outer(size, size)
    assert error.max() < 1e-13


@settings(max_examples=40, deadline=None)
@given(systems())
def test_equal_columns_are_held_once_and_every_equation_finds_them(
    system: tuple[list[Array], Array],
) -> None:
    designs, responses = system
    factor = factorise(designs, responses)
    distinct = {column.tobytes() for design in designs for column in design.T}
    assert factor.n_distinct == len(distinct)
    assert factor.n_equations == len(designs)
    data = columns_of(designs, responses, factor)
    assert not np.isnan(data).any()
    for i, design in enumerate(designs):
        assert np.array_equal(data[:, factor.design[i]], design)
        assert factor.regressors(i).shape == (factor.triangle.shape[0], design.shape[1])
    assert factor.stacked_regressors().shape[1] == sum(d.shape[1] for d in designs)


def test_shared_regressors_cost_one_column_for_all_equations() -> None:
    rng = np.random.default_rng(1)
    shared = np.column_stack([np.ones(30), rng.standard_normal((30, 2))])
    factor = factorise([shared] * 5, rng.standard_normal((30, 5)))
    assert factor.n_distinct == 3
    assert factor.triangle.shape == (8, 8)
    assert all(np.array_equal(where, [0, 1, 2]) for where in factor.design)


def test_fewer_periods_than_columns_keeps_every_cross_product() -> None:
    rng = np.random.default_rng(2)
    designs = [rng.standard_normal((4, 6)), rng.standard_normal((4, 5))]
    responses = rng.standard_normal((4, 2))
    factor = factorise(designs, responses)
    assert factor.triangle.shape == (4, 13)
    data = columns_of(designs, responses, factor)
    np.testing.assert_allclose(factor.triangle.T @ factor.triangle, data.T @ data, rtol=0, atol=1e-13)


def exact_slope(year: list[int], share: list[float], response: list[float]) -> float:
    """Coefficient of the share in response ~ 1 + year + share, in exact rational arithmetic."""
    rows = [[Fraction(1), Fraction(y), Fraction(s)] for y, s in zip(year, share, strict=True)]
    target = [Fraction(r) for r in response]
    gram = [[sum(r[a] * r[b] for r in rows) for b in range(3)] for a in range(3)]
    right = [sum(r[a] * t for r, t in zip(rows, target, strict=True)) for a in range(3)]

    def determinant(m: list[list[Fraction]]) -> Fraction:
        (a, b, c), (d, e, f), (g, h, i) = m
        return a * (e * i - f * h) - b * (d * i - f * g) + c * (d * h - e * g)

    replaced = [[*row[:2], value] for row, value in zip(gram, right, strict=True)]
    return float(determinant(replaced) / determinant(gram))


def test_a_calendar_year_beside_a_share_keeps_its_digits() -> None:
    # The year is 2004 ... 2021, the share moves in its fourth decimal: Z'Z would lose what R keeps.
    rng = np.random.default_rng(3)
    year = np.arange(2004.0, 2022.0)
    share = 0.5 + 1e-4 * rng.standard_normal(18)
    response = 12.0 + 0.01 * (year - 2000) + 3.0 * share + 0.01 * rng.standard_normal(18)
    truth = exact_slope([int(y) for y in year], share.tolist(), response.tolist())

    design = np.column_stack([np.ones(18), year, share])
    factor = factorise([design], response[:, None])
    through_factor = np.linalg.lstsq(factor.regressors(0), factor.responses()[:, 0], rcond=None)[0][2]
    through_products = np.linalg.solve(design.T @ design, design.T @ response)[2]

    # Condition number near 4e7: at rounding 2e-16 some eight digits are safe; cross-products square it.
    assert abs(through_factor / truth - 1) < 2e-8
    assert abs(through_products / truth - 1) > 100 * abs(through_factor / truth - 1)


def test_one_million_periods_pass_in_bounded_memory() -> None:
    n_periods, n_equations = 1_000_000, 3
    rng = np.random.default_rng(4)
    ones = np.ones(n_periods)
    designs = [np.column_stack([ones, rng.standard_normal(n_periods)]) for _ in range(n_equations)]
    responses = rng.standard_normal((n_periods, n_equations))
    tracemalloc.start()
    factor = factorise(designs, responses)
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    # Working memory: the distinct columns twice (made contiguous, and their bytes as keys: 4 columns of 8 MB)
    # and one chunk of 65,536 rows; never the whole of [X, Y] (56 MB) beside a Q of the same size (56 MB).
    assert peak < 110e6
    np.testing.assert_allclose(factor.triangle[0, 0] ** 2, n_periods, rtol=1e-12)
    np.testing.assert_allclose(
        factor.responses().T @ factor.responses(), responses.T @ responses, rtol=0, atol=1e-10 * n_periods
    )


@pytest.mark.parametrize("chunk_rows", [1, 7, 1000])
def test_the_number_of_periods_is_counted_whatever_the_chunk(chunk_rows: int) -> None:
    factor = factorise([np.ones((50, 1))], np.arange(50.0)[:, None], chunk_rows=chunk_rows)
    assert factor.n_periods == 50
    assert factor.triangle.shape == (2, 2)
