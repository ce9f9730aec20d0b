"""Probes of the log density along the whitened axes of a mode: walls, kinks, scales, far ends."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from evidence.rungs.record import Mode, Target

__all__ = ["FarEnds", "Probes", "name_axis", "probe", "probe_far_ends"]

CLOSE = np.array([0.01, 0.02])
STEPS = np.array([0.5, 1.0, 2.0, 3.0])
LONG_STEPS = np.array([4.5, 6.0])
WALL_WITHIN = 3.0
MATCHED_DROP = 2.0  # split scales agree with the density where sqrt(2 x drop) is 2 ("two sd")
SMALLEST_SCALE, LARGEST_SCALE = 0.05, 8.0
FAR = np.array([1e2, 1e3, 1e4])  # prior standard deviations
FLAT_WITHIN = 1.0  # nats lost from the nearest far point to the farthest; Cauchy tails lose 9


@dataclass(frozen=True, kw_only=True)
class Probes:
    """What the log density does along the axes of one mode.

    Attributes
    ----------
    below, above : [d] scales on either side of each axis, in units of the axis
    rise : () largest log density found, minus the mode's [nats]
    wall : [d] True where the density is zero within three sd along the axis
    kink : [d] True where the density falls linearly from the mode
    deviation : () largest distance from the parabola within two sd [nats]
    """

    below: np.ndarray
    above: np.ndarray
    rise: float
    wall: np.ndarray
    kink: np.ndarray
    deviation: float


@dataclass(frozen=True, kw_only=True)
class FarEnds:
    """Coordinates [d] along which the log density rises without end, or does not fall off."""

    rising: np.ndarray
    flat: np.ndarray


def probe(target: Target, mode: Mode) -> Probes:
    """Evaluate the log density at fixed steps along both sides of every axis.

    Returns
    -------
    Probes
        Split scales after Geweke (1989, Econometrica 57), and the signs of trouble.
    """
    steps = np.concatenate([CLOSE, STEPS])
    drop = _drops(target, mode, np.arange(target.dim), steps)
    short = np.flatnonzero((drop[:, :, -1] < 0.5 * MATCHED_DROP**2).any(axis=0))
    scales = _matched_scales(drop, steps)
    rise = -np.nanmin(drop)
    if len(short):
        longer = _drops(target, mode, short, LONG_STEPS)
        both = np.concatenate([drop[:, short], longer], axis=2)
        scales[:, short] = _matched_scales(both, np.concatenate([steps, LONG_STEPS]))
        rise = max(rise, -np.nanmin(longer))
    within = steps <= 2.0
    away = np.abs(drop[:, :, within] - 0.5 * steps[within] ** 2)
    return Probes(
        below=scales[0],
        above=scales[1],
        rise=float(rise),
        wall=(drop[:, :, steps <= WALL_WITHIN] == np.inf).any(axis=(0, 2)),
        kink=_kinked(drop),
        deviation=float(away.max()),
    )


def _drops(target: Target, mode: Mode, axes: np.ndarray, steps: np.ndarray) -> np.ndarray:
    """Return log density at the mode minus the one at each step: [side, axis, step]."""
    signed = np.stack([-steps, steps])
    columns = mode.axes[:, axes].T
    points = mode.z + signed[:, None, :, None] * columns[None, :, None, :]
    values = target.batch(points.reshape(-1, target.dim))
    return mode.log_density - values.reshape(2, len(axes), len(steps))


def _matched_scales(drop: np.ndarray, steps: np.ndarray) -> np.ndarray:
    """Scale [side, axis] of the normal density that has the same drop two sd out."""
    root = np.sqrt(2.0 * np.maximum(drop, 0.0))
    root = np.minimum(np.where(np.isfinite(root), root, 50.0), 50.0)
    root = np.concatenate([np.zeros((*root.shape[:2], 1)), root], axis=2)
    grid = np.concatenate([[0.0], steps])
    reached = root >= MATCHED_DROP
    first = np.where(reached.any(axis=2), reached.argmax(axis=2), len(grid) - 1)
    high = np.take_along_axis(root, first[..., None], axis=2)[..., 0]
    low = np.take_along_axis(root, first[..., None] - 1, axis=2)[..., 0]
    part = np.where(high > low, (MATCHED_DROP - low) / np.maximum(high - low, 1e-12), 1.0)
    crossing = grid[first - 1] + np.clip(part, 0.0, 1.0) * (grid[first] - grid[first - 1])
    beyond = grid[-1] / np.maximum(root[:, :, -1], 0.75)
    scales = np.where(reached.any(axis=2), crossing / MATCHED_DROP, beyond)
    return np.clip(scales, SMALLEST_SCALE, LARGEST_SCALE)


def _kinked(drop: np.ndarray) -> np.ndarray:
    """Say for which axes [d] the first two steps fall in proportion to the distance."""
    near, next_ = drop[:, :, 0], drop[:, :, 1]
    steep = next_ > 20.0 * 0.5 * CLOSE[1] ** 2
    with np.errstate(invalid="ignore"):
        linear = np.isfinite(next_) & steep & (next_ < 2.5 * near) & (near > 0.0)
    return linear.all(axis=0)


def probe_far_ends(target: Target, mode: Mode) -> FarEnds:
    """Look along every coordinate, 100 to 10 000 prior sd from a mode, for a density that stays.

    A proper posterior has lost several nats there even with the heaviest usual tails. Values of
    +inf are left out: so far away they come from a scale that underflows to zero.
    """
    d = target.dim
    offsets = np.concatenate([-FAR, FAR])
    points = mode.z + np.einsum("s,ij->sij", offsets, np.diag(target.spread))
    values = target.batch(points.reshape(-1, d)).reshape(2, len(FAR), d)
    values = np.where(np.isposinf(values), -np.inf, values)
    rising = (values >= mode.log_density + 1.0).any(axis=(0, 1))
    with np.errstate(invalid="ignore"):
        flat = (values[:, 0] - values[:, -1] < FLAT_WITHIN) & np.isfinite(values[:, -1])
    return FarEnds(rising=rising, flat=flat.any(axis=0) & ~rising)


def name_axis(column: np.ndarray, target: Target, most: int = 3) -> str:
    """Name the coordinates that make up a direction [d], largest first."""
    loading = np.abs(column) / target.spread
    order = np.argsort(-loading, kind="stable")[:most]
    kept = [i for i in order if loading[i] > 0.3 * loading[order[0]]]
    return ", ".join(target.names[i] for i in kept)
