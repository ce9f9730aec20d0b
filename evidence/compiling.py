"""Float64 programs without a lasting change of the user's JAX settings.

The one file that touches JAX's configuration: every trace, compilation and call of ours happens
inside :func:`float64`, and compilations go through a persistent cache of our own.

The cache saves about half a second per program in a new process. JAX's cache is a process-wide
singleton whose first directory wins, so ours is opened around our own compilation only and reset
before and after. Where the user has set a directory of their own, theirs is used and nothing is
touched. ``EVIDENCE_COMPILE_CACHE=off`` switches it off; another value is the directory to use.
"""

from __future__ import annotations

import contextlib
import logging
import os
import platform
import threading
from collections import OrderedDict
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import jax
import numpy as np

__all__ = ["Program", "Programs", "as_numpy", "compile_ahead", "float64", "on_device"]

PROGRAMS_KEPT = 48  # of one model
CACHE_VARIABLE = "EVIDENCE_COMPILE_CACHE"
_LOCK = threading.RLock()
_HASTY = {"xla_backend_optimization_level": 0, "xla_llvm_disable_expensive_passes": True}
_NOISY_LOGGERS = ("jax._src.compiler", "jax._src.compilation_cache", "jax._src.lru_cache")


def float64() -> contextlib.AbstractContextManager[Any]:
    """Context in which JAX traces and runs in float64, in this thread only."""
    return jax.enable_x64(True)


def on_device(tree: Any) -> Any:
    """Put the arrays of a pytree on the device once, keeping their 64 bits."""
    with float64():
        return jax.device_put(tree)


def as_numpy(tree: Any) -> Any:
    """Fetch the arrays of a pytree as NumPy arrays."""
    return jax.tree_util.tree_map(np.asarray, tree)


class Program:
    """A function compiled at its first call, in float64, through the persistent cache.

    Parameters
    ----------
    function : callable
        Traceable; takes and returns pytrees of arrays. Its name is part of the cache's key.
    hasty : bool
        Compile in about half the time to code that runs somewhat slower: for small problems,
        whose first answer is all compilation.
    """

    def __init__(self, function: Callable[..., Any], *, hasty: bool = False) -> None:
        self._function = function
        self._jitted = jax.jit(function, compiler_options=_HASTY if hasty else None)
        self._hasty = hasty
        self._compiled: set[tuple[Any, ...]] = set()

    def __call__(self, *arguments: Any) -> Any:
        """Run; outputs are JAX arrays of 64 bits.

        Other shapes of the first argument, or of the arrays in it, are compiled in their turn;
        those of the others must stay the same.
        """
        first = arguments[0] if isinstance(arguments[0], tuple) else arguments[:1]
        shapes = tuple(getattr(x, "shape", ()) for x in first)
        with float64():
            if shapes in self._compiled:
                return self._jitted(*arguments)
            with _LOCK, _persistent_cache():
                result = self._first_call(*arguments)
            self._compiled.add(shapes)
            return result

    def _first_call(self, *arguments: Any) -> Any:
        try:
            return self._jitted(*arguments)
        except jax.errors.JaxRuntimeError:
            if not self._hasty:
                raise
            # another compiler may not know the options
            self._hasty, self._jitted = False, jax.jit(self._function)
            return self._jitted(*arguments)


class Programs:
    """The compiled programs of one model, the most recently used ones kept."""

    def __init__(self) -> None:
        self._kept: OrderedDict[Any, Any] = OrderedDict()
        self.fits: dict[Any, int] = {}

    def get(self, key: Any, build: Callable[[], Any]) -> Any:
        """Return the program kept under a key, building it where there is none."""
        if key in self._kept:
            self._kept.move_to_end(key)
            return self._kept[key]
        program = self._kept[key] = build()
        while len(self._kept) > PROGRAMS_KEPT:
            self._kept.popitem(last=False)
        return program

    def __len__(self) -> int:
        return len(self._kept)


def compile_ahead(function: Callable[..., Any], *arguments: Any) -> Any:
    """Compile for arguments of these shapes, through the persistent cache, without running.

    What is returned takes such arguments inside :func:`float64`, in any thread, and can say how
    much memory it needs: ``memory_analysis().temp_size_in_bytes``.
    """
    with float64(), _LOCK, _persistent_cache():
        return jax.jit(function).lower(*arguments).compile()


def cache_directory() -> Path | None:
    """Directory of our compile cache, or None where it is switched off.

    One directory per processor, jaxlib version and operating system, since entries made for one
    processor may be refused or unsafe on another.
    """
    setting = os.environ.get(CACHE_VARIABLE, "")
    if setting.lower() in {"off", "0", "no", "false"}:
        return None
    root = Path(setting) if setting else _user_cache() / "evidence" / "compiled"
    return root / f"{platform.system()}-{_processor()}-jaxlib-{jax.lib.__version__}"


def _user_cache() -> Path:
    base = os.environ.get("XDG_CACHE_HOME") or os.environ.get("LOCALAPPDATA")
    return Path(base) if base else Path.home() / ".cache"


def _processor() -> str:
    """Short name of the processor: two machines that share a home directory may differ."""
    with contextlib.suppress(OSError):
        lines = Path("/proc/cpuinfo").read_text(errors="replace").split("\n\n", 1)[0].splitlines()
        told = [x for x in lines if x.startswith(("model name", "flags", "CPU part", "Features"))]
        if told:
            import hashlib

            return hashlib.sha256("".join(told).encode()).hexdigest()[:12]
    return platform.machine() or "unknown"


@contextlib.contextmanager
def _persistent_cache() -> Iterator[None]:
    """Open our compile cache around one compilation; do nothing where that is not possible."""
    settings = _cache_settings()
    if settings is None:
        yield
        return
    reset, contexts = settings
    with contextlib.ExitStack() as stack:
        stack.enter_context(_quiet())
        reset()
        stack.callback(reset)
        for context in contexts:
            stack.enter_context(context)
        yield


def _cache_settings() -> tuple[Callable[[], None], list[Any]] | None:
    """What opens our cache, or None: switched off, the user's own is set, or JAX lacks it."""
    directory = cache_directory()
    if directory is None or jax.config.jax_compilation_cache_dir:
        return None
    try:
        from jax._src import config
        from jax.experimental.compilation_cache.compilation_cache import reset_cache

        contexts = [
            config.compilation_cache_dir(str(directory)),
            config.persistent_cache_min_compile_time_secs(0.0),
            # -1 and not 0: with 0 JAX rewrites the global setting
            config.persistent_cache_min_entry_size_bytes(-1),
        ]
        directory.mkdir(parents=True, exist_ok=True)
    except (ImportError, AttributeError, TypeError, OSError):
        return None
    return reset_cache, contexts


@contextlib.contextmanager
def _quiet() -> Iterator[None]:
    """Keep the cache's own log lines and warnings (a full disk, a foreign entry) from the user."""
    import warnings

    loggers = [logging.getLogger(name) for name in _NOISY_LOGGERS]
    before = [logger.disabled for logger in loggers]
    try:
        for logger in loggers:
            logger.disabled = True
        with warnings.catch_warnings():
            warnings.filterwarnings("ignore", message=".*persistent compilation cache.*")
            yield
    finally:
        for logger, was in zip(loggers, before, strict=True):
            logger.disabled = was
