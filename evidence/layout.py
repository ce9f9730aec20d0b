"""How named parameters lie in the vector of unconstrained coordinates.

:func:`unpack` is the one place where z becomes named values, with the log prior density and the
log Jacobian of the map.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Iterator, Mapping
from typing import Any, NoReturn

import jax
import jax.numpy as jnp
import numpy as np

from evidence.compiling import float64
from evidence.complaints import DeclarationError, near_name, sentence
from evidence.distributions.base import Distribution
from evidence.model import Model, as_prior, call_flexibly
from evidence.tracing import reworded

__all__ = ["Layout", "Named", "lay_out", "prior_of", "unpack"]


@jax.tree_util.register_pytree_node_class
class Named(dict):
    """Named values as the user's functions see them: an unknown name is a clear mistake."""

    def __init__(self, values: Mapping[str, Any], kind: str, owner: str) -> None:
        super().__init__(values)
        self.kind, self.owner = kind, owner

    def __missing__(self, name: str) -> NoReturn:
        known = ", ".join(map(str, self)) or "none"
        what = "declared as a parameter or constant" if self.kind == "parameter" else "in the data"
        raise DeclarationError(
            f"a function of {self.owner!r} asks for {name!r}, which is not {what}. "
            f"There are: {known}.{near_name(name, self)}"
        )

    def tree_flatten(self) -> tuple[tuple[Any, ...], tuple[Any, ...]]:
        """Leaves in the order of the names, as JAX asks for."""
        return tuple(self.values()), (tuple(self), self.kind, self.owner)

    @classmethod
    def tree_unflatten(cls, aux: tuple[Any, ...], leaves: Any) -> Named:
        """Build again from :meth:`tree_flatten`."""
        names, kind, owner = aux
        return cls(dict(zip(names, leaves, strict=True)), kind, owner)


@dataclasses.dataclass(frozen=True, kw_only=True)
class Block:
    """The place of one parameter: its shape in natural units, its slice of z and its labels."""

    name: str
    shape: tuple[int, ...]
    z_shape: tuple[int, ...]
    first: int
    labels: tuple[str, ...]

    @property
    def place(self) -> slice:
        """Slice of the coordinates that belong to the parameter."""
        return slice(self.first, self.first + int(np.prod(self.z_shape)))


@dataclasses.dataclass(frozen=True, kw_only=True)
class Layout:
    """The blocks of all parameters of a candidate, in the order of declaration."""

    model: Model
    blocks: tuple[Block, ...]

    @property
    def dim(self) -> int:
        """Number of unconstrained coordinates d."""
        return sum(len(block.labels) for block in self.blocks)

    @property
    def labels(self) -> tuple[str, ...]:
        """(d,) labels of the coordinates."""
        return tuple(label for block in self.blocks for label in block.labels)

    def prior_scale(self, hyper: Any, data: Any) -> tuple[np.ndarray, np.ndarray, bool]:
        """Prior centre (d,) and spread (d,) in z, in closed form, and whether they are known."""
        if self.model.bare:
            return self._bare_scale(hyper)
        centres, spreads = [], []
        for _, centre, spread in self._walk_centres(hyper, data):
            centres.append(np.ravel(centre))
            spreads.append(np.ravel(spread))
        return _flat(centres), _flat(spreads), True

    def _bare_scale(self, hyper: Any) -> tuple[np.ndarray, np.ndarray, bool]:
        centre = _flat(
            [
                np.ravel(hyper["supports"][b.name].inverse(self.model.start[b.name], np))
                for b in self.blocks
            ]
        )
        if not self.model.spread:
            return centre, np.maximum(1.0, np.abs(centre)), False
        return centre, _flat([np.ravel(self.model.spread[b.name]) for b in self.blocks]), True

    def _walk_centres(self, hyper: Any, data: Any) -> Iterator[tuple[Any, Any, Any]]:
        """Each prior with its centre and spread, dependent ones at the centres before them."""
        values = Named(hyper["constants"], "parameter", self.model.name)
        columns = Named(data, "column", self.model.name)
        with float64():
            for block in self.blocks:
                prior = prior_of(self.model, block.name, hyper, values, columns)
                centre, spread = prior.centre_and_spread()
                centre = np.broadcast_to(np.asarray(centre, np.float64), block.z_shape)
                spread = np.broadcast_to(np.asarray(spread, np.float64), block.z_shape)
                yield prior, centre, spread
                values[block.name] = prior.support.forward(centre, np)

    def user_start(self, centre: np.ndarray, hyper: Any, data: Any) -> np.ndarray | None:
        """The user's start in z (d,), the prior's centre where none is given; None without one.

        Raises
        ------
        DeclarationError
            A start of the wrong shape or outside its support.
        """
        if self.model.bare:
            return centre
        return self._place(self.model.start, centre, hyper, data) if self.model.start else None

    def unconstrained(self, values: Mapping[str, Any], hyper: Any, data: Any) -> np.ndarray:
        """Coordinates z (d,) of natural values, by name.

        Raises
        ------
        DeclarationError
            A value of the wrong shape or outside its support.
        """
        return self._place(values, np.zeros(self.dim), hyper, data)

    def _place(
        self, given: Mapping[str, Any], otherwise: np.ndarray, hyper: Any, data: Any
    ) -> np.ndarray:
        """z (d,) of the given values, with the other coordinates left as they are."""
        z = otherwise.copy()
        values = Named(hyper["constants"], "parameter", self.model.name)
        columns = Named(data, "column", self.model.name)
        with float64():
            for block in self.blocks:
                support = self._support(block.name, hyper, values, columns)
                if block.name in given:
                    value = self._checked_value(block, given[block.name], support)
                    z[block.place] = np.ravel(support.inverse(value, np))
                piece = np.reshape(z[block.place], block.z_shape)
                values[block.name] = support.forward(piece, np)
        return z

    def _support(self, name: str, hyper: Any, values: Named, columns: Named) -> Any:
        if self.model.bare:
            return hyper["supports"][name]
        return prior_of(self.model, name, hyper, values, columns).support

    def _checked_value(self, block: Block, given: Any, support: Any) -> np.ndarray:
        try:
            value = np.broadcast_to(np.asarray(given, np.float64), block.shape)
        except ValueError:
            raise DeclarationError(
                sentence(
                    f"the value of {block.name!r} in {self.model.name!r} must have the shape "
                    f"{block.shape}",
                    str(np.shape(given)),
                )
            ) from None
        if not np.all(support.contains(value)):
            raise DeclarationError(
                sentence(
                    f"the value of {block.name!r} in {self.model.name!r} must lie inside its "
                    "prior's support",
                    str(given),
                )
            )
        return value

    def entries(self) -> Iterator[tuple[str, str, tuple[int, ...]]]:
        """Each scalar entry in natural units: (label such as "rate[2]", name, index)."""
        for block in self.blocks:
            for index in np.ndindex(*block.shape):
                shown = ",".join(map(str, index))
                yield (f"{block.name}[{shown}]" if index else block.name), block.name, index


