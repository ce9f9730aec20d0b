"""One part, all candidates: what a thread or a worker does."""

from __future__ import annotations

import collections
import concurrent.futures
from collections.abc import Callable, Iterable, Iterator, Sequence
from typing import Any

from evidence.batches.candidate import Candidate
from evidence.batches.parts import Part
from evidence.batches.results import PartResult, join

__all__ = ["in_threads", "solve_part"]


def solve_part(
    candidates: Sequence[Candidate], index: int, part: Part, chances: Sequence[float]
) -> PartResult:
    """Every candidate on the data sets of a part, compared with prior probabilities."""
    notes = {place: note for place, (_, note) in part.bad.items()}
    answers = []
    for candidate in candidates:
        found, bad = candidate.solve(part)
        answers.append(found)
        notes.update({place: note for place, (_, note) in bad.items()})
    return join(index, part.first, part.names, answers, notes, chances, part.fingerprint)


def in_threads(
    work: Callable[[Any], PartResult], tasks: Iterable[Any], threads: int
) -> Iterator[PartResult]:
    """Work on tasks in some threads, one queue each; results come in order."""
    waiting: collections.deque[concurrent.futures.Future[PartResult]] = collections.deque()
    with concurrent.futures.ThreadPoolExecutor(threads, "evidence") as pool:
        try:
            for task in tasks:
                waiting.append(pool.submit(work, task))
                if len(waiting) > threads:
                    yield waiting.popleft().result()
            while waiting:
                yield waiting.popleft().result()
        finally:
            for future in waiting:
                future.cancel()
