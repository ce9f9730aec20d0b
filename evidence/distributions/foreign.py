"""numpyro's distributions behind the interface of our own.

numpyro is imported here only, and only when one of its distributions arrives.
"""

from __future__ import annotations

import dataclasses
import functools
import types
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np

from evidence.complaints import DeclarationError, load_optional, sentence
from evidence.distributions.base import CentreSpread, Distribution
from evidence.distributions.coordinates import Index, element
from evidence.distributions.fields import brief, float32_names, identity_key
from evidence.distributions.supports import (
    Support,
    above,
    below,
    between,
    discrete,
    fraction,
    ordered,
    positive,
    real,
)

__all__ = ["ForeignDistribution", "ForeignSupport", "adapt"]

DRAWS = 256  # for centre and spread: enough for a start, and 16-84 % quantiles to 0.1 sd


def adapt(distribution: Any) -> Distribution:
    """Return a numpyro distribution behind our interface; our own are returned as they are.

    Parameters
    ----------
    distribution : numpyro.distributions.Distribution
        Any proper one. Its ``log_prob`` is numpyro's, which does not check the support.

    Returns
    -------
    Distribution
        A pytree whose leaves are numpyro's leaves, in an order that is the same in every process.

    Raises
    ------
    DeclarationError
        When it is no distribution, is improper, or has no map from the real line.
    ImportError
        When numpyro is not installed.
    """
    if isinstance(distribution, Distribution):
        return distribution
    # numpyro's objects are callable, so callable() would not tell them from functions
    modules = {base.__module__.split(".")[0] for base in type(distribution).__mro__}
    if not hasattr(distribution, "log_prob") or "numpyro" not in modules:
        expected = "a prior must be a distribution of evidence.distributions or of numpyro"
        remedy = "Type for example Normal(0.0, 1.0)"
        raise DeclarationError(sentence(expected, brief(distribution), remedy))
    refuse_improper(distribution)
    adapted = wrap(distribution)
    adapted.support  # noqa: B018 - refuses here what has no map from the real line
    return adapted


def refuse_improper(distribution: Any) -> None:
    """Refuse a prior that does not integrate to one.

    Raises
    ------
    DeclarationError
        For numpyro's ImproperUniform, bare or wrapped.
    """
    if any(base.__name__ == "ImproperUniform" for base in type(distribution).__mro__):
        expected = "a log evidence needs priors that integrate to one"
        remedy = "Type Uniform(low, high) or a wide Normal in place of ImproperUniform"
        raise DeclarationError(sentence(expected, type(distribution).__name__, remedy))
    inner = getattr(distribution, "base_dist", None)
    if inner is not None:
        refuse_improper(inner)


@dataclasses.dataclass(frozen=True)
class Structure:
    """All of a numpyro distribution but its leaves.

    Attributes
    ----------
    treedef : jax.tree_util.PyTreeDef
        numpyro's own structure.
    names : tuple of str
        Names of the leaves, sorted.
    places : tuple of int
        For each leaf in numpyro's order, its place in the sorted order.
    word : str
        Name of numpyro's class.
    shapes : tuple
        Batch shape and event shape.
    """

    treedef: Any
    names: tuple[str, ...]
    places: tuple[int, ...]
    word: str
    shapes: tuple[tuple[int, ...], tuple[int, ...]]


def wrap(distribution: Any) -> ForeignDistribution:
    """Return the wrapped distribution, unchecked.

    numpyro collects its leaves in a set, whose order changes from process to process; sorted by
    name, a compiled program is found again in the cache.
    """
    paths, treedef = jax.tree_util.tree_flatten_with_path(distribution)
    named = [(leaf_name(distribution, path), leaf) for path, leaf in paths]
    order = sorted(range(len(named)), key=lambda i: named[i][0])
    structure = Structure(
        treedef=treedef,
        names=tuple(named[i][0] for i in order),
        places=tuple(order.index(i) for i in range(len(named))),
        word=type(distribution).__name__,
        shapes=(tuple(distribution.batch_shape), tuple(distribution.event_shape)),
    )
    return ForeignDistribution(tuple(named[i][1] for i in order), structure)