def lay_out(model: Model, hyper: Any, data: Any) -> Layout:
    """Find names, shapes and labels of all coordinates by tracing the priors once.

    Raises
    ------
    DeclarationError
        A dependent prior that cannot be traced or returns no distribution.
    """
    blocks: list[Block] = []

    def walk(hyper: Any, data: Any) -> None:
        values = Named(hyper["constants"], "parameter", model.name)
        columns = Named(data, "column", model.name)
        for name in model.parameters:
            if model.bare:
                support, shape = hyper["supports"][name], np.shape(model.start[name])
            else:
                prior = prior_of(model, name, hyper, values, columns)
                support, shape = prior.support, (*prior.batch_shape, *prior.event_shape)
            block = _block(name, tuple(shape), support, sum(len(b.labels) for b in blocks))
            blocks.append(block)
            values[name] = support.forward(jnp.zeros(block.z_shape, jnp.float64))

    with float64(), reworded(f"the priors of {model.name!r}"):
        jax.eval_shape(walk, hyper, dict(data))
    return Layout(model=model, blocks=tuple(blocks))


def _block(name: str, shape: tuple[int, ...], support: Any, first: int) -> Block:
    z_shape = tuple(support.z_shape(shape))
    labels = tuple(support.labels(name, shape))
    return Block(name=name, shape=shape, z_shape=z_shape, first=first, labels=labels)


def unpack(layout: Layout, z: Any, hyper: Any, data: Any) -> tuple[dict[str, Any], Any, Any]:
    """Named values at z (d,), the log prior density and the log Jacobian there [nats]."""
    model = layout.model
    values = Named(hyper["constants"], "parameter", model.name)
    columns = Named(data, "column", model.name)
    log_prior, log_jacobian = jnp.zeros(()), jnp.zeros(())
    for block in layout.blocks:
        piece = jnp.reshape(z[block.place], block.z_shape)
        prior = None if model.bare else prior_of(model, block.name, hyper, values, columns)
        support = hyper["supports"][block.name] if prior is None else prior.support
        jacobian = jnp.sum(support.log_jacobian(piece))
        if prior is not None:
            # in z the density is exact where the natural value rounds to an edge of the support
            log_prior = log_prior + jnp.sum(prior.log_prob_z(piece)) - jacobian
        log_jacobian = log_jacobian + jacobian
        values[block.name] = support.forward(piece)
    return {block.name: values[block.name] for block in layout.blocks}, log_prior, log_jacobian


def prior_of(model: Model, name: str, hyper: Any, values: Named, data: Named) -> Any:
    """The prior of a parameter, given the values of those before it.

    Raises
    ------
    DeclarationError
        A prior function that cannot be traced, or returns no distribution.
    """
    declared = model.priors[name]
    if isinstance(declared, Distribution):
        return hyper["priors"][name]
    with reworded(f"the prior of {name!r} in {model.name!r}"):
        prior = call_flexibly(declared, values, data)
    if hasattr(prior, "log_prob"):
        prior = as_prior(model.name, name, prior)
    if not isinstance(prior, Distribution):
        raise DeclarationError(
            sentence(
                f"the prior function of {name!r} in {model.name!r} must return a distribution",
                type(prior).__name__,
            )
        )
    return prior


def _flat(pieces: list[np.ndarray]) -> np.ndarray:
    return np.concatenate(pieces) if pieces else np.zeros(0)
