"""Where data sets come from: stacked arrays, an iterator, a folder of files, a Parquet table.

Every source gives parts in order, each with a fingerprint of what it read; a part is turned into
arrays only when it is wanted, so that what a store holds already is compared and not computed.
"""

from __future__ import annotations

import glob
import itertools
from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from evidence.batches.findings import Finding
from evidence.batches.parts import Part, fingerprint_part
from evidence.complaints import DataError, DeclarationError, load_optional, near_name, sentence
from evidence.tables import named_arrays, read_data

__all__ = ["Raw", "Source", "open_source"]

SUFFIXES = (".csv", ".parquet")
READY = (np.dtype(np.float64), np.dtype(np.int64), np.dtype(np.bool_))
ROWS_READ = 65536
KINDS = (
    "a dict of stacked arrays, an iterator of dicts, a folder or pattern of CSV or Parquet files, "
    "or one Parquet table with by="
)
Reader = Callable[[], tuple[Any, Any, dict[int, tuple[int, str]]]]


@dataclass(frozen=True)
class Raw:
    """A part that has been seen but not yet turned into arrays."""

    first: int
    names: tuple[Any, ...]
    fingerprint: str
    read: Reader

    def load(self) -> Part:
        """Turn it into arrays."""
        stacked, listed, bad = self.read()
        return Part(first=self.first, names=self.names, stacked=stacked, listed=listed, bad=bad,
                    fingerprint=self.fingerprint)  # fmt: skip

    def loaded(self, part: Part) -> Raw:
        """The same with its arrays at hand, so that they are not read twice."""
        return replace(self, read=lambda: (part.stacked, part.listed, part.bad))


@dataclass(frozen=True)
class Source:
    """Data sets in order.

    Attributes
    ----------
    total : int or None
        How many there are, where that is known beforehand.
    bytes_each : int or None
        About how large one is.
    kind : str
        What it is, in words.
    parts : callable
        Size -> iterator of Raw parts of that many data sets.
    """

    total: int | None
    bytes_each: int | None
    kind: str
    parts: Callable[[int], Iterator[Raw]]


def open_source(data_sets: Any, by: str | None = None) -> Source:
    """Tell the kind of some data sets and make a source of them.

    Raises
    ------
    DataError
        Nothing that is known, files that are missing, arrays of unequal leading axis.
    DeclarationError
        ``by`` where it has no meaning.
    """
    if isinstance(data_sets, str | Path):
        return _from_path(Path(data_sets).expanduser(), by)
    if by is not None:
        raise DeclarationError(sentence("by= names a column of one Parquet table", repr(by)))
    if isinstance(data_sets, Mapping):
        return _from_stacked(data_sets)
    if isinstance(data_sets, Iterable) and not hasattr(data_sets, "iloc"):
        return _from_iterable(data_sets)
    raise DataError(sentence(f"data_sets must be {KINDS}", type(data_sets).__name__))


def _from_stacked(columns: Mapping[str, Any]) -> Source:
    arrays = {name: _stackable(name, values) for name, values in columns.items()}
    sizes = {name: len(array) for name, array in arrays.items()}
    if not arrays or len(set(sizes.values())) > 1:
        shown = ", ".join(f"{name!r} {size}" for name, size in sizes.items()) or "no columns"
        raise DataError(
            sentence(
                "stacked arrays must have one leading axis, the data set",
                shown,
                "Give what all data sets have in common apart: shared={'t': t}",
            )
        )
    total = next(iter(sizes.values()))

    def parts(size: int) -> Iterator[Raw]:
        for first in range(0, total, size):
            here = {name: array[first : first + size] for name, array in arrays.items()}
            names = tuple(range(first, min(first + size, total)))
            pieces = [
                piece
                for name in sorted(here)
                for piece in (f"{name}{here[name].dtype.str}{here[name].shape}".encode(),
                              np.ascontiguousarray(here[name]).tobytes())
            ]  # fmt: skip
            yield Raw(first, names, fingerprint_part(names, pieces), lambda h=here: _check(h))

    size = sum(array.nbytes for array in arrays.values()) // max(total, 1)
    return Source(total, size, "stacked arrays", parts)


