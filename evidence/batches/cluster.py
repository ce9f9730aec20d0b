"""Parts on the workers of a dask cluster; what is done there is what is done here.

Each worker makes the candidates once: from the study's file, whose fingerprint must be the same,
or from the Models themselves as dask serialises them. Data sets travel as Parquet. dask repeats
the part of a worker that is lost.
"""

from __future__ import annotations

import contextlib
import ctypes
import dataclasses
import io
import json
import secrets
import threading
from collections.abc import Iterable, Iterator, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from evidence.batches.answers import Settings
from evidence.batches.candidate import Candidate
from evidence.batches.parts import Part
from evidence.batches.results import PartResult
from evidence.batches.solving import solve_part
from evidence.batches.sources import Raw
from evidence.complaints import DeclarationError, load_optional, sentence
from evidence.model import Model
from evidence.study import Study, read_study

__all__ = ["on_cluster", "own_cluster"]

AHEAD = 2  # parts under way for each thread of the cluster
RETRIES = 5
TRIM_BYTES = 1 << 29  # dask sets 64 KiB, at which giving memory back doubles the cost
M_TRIM_THRESHOLD, M_MMAP_THRESHOLD = -1, -3
_LOCK = threading.Lock()
_READY: dict[str, list[Candidate]] = {}


@dataclasses.dataclass(frozen=True, kw_only=True)
class Orders:
    """What a worker needs to make the candidates.

    Attributes
    ----------
    token : str
        Of the run.
    path, digest : str or None
        The study and its fingerprint, or None where ``models`` travel.
    models : tuple of Model
    settings : Settings
    chances : tuple of float
        Prior probabilities.
    """

    token: str
    path: str | None
    digest: str | None
    models: tuple[Model, ...]
    settings: Settings
    chances: tuple[float, ...]


@contextlib.contextmanager
def own_cluster(workers: int) -> Iterator[Any]:
    """A client of worker processes on this machine, one thread each."""
    distributed = load_optional("distributed", "cluster")
    dask = load_optional("dask", "cluster")
    environment = {
        "MALLOC_TRIM_THRESHOLD_": str(TRIM_BYTES),
        "OMP_NUM_THREADS": "1",
        "OPENBLAS_NUM_THREADS": "1",
        "MKL_NUM_THREADS": "1",
    }
    with (
        dask.config.set({"distributed.nanny.pre-spawn-environ": environment}),
        distributed.LocalCluster(
            n_workers=workers, threads_per_worker=1, processes=True, dashboard_address=":0"
        ) as cluster,
        distributed.Client(cluster) as client,
    ):
        yield client


def on_cluster(
    client: Any,
    given: Any,
    models: Sequence[Model],
    settings: Settings,
    chances: Sequence[float],
    tasks: Iterable[tuple[int, Raw]],
) -> Iterator[PartResult]:
    """Work on parts with the workers of a client; results come as they get ready.

    Raises
    ------
    DeclarationError
        ``client`` is none, or a worker's study is another one.
    """
    distributed = load_optional("distributed", "cluster")
    if not isinstance(client, distributed.Client):
        raise DeclarationError(
            sentence(
                "client must be a dask.distributed.Client",
                type(client).__name__,
                "Type: client=dask.distributed.Client(address)",
            )
        )
    is_study = isinstance(given, Study)
    orders = Orders(
        token=secrets.token_hex(8),
        path=str(given.path) if is_study else None,
        digest=given.fingerprint if is_study else None,
        models=() if is_study else tuple(models),
        settings=settings,
        chances=tuple(chances),
    )
    sent = client.scatter(orders, broadcast=True, hash=False)
    names = [model.name for model in models]
    ready = distributed.as_completed(with_results=False)
    tasks = iter(tasks)

    def send() -> bool:
        task = next(tasks, None)
        if task is None:
            return False
        index, raw = task
        future = client.submit(
            _solve, sent, names, index, pack(raw.load()), pure=False, retries=RETRIES
        )
        ready.add(future)
        return True

    ahead = AHEAD * max(sum(client.nthreads().values()), 1)
    for _ in range(ahead):
        if not send():
            break
    for future in ready:
        result = future.result()
        future.release()
        send()
        yield result


