"""What densities and supports have in common: checked fields, equality, repr, pytree.

Both are frozen dataclasses and JAX pytrees whose fields are leaves. Constructing one runs no JAX
operation (each would compile a program), so they are cheap at import and inside a trace. Concrete
numbers are checked; traced values and JAX arrays cannot be without running something, and are not.
"""

from __future__ import annotations

import dataclasses
import typing
from collections.abc import Callable
from typing import Any

import jax
import numpy as np

from evidence.complaints import DeclarationError, sentence

__all__ = ["Declared", "brief", "declared", "float32_names", "hyper", "is_number"]

# What a check asks of a number: (predicate on the float64 array, wording, what to type).
CHECKS: dict[str, tuple[Callable[[np.ndarray], Any], str, str]] = {
    "finite": (np.isfinite, "a finite number", "Type a finite number, such as 0.0"),
    "positive": (
        lambda a: (a > 0) & np.isfinite(a),
        "a finite number above zero",
        "Type a number above zero, such as 1.0",
    ),
    "nonnegative": (
        lambda a: (a >= 0) & np.isfinite(a),
        "a finite number, zero or above",
        "Type a number that is zero or above, such as 1.0",
    ),
    "probability": (
        lambda a: (a >= 0) & (a <= 1),
        "a number from 0 to 1",
        "Type a probability, such as 0.5, or give logit= instead",
    ),
    "count": (
        lambda a: (a >= 0) & (a == np.floor(a)) & np.isfinite(a),
        "a whole number, zero or above",
        "Type a count, such as 10",
    ),
    "number": (lambda a: ~np.isnan(a), "a number", "Type a number, such as 0.0"),
}


def hyper(
    check: str,
    *,
    label: str | None = None,
    event_rank: int = 0,
    default: Any = dataclasses.MISSING,
    kw_only: bool = False,
) -> Any:
    """Declare a hyperparameter field.

    Parameters
    ----------
    check : str
        Key of ``CHECKS``: what a concrete value must satisfy.
    label : str, optional
        The trade's word for it where the field's name differs.
    event_rank : int
        How many trailing axes belong to one draw rather than to an array of independent ones.
    default : optional
        Default of the field; None marks one of several ways to give the same thing.
    kw_only : bool
        Whether the field is given by name only.
    """
    metadata = {"check": check, "label": label, "event_rank": event_rank}
    return dataclasses.field(default=default, metadata=metadata, kw_only=kw_only)


@typing.dataclass_transform(frozen_default=True, eq_default=False, field_specifiers=(hyper,))
def declared(cls: type) -> type:
    """Make a class a frozen dataclass and a pytree with keys."""
    cls = dataclasses.dataclass(frozen=True, eq=False, repr=False)(cls)
    fields = dataclasses.fields(cls)
    cls._leaf_fields = tuple(f for f in fields if f.name != "shape")
    cls._leaf_names = names = tuple(f.name for f in cls._leaf_fields)
    keys = tuple(jax.tree_util.GetAttrKey(name) for name in names)

    def flatten(self: Any) -> tuple[tuple, Any]:
        return tuple(getattr(self, name) for name in names), self._static()

    def flatten_with_keys(self: Any) -> tuple[tuple, Any]:
        leaves, static = flatten(self)
        return tuple(zip(keys, leaves, strict=True)), static

    def unflatten(static: Any, leaves: Any) -> Any:
        # JAX passes placeholders of any kind through here: nothing is checked or cast
        self = object.__new__(cls)
        for name, leaf in zip(names, leaves, strict=True):
            object.__setattr__(self, name, leaf)
        self._restore(static)
        return self

    jax.tree_util.register_pytree_with_keys(cls, flatten_with_keys, unflatten, flatten)
    return cls


def is_number(value: Any) -> bool:
    """Tell whether a field holds concrete numbers (no tracer, no JAX array, no placeholder)."""
    return isinstance(value, float | np.ndarray)


def float32_names(names_and_leaves: Any) -> tuple[str, ...]:
    """Return the names whose leaf is stored in single precision (1e-7 nat is lost there)."""
    return tuple(
        name for name, leaf in names_and_leaves if getattr(leaf, "dtype", None) == np.float32
    )