def _stackable(name: str, values: Any) -> np.ndarray:
    array = np.asarray(values)
    if array.ndim == 0 or array.dtype.kind not in "biuf":
        raise DataError(
            sentence(
                f"column {name!r} must be an array of numbers with one entry per data set",
                f"{array.dtype} of shape {array.shape}",
                "Data sets of unlike length go in as an iterator of dicts",
            )
        )
    return array


def _check(columns: Mapping[str, np.ndarray]) -> tuple[Any, Any, dict[int, tuple[int, str]]]:
    """Convert stacked columns, and find the data sets that hold nan or inf."""
    kinds = {"b": np.bool_, "i": np.int64, "u": np.int64, "f": np.float64}
    stacked = {k: np.asarray(x, dtype=kinds[x.dtype.kind]) for k, x in columns.items()}
    bad: dict[int, tuple[int, str]] = {}
    for name, array in stacked.items():
        if array.dtype.kind != "f":
            continue
        flat = np.isfinite(array).reshape(len(array), -1)
        for place in np.flatnonzero(~flat.all(axis=1)):
            count = int((~flat[place]).sum())
            bad.setdefault(
                int(place), (int(Finding.BAD_DATA), f"column {name!r} holds {count} nan or inf")
            )
    return stacked, (), bad


def _from_iterable(items: Iterable[Any]) -> Source:
    total = len(items) if hasattr(items, "__len__") else None
    ahead = iter(items)
    begun = list(itertools.islice(ahead, 1))
    peeked = _named(0, begun[0])[1] if begun else {}

    def parts(size: int) -> Iterator[Raw]:
        iterator, first = itertools.chain(begun, ahead), 0
        while some := list(itertools.islice(iterator, size)):
            pairs = [_named(first + k, item) for k, item in enumerate(some)]
            names = _uniform([name for name, _ in pairs])
            pieces = [_bytes(data) for _, data in pairs]
            listed = [data for _, data in pairs]
            yield Raw(first, names, fingerprint_part(names, pieces),
                      lambda d=listed: _convert(d, _arrays))  # fmt: skip
            first += len(some)

    return Source(total, len(_bytes(peeked)), "an iterator", parts)


def _named(position: int, item: Any) -> tuple[Any, Any]:
    if isinstance(item, tuple) and len(item) == 2 and isinstance(item[0], str | int | np.integer):
        name = item[0] if isinstance(item[0], str) else int(item[0])
        return name, item[1]
    return position, item


def _uniform(names: list[Any]) -> tuple[Any, ...]:
    whole = all(isinstance(name, int) for name in names)
    return tuple(names) if whole else tuple(str(name) for name in names)


def _bytes(data: Any) -> bytes:
    """Contents of a data set for a fingerprint, before anything is checked."""
    if not isinstance(data, Mapping):
        return repr(type(data)).encode() + np.asarray(data, dtype=object).astype(str).tobytes()
    pieces = []
    for name in sorted(data, key=str):
        array = np.asarray(data[name])
        plain = array.dtype.kind != "O"
        pieces.append(f"{name} {array.dtype.str} {array.shape} ".encode())
        pieces.append(array.tobytes() if plain else repr(array.tolist()).encode())
    return b"".join(pieces)


def _arrays(data: Any) -> Mapping[str, np.ndarray]:
    """As named_arrays, which costs more than an evidence where nothing is to be converted."""
    if type(data) is dict:
        ready = all(
            type(name) is str and type(x) is np.ndarray and x.dtype in READY and x.size
            for name, x in data.items()
        )
        if ready and all(x.dtype.kind != "f" or np.isfinite(x).all() for x in data.values()):
            return data
    return named_arrays(data)


def _convert(
    items: Iterable[Any], convert: Callable[[Any], Any]
) -> tuple[None, tuple[Any, ...], dict[int, tuple[int, str]]]:
    """Convert one by one; what cannot be used is noted with the reason."""
    listed, bad = [], {}
    for place, item in enumerate(items):
        try:
            arrays = dict(convert(item))
        except DataError as error:
            listed.append(None)
            bad[place] = (int(Finding.BAD_DATA), str(error))
            continue
        listed.append(arrays)
    return None, tuple(listed), bad


