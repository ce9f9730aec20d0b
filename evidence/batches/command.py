"""What the command `weigh-many` does: a study, a folder of data sets, a store."""

from __future__ import annotations

import contextlib
from collections.abc import Callable, Iterator
from typing import Any

from evidence.batches.batch import Batch
from evidence.batches.driver import weigh_many
from evidence.complaints import DataError, load_optional
from evidence.study import read_study

__all__ = ["run"]


def run(
    study_path: str,
    data_path: str,
    store: str,
    *,
    by: str | None,
    workers: int | None,
    cluster: str | None,
    depth: str,
    seed: int,
    progress: Callable[[str], None],
) -> Batch:
    """Weigh a study's candidates on the data sets of a folder or a table.

    Raises
    ------
    DataError
        The cluster cannot be reached; and all that :func:`weigh_many` raises.
    """
    study = read_study(study_path)
    with _client(workers, cluster) as client:
        return weigh_many(
            study, data_path, store=store, client=client, depth=depth, seed=seed, by=by,
            progress=progress,
        )  # fmt: skip


@contextlib.contextmanager
def _client(workers: int | None, cluster: str | None) -> Iterator[Any]:
    if cluster is not None:
        distributed = load_optional("distributed", "cluster")
        try:
            client = distributed.Client(cluster, timeout=20)
        except (OSError, ValueError) as error:
            raise DataError(f"the cluster at {cluster} cannot be reached: {error}.") from error
        with client:
            yield client
    elif workers is not None:
        from evidence.batches.cluster import own_cluster

        with own_cluster(workers) as client:
            yield client
    else:
        yield None