def leaf_name(node: Any, path: tuple) -> str:
    """Return the dotted name of a leaf, such as "base_dist.loc"."""
    words = []
    for key in path:
        place = getattr(key, "key", getattr(key, "idx", None))
        fields = getattr(type(node), "gather_pytree_data_fields", None)
        if fields is not None:
            words.append(fields()[place])
            node = node.__dict__.get(words[-1])
        else:
            words.append(str(place))
            children = jax.tree_util.tree_flatten(node, is_leaf=lambda n, top=node: n is not top)
            node = children[0][place] if isinstance(place, int) else None
    return ".".join(words)


@jax.tree_util.register_pytree_with_keys_class
class ForeignDistribution(Distribution):
    """A numpyro distribution, its leaves sorted by name."""

    def __init__(self, leaves: tuple, structure: Structure) -> None:
        object.__setattr__(self, "shape", ())
        object.__setattr__(self, "leaves", leaves)
        object.__setattr__(self, "structure", structure)

    def tree_flatten_with_keys(self) -> tuple[tuple, Structure]:
        keys = map(jax.tree_util.GetAttrKey, self.structure.names)
        return tuple(zip(keys, self.leaves, strict=True)), self.structure

    @classmethod
    def tree_unflatten(cls, structure: Structure, leaves: Any) -> ForeignDistribution:
        return cls(tuple(leaves), structure)

    def __reduce__(self) -> tuple:
        return wrap, (self.distribution,)  # a tree structure cannot be pickled

    @property
    def distribution(self) -> Any:
        """The numpyro distribution with the present leaves."""
        leaves = [self.leaves[place] for place in self.structure.places]
        return jax.tree_util.tree_unflatten(self.structure.treedef, leaves)

    @property
    def hyperparameters(self) -> tuple[tuple[str, str], ...]:
        """Pairs (leaf, leaf), or none where numpyro keeps copies that would have to follow."""
        names = self.structure.names
        copies = any(part.startswith("_") for name in names for part in name.split("."))
        return () if copies else tuple((name, name) for name in names)

    @property
    def float32_leaves(self) -> tuple[str, ...]:
        return float32_names(zip(self.structure.names, self.leaves, strict=True))

    @property
    def batch_shape(self) -> tuple[int, ...]:
        return self.structure.shapes[0]

    @property
    def event_shape(self) -> tuple[int, ...]:
        return self.structure.shapes[1]

    @property
    def support(self) -> Support:
        constraint = self.distribution.support
        if getattr(constraint, "is_discrete", False):
            return discrete
        own = own_support(constraint)
        return ForeignSupport(self) if own is None else own

    def log_prob(self, x: Any) -> jax.Array:
        return self.distribution.log_prob(jnp.asarray(x, dtype=float))

    def log_prob_z(self, z: Any) -> jax.Array:
        support = self.support
        jacobian = support.log_jacobian(z)
        rest = len(self.event_shape) - support.event_rank
        jacobian = jnp.sum(jacobian, axis=tuple(range(-rest, 0)))
        return self.log_prob(support.forward(z)) + jacobian

    def sample(self, key: jax.Array, sample_shape: tuple[int, ...] = ()) -> jax.Array:
        return self.distribution.sample(key, tuple(sample_shape))

    def centre_and_spread(self) -> CentreSpread:
        """Return median and half the 16-84 % range of 256 draws in the unconstrained z.

        Raises
        ------
        DeclarationError
            When numpyro cannot sample it, or no draw is finite in z.
        """
        cast = jax.tree_util.tree_map(lambda leaf: np.asarray(leaf, dtype=np.float64), self)
        try:
            with jax.enable_x64(True):
                draws = np.asarray(draws_in_z(cast))
        except NotImplementedError:
            raise self._no_draws("a distribution that numpyro can sample") from None
        finite = np.where(np.isfinite(draws), draws, np.nan)
        if np.any(np.all(np.isnan(finite), axis=0)):
            raise self._no_draws("a distribution with draws inside its support")
        low, centre, high = np.nanquantile(finite, [0.16, 0.5, 0.84], axis=0)
        return self._to_z_shape(centre, 0.5 * (high - low))

    def _no_draws(self, expected: str) -> DeclarationError:
        remedy = "Declare the prior with a distribution of evidence.distributions"
        return DeclarationError(sentence(f"the prior must be {expected}", repr(self), remedy))

    def _key(self) -> tuple:
        return type(self), self.structure, tuple(map(identity_key, self.leaves))

    def __repr__(self) -> str:
        named = zip(self.structure.names, self.leaves, strict=True)
        shown = [f"{name}={brief(leaf)}" for name, leaf in named if "_support" not in name]
        return f"numpyro {self.structure.word}({', '.join(shown)})"


