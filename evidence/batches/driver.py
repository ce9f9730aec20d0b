"""weigh_many(): every candidate on every one of many data sets."""

from __future__ import annotations

import contextlib
import dataclasses
import os
import time
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any

import jax
import numpy as np

from evidence.approximation import check_options
from evidence.batches.answers import Settings
from evidence.batches.batch import Batch
from evidence.batches.candidate import Candidate
from evidence.batches.results import PartResult
from evidence.batches.solving import in_threads, solve_part
from evidence.batches.sources import Raw, Source, open_source
from evidence.batches.store import Store
from evidence.batches.template import learn_settings
from evidence.candidates import candidates_of, chances_of
from evidence.complaints import DataError, DeclarationError, near_name, sentence
from evidence.fingerprint import read_functions
from evidence.model import Model
from evidence.record import versions
from evidence.report.progress import ProgressLine
from evidence.study import Study
from evidence.tables import fingerprint, named_arrays

__all__ = ["weigh_many"]

PART_BYTES = 32 * 2**20
PART_MOST, PART_LEAST = 8192, 64
PART_UNKNOWN = 1024


def weigh_many(
    models: Sequence[Model] | Study,
    data_sets: Any,
    *,
    store: str | Path | None = None,
    client: Any = None,
    depth: str = "quick",
    on_bad: str = "record",
    seed: int = 0,
    prior_probabilities: Mapping[str, float] | Sequence[float] | None = None,
    shared: Mapping[str, Any] | None = None,
    by: str | None = None,
    threads: int | None = None,
    part_size: int | None = None,
    progress: Callable[[str], None] | None = None,
) -> Batch:
    """Weigh candidates on every one of many data sets.

    Parameters
    ----------
    models : sequence of Model, or Study
    data_sets : mapping, iterable, or path
        A dict of stacked arrays, whose leading axis is the data set; an iterable of dicts, or of
        pairs of a name and a dict; a folder or a pattern of CSV or Parquet files, one per data
        set; or one Parquet table with ``by``. Data sets may differ in length.
    store : path, optional
        Folder in which finished parts are kept as Parquet. The same call goes on where it was
        stopped; a call that asks for something else is refused. Needs the extra ``batch``.
    client : dask.distributed.Client, optional
        Where to calculate, in place of the threads of this process. Needs the extra ``cluster``.
    depth : {"none", "quick", "standard", "thorough"}
        "quick" checks every row inside the compiled programs; the rows that do not pass are
        "doubtful". "standard" and "thorough" send those up the ladder one by one, as
        :func:`evidence.approximate` does: milliseconds to seconds for each.
    on_bad : {"record", "raise"}
        Whether a data set that cannot be used becomes a failed row, or ends the run.
    seed : int
        The same seed gives the same digits.
    prior_probabilities : mapping or sequence, optional
        One per candidate; equal where not given.
    shared : mapping, optional
        Columns that all data sets have in common.
    by : str, optional
        Column of a Parquet table that tells its data sets apart; their rows lie together.
    threads : int, optional
        One per core where not given.
    part_size : int, optional
        Data sets that are calculated, and kept, together; by their size where not given.
    progress : callable, optional
        Told in a few words how far it is; by default a line on the terminal says so.

    Returns
    -------
    Batch

    Raises
    ------
    DeclarationError
        Candidates or options are declared wrongly, or a candidate cannot be used on data sets of
        unlike length.
    DataError
        No data set can be used, the store belongs to another run, or ``on_bad="raise"`` and one
        is bad.
    """
    _check(depth, seed, on_bad, threads=threads, part_size=part_size)
    candidates = candidates_of(models)
    chances = list(chances_of(candidates, prior_probabilities).values())
    common = dict(named_arrays(shared))
    source = open_source(data_sets, by)
    workers = threads or _cores()
    size = part_size or _part_size(source, workers)
    asked = _asked(candidates, models, chances, common, depth=depth, seed=seed)
    with contextlib.ExitStack() as stack:
        if progress is None:
            progress = stack.enter_context(ProgressLine())
        kept = None
        if store is not None:
            kept = stack.enter_context(Store(store).open({**asked, "part_size": size}))
            asked = kept.manifest
        asked.setdefault("part_size", size)
        run = _Run(candidates, models, asked, common, source, kept, on_bad)
        results = run.results(client, workers)
        parts = _collect(results, kept, _Pace(progress, source.total))
        set_aside = tuple(kept.set_aside) if kept else ()
    where = Store.read(store) if store is not None else None
    return Batch(asked, where or tuple(parts), set_aside=set_aside)


