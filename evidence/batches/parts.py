"""Parts: some data sets in a row, and their columns stacked by shape for a compiled program.

Data sets of unlike length share a program where the log-likelihood is row by row: each is filled
up to the length of its class by repeating its last row, and the terms of the repeated rows are
left out of the sum.
"""

from __future__ import annotations

import hashlib
import itertools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from evidence.batches.findings import Finding

__all__ = [
    "Group",
    "Part",
    "Schema",
    "fingerprint_part",
    "group_by_shape",
    "learn_schema",
    "length_class",
]

FEWEST = 512  # data sets from which a length class of its own is worth a program


@dataclass(frozen=True, kw_only=True)
class Part:
    """Some data sets in a row.

    Attributes
    ----------
    first : int
        Position of the first in the whole.
    names : tuple
        What identifies each: all whole numbers, or all texts.
    stacked : dict or None
        Columns (n, ...), where all data sets have the same shapes.
    listed : tuple of (dict or None)
        Columns of each data set, None where it is bad; empty where they are stacked.
    bad : dict
        Position within the part -> (Finding, why the data set cannot be used).
    fingerprint : str
        Of names and contents.
    """

    first: int
    names: tuple[Any, ...]
    stacked: dict[str, np.ndarray] | None = None
    listed: tuple[dict[str, np.ndarray] | None, ...] = ()
    bad: Mapping[int, tuple[int, str]] = field(default_factory=dict)
    fingerprint: str = ""

    def __len__(self) -> int:
        return len(self.names)

    def data_set(self, place: int) -> dict[str, np.ndarray]:
        """Columns of one data set of the part."""
        if self.stacked is not None:
            return {name: array[place] for name, array in self.stacked.items()}
        return dict(self.listed[place] or {})

    def good(self) -> list[int]:
        """Places of the data sets that could be read."""
        return [place for place in range(len(self)) if place not in self.bad]


@dataclass(frozen=True, kw_only=True)
class Schema:
    """What every data set of a batch must look like.

    Attributes
    ----------
    shapes : dict
        Column -> shape; without the leading axis for the columns named in ``rows``.
    rows : frozenset of str
        Columns whose leading axis is the observation.
    length : int or None
        The number of observations where all data sets agree; None where they differ.
    """

    shapes: dict[str, tuple[int, ...]]
    rows: frozenset[str]
    length: int | None


@dataclass(frozen=True, kw_only=True)
class Group:
    """Data sets of one shape, stacked.

    Attributes
    ----------
    places : (k,)
        Places in the part.
    columns : dict
        Column -> (k, ...).
    kept : (k,) or None
        How many rows of each are its own; None where all are.
    """

    places: np.ndarray
    columns: dict[str, np.ndarray]
    kept: np.ndarray | None

    def data_set(self, index: int) -> dict[str, np.ndarray]:
        """Columns of one data set as they are stacked, repeated rows included."""
        return {name: array[index] for name, array in self.columns.items()}


def learn_schema(part: Part, template: int, terms: int | None) -> Schema:
    """Take one data set as the model of all; see which columns have a row for every term.

    Parameters
    ----------
    part : Part
        The first of a batch.
    template : int
        Place of the data set in it.
    terms : int or None
        Number of its log-likelihood terms.
    """
    good = part.good()
    first = {k: np.shape(v) for k, v in part.data_set(template).items()}
    if part.stacked is not None:
        return Schema(shapes=first, rows=frozenset(), length=None)
    alike = [k for k in good if part.listed[k].keys() >= first.keys()]
    rows = {name for name, shape in first.items() if shape and shape[0] == terms}
    lengths = {
        name: {np.shape(part.listed[k][name])[:1] for k in alike} for name in first if first[name]
    }
    varying = {name for name, seen in lengths.items() if len(seen) > 1}
    if varying & rows:  # a grid that happens to be as long as the first data set
        rows &= varying
    if (varying and terms is None) or varying - rows:
        rows = rows | varying
    shapes = {name: shape[1:] if name in rows else shape for name, shape in first.items()}
    return Schema(shapes=shapes, rows=frozenset(rows), length=None if varying else terms)


