"""A candidate joined with data: the log posterior density on R^d, its parts and derivatives.

Coordinates z are unconstrained; prior, Jacobian and likelihood stay separable, since the Occam
factor, the share of the data in the curvature and prior derivatives need the parts.
"""

from __future__ import annotations

import dataclasses
import time
from collections.abc import Callable, Mapping
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np

from evidence.compiling import Program, on_device
from evidence.layout import Layout, Named, lay_out, unpack
from evidence.model import Model, call_flexibly
from evidence.tables import named_arrays
from evidence.tracing import count_terms

__all__ = ["Evaluation", "Problem", "derivatives"]

BATCH_ROWS = 1024
BATCH_TERMS = 4_000_000  # rows x terms held at once


class Evaluation(NamedTuple):
    """The log posterior density at one point, in parts, with derivatives in z.

    Attributes
    ----------
    log_likelihood, log_prior, log_jacobian : ()
        Parts of the log density [nats].
    gradient : (d,)
        Of the log posterior density, all parts.
    hessian : (d, d)
        Of *minus* the log posterior density: the curvature.
    likelihood_gradient : (d,)
        Of the log-likelihood.
    likelihood_hessian : (d, d)
        Of *minus* the log-likelihood.
    values : dict
        The parameters in natural units.
    """

    log_likelihood: Any
    log_prior: Any
    log_jacobian: Any
    gradient: Any
    hessian: Any
    likelihood_gradient: Any
    likelihood_hessian: Any
    values: Any

    @property
    def log_density(self) -> Any:
        """Log posterior density in z, up to the evidence [nats]."""
        return self.log_likelihood + self.log_prior + self.log_jacobian


def derivatives(function: Callable[..., Any], z: Any) -> tuple[Any, Any, Any, Any]:
    """Value, auxiliary output, gradient and Hessian of a scalar function, forward over reverse."""

    def gradient(z: Any) -> Any:
        (value, aux), slope = jax.value_and_grad(function, has_aux=True)(z)
        return slope, (value, aux, slope)

    hessian, (value, aux, slope) = jax.jacfwd(gradient, has_aux=True)(z)
    return value, aux, slope, hessian


@dataclasses.dataclass(frozen=True)
class Density:
    """The log posterior of one declaration as pure functions of arrays and pytrees.

    Every method can be traced, differentiated and mapped by JAX; names and sentences are added
    elsewhere. ``z`` has shape (d,).
    """

    model: Model
    layout: Layout

    def log_likelihood(self, z: Any, hyper: Any, data: Any) -> Any:
        """Sum of the log-likelihood terms at z: () [nats]."""
        values, _, _ = unpack(self.layout, z, hyper, data)
        return self._likelihood(values, hyper, data)

    def _likelihood(self, values: Any, hyper: Any, data: Any) -> Any:
        p = Named({**values, **hyper["constants"]}, "parameter", self.model.name)
        d = Named(data, "column", self.model.name)
        return jnp.sum(jnp.asarray(call_flexibly(self.model.log_likelihood, p, d), jnp.float64))

    def terms(self, z: Any, hyper: Any, data: Any) -> Any:
        """What the user's log-likelihood returns: () or (n,) [nats]."""
        values, _, _ = unpack(self.layout, z, hyper, data)
        p = Named({**values, **hyper["constants"]}, "parameter", self.model.name)
        return call_flexibly(self.model.log_likelihood, p, Named(data, "column", self.model.name))

    def log_density(self, z: Any, hyper: Any, data: Any) -> Any:
        """Log posterior density at z, up to the evidence: () [nats]; nan where undefined."""
        values, log_prior, log_jacobian = unpack(self.layout, z, hyper, data)
        return self._likelihood(values, hyper, data) + log_prior + log_jacobian

    def evaluate(self, z: Any, hyper: Any, data: Any) -> Evaluation:
        """Parts, gradient and Hessian at z."""

        def likelihood(z: Any) -> Any:
            return self.log_likelihood(z, hyper, data), ()

        def rest(z: Any) -> Any:
            values, log_prior, log_jacobian = unpack(self.layout, z, hyper, data)
            return log_prior + log_jacobian, (values, log_prior, log_jacobian)

        fit, _, fit_slope, fit_curve = derivatives(likelihood, z)
        _, (values, log_prior, log_jacobian), slope, curve = derivatives(rest, z)
        return Evaluation(
            log_likelihood=fit,
            log_prior=log_prior,
            log_jacobian=log_jacobian,
            gradient=fit_slope + slope,
            hessian=-(fit_curve + curve),
            likelihood_gradient=fit_slope,
            likelihood_hessian=-fit_curve,
            values=values,
        )


