"""A candidate joined with data: the log posterior density on R^d, its parts and derivatives.

Coordinates z are unconstrained; prior, Jacobian and likelihood stay separable, since the Occam
factor, the share of the data in the curvature and prior derivatives need the parts.
"""

from __future__ import annotations

import dataclasses
import functools
import time
from collections.abc import Callable, Mapping
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np

from evidence.compiling import Program, as_numpy, on_device
from evidence.layout import Layout, Named, lay_out, unpack
from evidence.model import Model, call_flexibly
from evidence.tables import named_arrays
from evidence.tracing import count_terms

__all__ = ["Density", "Evaluation", "PriorPart", "Problem", "derivatives"]

BATCH_TERMS = 4_000_000  # rows x terms held at once
# rows of a batch by the seconds that one value, gradient and Hessian takes: one program serves
# all batches, and a slow density must not be evaluated at padding
BATCH_ROWS = ((2e-3, 256), (5e-2, 32), (np.inf, 4))
HASTY_KINDS = ("evaluate", "prior", "natural")
SMALL = 20_000  # numbers in the data up to which hasty compilation is the better bargain


class Evaluation(NamedTuple):
    """The log posterior density at one point, with derivatives in z.

    Attributes
    ----------
    log_density : ()
        Log of likelihood, prior density and Jacobian [nats].
    gradient : (d,)
        Of the log density.
    hessian : (d, d)
        Of *minus* the log density: the curvature.
    """

    log_density: Any
    gradient: Any
    hessian: Any