def length_class(length: int) -> int:
    """Smallest of 8, 12, 16, 24, 32, 48, ... that is not below a length."""
    size = 8
    while True:
        for candidate in (size, size + size // 2):
            if length <= candidate:
                return candidate
        size *= 2


def misfit(columns: Mapping[str, np.ndarray], schema: Schema) -> str | None:
    """Why a data set does not fit the schema, or None."""
    lacking = [name for name in schema.shapes if name not in columns]
    if lacking:
        return f"no column {lacking[0]!r}; it has {', '.join(columns) or 'none'}"
    length = None
    for name, wanted in schema.shapes.items():
        shape = np.shape(columns[name])
        if name not in schema.rows:
            if shape != wanted:
                return f"column {name!r} has the shape {shape}, others {wanted}"
            continue
        if shape[1:] != wanted or not shape:
            return (
                f"column {name!r} has the shape {shape}, others (n, {', '.join(map(str, wanted))})"
            )
        if length is not None and shape[0] != length:
            return f"column {name!r} has {shape[0]} rows, another {length}"
        length = shape[0]
    return None


def group_by_shape(
    part: Part, schema: Schema, *, exact: bool
) -> tuple[list[Group], dict[int, tuple[int, str]]]:
    """Stack the data sets of a part by shape; also tell which do not fit.

    Parameters
    ----------
    part, schema : Part, Schema
    exact : bool
        One group for every length; otherwise lengths share classes, and repeated rows fill up.
    """
    if part.stacked is not None:
        places = np.array(part.good(), np.int64)
        if len(places) == len(part):
            return [Group(places=places, columns=part.stacked, kept=None)], {}
        columns = {name: array[places] for name, array in part.stacked.items()}
        return ([Group(places=places, columns=columns, kept=None)] if len(places) else []), {}
    bad, lengths = {}, {}
    for place in part.good():
        reason = misfit(part.listed[place], schema)
        if reason is not None:
            bad[place] = (int(Finding.WRONG_COLUMNS), reason)
            continue
        some = next((part.listed[place][name] for name in schema.rows), None)
        lengths[place] = 0 if some is None else len(some)
    classes = _classes(lengths, schema, exact)
    kinds = _kinds(part, list(lengths), schema)
    groups = [
        _stack(part, [p for p in lengths if classes[p] == size], size, schema, kinds)
        for size in sorted(set(classes.values()))
    ]
    return groups, bad


def _classes(lengths: Mapping[int, int], schema: Schema, exact: bool) -> dict[int, int]:
    """Length to which each data set is filled up; negative where nothing is filled up."""
    if exact or not schema.rows:
        return {place: -length for place, length in lengths.items()}
    classes = {
        place: -length if length == schema.length else length_class(length)
        for place, length in lengths.items()
    }
    sizes = sorted({c for c in classes.values() if c > 0})
    for size, longer in itertools.pairwise(sizes):
        members = [p for p, c in classes.items() if c == size]
        if len(members) < FEWEST:  # a class of few joins the next
            classes.update(dict.fromkeys(members, longer))
    return classes


def _kinds(part: Part, places: Sequence[int], schema: Schema) -> dict[str, np.dtype]:
    """One type per column: numbers that happen to be whole in some data sets are numbers."""
    return {
        name: np.result_type(*{part.listed[p][name].dtype for p in places})
        for name in schema.shapes
        if places
    }


def _stack(
    part: Part, places: list[int], size: int, schema: Schema, kinds: Mapping[str, np.dtype]
) -> Group:
    filled = size > 0
    columns = {}
    for name, shape in schema.shapes.items():
        pieces = [part.listed[p][name] for p in places]
        if not filled or name not in schema.rows:
            columns[name] = np.stack(pieces).astype(kinds[name], copy=False)
            continue
        column = np.empty((len(places), size, *shape), kinds[name])
        for row, piece in zip(column, pieces, strict=True):
            row[: len(piece)] = piece
            row[len(piece) :] = piece[-1]
        columns[name] = column
    some = next(iter(schema.rows), None)
    kept = None
    if filled:
        kept = np.array([len(part.listed[p][some]) for p in places], np.int64)
    return Group(places=np.array(places, np.int64), columns=columns, kept=kept)


def fingerprint_part(names: Sequence[Any], pieces: Sequence[bytes]) -> str:
    """SHA-256 of names and contents, each with its length."""
    digest = hashlib.sha256()
    for part in (repr(tuple(names)).encode(), *pieces):
        digest.update(len(part).to_bytes(8, "little") + part)
    return digest.hexdigest()
