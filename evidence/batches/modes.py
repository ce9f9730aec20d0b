"""The modes of each row among the ends of its searches."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from evidence.batches.queue import Ends
from evidence.mode import MATTERS, SAME_MODE
from evidence.outcome import Outcome

__all__ = ["RowModes", "find_row_modes", "merge"]


class RowModes(NamedTuple):
    """Distinct modes of each row, the leading one first.

    Attributes
    ----------
    z, hessian : (n, M, d), (n, M, d, d)
        Where there is no further mode, those of the leading one.
    log_density, laplace : (n, M), (n, M)
        laplace is nan where there is no further mode [nats].
    left_out : (n,) bool
        More modes matter than M.
    outcome : (n,)
        Outcome of the row: that of a search which found no peak and ended above all, too.
    """

    z: np.ndarray
    hessian: np.ndarray
    log_density: np.ndarray
    laplace: np.ndarray
    left_out: np.ndarray
    outcome: np.ndarray


def find_row_modes(ends: Ends, searches: int, kept: int) -> RowModes:
    """Tell apart the ends of some searches per row (n * searches of them), and keep the best.

    Searches that ended within 0.1 sd of one another, in the metric of the higher one, found the
    same mode, as in :func:`evidence.mode.gather`.
    """
    d = ends.z.shape[1]
    n = len(ends.z) // searches
    z = ends.z.reshape(n, searches, d)
    hessian = ends.hessian.reshape(n, searches, d, d)
    height = np.where(np.isfinite(ends.log_density), ends.log_density, -np.inf)
    height = height.reshape(n, searches)
    outcome = ends.outcome.reshape(n, searches)
    laplace = np.where(outcome == Outcome.OK, ends.laplace.reshape(n, searches), -np.inf)
    laplace = _without_twins(z, hessian, height, laplace)
    order = np.argsort(-laplace, axis=1, kind="stable")
    left_out = np.zeros(n, bool)
    if searches > kept:
        ranked = np.take_along_axis(laplace, order, 1)
        left_out = ranked[:, kept] > ranked[:, 0] - MATTERS
    order = order[:, :kept]
    picked = np.take_along_axis(laplace, order, 1)
    missing = ~np.isfinite(picked)
    order = np.where(missing, order[:, :1], order)
    row = np.arange(n)[:, None]
    return RowModes(
        z=z[row, order],
        hessian=hessian[row, order],
        log_density=height[row, order],
        laplace=np.where(missing, np.nan, picked),
        left_out=left_out,
        outcome=_row_outcome(height, outcome, picked[:, 0]),
    )


def _without_twins(
    z: np.ndarray, hessian: np.ndarray, height: np.ndarray, laplace: np.ndarray
) -> np.ndarray:
    """Take out (-inf) each end that lies at a mode already reached by another."""
    laplace = laplace.copy()
    searches, d = z.shape[1:]
    for j in range(1, searches):
        for i in range(j):
            higher = np.where(height[:, i] >= height[:, j], i, j)
            metric = hessian[np.arange(len(z)), higher]
            step = z[:, j] - z[:, i]
            square = np.einsum("nd,nde,ne->n", step, metric, step) / max(d, 1)
            both = np.isfinite(laplace[:, i]) & np.isfinite(laplace[:, j])
            laplace[both & (square < SAME_MODE**2), j] = -np.inf
    return laplace


def _row_outcome(height: np.ndarray, outcome: np.ndarray, best: np.ndarray) -> np.ndarray:
    """OK where there is a peak and nothing higher; else the outcome of the highest failure."""
    failed = outcome != Outcome.OK
    failures = np.where(failed, height, -np.inf)
    worst = np.argmax(failures, axis=1)[:, None]
    # a search that met +inf counts as above all, whatever was kept of it
    infinite = (outcome == Outcome.INFINITE).any(axis=1)
    top = np.where(failed, -np.inf, height).max(axis=1, initial=-np.inf)
    highest = np.take_along_axis(failures, worst, 1)[:, 0]
    code = np.take_along_axis(outcome, worst, 1)[:, 0]
    none = ~np.isfinite(best)
    code = np.where(none & ~failed.any(axis=1), int(Outcome.NO_PROGRESS), code)
    result = np.where(none | (highest > top + 1e-6), code, int(Outcome.OK))
    return np.where(infinite, int(Outcome.INFINITE), result)


def merge(modes: RowModes, rows: np.ndarray, again: RowModes) -> RowModes:
    """Put the modes of a second round in the place of some rows."""
    merged = []
    for old, new in zip(modes, again, strict=True):
        array = old.copy()
        array[rows] = new
        merged.append(array)
    return RowModes(*merged)