class Declared:
    """Fields, checks, equality and repr shared by distributions and supports."""

    _leaf_fields: typing.ClassVar[tuple] = ()
    _leaf_names: typing.ClassVar[tuple[str, ...]] = ()

    def __post_init__(self) -> None:
        for field in self._leaf_fields:
            value = getattr(self, field.name)
            if value is None and field.default is None:
                continue
            object.__setattr__(self, field.name, self._checked(field, value))
        self._check_together()

    def _check_together(self) -> None:
        """Check what concerns more than one field."""

    def _static(self) -> Any:
        return None

    def _restore(self, static: Any) -> None:
        pass

    def _complain(self, field: str, expected: str, got: Any, remedy: str) -> DeclarationError:
        subject = f"{self._word()}: {field} must be {expected}"
        return DeclarationError(sentence(subject, brief(got), remedy))

    def _word(self) -> str:
        return type(self).__name__

    def _checked(self, field: dataclasses.Field, value: Any) -> Any:
        """Return the value as float or float64 array, checked; traced values as they are."""
        if isinstance(value, jax.Array | jax.ShapeDtypeStruct):
            self._check_rank(field, value)
            return value
        predicate, expected, remedy = CHECKS[field.metadata["check"]]
        if hasattr(value, "log_prob") or callable(value):
            raise self._complain(field.name, expected, value, DEPENDENT.format(self._word()))
        array = self._as_float64(field.name, value, expected, remedy)
        if not np.all(predicate(array)):
            raise self._complain(field.name, expected, value, remedy)
        self._check_rank(field, array)
        return float(array) if array.ndim == 0 else array

    def _as_float64(self, name: str, value: Any, expected: str, remedy: str) -> np.ndarray:
        if isinstance(value, list | tuple) and any(isinstance(v, jax.Array) for v in value):
            remedy = f"Write {name}=jnp.stack([...]) to join values that JAX traces"
            raise self._complain(name, "one array, not a list of JAX values", value, remedy)
        try:
            array = np.asarray(value)
        except (ValueError, TypeError):  # ragged lists, foreign objects
            raise self._complain(name, expected, value, remedy) from None
        if array.dtype.kind not in "iuf":
            raise self._complain(name, expected, value, remedy)
        array = np.array(array, dtype=np.float64)
        array.flags.writeable = False
        return array

    def _check_rank(self, field: dataclasses.Field, value: Any) -> None:
        rank = field.metadata["event_rank"]
        if len(np.shape(value)) < rank:
            expected = f"an array with at least {rank} {'axis' if rank == 1 else 'axes'}"
            example = "[1.0, 1.0, 1.0]" if rank == 1 else "[[1.0, 0.0], [0.0, 1.0]]"
            raise self._complain(field.name, expected, value, f"Type {field.name}={example}")

    def _key(self) -> tuple:
        leaves = (getattr(self, name) for name in self._leaf_names)
        return type(self), self._static(), tuple(map(identity_key, leaves))

    def __eq__(self, other: object) -> bool:
        return isinstance(other, Declared) and self._key() == other._key()

    def __hash__(self) -> int:
        return hash(self._key())

    def __repr__(self) -> str:
        leaves = ((name, getattr(self, name)) for name in self._leaf_names)
        parts = [f"{name}={brief(leaf)}" for name, leaf in leaves if leaf is not None]
        if getattr(self, "shape", ()):
            parts.append(f"shape={self.shape}")
        return f"{self._word()}({', '.join(parts)})"


DEPENDENT = (
    "Where it depends on another parameter, make the whole prior a function: "
    "lambda p: {}(... p['name'] ...)"
)


def identity_key(leaf: Any) -> Any:
    """Return something hashable that equals for equal numbers; identity for anything traced."""
    if leaf is None or isinstance(leaf, float):
        return leaf
    if isinstance(leaf, np.ndarray):
        # + 0.0 makes -0.0 and 0.0 the same bytes
        return leaf.shape, (np.asarray(leaf, np.float64) + 0.0).tobytes()
    return type(leaf), id(leaf)


def brief(value: Any) -> str:
    """Show a value shortly: small arrays as lists, large ones and traced ones by shape."""
    if isinstance(value, jax.core.Tracer):
        return f"<traced {list(value.shape)}>"
    if isinstance(value, np.ndarray | jax.Array):
        small = value.size <= 9 and not isinstance(value, jax.ShapeDtypeStruct)
        return repr(np.asarray(value).tolist()) if small else f"<array {list(value.shape)}>"
    text = repr(value)
    return text if len(text) <= 80 else text[:77] + "..."