def _solve(orders: Orders, names: Sequence[str], index: int, packed: bytes) -> PartResult:
    """In a worker: one part."""
    _spare_allocations()
    with _LOCK:
        candidates = _READY.get(orders.token)
        if candidates is None:
            _READY.clear()  # those of an earlier run
            models = _models(orders, names)
            candidates = [Candidate(model, orders.settings) for model in models]
            _READY[orders.token] = candidates
    return solve_part(candidates, index, unpack(packed), orders.chances)


def _models(orders: Orders, names: Sequence[str]) -> list[Model]:
    if orders.path is None:
        return list(orders.models)
    if not Path(orders.path).exists():
        raise DeclarationError(f"a worker does not see the study {orders.path}.")
    study = read_study(orders.path)
    if study.fingerprint != orders.digest:
        raise DeclarationError(
            f"the study {orders.path} that a worker sees is not the one that was read here."
        )
    by_name = {model.name: model for model in study.models}
    return [by_name[name] for name in names]


def _spare_allocations() -> None:
    """Let the allocator of a worker keep its memory between programs."""
    with contextlib.suppress(OSError, AttributeError):
        library = ctypes.CDLL(None)
        for option in (M_TRIM_THRESHOLD, M_MMAP_THRESHOLD):
            library.mallopt(option, TRIM_BYTES)


def pack(part: Part) -> bytes:
    """A part as the bytes of a Parquet table: one row per data set, arrays as lists."""
    arrow = load_optional("pyarrow", "batch")
    parquet = load_optional("pyarrow.parquet", "batch")
    places = range(len(part))
    columns: dict[str, Any] = {"name": arrow.array(list(part.names))}
    sets = [part.data_set(place) for place in places]
    wanted = list(dict.fromkeys(name for data in sets for name in data))
    kinds = {}
    for name in wanted:
        some = [data.get(name) for data in sets]
        kind = np.result_type(*{x.dtype for x in some if x is not None})
        kinds[name] = kind.str
        columns[f"values {name}"] = arrow.array(
            [None if x is None else np.ravel(x).astype(kind, copy=False) for x in some]
        )
        columns[f"shape {name}"] = arrow.array(
            [None if x is None else list(np.shape(x)) for x in some], arrow.list_(arrow.int64())
        )
    about = {
        "first": part.first, "fingerprint": part.fingerprint, "columns": wanted, "kinds": kinds,
        "stacked": part.stacked is not None,
        "bad": {str(k): v for k, v in part.bad.items()},
    }  # fmt: skip
    table = arrow.table(columns).replace_schema_metadata({b"evidence": json.dumps(about).encode()})
    sink = io.BytesIO()
    parquet.write_table(table, sink, compression="zstd")
    return sink.getvalue()


def unpack(content: bytes) -> Part:
    """A part from :func:`pack`."""
    parquet = load_optional("pyarrow.parquet", "batch")
    table = parquet.read_table(io.BytesIO(content))
    about = json.loads(table.schema.metadata[b"evidence"])
    names = tuple(table.column("name").to_pylist())
    read = {name: _read_column(table, name, about["kinds"][name]) for name in about["columns"]}
    bad = {int(k): (int(code), note) for k, (code, note) in about["bad"].items()}
    if about["stacked"]:
        return Part(first=about["first"], names=names, bad=bad, fingerprint=about["fingerprint"],
                    stacked={name: np.stack(arrays) for name, arrays in read.items()})  # fmt: skip
    listed = tuple(
        None if k in bad else {n: a[k] for n, a in read.items() if a[k] is not None}
        for k in range(len(names))
    )
    return Part(first=about["first"], names=names, bad=bad, fingerprint=about["fingerprint"],
                listed=listed)  # fmt: skip


def _read_column(table: Any, name: str, kind: str) -> list[np.ndarray | None]:
    values = table.column(f"values {name}").combine_chunks()
    shapes = table.column(f"shape {name}").to_pylist()
    flat = values.flatten().to_numpy(zero_copy_only=False).astype(kind, copy=False)
    sizes = [0 if shape is None else int(np.prod(shape)) for shape in shapes]
    ends = np.cumsum(sizes)
    return [
        None if shape is None else flat[end - size : end].reshape(shape)
        for shape, size, end in zip(shapes, sizes, ends, strict=True)
    ]
