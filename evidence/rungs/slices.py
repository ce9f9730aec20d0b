"""A mixture of conditional expansions along one coordinate, for funnels and other scale models.

Where the width of all other coordinates hangs on one of them, no Gaussian around a mode fits,
yet given that coordinate the rest is close to Gaussian. The proposal is then a row of Student-t
components: at each point of a grid along the coordinate, the mode of the others given it, with
their conditional curvature (the conditional expansion of nested Laplace methods, Tierney &
Kadane 1986, here only as a proposal whose draws are weighted exactly).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from evidence.curvature import whitened_axes
from evidence.rungs.importance import Sample
from evidence.rungs.proposal import Mixture, component
from evidence.rungs.record import Target
from evidence.rungs.weights import log_sum_exp, truncated_share

__all__ = ["Slices", "find_driver", "slice_mixture"]

GRID = 25
REACH = 4.0  # prior sd on either side
WIDTH = 0.7  # of the grid's spacing
LEAST_SCORE = 0.1  # squared correlation of a coordinate with the log widths of the others
SMALLEST_SHARE = 0.004
MOST_STEPS = 12
DIFFERENCE = 1e-5  # of the prior sd
LONGEST_STEP = 1.0  # prior sd
SHORTENED = 0.5 ** np.arange(0, 12, 1.5)
AT_TOP = 1e-3


@dataclass(frozen=True, kw_only=True)
class Slices:
    """A proposal along one coordinate.

    Attributes
    ----------
    driver : index of the coordinate
    mixture : one component for each point of the grid
    """

    driver: int
    mixture: Mixture


def find_driver(sample: Sample) -> int | None:
    """Return the coordinate on which the widths of the others hang most, or None.

    The score is the mean squared correlation, over weighted draws, of the coordinate with the
    log distance of the others from their mean.
    """
    z = sample.draws
    d = z.shape[1]
    if d < 2 or not np.isfinite(sample.estimate):
        return None
    weights = truncated_share(sample.log_weights)
    away = z - weights @ z
    log_width = np.log(np.abs(away) + 1e-300)
    correlation = _correlate(away, log_width, weights)
    np.fill_diagonal(correlation, 0.0)
    score = (correlation**2).sum(axis=1) / (d - 1)
    best = int(np.argmax(score))
    return best if score[best] > LEAST_SCORE else None


def _correlate(x: np.ndarray, y: np.ndarray, weights: np.ndarray) -> np.ndarray:
    """Weighted correlation [d, d] of the columns of x [n, d] with those of y [n, d]."""
    x, y = x - weights @ x, y - weights @ y
    scale = np.outer(np.sqrt(weights @ x**2), np.sqrt(weights @ y**2))
    return (x * weights[:, None]).T @ y / np.maximum(scale, 1e-300)


def slice_mixture(target: Target, driver: int, sample: Sample, *, shift: float = 0.0) -> Slices:
    """Expand the other coordinates around their mode at every point of a grid along the driver.

    Parameters
    ----------
    target : Target
        The log density.
    driver : int
        The coordinate held at each grid point.
    sample : Sample
        Weighted draws; their means are where the climbs begin.
    shift : float
        Moves the grid by this share of its spacing: a second, different proposal.
    """
    grid, spacing = _grid(target, driver, shift)
    z = np.tile(truncated_share(sample.log_weights) @ sample.draws, (GRID, 1))
    z[:, driver] = grid
    z, heights, axes = _climb_all(target, driver, z)
    slopes = np.gradient(z, spacing, axis=0)
    good = np.flatnonzero(np.isfinite(heights))
    parts, logs = [], []
    for i in good:
        whole = np.column_stack([WIDTH * spacing * slopes[i], axes[i]])
        parts.append(component(z[i], whole))
        logs.append(heights[i] - parts[-1].log_norm)
    shares = np.exp(np.array(logs) - log_sum_exp(np.array(logs)))
    shares = np.maximum(shares, SMALLEST_SHARE)
    return Slices(driver=driver, mixture=Mixture.of(parts, shares))


def _grid(target: Target, driver: int, shift: float) -> tuple[np.ndarray, float]:
    steps = np.linspace(-REACH, REACH, GRID)
    spacing = target.spread[driver] * (steps[1] - steps[0])
    return target.centre[driver] + target.spread[driver] * steps + shift * spacing, spacing


def _climb_all(
    target: Target, driver: int, z: np.ndarray
) -> tuple[np.ndarray, np.ndarray, list[np.ndarray]]:
    """Climb with the driver held, at all grid points at once; axes [d, d - 1] of the others."""
    others = np.delete(np.arange(target.dim), driver)
    heights = target.batch(z)
    axes = [np.zeros((target.dim, len(others)))] * len(z)
    for _ in range(MOST_STEPS):
        gradients = _gradients(target, z, others)
        steps = np.zeros_like(z)
        for i, (place, gradient) in enumerate(zip(z, gradients, strict=True)):
            axes[i] = _conditional_axes(target, place, others)
            steps[i] = axes[i] @ (axes[i].T[:, others] @ gradient)
        steps = np.where(np.isfinite(steps), steps, 0.0)
        long = np.max(np.abs(steps) / target.spread, axis=1, keepdims=True) / LONGEST_STEP
        steps /= np.maximum(long, 1.0)
        tried = z + SHORTENED[:, None, None] * steps
        values = target.batch(tried.reshape(-1, target.dim)).reshape(len(SHORTENED), -1)
        best = values.argmax(axis=0)
        value = values[best, np.arange(len(z))]
        better = value > heights
        z = np.where(better[:, None], tried[best, np.arange(len(z))], z)
        gained = np.where(better, value - heights, 0.0)
        heights = np.where(better, value, heights)
        if gained.max() < AT_TOP:
            break
    axes = [_conditional_axes(target, place, others) for place in z]
    usable = np.array([np.all(np.isfinite(a)) and a.any() for a in axes])
    return z, np.where(usable, heights, -np.inf), axes


def _gradients(target: Target, z: np.ndarray, others: np.ndarray) -> np.ndarray:
    """Central differences [g, d - 1] in the other coordinates."""
    size = DIFFERENCE * target.spread[others]
    shift = np.zeros((len(others), target.dim))
    shift[np.arange(len(others)), others] = size
    both = np.stack([z[:, None] + shift, z[:, None] - shift])
    values = target.batch(both.reshape(-1, target.dim)).reshape(2, len(z), -1)
    with np.errstate(invalid="ignore"):
        return (values[0] - values[1]) / (2.0 * size)


def _conditional_axes(target: Target, z: np.ndarray, others: np.ndarray) -> np.ndarray:
    """Whitened axes [d, d - 1] of the others with the driver held; zero where there are none.

    They are not cut at three prior sd: far along a funnel they are longer, and rightly so.
    """
    axes = np.zeros((target.dim, len(others)))
    hessian = target.hessian(z)[np.ix_(others, others)]
    if np.all(np.isfinite(hessian)):
        found = whitened_axes(hessian, target.spread[others])
        axes[others] = found.directions if found.positive else found.columns
    return axes
