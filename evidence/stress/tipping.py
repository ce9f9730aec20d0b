"""Where the lead changes hands: the smallest change of one number, and of several together.

Every value is a recomputed evidence. A single number is moved over a grid of factors on either
side until the lead changes sign, and the root is closed in by Brent's method (Brent 1973).
Several together go to the point of the surface "equal" nearest to the declared numbers, in the
Euclidean norm of log units and prior sd, by the iteration of Hasofer & Lind (1974) and Rackwitz
& Fiessler (1978).
"""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Sequence

import numpy as np

from evidence.stress.levers import FACTOR_LIMIT

__all__ = ["LIMIT", "nearest_point", "nearest_root"]

LIMIT = float(np.log(FACTOR_LIMIT))
GRID = np.log([2.0, 5.0, 15.0, 40.0, FACTOR_LIMIT])
EVEN = 1e-9  # nats: a lead that is none
ITERATIONS = 30
STANDS = 1e-3  # relative change of the point at which the iteration ends


@dataclasses.dataclass(frozen=True, kw_only=True)
class Root:
    """A change of one number that makes two candidates equal; nan where there is none.

    Attributes
    ----------
    step : ()
        [log units or prior sd]; nan where there is none within the limit.
    lost_at : ()
        The change from which on no evidence could be computed, on the side looked at last; nan
        where all could.
    """

    step: float
    lost_at: float = np.nan


def nearest_root(lead: Callable[[float], float], known: dict[float, float] | None = None) -> Root:
    """Find the change of smallest size at which a lead is zero.

    Parameters
    ----------
    lead : callable
        Change [log units or prior sd] -> lead [nats], positive at 0; nan where it is not known.
    known : dict, optional
        Values of the lead that are known already.
    """
    known = {} if known is None else known
    start = known.get(0.0, np.nan)
    start = lead(0.0) if np.isnan(start) else start
    if start <= EVEN:
        return Root(step=0.0)
    before = {1.0: (0.0, start), -1.0: (0.0, start)}
    lost = np.nan
    for size in GRID:
        roots = []
        for side in [side for side in (1.0, -1.0) if side in before]:
            near, value = before[side]
            far = side * size
            here = known[far] if far in known else lead(far)
            if np.isnan(here):
                lost = far
                del before[side]
            elif value > 0 >= here:
                roots.append(_closed_in(lead, near, far))
            else:
                before[side] = (far, here)
        if roots:
            return Root(step=min(roots, key=abs), lost_at=lost)
    return Root(step=np.nan, lost_at=lost)


def _closed_in(lead: Callable[[float], float], near: float, far: float) -> float:
    from scipy.optimize import brentq

    try:
        return float(brentq(lead, near, far, xtol=1e-13, rtol=1e-13, maxiter=100))
    except ValueError:  # nan between: the nearest point known to be past the change
        return far


def nearest_point(
    lead: Callable[[np.ndarray], float],
    slopes: Callable[[np.ndarray], np.ndarray],
    first: np.ndarray,
) -> np.ndarray:
    """Find the joint change (k,) of smallest norm at which a lead is zero; nan if none is near.

    Parameters
    ----------
    lead : callable
        (k,) -> lead [nats].
    slopes : callable
        (k,) -> (k,) derivatives of the lead.
    first : (k,)
        Where to begin: a root of a single change, or zeros.
    """
    point, value, slope = first, lead(first), slopes(first)
    best = first if abs(value) < 1e-6 else None
    for _ in range(ITERATIONS):
        square = float(slope @ slope)
        if not (np.isfinite(square) and square > 0 and np.isfinite(value)):
            break
        target = (slope @ point - value) / square * slope
        step = target - point
        point, value = _shortened(lead, point, value, step, slope)
        slope = slopes(point)
        if np.linalg.norm(step) < STANDS * (1.0 + np.linalg.norm(point)):
            break
    on_ray = _along_ray(lead, point)
    if best is None or np.linalg.norm(on_ray) < np.linalg.norm(best):
        best = on_ray if np.all(np.isfinite(on_ray)) else best
    if best is None or np.linalg.norm(best) > LIMIT:
        return np.full(len(first), np.nan)
    return best


def _shortened(
    lead: Callable[[np.ndarray], float],
    point: np.ndarray,
    value: float,
    step: np.ndarray,
    slope: np.ndarray,
) -> tuple[np.ndarray, float]:
    """Half the step until norm and distance from equality together get smaller."""
    weight = 2.0 * (1.0 + np.linalg.norm(point)) / max(float(np.linalg.norm(slope)), 1e-12)

    def merit(point: np.ndarray, value: float) -> float:
        return 0.5 * float(point @ point) + weight * abs(value)

    before, part = merit(point, value), 1.0
    for _ in range(12):
        there = point + part * step
        if np.linalg.norm(there) <= 2 * LIMIT:
            here = lead(there)
            if np.isfinite(here) and merit(there, here) < before:
                return there, here
        part *= 0.5
    return point, value


def _along_ray(lead: Callable[[np.ndarray], float], point: np.ndarray) -> np.ndarray:
    """The multiple of a change at which the lead is zero, nearest to the declared numbers."""
    length = float(np.linalg.norm(point))
    nothing = np.full(len(point), np.nan)
    if length == 0:
        return nothing
    unit = point / length
    ends: Sequence[float] = [x for x in (length, 1.05 * length, 1.3 * length) if x <= LIMIT] or [
        LIMIT
    ]
    for end in ends:
        if lead(end * unit) <= 0:
            return _closed_in(lambda x: lead(x * unit), 0.0, end) * unit
    return nothing
