"""The log posterior of a candidate on one of many data sets, as functions of arrays alone.

A data set is a row of stacked columns; columns that all data sets share are kept apart, so that
they lie in memory once. Where data sets of several lengths share a program, each is filled up by
repeating its last row, and ``kept`` says how many terms count.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import jax
import jax.numpy as jnp

from evidence.layout import Layout, Named, unpack
from evidence.model import Model, call_flexibly
from evidence.problem import derivatives

__all__ = ["Given", "RowDensity"]


class Given(NamedTuple):
    """What a density is given beside z.

    Attributes
    ----------
    hyper : pytree
        Hyperparameters of the candidate.
    shared : dict
        Columns that all data sets have in common.
    columns : dict
        Columns of the data set at hand; stacked (B, ...) where many are meant.
    kept : () or None
        How many log-likelihood terms count; None where all do. Stacked (B,).
    """

    hyper: Any
    shared: Any
    columns: Any
    kept: Any

    def at(self, rows: Any) -> Given:
        """Data sets at some rows (k,) of the stacked ones."""
        columns, kept = jax.tree_util.tree_map(lambda x: x[rows], (self.columns, self.kept))
        return self._replace(columns=columns, kept=kept)

    def axes(self) -> Given:
        """Axes to map over, for ``jax.vmap``."""
        columns, kept = jax.tree_util.tree_map(lambda _: 0, (self.columns, self.kept))
        return Given(None, None, columns, kept)


class RowDensity(NamedTuple):
    """The log posterior of one declaration; every method passes through jit, grad and vmap."""

    model: Model
    layout: Layout

    def parts(self, z: Any, given: Given) -> tuple[Any, Any]:
        """Log-likelihood terms, () or (n,), and log prior plus log Jacobian () at z (d,)."""
        data = {**given.shared, **given.columns}
        values, log_prior, log_jacobian = unpack(self.layout, z, given.hyper, data)
        p = Named({**values, **given.hyper["constants"]}, "parameter", self.model.name)
        columns = Named(data, "column", self.model.name)
        terms = call_flexibly(self.model.log_likelihood, p, columns)
        return terms, log_prior + log_jacobian

    def log_density(self, z: Any, given: Given) -> Any:
        """Log posterior density at z (d,): () [nats]; nan where undefined."""
        terms, rest = self.parts(z, given)
        if given.kept is not None:
            terms = jnp.where(jnp.arange(terms.shape[0]) < given.kept, terms, 0.0)
        return jnp.sum(terms) + rest

    def objective(self, z: Any, given: Given) -> tuple[Any, Any, Any]:
        """Minus the log density with its gradient (d,) and Hessian (d, d)."""
        value, _, slope, curve = derivatives(lambda x: (-self.log_density(x, given), ()), z)
        return value, slope, curve
