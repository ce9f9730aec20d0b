"""What a user's function reads: a fingerprint, so that a changed global means a new trace.

JAX traces a function once and keeps what it read from closures and globals. A constant that the
user changes between two calls would silently go unnoticed; the programs of a model are therefore
kept under a fingerprint of everything its functions read.
"""

from __future__ import annotations

import collections
import dataclasses
import functools
import hashlib
import itertools
import sys
import types
from collections.abc import Callable, Iterable, Iterator
from typing import Any

import numpy as np

__all__ = ["Reading", "read_functions"]

HASHED_BYTES = 64 * 2**20  # larger arrays go by identity and a sample
SAMPLED_ITEMS = 4096
DEPTH_LIMIT = 60
OWN_PACKAGE = __name__.split(".")[0]
# ready parts are closures over what the user chose: read as the user's own
READY_PARTS = f"{OWN_PACKAGE}.shelf"
ARRAY_LIBRARIES = frozenset({"jax", "numpy", "scipy"})
_PLAIN = (type(None), bool, int, float, complex, str, bytes)
_SEQUENCES = (list, tuple, set, frozenset, collections.deque)
_UNREADABLE = itertools.count()


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
    held : tuple of object
        What went in by identity. Whoever keeps something under the digest keeps the reading, or
        another object may come to stand at the same address.
    """

    digest: str
    float32: tuple[str, ...]
    held: tuple[Any, ...] = dataclasses.field(default=(), repr=False, compare=False)


def read_functions(
    functions: Iterable[Callable[..., Any] | None], *, lasting: bool = False
) -> Reading:
    """Fingerprint some functions with their closures, defaults and globals.

    Parameters
    ----------
    functions : iterable of callable
    lasting : bool
        Make a fingerprint that another process finds again, for what is kept in a file: what
        would go in by its identity goes in by its name, and changes inside it are not noticed.
    """
    functions = list(functions)
    reader = _Reader(functions, lasting=lasting)
    for function in functions:
        reader.read(function, "", 0)
    return Reading(
        digest=reader.hash.hexdigest(),
        float32=tuple(dict.fromkeys(reader.float32)),
        held=tuple(reader.held),
    )


class _Reader:
    def __init__(self, functions: Iterable[Any], *, lasting: bool = False) -> None:
        self.lasting = lasting
        self.hash = hashlib.sha256()
        self.float32: list[str] = []
        # number and object by address; held, so that no address is used twice
        self.seen: dict[int, tuple[int, Any]] = {}
        self.held: list[Any] = []
        # a user's package is the user's own also where it is installed
        roots = {_root(getattr(function, "__module__", None)) for function in functions}
        self.homes = roots - ARRAY_LIBRARIES - {OWN_PACKAGE, ""}

    def add(self, *parts: object) -> None:
        for part in parts:
            self.hash.update(repr(part).encode() + b"\0")

    def read(self, value: Any, name: str, depth: int) -> None:
        """Add one value to the fingerprint."""
        if isinstance(value, _PLAIN):
            self.add(type(value).__name__, value)
        elif isinstance(value, (np.ndarray, np.generic)) or _is_jax_array(value):
            self.read_array(value, name)
        elif id(value) in self.seen:
            self.add("again", self.seen[id(value)][0])
        elif isinstance(value, types.ModuleType):
            self.add("module", value.__name__)
        elif depth > DEPTH_LIMIT:
            self.add("too deep to read", next(_UNREADABLE))  # never equal: traced again
        else:
            self.seen[id(value)] = (len(self.seen), value)
            self.read_object(value, name, depth)

    def identify(self, value: Any) -> None:
        """Add an object by its identity, and keep it from being freed."""
        self.held.append(value)
        if not self.lasting:
            self.add(id(value))
            return
        named = value if hasattr(value, "__qualname__") else type(value)
        module = getattr(named, "__module__", "")
        # the module of a study is numbered anew each time it is read
        self.add("" if self.is_users(module) else module, getattr(named, "__qualname__", ""))

    def is_users(self, module: str | None) -> bool:
        return _root(module) in self.homes or _is_users(module)

    def read_array(self, value: Any, name: str) -> None:
        array = np.asarray(value)
        self.add("array", array.shape, array.dtype.str)
        if array.dtype == np.float32:
            self.float32.append(name or "an unnamed constant")
        if array.dtype == object:
            self.read(array.ravel().tolist(), name, 1)
        elif array.nbytes <= HASHED_BYTES:
            self.hash.update(np.ascontiguousarray(array).tobytes())
        else:
            stride = max(1, array.size // SAMPLED_ITEMS)
            self.identify(value)
            self.hash.update(np.ascontiguousarray(array.ravel()[::stride]).tobytes())

    def read_object(self, value: Any, name: str, depth: int) -> None:
        if isinstance(value, types.FunctionType):
            self.read_function(value, depth)
        elif isinstance(value, types.MethodType):
            self.read(value.__func__, name, depth + 1)
            self.read(value.__self__, name, depth + 1)
        elif isinstance(value, functools.partial):
            self.read([value.func, value.args, value.keywords], name, depth + 1)
        elif isinstance(value, property):
            self.read([value.fget, value.fset], name, depth + 1)
        elif isinstance(value, functools.cached_property):
            self.read(value.func, name, depth + 1)
        elif isinstance(value, _SEQUENCES):
            items = sorted(value, key=repr) if isinstance(value, (set, frozenset)) else value
            self.add(type(value).__name__, len(value))
            for index, item in enumerate(items):
                self.read(item, f"{name}[{index}]", depth + 1)
        elif isinstance(value, dict):
            self.add("dict", len(value))
            for key, item in value.items():
                self.read(key, name, depth + 1)
                self.read(item, f"{name}[{key!r}]", depth + 1)
        elif not isinstance(value, type) and hasattr(type(value), "__array__"):
            self.read_table(value, name, depth)
        else:
            if hasattr(value, "__wrapped__"):  # jitted or decorated
                self.read(value.__wrapped__, name, depth + 1)
            self.read_instance(value, name, depth)

    def read_table(self, value: Any, name: str, depth: int) -> None:
        """A DataFrame, a Series or another array-like: by what it holds, which may change."""
        self.identify(value)
        try:
            content = np.asarray(value)
            labels = [str(x) for x in getattr(value, "columns", ())]
        except (TypeError, ValueError):
            return
        self.add(labels)
        self.read(content, name, depth + 1)

    def read_instance(self, value: Any, name: str, depth: int) -> None:
        """An object: by identity, and by its attributes where its class is the user's own."""
        is_class = isinstance(value, type)
        owner = value if is_class else type(value)
        self.add("object", owner.__qualname__)
        self.identify(value)
        # a library's object stands for itself; a plain bag of values of Python's own does not
        if not self.is_users(owner.__module__) and not isinstance(value, types.SimpleNamespace):
            return
        for base in owner.__mro__[1:] if is_class else (owner,):
            if self.is_users(base.__module__):
                self.read(base, name, depth + 1)
        for key, item in _attributes(value):
            self.add(key)
            self.read(item, f"{name}.{key}", depth + 1)

    def read_function(self, function: types.FunctionType, depth: int) -> None:
        self.add("function", function.__qualname__)
        if not self.is_users(function.__module__):
            self.add(function.__module__)
            self.identify(function)
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
        names = sorted(_global_names(function.__code__))
        for name in names:
            # a name that is no global may be imported inside the function
            value = function.__globals__.get(name, sys.modules.get(name))
            if name in function.__globals__ or value is not None:
                self.add(name)
                self.read(value, name, depth + 1)
                self.read_module(value, names, depth)

    def read_module(self, module: Any, names: Iterable[str], depth: int) -> None:
        """Attributes of a module of the user's own, and of those inside, that a function names."""
        modules, done = [module], set()
        while modules:
            module = modules.pop()
            if not isinstance(module, types.ModuleType) or id(module) in done:
                continue
            done.add(id(module))
            if not self.is_users(module.__name__):
                continue
            for name in names:
                if name in vars(module):
                    value = vars(module)[name]
                    self.add(name)
                    self.read(value, f"{module.__name__}.{name}", depth + 1)
                    modules.append(value)

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


def _attributes(value: Any) -> Iterator[tuple[str, Any]]:
    """Names and values that a user's object or class carries, in its dict and in its slots."""
    for key, item in list(getattr(value, "__dict__", {}).items()):
        dunder = key.startswith("__") and key.endswith("__")
        if not dunder or isinstance(item, types.FunctionType):
            yield key, item
    if not isinstance(value, type):
        for base in type(value).__mro__:
            slots = vars(base).get("__slots__", ())
            for key in (slots,) if isinstance(slots, str) else slots:
                if hasattr(value, key) and not key.startswith("__"):
                    yield key, getattr(value, key)


def _root(module: str | None) -> str:
    return (module or "").split(".")[0]


def _is_users(module: str | None) -> bool:
    """Whether a module is the user's own, by its place outside the installed libraries."""
    if module is None or module == "__main__" or module.startswith(READY_PARTS):
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
