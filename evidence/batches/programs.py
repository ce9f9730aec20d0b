"""The compiled programs of one candidate for many data sets, sized to stay in the cache.

A program's temporaries grow with the number of slots. Too few slots waste the vector units; above
some tens of MiB the allocation of the temporaries costs several times the arithmetic. Slots are
therefore chosen by what the compiled program says of itself.
"""

from __future__ import annotations

import threading
from collections.abc import Callable
from typing import Any

import jax
import numpy as np

from evidence.compiling import compile_ahead, float64
from evidence.model import Model

__all__ = ["Programs", "signature"]

LEAST_BYTES, WANTED_BYTES, MOST_BYTES = 2 * 2**20, 4 * 2**20, 8 * 2**20
LEAST_SLOTS, ENOUGH_SLOTS, MOST_SLOTS = 4, 64, 512
_LOCK = threading.RLock()


class Programs:
    """Programs by kind and shapes, kept on the model from one call to the next."""

    def __init__(self, model: Model) -> None:
        self._model = model
        self.key = (model.reading(), signature(model.hyperparameters()))

    def run(
        self,
        kind: str,
        build: Callable[[int], Callable[..., Any]],
        arguments: tuple[Any, ...],
        *,
        bytes_per_slot: int,
        most_slots: int,
    ) -> np.ndarray:
        """Run the program of a kind for arguments of these shapes, compiling it where needed.

        Parameters
        ----------
        kind : str
        build : callable
            Slots -> traceable function.
        arguments : tuple of pytrees
        bytes_per_slot : int
            A first guess of the temporaries, to spare a second compilation.
        most_slots : int
            More would not be used.
        """
        key = ("batch", kind, most_slots, self.key, signature(arguments))
        with _LOCK:  # two threads that want the same program compile it once
            program = self._model.programs.get(
                key, lambda: _sized(build, arguments, bytes_per_slot, most_slots)
            )
        with float64():
            return np.asarray(program(*arguments))


def _sized(
    build: Callable[[int], Callable[..., Any]],
    arguments: tuple[Any, ...],
    bytes_per_slot: int,
    most: int,
) -> Any:
    slots = _power_of_two(WANTED_BYTES / max(bytes_per_slot, 1), most)
    program = compile_ahead(build(slots), *arguments)
    needed = _temporaries(program)
    # more slots than enough gain nothing that a second compilation could pay for
    enough = needed is None or needed >= LEAST_BYTES or slots >= ENOUGH_SLOTS
    if needed is None or (enough and needed <= MOST_BYTES):
        return program
    better = _power_of_two(slots * WANTED_BYTES / max(needed, 1), most)
    return program if better == slots else compile_ahead(build(better), *arguments)


def _temporaries(program: Any) -> int | None:
    analysis = program.memory_analysis()
    return getattr(analysis, "temp_size_in_bytes", None)


def _power_of_two(wanted: float, most: int) -> int:
    most = min(most, MOST_SLOTS)
    slots = LEAST_SLOTS
    while slots * 2 <= min(wanted * 1.5, most):
        slots *= 2
    return min(slots, most)


def signature(tree: Any) -> tuple[Any, ...]:
    """Structure, shapes and types of a pytree, as a key."""
    leaves, structure = jax.tree_util.tree_flatten(tree)
    return (str(structure), *((np.shape(x), str(getattr(x, "dtype", ""))) for x in leaves))