class Problem:
    """One candidate on one data set, with its compiled programs and NumPy around them.

    Parameters
    ----------
    model : Model
    data : None, mapping of arrays, DataFrame or xarray Dataset

    Raises
    ------
    DeclarationError
        The candidate's functions cannot be traced on these data, or return the wrong thing.
    DataError
        The data hold nan or text.
    """

    def __init__(self, model: Model, data: Any = None) -> None:
        self.model = model
        self.arrays = named_arrays(data)
        self.reading = model.reading()
        hyper, arrays = model.hyperparameters(), dict(self.arrays)
        self._key = (self.reading.digest, _signature(hyper), _signature(arrays))
        self.layout, self.terms, self.float32 = model.programs.get(
            ("layout", *self._key), lambda: self._inspect(hyper, arrays)
        )
        self.hyper, self.data = on_device((hyper, arrays))
        self.density = Density(model, self.layout)
        self.centre, self.spread, self.spread_known = self.layout.prior_scale(hyper, arrays)
        self.start = self.layout.user_start(self.centre, hyper, arrays)
        self.evaluations = 0
        self._cost = 0.0

    def _inspect(self, hyper: Any, arrays: Mapping[str, Any]) -> tuple[Layout, int | None, Any]:
        layout = lay_out(self.model, hyper, arrays)
        density = Density(self.model, layout)
        terms, float32 = count_terms(self.model.name, density.terms, layout.dim, hyper, arrays)
        return layout, terms, (*self.reading.float32, *float32)

    @property
    def dim(self) -> int:
        """Number of unconstrained coordinates d."""
        return self.layout.dim

    @property
    def names(self) -> tuple[str, ...]:
        """(d,) labels of the coordinates in the user's words, e.g. "log rate"."""
        return self.layout.labels

    def program(self, kind: str, build: Callable[[Density], Callable[..., Any]]) -> Program:
        """Compiled program of one kind for this candidate and these shapes, kept on the model."""
        return self.model.programs.get(
            (kind, *self._key), lambda: Program(build(Density(self.model, self.layout)))
        )

    def count_fit(self) -> int:
        """Count this fit; return how many fits of the same shapes went before."""
        before = self.model.programs.fits.get(self._key, 0)
        self.model.programs.fits[self._key] = before + 1
        return before

    def evaluate(self, z: np.ndarray) -> Evaluation:
        """Parts and derivatives at z (d,), as NumPy arrays."""
        self.evaluations += 1
        here = self.program("evaluate", _evaluate).numpy(z, self.hyper, self.data)
        return here._replace(values=self._in_order(here.values))

    def _in_order(self, values: dict[str, Any]) -> dict[str, Any]:
        """JAX sorts the names of a dict; the reader wants the order of declaration."""
        return {block.name: values[block.name] for block in self.layout.blocks}

    def hessian(self, z: np.ndarray) -> np.ndarray:
        """(d, d) Hessian of minus the log density at z; may hold nan."""
        return self.evaluate(z).hessian

    def batch(self, z: np.ndarray) -> np.ndarray:
        """Log density at many points: (n, d) -> (n,) [nats]; nan counts as -inf, +inf stays."""
        program = self.program("batch", _batch)
        rows = self._rows_per_call(len(z))
        out = np.empty(len(z))
        began = time.perf_counter()
        for first in range(0, len(z), rows):
            piece = z[first : first + rows]
            padded = np.concatenate([piece, np.repeat(piece[-1:], rows - len(piece), axis=0)])
            out[first : first + rows] = program(padded, self.hyper, self.data)[: len(piece)]
        self._cost = (time.perf_counter() - began) / max(len(z), 1)
        self.evaluations += len(z)
        return np.where(np.isnan(out), -np.inf, out)

    @property
    def seconds_per_call(self) -> float:
        """Measured cost of one density evaluation in a batch, after the first batch [s]."""
        return self._cost

    def _rows_per_call(self, wanted: int) -> int:
        most = int(np.clip(BATCH_TERMS // max(self.terms or 1, self.dim), 8, BATCH_ROWS))
        return most if wanted > 64 else min(64, most)

    def log_density(self, z: Any) -> Any:
        """Traceable log density at z (d,): () [nats]; call inside the float64 context."""
        return self.density.log_density(z, self.hyper, self.data)

    def unconstrained(self, values: Mapping[str, Any]) -> np.ndarray:
        """Coordinates z (d,) of named natural values."""
        return self.layout.unconstrained(values, self.model.hyperparameters(), self.arrays)

    def natural(self, z: np.ndarray) -> dict[str, np.ndarray]:
        """Values in natural units at z (d,), or at draws (n, d): name -> (n, *shape)."""
        z = np.asarray(z, dtype=np.float64)
        single = z.ndim == 1
        values = self.program("natural", _natural).numpy(np.atleast_2d(z), self.hyper, self.data)
        return {k: v[0] if single else v for k, v in self._in_order(values).items()}


def _evaluate(density: Density) -> Callable[..., Any]:
    def evidence_evaluate(z: Any, hyper: Any, data: Any) -> Evaluation:
        return density.evaluate(z, hyper, data)

    return evidence_evaluate


def _batch(density: Density) -> Callable[..., Any]:
    def evidence_batch(z: Any, hyper: Any, data: Any) -> Any:
        return jax.vmap(lambda point: density.log_density(point, hyper, data))(z)

    return evidence_batch


def _natural(density: Density) -> Callable[..., Any]:
    def evidence_natural(z: Any, hyper: Any, data: Any) -> Any:
        return jax.vmap(lambda point: unpack(density.layout, point, hyper, data)[0])(z)

    return evidence_natural


def _signature(tree: Any) -> tuple[Any, ...]:
    leaves, structure = jax.tree_util.tree_flatten(tree)
    return (str(structure), *((np.shape(x), np.asarray(x).dtype.str) for x in leaves))
