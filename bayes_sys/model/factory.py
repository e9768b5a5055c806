"""The model factory: blocks laid together into a PyMC model, the definition that users open and extend."""

from __future__ import annotations

from typing import TYPE_CHECKING

from bayes_sys.model.blocks import coefficients as coefficient_block
from bayes_sys.model.blocks import correlation as correlation_block
from bayes_sys.model.blocks import errors as error_block
from bayes_sys.model.blocks import scales as scale_block
from bayes_sys.prior.cards import PriorCard
from bayes_sys.prior.law import Prior
from bayes_sys.prior.resolve import resolve
from bayes_sys.system.system import System

if TYPE_CHECKING:
    import pymc as pm


def build_model(system: System, card: PriorCard) -> pm.Model:
    """Build the PyMC model of a system under a prior card.

    Named dimensions: ``equation``, ``equation_b``, ``coefficient`` (``equation.regressor``), ``pair``
    (``earlier ~ later``), ``pooled`` (names of pooled regressors). Variables: ``coefficients``, ``scales``,
    ``correlation`` and its distinct ``correlations``, all in the units of the data.

    Raises
    ------
    CardError, NotBuiltError
        If the card does not fit the system.
    """
    return assemble(system, resolve(card, system))


def assemble(system: System, prior: Prior) -> pm.Model:
    """Lay the blocks of a resolved prior together into the PyMC model of a system."""
    import pymc as pm

    coords = {
        "equation": list(system.names),
        "equation_b": list(system.names),
        "coefficient": list(system.coefficient_labels),
        "pair": list(system.pair_labels),
        "pooled": [group.name for group in prior.coefficients.groups],
    }
    with pm.Model(coords=coords) as model:
        coefficients = coefficient_block.declare(prior.coefficients)
        scales = scale_block.declare(prior.scales)
        factor = correlation_block.declare(prior.correlation, system.n_equations, system.pairs)
        error_block.declare(system.factor, coefficients, scales, factor)
    return model
