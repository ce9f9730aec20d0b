"""Where values may lie: each support's map from the real line, its inverse and log Jacobian.

``x = forward(z)`` takes the unconstrained coordinate z to natural units. All of a support is in
one class. Every map takes ``xp``: jax.numpy inside programs, numpy where a compile is not worth
it (a user's start, a table).
"""

from __future__ import annotations

import types
from typing import Any

import jax.numpy as jnp
import numpy as np

from evidence.complaints import DeclarationError, sentence
from evidence.distributions.coordinates import (
    Index,
    bound_words,
    element,
    log_sigmoid,
    log_softmax,
    sigmoid,
)
from evidence.distributions.fields import Declared, declared, hyper, is_number

__all__ = [
    "Support",
    "above",
    "below",
    "between",
    "discrete",
    "fraction",
    "ordered",
    "positive",
    "real",
    "simplex",
]


class Support(Declared):
    """Where a value may lie, with its map from the unconstrained coordinate z."""

    event_rank = 0

    def forward(self, z: Any, xp: types.ModuleType = jnp) -> Any:
        """Return x in natural units for z, elementwise or along the last axis."""
        raise NotImplementedError

    def inverse(self, x: Any, xp: types.ModuleType = jnp) -> Any:
        """Return z for x inside the support (not checked here: see ``contains``)."""
        raise NotImplementedError

    def log_jacobian(self, z: Any, xp: types.ModuleType = jnp) -> Any:
        """Return log abs(dx/dz) in nats, event axes summed."""
        raise NotImplementedError

    def z_shape(self, x_shape: tuple[int, ...]) -> tuple[int, ...]:
        """Return the shape of z for a value of this shape."""
        return tuple(x_shape)

    def contains(self, x: Any) -> bool:
        """Tell, in NumPy, whether every value is inside (edges excluded: z would be infinite)."""
        x = np.asarray(x)
        return x.dtype.kind in "iuf" and bool(np.all(np.isfinite(x)) and self._inside(x))

    def _inside(self, x: np.ndarray) -> bool:
        raise NotImplementedError

    def label(self, name: str, index: Index = None, x_shape: tuple[int, ...] | None = None) -> str:
        """Return the z coordinate in the user's words.

        Parameters
        ----------
        name : str
            The parameter's name.
        index : int or tuple of int, optional
            Which element of z, for an array.
        x_shape : tuple of int, optional
            Shape of the parameter, where the label names its last component (simplex).
        """
        raise NotImplementedError

    def labels(self, name: str, x_shape: tuple[int, ...]) -> list[str]:
        """Return the label of every z coordinate of a parameter, in C order."""
        shape = self.z_shape(x_shape)
        if shape == ():
            return [self.label(name)]
        return [self.label(name, index, x_shape) for index in np.ndindex(*shape)]

    def _word(self) -> str:
        return type(self).__name__.lower()

    def __repr__(self) -> str:
        return super().__repr__() if self._leaf_names else self._word()


@declared
class Real(Support):
    """All real numbers; z = x."""

    def forward(self, z: Any, xp: types.ModuleType = jnp) -> Any:
        return xp.asarray(z)

    def inverse(self, x: Any, xp: types.ModuleType = jnp) -> Any:
        return xp.asarray(x)

    def log_jacobian(self, z: Any, xp: types.ModuleType = jnp) -> Any:
        return xp.zeros_like(z)

    def _inside(self, x: np.ndarray) -> bool:  # noqa: ARG002 - every finite number is inside
        return True

    def label(self, name: str, index: Index = None, x_shape: Any = None) -> str:  # noqa: ARG002
        return element(name, index)


@declared
class Positive(Support):
    """Numbers above zero; z = log x."""

    def forward(self, z: Any, xp: types.ModuleType = jnp) -> Any:
        return xp.exp(z)

    def inverse(self, x: Any, xp: types.ModuleType = jnp) -> Any:
        return xp.log(x)

    def log_jacobian(self, z: Any, xp: types.ModuleType = jnp) -> Any:
        return xp.asarray(z)

    def _inside(self, x: np.ndarray) -> bool:
        return bool(np.all(x > 0))

    def label(self, name: str, index: Index = None, x_shape: Any = None) -> str:  # noqa: ARG002
        return f"log {element(name, index)}"


