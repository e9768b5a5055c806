"""The compiled density and the PyMC model are one truth: value and gradient, at random points."""

from __future__ import annotations

import numpy as np
import pytest
from helpers import make_system
from pymc_identity import Identity, derivative

from bayes_sys.prior.law import CoefficientLaw, CorrelationLaw, PooledGroup, Prior, ScaleLaw
from bayes_sys.system.system import System

FAMILIES = ("half_normal", "half_student_t", "exponential", "lognormal")
SHAPES = {"half_normal": 0.0, "half_student_t": 4.0, "exponential": 0.0, "lognormal": 0.6}


def invented_system(n: int, periods: int, p: int, seed: int, centre: float = 0.0) -> System:
    rng = np.random.default_rng(seed)
    designs = [
        np.column_stack([np.ones(periods), centre + rng.normal(size=(periods, p - 1))]) for _ in range(n)
    ]
    shared = rng.normal(size=(periods, 1))
    responses = np.column_stack([x @ rng.normal(size=p) for x in designs])
    return make_system(designs, responses + 0.7 * shared + 0.5 * rng.normal(size=(periods, n)))


def plain_prior(system: System, family: str, concentration: float = 2.0) -> Prior:
    k, n = system.n_coefficients, system.n_equations
    law = CoefficientLaw(np.eye(k), np.linspace(-0.5, 0.5, k), np.linspace(0.5, 3.0, k), np.full(k, -1))
    scales = ScaleLaw((family,) * n, np.linspace(0.5, 2.0, n), np.full(n, SHAPES[family]))
    return Prior(law, scales, CorrelationLaw(concentration))


def pooled_prior(system: System) -> Prior:
    """Slopes pooled by name, intercepts stated away from the origin, every scale family at once."""
    names = [regressor for _, regressor in system.coefficients]
    slopes = sorted(set(names) - {"intercept"})
    group = np.array([slopes.index(name) if name in slopes else -1 for name in names])
    groups = tuple(PooledGroup(name, 0.2 * i, 1.0 + i, 0.4 + 0.1 * i) for i, name in enumerate(slopes))
    to_raw = np.eye(len(names))
    for i in range(system.n_equations):
        block = system.slice_of(i)
        to_raw[block.start, block.start + 1 : block.stop] = -0.7
        to_raw[range(block.start + 1, block.stop), range(block.start + 1, block.stop)] = 0.5 + 0.3 * i
    fixed = np.where(group < 0, 1.5, np.nan)
    families = tuple(FAMILIES[i % 4] for i in range(system.n_equations))
    scales = ScaleLaw(families, np.ones(len(families)), np.array([SHAPES[f] for f in families]))
    law = CoefficientLaw(to_raw, np.where(group < 0, 0.3, np.nan), fixed, group, groups)
    return Prior(law, scales, CorrelationLaw(3.0))


def structures() -> dict[str, tuple[System, Prior]]:
    out = {}
    for n, family in ((3, "half_normal"), (2, "lognormal"), (1, "half_student_t"), (4, "exponential")):
        system = invented_system(n, 12, 3, seed=n)
        out[f"normal, {n} equations, {family}"] = (system, plain_prior(system, family, 1.0 + 0.5 * n))
    system = invented_system(4, 15, 3, seed=9, centre=2.0)
    out["pooled, 4 equations, mixed scales"] = (system, pooled_prior(system))
    system = invented_system(3, 6, 5, seed=7)
    out["normal, more coefficients than the likelihood bears"] = (system, plain_prior(system, "half_normal"))
    return out


STRUCTURES = structures()


@pytest.fixture(params=STRUCTURES, scope="module")
def identity(request: pytest.FixtureRequest) -> Identity:
    return Identity(*STRUCTURES[request.param])


def random_points(identity: Identity, count: int) -> list[tuple[np.ndarray, np.ndarray]]:
    rng = np.random.default_rng(5)
    p = identity.system.n_coefficients + len(identity.prior.coefficients.groups)
    return [(0.6 * rng.normal(size=identity.packed.n_dim), rng.normal(size=p)) for _ in range(count)]


def check_values(identity: Identity, count: int) -> None:
    points = random_points(identity, count)
    ours = np.array([identity.compiled(u)[0] for u, _ in points])
    theirs = np.array([identity.reference(u, theta) for u, theta in points])
    gap = ours - theirs
    # up to one constant; 1e-8 of the values' own size leaves room for the numerical Jacobian only
    assert np.abs(gap - gap[0]).max() <= 1e-8 * np.abs(theirs).max()
    assert np.ptp(theirs) > 1.0


def check_gradients(identity: Identity, count: int) -> None:
    for u, theta in random_points(identity, count):
        ours, theirs = identity.compiled(u)[1], identity.reference_gradient(u, theta)
        assert np.abs(ours - theirs).max() <= 1e-8 * np.abs(theirs).max()


def check_sampled(identity: Identity, count: int) -> None:
    rng = np.random.default_rng(6)
    points = 0.6 * rng.normal(size=(count, identity.sampled.n_dim))
    ours = np.array([identity.compiled_sampled(u)[0] for u in points])
    theirs = np.array([identity.reference_sampled(u) for u in points])
    gap = ours - theirs
    assert np.abs(gap - gap[0]).max() <= 1e-8 * np.abs(theirs).max()
    for u in points[: max(2, count // 10)]:
        numerical = derivative(lambda v: np.asarray(identity.compiled_sampled(v)[0]), u)
        assert np.abs(identity.compiled_sampled(u)[1] - numerical).max() <= 1e-8 * np.abs(numerical).max()


def test_log_density_with_sampled_coefficients_equals_the_pymc_model_too(identity: Identity) -> None:
    check_sampled(identity, 8)


def test_log_density_equals_the_pymc_model_up_to_a_constant(identity: Identity) -> None:
    check_values(identity, 8)


def test_gradient_equals_the_pymc_model(identity: Identity) -> None:
    check_gradients(identity, 2)


@pytest.mark.slow
def test_log_density_and_gradient_equal_the_pymc_model_at_a_hundred_points(identity: Identity) -> None:
    check_values(identity, 100)
    check_gradients(identity, 100)
    check_sampled(identity, 100)
