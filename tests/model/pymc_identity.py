"""Holds the compiled density against the PyMC model, point by point.

For any coefficients ``theta``: log p(D, R, spreads | y) = log p(theta, D, R, spreads, y) - log p(theta | D, R,
spreads, y) + constant. The first term on the right is PyMC's, the second a dense Gaussian formula written here,
and the change of variables from (D, R, spreads) to the sampler's coordinates is differentiated numerically: the
right-hand side shares no formula with the compiled density.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from bayes_sys.model.blocks import coefficients as coefficient_block
from bayes_sys.model.blocks import correlation as correlation_block
from bayes_sys.model.compiled import value_and_gradient
from bayes_sys.model.density import covariance_roots, pack, sampled_coefficients
from bayes_sys.model.factory import assemble
from bayes_sys.prior.law import Prior
from bayes_sys.system.system import System

Array = NDArray[np.float64]


def derivative(function: Any, at: Array, step: float = 2e-3) -> Array:
    """Central differences of sixth order, one column per argument: error about 1e-12 for smooth functions."""
    weights = {1: 3 / 4, 2: -3 / 20, 3: 1 / 60}
    columns = []
    for i in range(len(at)):
        move = np.zeros_like(at)
        move[i] = step
        columns.append(
            sum(w * (function(at + k * move) - function(at - k * move)) for k, w in weights.items()) / step
        )
    return np.stack(columns, axis=-1)


@dataclass
class Identity:
    """One system under one prior, seen by both definitions."""

    system: System
    prior: Prior

    def __post_init__(self) -> None:
        from pytensor.compile.mode import Mode

        self.packed = pack(self.system.factor, self.prior, integrated=True)
        self.sampled = pack(self.system.factor, self.prior, integrated=False)
        self.model = assemble(self.system, self.prior)
        mode = Mode(linker="py", optimizer=None)
        self.variables = self.model.value_vars
        arguments = {"inputs": self.variables, "mode": mode, "on_unused_input": "ignore"}
        self._value = self.model.compile_fn(self.model.logp(jacobian=False), **arguments)
        self._gradient = self.model.compile_fn(self.model.dlogp(jacobian=False), **arguments)
        self._forward = {rv.name: self._transform(rv, mode) for rv in self.model.free_RVs}

    def _transform(self, rv: Any, mode: Any) -> Any:
        import pytensor

        transform = self.model.rvs_to_transforms[rv]
        if transform is None:
            return lambda value: value
        argument = rv.type("argument")
        return pytensor.function([argument], transform.forward(argument, *rv.owner.inputs), mode=mode)

    # the sampler's coordinates, in the words of the laws

    def quantities(self, u: Array) -> tuple[Array, Array, Array]:
        """Scales, Cholesky factor of the correlation, spreads."""
        root = covariance_roots(u[None, :], self.packed)[0]
        scales = np.sqrt((root**2).sum(axis=1))
        n = len(scales)
        scores = u[n * (n + 1) // 2 : self.packed.n_dim]
        spreads = coefficient_block.spreads(self.prior.coefficients, scores)
        return scales, root / scales[:, None], spreads

    def log_volume(self, u: Array) -> float:
        """Log Jacobian of u -> (D, distinct correlations, spreads)."""

        def flat(v: Array) -> Array:
            scales, root, spreads = self.quantities(v)
            matrix = root @ root.T
            return np.concatenate([scales, [matrix[a, b] for a, b in self.system.pairs], spreads])

        return float(np.linalg.slogdet(derivative(flat, u))[1])

    # PyMC's side

    def point(self, u: Array, theta: Array) -> dict[str, Array]:
        """PyMC's point for coordinates u and standardised coefficients theta (pooled means last)."""
        law = self.prior.coefficients
        scales, root, spreads = self.quantities(u)
        k, n_groups = len(law.mean), len(law.groups)
        fixed = ~law.pooled
        group_mean = np.array([g.mean + g.mean_scale * theta[k + i] for i, g in enumerate(law.groups)])
        values: dict[str, Array] = {
            "stated_fixed": (law.mean + law.scale * theta[:k])[fixed],
            "stated_deviation": theta[:k][law.pooled],
            "pooled_mean": group_mean,
            "pooled_spread": spreads,
            "scales": scales,
            correlation_block.FACTOR: root,
        }
        for family in set(self.prior.scales.family):
            members = [f == family for f in self.prior.scales.family]
            values[f"scales_{family}"] = scales[members]
        del n_groups
        out = {}
        for rv in self.model.free_RVs:
            name = self.model.rvs_to_values[rv].name
            out[name] = np.asarray(self._forward[rv.name](values[rv.name]))
        return out

    def pymc_value(self, u: Array, theta: Array) -> float:
        """Log density in (theta, D, R, spreads): PyMC speaks of L where we speak of R, and of b, not theta."""
        value = float(self._value(self.point(u, theta)))
        return value + self._measure(u)

    def _measure(self, u: Array) -> float:
        law = self.prior.coefficients
        _, root, _ = self.quantities(u)
        n = len(root)
        to_matrix = -sum((n - i - 1) * np.log(root[i, i]) for i in range(n))
        return float(to_matrix + np.log(law.scale[~law.pooled]).sum())

    def pymc_gradient(self, u: Array, theta: Array) -> Array:
        """Derivative of ``pymc_value`` in u: PyMC's own gradient through the chain rule."""

        def flat(v: Array) -> Array:
            return np.concatenate([np.ravel(x) for x in self.point(v, theta).values()])

        inner = np.concatenate([np.ravel(g) for g in [self._gradient(self.point(u, theta))]])
        return inner @ derivative(flat, u) + derivative(lambda v: np.asarray(self._measure(v)), u)

    # the dense Gaussian

    def conditional(self, u: Array, theta: Array) -> float:
        """Log density of theta given everything else, from the stacked dense regression."""
        law = self.prior.coefficients
        scales, root, spreads = self.quantities(u)
        columns = law.to_raw @ coefficient_block.scale_columns(law, spreads[None, :])[0]
        sizes = [e.design.shape[1] for e in self.system.equations]
        periods, n = self.system.responses.shape
        stacked = np.zeros((n * periods, sum(sizes)))
        for i, equation in enumerate(self.system.equations):
            stacked[i * periods : (i + 1) * periods, self.system.slice_of(i)] = equation.design
        design = stacked @ columns
        target = self.system.responses.T.ravel() - stacked @ law.to_raw @ law.stated_mean
        whiten = np.kron(np.linalg.inv(scales[:, None] * root), np.eye(periods))
        x, y = whiten @ design, whiten @ target
        precision = np.eye(design.shape[1]) + x.T @ x
        mean = np.linalg.solve(precision, x.T @ y)
        off = theta - mean
        return float(0.5 * np.linalg.slogdet(precision)[1] - 0.5 * off @ precision @ off)

    # both sides

    def compiled(self, u: Array) -> tuple[float, Array]:
        """Value and gradient of the compiled density."""
        return value_and_gradient(u, self.packed.data)

    def reference(self, u: Array, theta: Array) -> float:
        """The right-hand side of the identity."""
        return self.pymc_value(u, theta) - self.conditional(u, theta) + self.log_volume(u)

    def compiled_sampled(self, u: Array) -> tuple[float, Array]:
        """Value and gradient of the compiled density that samples the coefficients, in all its coordinates."""
        return value_and_gradient(u, self.sampled.data)

    def reference_sampled(self, u: Array) -> float:
        """What PyMC says in those coordinates, up to a constant."""
        law = self.prior.coefficients
        stated, mean = sampled_coefficients(u[None, :], self.sampled, law)
        spreads = self.quantities(u)[2]
        scale, centre = law.scale.copy(), law.mean.copy()
        scale[law.pooled] = spreads[law.group[law.pooled]]
        centre[law.pooled] = mean[0][law.group[law.pooled]]
        standard = [(mean[0][i] - g.mean) / g.mean_scale for i, g in enumerate(law.groups)]
        theta = np.concatenate([(stated[0] - centre) / scale, standard])
        inner = u[: self.packed.n_dim]
        return self.pymc_value(inner, theta) + self.log_volume(inner) - float(np.log(scale).sum())

    def reference_gradient(self, u: Array, theta: Array) -> Array:
        """Its derivative in u."""
        rest = derivative(lambda v: np.asarray(self.log_volume(v) - self.conditional(v, theta)), u, 5e-3)
        return self.pymc_gradient(u, theta) + rest