def own_support(constraint: Any) -> Support | None:
    """Return our support where numpyro maps the same way (ours also runs in NumPy), or None."""
    word = type(constraint).__name__.strip("_")
    if word == "IndependentConstraint":
        inner = own_support(constraint.base_constraint)
        return inner if inner is None or inner.event_rank == 0 else None
    if word in PLAIN:
        return PLAIN[word]
    if word in ("GreaterThan", "GreaterThanEq"):
        return above(constraint.lower_bound)
    if word in ("LessThan", "LessThanEq"):
        return below(constraint.upper_bound)
    if word in ("Interval", "OpenInterval"):
        return between(constraint.lower_bound, constraint.upper_bound)
    return None


PLAIN = {
    "Real": real,
    "Positive": positive,
    "Nonnegative": positive,
    "UnitInterval": fraction,
    "OrderedVector": ordered,
}


def with_numpy(method: Any) -> Any:
    """Run a support's method in one compiled float64 program where NumPy is asked for."""

    @functools.partial(jax.jit, static_argnums=2)
    def compiled(support: ForeignSupport, value: Any, xp: Any) -> Any:
        return method(support, value, xp)

    @functools.wraps(method)
    def choose(self: ForeignSupport, value: Any, xp: types.ModuleType = jnp) -> Any:
        if xp is not np:
            return method(self, jnp.asarray(value, dtype=float), jnp)
        with jax.enable_x64(True):
            return np.asarray(compiled(self, np.asarray(value, dtype=np.float64), jnp))

    return choose


@jax.tree_util.register_pytree_node_class
class ForeignSupport(Support):
    """The support of a numpyro distribution that none of ours maps in the same way."""

    def __init__(self, prior: ForeignDistribution) -> None:
        self.prior = prior

    def tree_flatten(self) -> tuple[tuple, None]:
        return (self.prior,), None

    @classmethod
    def tree_unflatten(cls, static: None, leaves: Any) -> ForeignSupport:  # noqa: ARG003
        return cls(*leaves)

    @property
    def event_rank(self) -> int:
        """Number of axes over which the map is joint."""
        return self._transform.codomain.event_dim

    @property
    def _transform(self) -> Any:
        transforms = load_optional("numpyro.distributions.transforms", "numpyro")
        try:
            return transforms.biject_to(self.prior.distribution.support)
        except NotImplementedError:
            expected = "the prior must have a map from the real line"
            remedy = "Declare it with a distribution of evidence.distributions"
            raise DeclarationError(sentence(expected, repr(self.prior), remedy)) from None

    @with_numpy
    def forward(self, z: Any, xp: types.ModuleType = jnp) -> Any:  # noqa: ARG002
        return self._transform(z)

    @with_numpy
    def inverse(self, x: Any, xp: types.ModuleType = jnp) -> Any:  # noqa: ARG002
        return self._transform.inv(x)

    @with_numpy
    def log_jacobian(self, z: Any, xp: types.ModuleType = jnp) -> Any:  # noqa: ARG002
        transform = self._transform
        return transform.log_abs_det_jacobian(z, transform(z))

    def z_shape(self, x_shape: tuple[int, ...]) -> tuple[int, ...]:
        return tuple(self._transform.inverse_shape(tuple(x_shape)))

    def contains(self, x: Any) -> bool:
        with jax.enable_x64(True):
            x = np.asarray(x, dtype=np.float64)
            return bool(np.all(np.isfinite(x)) and np.all(inside(self, x)))

    def label(self, name: str, index: Index = None, x_shape: Any = None) -> str:  # noqa: ARG002
        return f"unconstrained {element(name, index)}"

    def _key(self) -> tuple:
        return type(self), self.prior._key()

    def __repr__(self) -> str:
        return f"support of {self.prior!r}"


@jax.jit
def inside(support: ForeignSupport, x: Any) -> jax.Array:
    """Tell whether numpyro's constraint holds."""
    return support.prior.distribution.support(x)


@jax.jit
def draws_in_z(prior: ForeignDistribution) -> jax.Array:
    """Return draws of the prior in the unconstrained coordinate [DRAWS, *z shape]."""
    return prior.support.inverse(prior.sample(jax.random.key(0), (DRAWS,)))
