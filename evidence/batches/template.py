"""What is learned from the first data sets before a run: their shape, and how to cut them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from evidence.batches.answers import Settings
from evidence.batches.parts import Part, learn_schema
from evidence.candidates import check_same_terms
from evidence.complaints import DeclarationError
from evidence.model import Model
from evidence.problem import Problem

__all__ = ["learn_settings"]

TRIED = 8  # data sets tried until one suits all candidates
BLOCK_BYTES = 64 * 2**20


def learn_settings(
    models: Sequence[Model],
    part: Part,
    shared: Mapping[str, np.ndarray],
    *,
    depth: str,
    seed: int,
    part_size: int,
) -> Settings:
    """Find a data set that suits all candidates, and settle what a run needs but the starts.

    Raises
    ------
    DeclarationError
        No data set suits all candidates, or they return different numbers of terms.
    """
    template, problems = _first_that_suits(models, part, shared)
    check_same_terms({p.model.name: p.terms for p in problems})
    terms = next((p.terms for p in problems if p.terms is not None), None)
    schema = learn_schema(part, template, terms)
    columns = part.data_set(template)
    return Settings(
        depth=depth,
        seed=seed,
        block=_block(part_size, max(p.dim for p in problems)),
        schema=schema,
        shared=dict(shared),
        template={name: columns[name] for name in schema.shapes},
        starts={},
    )


def _first_that_suits(
    models: Sequence[Model], part: Part, shared: Mapping[str, np.ndarray]
) -> tuple[int, list[Problem]]:
    first_error: DeclarationError | None = None
    for place in part.good()[:TRIED]:
        try:
            return place, [Problem(model, {**shared, **part.data_set(place)}) for model in models]
        except DeclarationError as error:
            first_error = first_error or error
    raise first_error or DeclarationError("there is no data set to begin with.")


def _block(part_size: int, dim: int) -> int:
    """Rows of one call: a power of two that holds a part, unless its Hessians are too large."""
    most = max(16, BLOCK_BYTES // (8 * (dim * dim + 4 * dim + 8)))
    wanted = min(part_size, most)
    block = 16
    while block < wanted:
        block *= 2
    return block
