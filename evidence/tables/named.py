"""Named arrays: what every kind of data becomes before a calculation sees it."""

from __future__ import annotations

import hashlib
from collections.abc import Iterable, Mapping
from typing import Any, NoReturn

import numpy as np

from evidence.complaints import DataError, sentence

__all__ = ["NamedArrays", "fingerprint"]

KEPT_TYPES = (np.dtype(np.float64), np.dtype(np.int64), np.dtype(np.bool_))
MOST_COLUMNS_SHOWN = 8


class NamedArrays(dict):
    """Columns by name: float64, int64 or bool arrays, finite, read-only and our own copies.

    Since nothing in it can change, it is passed on as it is and checked once. JAX does not look
    inside subclasses of dict: ``dict(arrays)`` is what travels into a compiled program.

    Parameters
    ----------
    arrays : mapping
        Column name -> NumPy array of float64, int64 or bool, of any shape. Copied.
    labels : mapping, optional
        Column name -> labels; code k of the column stands for ``labels[name][k]``.
    source : str, optional
        Where the data came from, as the user wrote it.

    Raises
    ------
    DataError
        If an array is of another type or holds nan or inf: ``named_arrays`` converts and
        explains, this class only keeps.
    """

    def __init__(
        self,
        arrays: Mapping[str, np.ndarray],
        labels: Mapping[str, Iterable[str]] | None = None,
        source: str | None = None,
    ) -> None:
        super().__init__({name: _keep(name, array) for name, array in arrays.items()})
        self.labels = {name: tuple(words) for name, words in (labels or {}).items()}
        self.source = source

    def __repr__(self) -> str:
        shown = [f"{name} {a.shape} {a.dtype}" for name, a in self.items()][:MOST_COLUMNS_SHOWN]
        more = len(self) - len(shown)
        tail = f", and {more} more" if more else ""
        origin = f" from {self.source}" if self.source else ""
        return f"NamedArrays({', '.join(shown)}{tail}){origin}"

    def __reduce__(self) -> tuple[Any, ...]:
        # Without this, copying and pickling would fill the dict item by item, which is refused.
        return NamedArrays, (dict(self), self.labels, self.source)

    def _refuse(self, *_: object, **__: object) -> NoReturn:
        """Refuse every change.

        Raises
        ------
        TypeError
            Always, with the line that makes changed data.
        """
        raise TypeError(
            "named arrays do not change once they are checked. "
            "Make new data instead: {**data, 'name': values}."
        )

    __setitem__ = __delitem__ = __ior__ = _refuse
    clear = pop = popitem = setdefault = update = _refuse


def _keep(name: str, array: np.ndarray) -> np.ndarray:
    if not isinstance(array, np.ndarray) or array.dtype not in KEPT_TYPES:
        kind = getattr(array, "dtype", type(array).__name__)
        raise DataError(
            sentence(
                f"column {name!r} must be an array of float64, int64 or bool",
                str(kind),
                "Let named_arrays(data) convert it",
            )
        )
    if array.dtype.kind == "f" and not np.isfinite(array).all():
        raise DataError(f"column {name!r} holds nan or inf. Let named_arrays(data) say where.")
    kept = np.array(array, order="C")
    kept.flags.writeable = False
    return kept


def fingerprint(arrays: Mapping[str, np.ndarray]) -> str:
    """Return the SHA-256 of names, types, shapes and bytes, whatever the order of the columns.

    Parameters
    ----------
    arrays : mapping
        Column name -> NumPy array.

    Returns
    -------
    str
        64 hexadecimal digits.
    """
    digest = hashlib.sha256()
    for name in sorted(arrays):
        array = np.ascontiguousarray(arrays[name]).reshape(np.shape(arrays[name]))
        # Each part carries its length, so that no two tables can spell the same bytes.
        for part in (name.encode(), array.dtype.str.encode(), repr(array.shape).encode()):
            digest.update(len(part).to_bytes(8, "little") + part)
        digest.update(array.tobytes())
    return digest.hexdigest()