class _Run:
    """One run: what is asked, and the candidates once the first data sets have been seen."""

    def __init__(
        self,
        models: Sequence[Model],
        given: Any,
        asked: Mapping[str, Any],
        shared: Mapping[str, np.ndarray],
        source: Source,
        store: Store | None,
        on_bad: str,
    ) -> None:
        self.models, self.given, self.asked, self.shared = models, given, asked, shared
        self.source, self.store, self.on_bad = source, store, on_bad
        self.finished = store.finished() if store else {}
        self.chances = list(asked["prior_probabilities"].values())

    def results(self, client: Any, workers: int) -> Iterator[PartResult]:
        """The parts that were not finished before, as they get ready."""
        raws = enumerate(self.source.parts(self.asked["part_size"]))
        begun, settings, candidates = self._begin(raws)
        tasks = self._unfinished(_chain(begun, raws))
        if client is not None:
            from evidence.batches.cluster import on_cluster

            results = on_cluster(client, self.given, self.models, settings, self.chances, tasks)
        else:
            results = in_threads(
                lambda task: solve_part(candidates, task[0], task[1].load(), self.chances),
                tasks,
                workers,
            )
        for result in results:
            self._complain(result)
            yield result

    def _begin(
        self, raws: Iterator[tuple[int, Raw]]
    ) -> tuple[list[tuple[int, Raw]], Settings, list[Candidate]]:
        """Read on until there is a data set that can be used, and learn from it."""
        begun: list[tuple[int, Raw]] = []
        reason = "there are none"
        for index, raw in raws:
            part = raw.load()
            begun.append((index, raw.loaded(part)))
            if part.good():
                settings = learn_settings(
                    self.models, part, self.shared, depth=self.asked["depth"],
                    seed=self.asked["seed"], part_size=self.asked["part_size"],
                )  # fmt: skip
                candidates = [Candidate(model, settings) for model in self.models]
                starts = {c.model.name: c.learn_starts(part) for c in candidates}
                return begun, dataclasses.replace(settings, starts=starts), candidates
            reason = next(iter(part.bad.values()))[1]
        raise DataError(sentence("no data set can be used", reason))

    def _unfinished(self, raws: Iterable[tuple[int, Raw]]) -> Iterator[tuple[int, Raw]]:
        seen = -1
        for index, raw in raws:
            seen = index
            known = self.finished.get(index)
            if known is None:
                yield index, raw
            elif known != raw.fingerprint:
                raise DataError(
                    f"the data sets {raw.names[0]!r} to {raw.names[-1]!r} are not those of which "
                    f"{self.store.path} holds the results: something in them has changed. Give "
                    "another store, or remove this one."
                )
        if self.finished and max(self.finished) > seen:
            raise DataError(
                f"{self.store.path} holds results of more data sets than there are now. Give "
                "another store, or remove this one."
            )

    def _complain(self, result: PartResult) -> None:
        if self.on_bad == "raise" and result.notes:
            place, note = min(result.notes.items())
            raise DataError(sentence(f"data set {result.names[place]!r} cannot be used", note))


class _Pace:
    """How far a run is, in words."""

    def __init__(self, tell: Callable[[str], None], total: int | None) -> None:
        self.tell, self.total = tell, total
        self.done, self.began = 0, time.monotonic()
        tell("looking at the first data sets")

    def add(self, count: int) -> None:
        """Count finished data sets and tell."""
        self.done += count
        rate = self.done / max(time.monotonic() - self.began, 1e-9)
        text = f"{self.done} data sets"
        if self.total is not None:
            left = max(self.total - self.done, 0) / max(rate, 1e-9)
            text = f"{self.done} of {self.total} data sets, {rate:.0f} a second, {left:.0f} s left"
        else:
            text += f", {rate:.0f} a second"
        self.tell(text)


def _collect(results: Iterator[PartResult], store: Store | None, pace: _Pace) -> list[PartResult]:
    """Keep each part as it gets ready: in the store, or in memory where there is none."""
    parts = []
    for result in results:
        if store is None:
            parts.append(result)
        else:
            store.write(result)
        pace.add(len(result))
    return sorted(parts, key=lambda part: part.index)


def _asked(
    models: Sequence[Model],
    given: Any,
    chances: Sequence[float],
    shared: Mapping[str, np.ndarray],
    *,
    depth: str,
    seed: int,
) -> dict[str, Any]:
    """What was asked, as the manifest keeps it: a run that asks otherwise is another one."""
    import datetime

    names = [model.name for model in models]
    return {
        "candidates": names,
        "models": {model.name: _declared(model) for model in models},
        "study": given.path.name if isinstance(given, Study) else None,
        "depth": depth,
        "seed": int(seed),
        "prior_probabilities": dict(zip(names, chances, strict=True)),
        "shared": fingerprint(shared),
        "versions": versions(),
        "created": datetime.datetime.now(datetime.UTC).isoformat(timespec="seconds"),
    }


def _declared(model: Model) -> str:
    """Fingerprint of a declaration that another process finds again."""
    dependent = [p for p in model.priors.values() if not hasattr(p, "log_prob")]
    reading = read_functions([model.log_likelihood, *dependent], lasting=True)
    leaves, structure = jax.tree_util.tree_flatten(model.hyperparameters())
    numbers = {f"{k:06d}": np.asarray(leaf) for k, leaf in enumerate(leaves)}
    extra = {"start": model.start, "spread": model.spread}
    numbers |= {f"{k} {n}": np.asarray(v) for k, d in extra.items() for n, v in d.items()}
    words = [model.name, str(structure), reading.digest, fingerprint(numbers)]
    return fingerprint({word: np.zeros(0) for word in words})


def _part_size(source: Source, workers: int) -> int:
    size = PART_UNKNOWN
    if source.bytes_each is not None:
        size = int(np.clip(PART_BYTES // max(source.bytes_each, 1), 16, PART_MOST))
    if source.total is not None:  # something for every worker
        size = min(size, max(PART_LEAST, -(-source.total // workers)))
    return size


def _check(depth: Any, seed: Any, on_bad: Any, **whole: Any) -> None:
    check_options(depth, seed)
    if on_bad not in ("record", "raise"):
        raise DeclarationError(
            sentence("on_bad must be 'record' or 'raise'", repr(on_bad))
            + near_name(str(on_bad), ("record", "raise"))
        )
    for name, value in whole.items():
        if value is not None and (not isinstance(value, int) or value < 1):
            raise DeclarationError(
                sentence(f"{name} must be a whole number from 1 on", repr(value))
            )


def _cores() -> int:
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def _chain(begun: list[Any], rest: Iterator[Any]) -> Iterator[Any]:
    """The parts already read, let go one by one, and then the rest."""
    while begun:
        yield begun.pop(0)
    yield from rest