def _from_path(path: Path, by: str | None) -> Source:
    if by is not None:
        return _from_table(path, by)
    files = _files(path)
    names = _short_names(files)

    def parts(size: int) -> Iterator[Raw]:
        for first in range(0, len(files), size):
            here, own = files[first : first + size], names[first : first + size]
            pieces = [_content(file) for file in here]
            yield Raw(first, own, fingerprint_part(own, pieces),
                      lambda h=here: _convert(h, read_data))  # fmt: skip

    size = max(file.stat().st_size for file in files)
    return Source(len(files), size, str(path), parts)


def _files(path: Path) -> list[Path]:
    if path.is_file():
        remedy = "Name the column that identifies the data set: by='well' (--by well)"
        raise DataError(sentence(f"{path} is one file, where many data sets are wanted",
                                 remedy=remedy))  # fmt: skip
    if path.is_dir():
        found = [p for p in path.iterdir() if p.suffix.lower() in SUFFIXES]
        found = [p for p in found if not p.name.startswith((".", "_"))]
    else:
        found = [Path(p) for p in glob.glob(str(path), recursive=True)]
        found = [p for p in found if p.suffix.lower() in SUFFIXES]
    if not found:
        neighbours = [p.name for p in path.parent.glob("*")] if path.parent.is_dir() else []
        hint = "" if path.exists() else near_name(path.name, neighbours)
        raise DataError(sentence(f"no .csv or .parquet file in {path}") + hint)
    return sorted(found)


def _short_names(files: list[Path]) -> tuple[str, ...]:
    """Names of files without the ending where that tells them apart."""
    stems = [file.stem for file in files]
    if len(set(stems)) == len(stems):
        return tuple(stems)
    return tuple(str(file) for file in files)


def _content(file: Path) -> bytes:
    try:
        return file.read_bytes()
    except OSError as error:
        return f"unreadable: {error.strerror}".encode()


def _from_table(path: Path, by: str) -> Source:
    parquet = load_optional("pyarrow.parquet", "batch")
    if path.suffix.lower() != ".parquet" or not path.is_file():
        raise DataError(sentence("by= needs one Parquet file", str(path)))
    try:
        columns = parquet.ParquetFile(path).schema_arrow.names
    except Exception as error:
        raise DataError(f"{path} is not a readable Parquet file: {error}.") from error
    if by not in columns:
        raise DataError(
            sentence(f"{path.name} has no column {by!r}, only {', '.join(columns)}")
            + near_name(by, columns)
        )

    def parts(size: int) -> Iterator[Raw]:
        groups, first = _table_groups(parquet.ParquetFile(path), by), 0
        while some := list(itertools.islice(groups, size)):
            names = _uniform([name for name, _ in some])
            frames = [frame for _, frame in some]
            pieces = [_frame_bytes(frame) for frame in frames]
            yield Raw(first, names, fingerprint_part(names, pieces),
                      lambda f=frames: _convert(f, named_arrays))  # fmt: skip
            first += len(some)

    return Source(None, None, f"{path} by {by!r}", parts)


def _table_groups(file: Any, by: str) -> Iterator[tuple[Any, Any]]:
    """Rows of one identifier after the other; they must lie together."""
    import pandas

    seen: set[Any] = set()
    held: Any = None
    for batch in file.iter_batches(batch_size=ROWS_READ):
        frame = batch.to_pandas()
        if held is not None:
            frame = pandas.concat([held, frame], ignore_index=True)
        starts = np.flatnonzero((frame[by] != frame[by].shift()).to_numpy())
        for begin, end in itertools.pairwise(starts):
            yield _one_group(frame.iloc[begin:end], by, seen)
        held = frame.iloc[starts[-1] :]
    if held is not None and len(held):
        yield _one_group(held, by, seen)


def _one_group(frame: Any, by: str, seen: set[Any]) -> tuple[Any, Any]:
    name = frame[by].iloc[0]
    name = int(name) if isinstance(name, int | np.integer) else str(name)
    if name in seen:
        raise DataError(
            f"the rows of data set {name!r} do not lie together. Sort the table by {by!r} first."
        )
    seen.add(name)
    return name, frame.drop(columns=by).reset_index(drop=True)


def _frame_bytes(frame: Any) -> bytes:
    return _bytes({name: frame[name].to_numpy() for name in frame.columns})