@declared
class Fraction(Support):
    """Numbers between 0 and 1; z = log(x / (1 - x))."""

    def forward(self, z: Any, xp: types.ModuleType = jnp) -> Any:
        return sigmoid(z, xp)

    def inverse(self, x: Any, xp: types.ModuleType = jnp) -> Any:
        return xp.log(x) - xp.log1p(-xp.asarray(x))

    def log_jacobian(self, z: Any, xp: types.ModuleType = jnp) -> Any:
        return log_sigmoid(z, xp) + log_sigmoid(-xp.asarray(z), xp)

    def _inside(self, x: np.ndarray) -> bool:
        return bool(np.all((x > 0) & (x < 1)))

    def label(self, name: str, index: Index = None, x_shape: Any = None) -> str:  # noqa: ARG002
        return f"logit {element(name, index)}"


@declared
class Above(Support):
    """Numbers above a lower bound; z = log(x - lower)."""

    lower: Any = hyper("finite")

    def forward(self, z: Any, xp: types.ModuleType = jnp) -> Any:
        return xp.asarray(self.lower) + xp.exp(z)

    def inverse(self, x: Any, xp: types.ModuleType = jnp) -> Any:
        return xp.log(xp.asarray(x) - xp.asarray(self.lower))

    def log_jacobian(self, z: Any, xp: types.ModuleType = jnp) -> Any:
        return xp.asarray(z)

    def _inside(self, x: np.ndarray) -> bool:
        return bool(np.all(x > np.asarray(self.lower)))

    def label(self, name: str, index: Index = None, x_shape: Any = None) -> str:
        bound = bound_words(self.lower, index, x_shape, "lower bound")
        word = element(name, index)
        return f"log {word}" if bound == "0" else f"log({word} - {bound})"


@declared
class Below(Support):
    """Numbers below an upper bound; z = log(upper - x)."""

    upper: Any = hyper("finite")

    def forward(self, z: Any, xp: types.ModuleType = jnp) -> Any:
        return xp.asarray(self.upper) - xp.exp(z)

    def inverse(self, x: Any, xp: types.ModuleType = jnp) -> Any:
        return xp.log(xp.asarray(self.upper) - xp.asarray(x))

    def log_jacobian(self, z: Any, xp: types.ModuleType = jnp) -> Any:
        return xp.asarray(z)

    def _inside(self, x: np.ndarray) -> bool:
        return bool(np.all(x < np.asarray(self.upper)))

    def label(self, name: str, index: Index = None, x_shape: Any = None) -> str:
        bound = bound_words(self.upper, index, x_shape, "upper bound")
        return f"log({bound} - {element(name, index)})"


@declared
class Between(Support):
    """Numbers between two bounds; z = log((x - low) / (high - x))."""

    low: Any = hyper("finite")
    high: Any = hyper("finite")

    def _check_together(self) -> None:
        check_order(self)

    def forward(self, z: Any, xp: types.ModuleType = jnp) -> Any:
        # measured from the nearer bound, so that the distance to it keeps all its digits
        z = xp.asarray(z)
        low, high = xp.asarray(self.low), xp.asarray(self.high)
        from_low = low + (high - low) * sigmoid(z, xp)
        return xp.where(z < 0, from_low, high - (high - low) * sigmoid(-z, xp))

    def inverse(self, x: Any, xp: types.ModuleType = jnp) -> Any:
        x = xp.asarray(x)
        return xp.log(x - xp.asarray(self.low)) - xp.log(xp.asarray(self.high) - x)

    def log_jacobian(self, z: Any, xp: types.ModuleType = jnp) -> Any:
        z = xp.asarray(z)
        width = xp.asarray(self.high) - xp.asarray(self.low)
        return xp.log(width) + log_sigmoid(z, xp) + log_sigmoid(-z, xp)

    def _inside(self, x: np.ndarray) -> bool:
        return bool(np.all((x > np.asarray(self.low)) & (x < np.asarray(self.high))))

    def label(self, name: str, index: Index = None, x_shape: Any = None) -> str:  # noqa: ARG002
        unit = is_number(self.low) and np.all(self.low == 0) and np.all(self.high == 1)
        return f"{'logit' if unit else 'scaled logit'} {element(name, index)}"


