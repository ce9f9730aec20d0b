"""A work queue in one compiled program: slots that search for modes, each on its own data set.

A slot whose search has ended writes its result and takes the next data set, so that no slot waits
for the slowest. The step is the one of :mod:`evidence.newton`, with directions by a factorisation.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np

from evidence import newton
from evidence.batches.density import Given, RowDensity
from evidence.batches.factor import factored_directions
from evidence.outcome import Outcome

__all__ = ["Ends", "build_queue", "ends_width", "unpack_ends"]

LOG_2PI = float(np.log(2.0 * np.pi))
SINGULAR = 1e-10  # scaled eigenvalue at or below which a peak counts as none, as in a single fit


class Ends(NamedTuple):
    """Where searches ended, one row per search.

    Attributes
    ----------
    z : (B, d)
        Places [unconstrained].
    log_density, laplace : (B,), (B,)
        Log posterior density, and plain Laplace approximation; nan where there is no peak [nats].
    decrement : (B,)
        Squared Newton decrement.
    hessian : (B, d, d)
        Of minus the log density.
    steps, outcome : (B,), (B,)
        Evaluations used; Outcome as an integer.
    """

    z: np.ndarray
    log_density: np.ndarray
    laplace: np.ndarray
    decrement: np.ndarray
    hessian: np.ndarray
    steps: np.ndarray
    outcome: np.ndarray


def ends_width(dim: int) -> int:
    """Numbers in one packed row of results."""
    return dim * dim + dim + 4


def build_queue(density: RowDensity, slots: int) -> Callable[..., Any]:
    """Make the program: (starts, centre, spread, row, count, given) -> packed (k, width).

    ``starts``, ``centre`` and ``spread`` are (k, d), ``row`` (k,) is the data set of each search;
    searches from ``count`` on are not made.
    """

    def step(search: newton.Search, centre: Any, spread: Any, given: Given) -> newton.Search:
        return newton.advance(
            jnp,
            search,
            *density.objective(search.trial, given),
            centre,
            spread,
            find=factored_directions,
        )

    def evidence_queue(
        starts: Any, centre: Any, spread: Any, row: Any, count: Any, given: Given
    ) -> Any:
        length, d = starts.shape
        advance = jax.vmap(step, in_axes=(0, 0, 0, given.axes()))
        fresh = jax.vmap(lambda z: newton.begin(jnp, z))

        def going(carry: Any) -> Any:
            return jnp.any(carry[1] < count)

        def body(carry: Any) -> Any:
            search, place, following, own, out = carry
            search = advance(search, *own)
            done = search.phase == newton.ENDED
            packed = jax.vmap(_pack)(search)
            out = out.at[jnp.where(done, place, length)].set(packed, mode="drop")
            place = jnp.where(done, following + jnp.cumsum(done) - 1, place)
            following = following + jnp.sum(done)
            begun, taken = take(place)
            return (_pick(done, begun, search), place, following,
                    _pick_own(done, taken, own), out)  # fmt: skip

        def take(place: Any) -> Any:
            here = jnp.minimum(place, length - 1)
            own = (centre[here], spread[here], given.at(row[here]))
            return fresh(starts[here]), own

        first = jnp.arange(slots)
        search, own = take(first)
        out = jnp.full((length, ends_width(d)), jnp.nan)
        return jax.lax.while_loop(going, body, (search, first, jnp.asarray(slots), own, out))[-1]

    return evidence_queue


def _pick_own(done: Any, new: Any, old: Any) -> Any:
    centre, spread = _pick(done, new[:2], old[:2])
    columns, kept = _pick(done, new[2][2:], old[2][2:])
    return centre, spread, new[2]._replace(columns=columns, kept=kept)


def _pick(done: Any, new: Any, old: Any) -> Any:
    def one(a: Any, b: Any) -> Any:
        return jnp.where(done.reshape(done.shape + (1,) * (a.ndim - 1)), a, b)

    return jax.tree_util.tree_map(one, new, old)


def _pack(search: newton.Search) -> Any:
    """One row: fetching, and writing, each number by itself would cost more than the arithmetic."""
    numbers = [-search.objective, search.decrement, search.steps, search.outcome]
    return jnp.concatenate(
        [search.z, search.hessian.ravel(), jnp.stack([x.astype(search.z.dtype) for x in numbers])]
    )


def unpack_ends(packed: np.ndarray, dim: int, spread: np.ndarray) -> Ends:
    """Name the parts of packed rows, with Laplace's value; see whether a Hessian is singular."""
    tail = packed[:, dim * dim + dim :]
    hessian = packed[:, dim : dim * dim + dim].reshape(-1, dim, dim)
    outcome = tail[:, 3].astype(np.int64)
    laplace = np.full(len(packed), np.nan)
    peaks = np.flatnonzero(outcome == Outcome.OK)
    if len(peaks):
        half_log_det, smallest = _measure(hessian[peaks], spread[peaks])
        laplace[peaks] = tail[peaks, 0] + 0.5 * dim * LOG_2PI - half_log_det
        singular = ~(smallest > SINGULAR)
        indefinite = smallest < -1e-8
        outcome[peaks[singular]] = Outcome.FLAT
        outcome[peaks[singular & indefinite]] = Outcome.INDEFINITE
    laplace[outcome != Outcome.OK] = np.nan
    steps = tail[:, 2].astype(np.int64)
    return Ends(packed[:, :dim], tail[:, 0], laplace, tail[:, 1], hessian, steps, outcome)


def _measure(hessian: np.ndarray, spread: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """0.5 log det (k,), and the smallest eigenvalue (k,) of the scaled Hessian or less."""
    d = hessian.shape[1]
    diagonal = np.abs(np.diagonal(hessian, axis1=1, axis2=2))
    scale = 1.0 / np.sqrt(np.maximum(diagonal, 1e-12 / spread**2))
    scaled = hessian * scale[:, :, None] * scale[:, None, :]
    sign, log_det = np.linalg.slogdet(scaled)
    # of a positive definite matrix of trace d no eigenvalue lies below det ((d - 1) / d)^(d - 1)
    smallest = sign * np.exp(log_det) * ((d - 1) / d) ** (d - 1)
    near = np.flatnonzero(~(smallest > 10 * SINGULAR))
    if len(near):
        smallest[near] = np.linalg.eigvalsh(scaled[near])[:, 0]
    return 0.5 * log_det - np.log(scale).sum(axis=1), smallest
