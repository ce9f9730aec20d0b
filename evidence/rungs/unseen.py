"""A look for peaks that the mode search missed, from draws on the prior's scale.

A draw that lies in the basin of another peak betrays it: on the straight line to the nearest
known mode the density falls before it rises. That takes far fewer draws than hitting the peak.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from evidence.curvature import whitened_axes
from evidence.rungs.proposal import Component, Mixture, component
from evidence.rungs.quasirandom import uniform_points
from evidence.rungs.record import Mode, Target

__all__ = ["climb_to_peak", "find_unseen"]

LINES, POINTS = 32, 12
# in few dimensions a narrow peak is worth a closer look: its basin holds a fair share of draws
DRAWS = {1: 512, 2: 2048, 3: 2048, 4: 1024, 5: 512}
DRAWS_ABOVE = 256
DIP = 0.1  # nats
MOST_CLIMBS, MOST_STEPS = 4, 40
MATTERS = 8.0  # nats below the leading mode, by height and volume
DIFFERENCE = 1e-4  # of the prior sd, for the gradient
LONGEST_STEP = 1.0  # prior sd
SHORTENED = 0.5 ** np.arange(0, 16, 1.5)
AT_TOP = 1e-2  # Newton decrement
SAME_PEAK = 1.0  # root mean square distance in sd


def find_unseen(
    target: Target, modes: Sequence[Mode], mixture: Mixture, rng: np.random.Generator
) -> list[Component]:
    """Return a Student-t around every peak that is none of the modes.

    Parameters
    ----------
    target : Target
        The log density.
    modes : sequence of Mode
        What is known.
    mixture : Mixture
        Proposal built from them; its broad parts are drawn from.
    rng : numpy.random.Generator
        Source of the draws.
    """
    starts = _betrayed(target, modes, mixture, rng)
    local = mixture.narrow().components
    leading = max(m.log_density - c.log_norm for m, c in zip(modes, local, strict=True))
    found: list[Component] = []
    for start in starts[:MOST_CLIMBS]:
        peak = climb_to_peak(target, start)
        known = [(m.z, np.linalg.inv(m.axes)) for m in modes]
        known += [(c.centre, c.inverse) for c in found]
        if peak is None or any(_same(peak, z, inverse) for z, inverse in known):
            continue
        if target.batch(peak.centre[None])[0] - peak.log_norm > leading - MATTERS:
            found.append(peak)
    return found


def _betrayed(
    target: Target, modes: Sequence[Mode], mixture: Mixture, rng: np.random.Generator
) -> np.ndarray:
    """Places [k, d] from which a straight walk to the nearest mode leads through a dip."""
    broad = [p for p, is_broad in zip(mixture.components, mixture.broad, strict=True) if is_broad]
    z = broad[0].draw(uniform_points(DRAWS.get(target.dim, DRAWS_ABOVE), target.dim + 1, rng)[0])
    height = target.batch(z)
    excess = np.where(np.isfinite(height), height - mixture.narrow().log_density(z), -np.inf)
    kept = np.argsort(-excess, kind="stable")[:LINES]
    z = z[kept[np.isfinite(excess[kept])]]
    if not len(z):
        return z
    lines = _lines_to_nearest(z, modes)
    along = target.batch(lines.reshape(-1, target.dim)).reshape(len(z), POINTS)
    highest = np.maximum.accumulate(along, axis=1)
    with np.errstate(invalid="ignore"):
        dips = (highest - along > DIP).any(axis=1)
    # the top of the first rise is the best place to climb from
    before_dip = np.where(np.cumsum(highest > along, axis=1) == 0, along, -np.inf)
    best = before_dip.argmax(axis=1)
    tops = lines[np.arange(len(z)), best][dips]
    order = np.argsort(-before_dip.max(axis=1)[dips], kind="stable")
    return tops[order]


def _lines_to_nearest(z: np.ndarray, modes: Sequence[Mode]) -> np.ndarray:
    """Points [n, POINTS, d] on the way from each draw to its nearest mode."""
    apart = np.stack([np.linalg.norm(np.linalg.solve(m.axes, (z - m.z).T), axis=0) for m in modes])
    ends = np.array([m.z for m in modes])[apart.argmin(axis=0)]
    # denser near the draw, where an unseen peak ends, and near the known mode
    part = 0.5 - 0.5 * np.cos(np.pi * np.arange(POINTS) / (POINTS - 1))
    return z[:, None] + part[None, :, None] * (ends - z)[:, None]


def climb_to_peak(target: Target, z: np.ndarray) -> Component | None:
    """Climb by damped Newton steps with differenced gradients; None where no peak is reached."""
    height = target.batch(z[None])[0]
    for _ in range(MOST_STEPS):
        gradient, hessian = _gradient(target, z), target.hessian(z)
        if not (np.all(np.isfinite(gradient)) and np.all(np.isfinite(hessian))):
            return None
        axes = whitened_axes(hessian, target.spread)
        uphill = axes.columns.T @ gradient
        if np.linalg.norm(uphill) < AT_TOP and axes.positive:
            return component(z, axes.columns)
        step = axes.columns @ uphill
        step /= max(np.max(np.abs(step) / target.spread) / LONGEST_STEP, 1.0)
        tried = z + SHORTENED[:, None] * step
        heights = target.batch(tried)
        best = int(np.argmax(heights))
        if not heights[best] > height:
            return component(z, axes.columns) if axes.positive else None
        z, height = tried[best], heights[best]
    return None


def _gradient(target: Target, z: np.ndarray) -> np.ndarray:
    shift = np.diag(DIFFERENCE * target.spread)
    ahead, behind = target.batch(np.concatenate([z + shift, z - shift])).reshape(2, -1)
    with np.errstate(invalid="ignore"):
        return (ahead - behind) / (2.0 * DIFFERENCE * target.spread)


def _same(peak: Component, z: np.ndarray, inverse: np.ndarray) -> bool:
    """Whether two peaks are one, by the distance in either's standard deviations."""
    away = z - peak.centre
    near = min(np.sqrt(np.mean((a @ away) ** 2)) for a in (inverse, peak.inverse))
    return bool(near < SAME_PEAK)