@declared
class Simplex(Support):
    """Positive vectors that sum to one; z[i] = log(x[i] / x[last]), one fewer than x.

    Densities on a simplex are per unit of all components but the last.
    """

    event_rank = 1

    def forward(self, z: Any, xp: types.ModuleType = jnp) -> Any:
        return xp.exp(self.log_forward(z, xp))

    def log_forward(self, z: Any, xp: types.ModuleType = jnp) -> Any:
        """Return log x, exact where a component is too small for a float."""
        z = xp.asarray(z)
        return log_softmax(xp.concatenate([z, xp.zeros_like(z[..., :1])], axis=-1), xp)

    def inverse(self, x: Any, xp: types.ModuleType = jnp) -> Any:
        log_x = xp.log(x)
        return log_x[..., :-1] - log_x[..., -1:]

    def log_jacobian(self, z: Any, xp: types.ModuleType = jnp) -> Any:
        return xp.sum(self.log_forward(z, xp), axis=-1)

    def z_shape(self, x_shape: tuple[int, ...]) -> tuple[int, ...]:
        return (*x_shape[:-1], x_shape[-1] - 1)

    def _inside(self, x: np.ndarray) -> bool:
        if x.ndim == 0 or x.shape[-1] < 2:
            return False
        return bool(np.all(x > 0) and np.all(np.abs(x.sum(axis=-1) - 1) <= 1e-6))

    def label(self, name: str, index: Index = None, x_shape: Any = None) -> str:
        if index is None:
            return f"log({name}/{name}[last])"
        index = index if isinstance(index, tuple) else (index,)
        last = "last" if x_shape is None else x_shape[-1] - 1
        return f"log({element(name, index)}/{element(name, (*index[:-1], last))})"


@declared
class Ordered(Support):
    """Increasing vectors; z[0] = x[0], z[i] = log(x[i] - x[i-1])."""

    event_rank = 1

    def forward(self, z: Any, xp: types.ModuleType = jnp) -> Any:
        z = xp.asarray(z)
        return xp.cumsum(xp.concatenate([z[..., :1], xp.exp(z[..., 1:])], axis=-1), axis=-1)

    def inverse(self, x: Any, xp: types.ModuleType = jnp) -> Any:
        x = xp.asarray(x)
        return xp.concatenate([x[..., :1], xp.log(x[..., 1:] - x[..., :-1])], axis=-1)

    def log_jacobian(self, z: Any, xp: types.ModuleType = jnp) -> Any:
        return xp.sum(xp.asarray(z)[..., 1:], axis=-1)

    def _inside(self, x: np.ndarray) -> bool:
        return x.ndim > 0 and bool(np.all(np.diff(x, axis=-1) > 0))

    def label(self, name: str, index: Index = None, x_shape: Any = None) -> str:  # noqa: ARG002
        if index is None:
            return f"log steps of {name}"
        index = index if isinstance(index, tuple) else (index,)
        if index[-1] == 0:
            return element(name, index)
        return f"log({element(name, index)} - {element(name, (*index[:-1], index[-1] - 1))})"


@declared
class Discrete(Support):
    """Counts: for likelihoods only, they have no unconstrained coordinate."""

    def _refuse(self) -> DeclarationError:
        expected = "a count has no unconstrained coordinate"
        remedy = "Sum over the counts inside log_likelihood, and keep priors continuous"
        return DeclarationError(sentence(expected, None, remedy))

    def forward(self, z: Any, xp: types.ModuleType = jnp) -> Any:  # noqa: ARG002
        raise self._refuse()

    def inverse(self, x: Any, xp: types.ModuleType = jnp) -> Any:  # noqa: ARG002
        raise self._refuse()

    def log_jacobian(self, z: Any, xp: types.ModuleType = jnp) -> Any:  # noqa: ARG002
        raise self._refuse()

    def z_shape(self, x_shape: tuple[int, ...]) -> tuple[int, ...]:  # noqa: ARG002
        raise self._refuse()

    def _inside(self, x: np.ndarray) -> bool:
        return bool(np.all((x >= 0) & (x == np.floor(x))))

    def label(self, name: str, index: Index = None, x_shape: Any = None) -> str:  # noqa: ARG002
        return element(name, index)


real = Real()
positive = Positive()
fraction = Fraction()
simplex = Simplex()
ordered = Ordered()
discrete = Discrete()


def above(lower: Any) -> Above:
    """Return the support of numbers above ``lower``; z = log(x - lower)."""
    return Above(lower)


def below(upper: Any) -> Below:
    """Return the support of numbers below ``upper``; z = log(upper - x)."""
    return Below(upper)


def between(low: Any, high: Any) -> Between:
    """Return the support of numbers between ``low`` and ``high``; z = the scaled logit of x."""
    return Between(low, high)


def check_order(declaration: Any) -> None:
    """Refuse fields ``low`` and ``high`` that are not in order.

    Raises
    ------
    DeclarationError
        When both are concrete and low is not below high.
    """
    low, high = declaration.low, declaration.high
    if not (is_number(low) and is_number(high)):
        return
    try:
        in_order = np.all(np.less(low, high))
    except ValueError:  # shapes that do not broadcast
        in_order = False
    if not in_order:
        subject = f"{declaration._word()}: low must be below high, element by element"
        remedy = f"Type {declaration._word()}(low, high), such as (0.0, 1.0)"
        raise DeclarationError(sentence(subject, repr(declaration), remedy))
