"""What is learned from the first data sets: their shape, and where to start in all others."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from evidence.batches.answers import Settings
from evidence.batches.parts import Part, learn_schema
from evidence.candidates import check_same_terms
from evidence.complaints import DeclarationError
from evidence.mode import MATTERS, find_modes
from evidence.model import Model
from evidence.problem import Problem

__all__ = ["learn_settings"]

PILOTS = 5  # data sets whose modes are looked for from many starts
TRIED = 8  # data sets tried until one suits all candidates
ROUNDED = 6  # decimals of a start, in prior sd
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
    """Fit some data sets of the first part from many starts, and settle what a run needs.

    Where a pilot has several modes each is followed in every data set; otherwise the median of
    the pilots' modes is the start.

    Raises
    ------
    DeclarationError
        No data set suits all candidates, or they return different numbers of terms.
    """
    template, problems = _first_that_suits(models, part, shared)
    check_same_terms({p.model.name: p.terms for p in problems})
    terms = next((p.terms for p in problems if p.terms is not None), None)
    schema = learn_schema(part, template, terms)
    places = _pilots(part, template, schema.shapes)
    starts = {
        problem.model.name: _starts(problem, part, places, shared, seed) for problem in problems
    }
    columns = part.data_set(template)
    return Settings(
        depth=depth,
        seed=seed,
        block=_block(part_size, max(p.dim for p in problems)),
        schema=schema,
        shared=dict(shared),
        template={name: columns[name] for name in schema.shapes},
        starts=starts,
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


def _pilots(part: Part, template: int, names: Mapping[str, object]) -> list[int]:
    """The template and some data sets spread over the part that have its columns."""
    like = [p for p in part.good() if p >= template and names.keys() <= part.data_set(p).keys()]
    step = max(1, len(like) // PILOTS)
    return list(dict.fromkeys([template, *like[::step]]))[:PILOTS]


def _starts(
    problem: Problem, part: Part, places: Sequence[int], shared: Mapping[str, np.ndarray], seed: int
) -> np.ndarray:
    """Starts (M, d): as many as the pilot with the most modes has."""
    found = []
    for place in places:
        try:
            pilot = Problem(problem.model, {**shared, **part.data_set(place)})
        except DeclarationError:  # of another shape: left to the run to name
            continue
        if pilot.dim != problem.dim:
            continue
        peaks = find_modes(pilot, seed=seed).peaks if pilot.dim else ()
        found.append([p.z for p in peaks if p.laplace > peaks[0].laplace - MATTERS])
    most = max((len(modes) for modes in found), default=0)
    if most == 0:
        return np.array([problem.centre if problem.start is None else problem.start])
    if most == 1:
        starts = np.median([modes[0] for modes in found if modes], axis=0)[None]
    else:
        starts = np.array(next(modes for modes in found if len(modes) == most))
    # the same digits whichever driver found the modes, so that a resumed run gives them again
    return np.round(starts / problem.spread, ROUNDED) * problem.spread


def _block(part_size: int, dim: int) -> int:
    """Rows of one call: a power of two that holds a part, unless its Hessians are too large."""
    most = max(16, BLOCK_BYTES // (8 * (dim * dim + 4 * dim + 8)))
    wanted = min(part_size, most)
    block = 16
    while block < wanted:
        block *= 2
    return block
