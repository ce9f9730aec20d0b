"""What a user's function reads: a fingerprint, so that a changed global means a new trace.

JAX traces a function once and keeps what it read from closures and globals. A constant that the
user changes between two calls would silently go unnoticed; the programs of a model are therefore
kept under a fingerprint of everything its functions read.
"""

from __future__ import annotations

import dataclasses
import functools
import hashlib
import sys
import types
from collections.abc import Callable, Iterable
from typing import Any

import numpy as np

__all__ = ["Reading", "read_functions"]

HASHED_BYTES = 64 * 2**20  # larger arrays go by identity and a sample
SAMPLED_ITEMS = 4096
DEPTH_LIMIT = 8
OWN_PACKAGE = __name__.split(".")[0]
_PLAIN = (type(None), bool, int, float, complex, str, bytes)


@dataclasses.dataclass(frozen=True, kw_only=True)
class Reading:
    """What functions read from outside their arguments.

    Attributes
    ----------
    digest : str
        Changes when anything changes that the functions read: numbers and text by value, arrays
        by their bytes, functions of the user's by their code, the rest by identity.
    float32 : tuple of str
        Names of the float32 arrays found, which cost half of the digits.
    """

    digest: str
    float32: tuple[str, ...]


def read_functions(functions: Iterable[Callable[..., Any] | None]) -> Reading:
    """Fingerprint some functions with their closures, defaults and globals."""
    reader = _Reader()
    for function in functions:
        reader.read(function, "", 0)
    return Reading(digest=reader.hash.hexdigest(), float32=tuple(dict.fromkeys(reader.float32)))


class _Reader:
    def __init__(self) -> None:
        self.hash = hashlib.sha256()
        self.float32: list[str] = []
        self.seen: set[int] = set()

    def add(self, *parts: object) -> None:
        for part in parts:
            self.hash.update(repr(part).encode() + b"\0")

    def read(self, value: Any, name: str, depth: int) -> None:
        """Add one value to the fingerprint."""
        if isinstance(value, _PLAIN):
            self.add(type(value).__name__, value)
        elif isinstance(value, (np.ndarray, np.generic)) or _is_jax_array(value):
            self.read_array(value, name)
        elif id(value) in self.seen or depth > DEPTH_LIMIT:
            self.add("again", type(value).__name__)
        elif isinstance(value, types.ModuleType):
            self.add("module", value.__name__)
        else:
            self.seen.add(id(value))
            self.read_object(value, name, depth)

    def read_array(self, value: Any, name: str) -> None:
        array = np.asarray(value)
        self.add("array", array.shape, array.dtype.str)
        if array.dtype == np.float32:
            self.float32.append(name or "an unnamed constant")
        if array.dtype == object:
            self.add([id(x) for x in array.ravel()])
        elif array.nbytes <= HASHED_BYTES:
            self.hash.update(np.ascontiguousarray(array).tobytes())
        else:
            stride = max(1, array.size // SAMPLED_ITEMS)
            self.add(id(value))
            self.hash.update(np.ascontiguousarray(array.ravel()[::stride]).tobytes())

    def read_object(self, value: Any, name: str, depth: int) -> None:
        if isinstance(value, types.FunctionType):
            self.read_function(value, depth)
        elif isinstance(value, types.MethodType):
            self.read(value.__func__, name, depth + 1)
            self.read(value.__self__, name, depth + 1)
        elif isinstance(value, functools.partial):
            self.read([value.func, value.args, value.keywords], name, depth + 1)
        elif isinstance(value, (list, tuple, set, frozenset)):
            items = sorted(value, key=repr) if isinstance(value, (set, frozenset)) else value
            self.add(type(value).__name__, len(value))
            for index, item in enumerate(items):
                self.read(item, f"{name}[{index}]", depth + 1)
        elif isinstance(value, dict):
            self.add("dict", len(value))
            for key, item in value.items():
                self.add(key if isinstance(key, _PLAIN) else id(key))
                self.read(item, f"{name}[{key!r}]", depth + 1)
        elif hasattr(value, "__wrapped__"):  # jitted or decorated
            self.read(value.__wrapped__, name, depth + 1)
        else:
            self.read_instance(value, name, depth)

    def read_instance(self, value: Any, name: str, depth: int) -> None:
        """An object: by identity, and by its attributes where its class is the user's own."""
        is_class = isinstance(value, type)
        owner = value if is_class else type(value)
        self.add("object", owner.__qualname__, id(value))
        if not _is_users(owner.__module__):
            return
        if not is_class:
            self.read(owner, name, depth + 1)
        for key, item in getattr(value, "__dict__", {}).items():
            if not key.startswith("__") or key == "__call__":
                self.add(key)
                self.read(item, f"{name}.{key}", depth + 1)

    def read_function(self, function: types.FunctionType, depth: int) -> None:
        self.add("function", function.__qualname__)
        if not _is_users(function.__module__):
            self.add(function.__module__, id(function))
            return
        self.read_code(function.__code__)
        for name, cell in zip(
            function.__code__.co_freevars, function.__closure__ or (), strict=True
        ):
            try:
                self.read(cell.cell_contents, name, depth + 1)
            except ValueError:  # a name that is not bound yet
                self.add("unbound", name)
        self.read(list(function.__defaults__ or ()), "default", depth + 1)
        self.read(function.__kwdefaults__ or {}, "default", depth + 1)
        for name in sorted(_global_names(function.__code__)):
            if name in function.__globals__:
                self.add(name)
                self.read(function.__globals__[name], name, depth + 1)

    def read_code(self, code: types.CodeType) -> None:
        self.add(code.co_code, code.co_names, code.co_varnames, code.co_freevars)
        for constant in code.co_consts:
            if isinstance(constant, types.CodeType):
                self.read_code(constant)
            else:
                self.add(constant)


def _global_names(code: types.CodeType) -> set[str]:
    """Names that a function and the functions inside it may read from the globals."""
    names = set(code.co_names)
    for constant in code.co_consts:
        if isinstance(constant, types.CodeType):
            names |= _global_names(constant)
    return names


def _is_users(module: str | None) -> bool:
    """Whether a module is the user's own, by its place outside the installed libraries."""
    if module is None or module == "__main__":
        return True
    if module.split(".")[0] in sys.stdlib_module_names | {OWN_PACKAGE}:
        return False
    file = getattr(sys.modules.get(module), "__file__", None)
    return file is None or ("site-packages" not in file and "dist-packages" not in file)


def _is_jax_array(value: Any) -> bool:
    jax = sys.modules.get("jax")
    if jax is None:
        return False
    return isinstance(value, jax.Array) and not isinstance(value, jax.core.Tracer)