class PriorPart(NamedTuple):
    """The part of the log density that does not come from the data, at one point.

    Attributes
    ----------
    log_prior, log_jacobian : (), ()
        [nats].
    gradient, hessian : (d,), (d, d)
        Of the sum of both; of *minus* the sum of both.
    values : dict
        The parameters in natural units, in the order of declaration.
    """

    log_prior: Any
    log_jacobian: Any
    gradient: Any
    hessian: Any
    values: dict[str, Any]


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

    def terms(self, z: Any, hyper: Any, data: Any) -> Any:
        """What the user's log-likelihood returns: () or (n,) [nats]."""
        return self._terms(unpack(self.layout, z, hyper, data)[0], hyper, data)

    def _terms(self, values: Any, hyper: Any, data: Any) -> Any:
        p = Named({**values, **hyper["constants"]}, "parameter", self.model.name)
        return call_flexibly(self.model.log_likelihood, p, Named(data, "column", self.model.name))

    def log_likelihood(self, z: Any, hyper: Any, data: Any) -> Any:
        """Sum of the log-likelihood terms at z: () [nats]."""
        return jnp.sum(self.terms(z, hyper, data))

    def log_density(self, z: Any, hyper: Any, data: Any, weights: Any = None) -> Any:
        """Log posterior density at z, up to the evidence: () [nats]; nan where undefined.

        ``weights`` (n,), one per log-likelihood term, multiply the terms where given.
        """
        values, log_prior, log_jacobian = unpack(self.layout, z, hyper, data)
        terms = self._terms(values, hyper, data)
        terms = terms if weights is None else weights * terms
        return jnp.sum(terms) + log_prior + log_jacobian

    def evaluate(self, z: Any, hyper: Any, data: Any, weights: Any = None) -> Evaluation:
        """Log density, gradient and curvature at z."""
        value, _, slope, curve = derivatives(
            lambda point: (self.log_density(point, hyper, data, weights), ()), z
        )
        return Evaluation(log_density=value, gradient=slope, hessian=-curve)

    def prior_part(self, z: Any, hyper: Any, data: Any) -> PriorPart:
        """Prior and Jacobian with derivatives, and the natural values, at z."""

        def rest(z: Any) -> Any:
            values, log_prior, log_jacobian = unpack(self.layout, z, hyper, data)
            return log_prior + log_jacobian, (values, log_prior, log_jacobian)

        _, (values, log_prior, log_jacobian), slope, curve = derivatives(rest, z)
        return PriorPart(log_prior, log_jacobian, slope, -curve, values)


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
        self._key = (self.reading, _signature(hyper), _signature(arrays))
        self.layout, self.terms, self.float32 = model.programs.get(
            ("layout", *self._key), lambda: self._inspect(hyper, arrays)
        )
        self.hyper, self.data = on_device((hyper, arrays))
        self._leaves, self._structure = jax.tree_util.tree_flatten((self.hyper, self.data))
        self.density = Density(model, self.layout)
        self.centre, self.spread, self.spread_known = self.layout.prior_scale(hyper, arrays)
        self.start = self.layout.user_start(self.centre, hyper, arrays)
        self.evaluations = 0
        self._seconds = {"evaluate": np.inf, "batch": np.inf}  # the fastest seen

    def _inspect(self, hyper: Any, arrays: Mapping[str, Any]) -> tuple[Layout, int | None, Any]:
        layout = lay_out(self.model, hyper, arrays)
        density = Density(self.model, layout)
        terms, float32 = count_terms(self.model.name, density.terms, layout.dim, hyper, arrays)
        return layout, terms, (*self.model.float32, *self.reading.float32, *float32)

    @property
    def _is_small(self) -> bool:
        numbers = sum(np.size(leaf) for leaf in self._leaves)
        return numbers * max(self.dim, 1) <= 10 * SMALL and numbers <= SMALL

    @property
    def dim(self) -> int:
        """Number of unconstrained coordinates d."""
        return self.layout.dim

    @property
    def names(self) -> tuple[str, ...]:
        """(d,) labels of the coordinates in the user's words, e.g. "log rate"."""
        return self.layout.labels

    def program(
        self, kind: str, build: Callable[[Density], Callable[..., Any]]
    ) -> Callable[..., Any]:
        """Compiled program of one kind for this candidate and these shapes, kept on the model.

        ``build`` makes a function of (own arguments, hyper, data); what is returned takes its own
        arguments only and gives JAX arrays.
        """

        def compiled() -> Program:
            # hyper and data go in as a flat list: unfolding pytrees in Python costs at each call
            function, structure = build(Density(self.model, self.layout)), self._structure

            def flat(own: tuple[Any, ...], leaves: list[Any]) -> Any:
                return function(*own, *jax.tree_util.tree_unflatten(structure, leaves))

            flat.__name__ = f"evidence_{kind}"  # a part of the key of the compile cache
            return Program(flat, hasty=kind in HASTY_KINDS and self._is_small)

        program = self.model.programs.get((kind, *self._key), compiled)
        return lambda *own: program(own, self._leaves)

    def count_fit(self) -> int:
        """Count this fit; return how many fits of the same shapes went before."""
        key = (self.reading.digest, *self._key[1:])
        before = self.model.programs.fits.get(key, 0)
        self.model.programs.fits[key] = before + 1
        return before

    def evaluate(self, z: np.ndarray) -> Evaluation:
        """Log density and derivatives at z (d,), as NumPy arrays."""
        self.evaluations += 1
        began = time.perf_counter()
        packed = np.asarray(self.program("evaluate", _evaluate)(z))
        self._took("evaluate", time.perf_counter() - began)
        d = self.dim
        return Evaluation(packed[0], packed[1 : d + 1], packed[d + 1 :].reshape(d, d))

    def prior_part(self, z: np.ndarray) -> PriorPart:
        """What does not come from the data at z (d,), as NumPy arrays."""
        part = as_numpy(self.program("prior", _prior_part)(z))
        return part._replace(values=self._in_order(part.values))

    def likelihood_part(self, z: np.ndarray) -> Evaluation:
        """Log-likelihood and derivatives at z (d,): the whole less the prior's part."""
        whole, part = self.evaluate(z), self.prior_part(z)
        return Evaluation(
            whole.log_density - part.log_prior - part.log_jacobian,
            whole.gradient - part.gradient,
            whole.hessian - part.hessian,
        )

    def _in_order(self, values: dict[str, Any]) -> dict[str, Any]:
        """JAX sorts the names of a dict; the reader wants the order of declaration."""
        return {block.name: values[block.name] for block in self.layout.blocks}

    def hessian(self, z: np.ndarray) -> np.ndarray:
        """(d, d) Hessian of minus the log density at z; may hold nan."""
        return self.evaluate(z).hessian

    def batch(self, z: np.ndarray) -> np.ndarray:
        """Log density at many points: (n, d) -> (n,) [nats]; nan counts as -inf, +inf stays."""
        program = self.program("batch", _batch)
        rows = self._rows_per_call
        out = np.empty(len(z))
        for first in range(0, len(z), rows):
            began = time.perf_counter()
            piece = z[first : first + rows]
            padded = np.concatenate([piece, np.repeat(piece[-1:], rows - len(piece), axis=0)])
            out[first : first + rows] = np.asarray(program(padded))[: len(piece)]
            self._took("batch", (time.perf_counter() - began) / rows)
        self.evaluations += len(z)
        return np.where(np.isnan(out), -np.inf, out)

    @property
    def seconds_per_call(self) -> float:
        """Measured cost of one log density [s]; before the first batch, judged by a Hessian's."""
        if np.isfinite(self._seconds["batch"]):
            return self._seconds["batch"]
        hessian = self._seconds["evaluate"]
        return hessian / (3 + 3 * self.dim) if np.isfinite(hessian) else 0.0

    def _took(self, what: str, seconds: float) -> None:
        self._seconds[what] = min(self._seconds[what], seconds)  # the first one compiles

    @functools.cached_property
    def _rows_per_call(self) -> int:
        seconds = self._seconds["evaluate"]
        by_speed = next(rows for limit, rows in BATCH_ROWS if seconds <= limit)
        return int(np.clip(BATCH_TERMS // max(self.terms or 1, self.dim), 4, by_speed))

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
        values = as_numpy(self.program("natural", _natural)(np.atleast_2d(z)))
        return {k: v[0] if single else v for k, v in self._in_order(values).items()}


def _evaluate(density: Density) -> Callable[..., Any]:
    def evidence_evaluate(z: Any, hyper: Any, data: Any) -> Any:
        here = density.evaluate(z, hyper, data)
        # one array: fetching each output by itself costs more than the arithmetic
        return jnp.concatenate([here.log_density[None], here.gradient, here.hessian.ravel()])

    return evidence_evaluate


def _prior_part(density: Density) -> Callable[..., Any]:
    def evidence_prior(z: Any, hyper: Any, data: Any) -> PriorPart:
        return density.prior_part(z, hyper, data)

    return evidence_prior


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
