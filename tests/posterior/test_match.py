from __future__ import annotations

import numpy as np
import pytest
from helpers import make_system
from trees import make_tree

from bayes_sys.errors import InputError
from bayes_sys.posterior import tables
from bayes_sys.posterior.checks import predictive_checks

TABLES = (
    tables.coefficient_table,
    tables.scale_table,
    tables.correlation_table,
    tables.fitted_table,
    tables.equation_table,
    lambda posterior, system: predictive_checks(posterior, system, 1),
)


def some_system(names=("north", "south"), n_slopes=1):
    rng = np.random.default_rng(5)
    designs = [np.column_stack([np.ones(12), rng.normal(size=(12, n_slopes))]) for _ in names]
    return make_system(designs, rng.normal(size=(12, len(names))), names)


@pytest.mark.parametrize("table", TABLES)
def test_a_table_is_only_made_of_a_posterior_and_its_own_system(table):
    system = some_system()
    tree = make_tree(system, n_draws=5)
    for posterior, other, hint in (
        (system, tree, "posterior comes first"),
        (tree, "study.toml", "not a str"),
        ({"coefficients": 1}, system, "not a dict"),
        (tree, some_system(("north", "east")), "“south” stands where the system has “east”"),
        (tree, some_system(n_slopes=2), "it has 4 coefficients, the system 6"),
        (tree, some_system(("north", "south", "east")), "it has 2 equations, the system 3"),
    ):
        with pytest.raises(InputError, match=hint):
            table(posterior, other)
    assert len(table(tree, system))


def test_a_system_is_shown_in_one_line():
    assert repr(some_system()) == (
        "<System 'A system made from arrays': 2 equations, 12 periods 1 to 12, 4 coefficients>"
    )
