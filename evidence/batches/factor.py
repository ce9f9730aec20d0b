"""A factorisation that is always positive definite: cheap directions for many searches at once.

The Hessian, scaled to a unit diagonal, is factored as L D L' column by column; where a pivot is
too small or negative, as much as needed is added to it (Gill & Murray 1974, Math. Programming
7:311; Gill, Murray & Wright 1981, Practical Optimization, section 4.4.2.2). The damping is found
anew at every point and carried nowhere, so that no search is left with one that it once needed.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import jax
import jax.numpy as jnp

from evidence.newton import Directions

__all__ = ["Factor", "factor", "factored_directions"]

PIVOT_FLOOR = 1e-9  # of the unit diagonal


class Factor(NamedTuple):
    """L D L' of a scaled Hessian plus the damping it needed.

    Attributes
    ----------
    scale : (d,)
        One over the root of the Hessian's diagonal.
    lower : (d, d)
        Unit lower triangle L.
    pivots, raw : (d,), (d,)
        D as used, and as met before damping was added.
    forward : (d,)
        L^-1 of the scaled gradient.
    """

    scale: Any
    lower: Any
    pivots: Any
    raw: Any
    forward: Any


def factor(gradient: Any, hessian: Any, spread: Any) -> Factor:
    """Factor a Hessian (d, d) and carry a gradient (d,) through; spread (d,) bounds the scale."""
    d = gradient.shape[0]
    scale = 1.0 / jnp.sqrt(jnp.maximum(jnp.abs(jnp.diagonal(hessian)), 1e-12 / spread**2))
    scaled = hessian * scale[:, None] * scale[None, :]
    off = jnp.max(jnp.abs(scaled - jnp.diag(jnp.diagonal(scaled))), initial=0.0)
    bound = jnp.maximum(1.0, off / max((d * d - 1) ** 0.5, 1.0))
    places = jnp.arange(d)

    def column(j: Any, state: tuple[Any, ...]) -> tuple[Any, ...]:
        rest, lower, pivots, raw, forward = state
        below = jnp.where(places > j, rest[:, j], 0.0)
        met = rest[j, j]
        pivot = jnp.maximum(jnp.abs(met), jnp.max(jnp.abs(below), initial=0.0) ** 2 / bound)
        pivot = jnp.maximum(pivot, PIVOT_FLOOR)
        # rounding must not look like damping
        pivot = jnp.where((met > PIVOT_FLOOR) & (pivot <= met * (1 + 1e-12)), met, pivot)
        multipliers = below / pivot
        rest = rest - multipliers[:, None] * below[None, :]
        forward = forward - multipliers * forward[j]
        lower = lower.at[:, j].set(jnp.where(places == j, 1.0, multipliers))
        return rest, lower, pivots.at[j].set(pivot), raw.at[j].set(met), forward

    zero = jnp.zeros(d)
    state = (scaled, jnp.zeros((d, d)), zero, zero, scale * gradient)
    # written out column by column it runs no faster, and compiles longer
    _, lower, pivots, raw, forward = jax.lax.fori_loop(0, d, column, state)
    return Factor(scale, lower, pivots, raw, forward)


def factored_directions(_xp: Any, gradient: Any, hessian: Any, spread: Any) -> Directions:
    """Directions for :func:`evidence.newton.advance`, in JAX alone."""
    parts = factor(gradient, hessian, spread)
    worst = jnp.argmin(parts.raw)
    smallest = jnp.min(parts.raw, initial=jnp.inf)
    unit = jnp.where(jnp.arange(gradient.shape[0]) == worst, 1.0, 0.0)
    both = _back_substitute(parts.lower, jnp.stack([parts.forward / parts.pivots, unit], axis=1))
    newton = -parts.scale * both[:, 0]
    downhill = parts.scale * both[:, 1]
    side = jnp.where(jnp.sum(downhill / spread) >= 0, 1.0, -1.0)
    escape = jnp.where(smallest < -1e-10, side, 0.0) * downhill
    decrement = jnp.sum(parts.forward**2 / parts.pivots)
    return Directions(newton, escape, decrement, smallest)


def _back_substitute(lower: Any, right: Any) -> Any:
    """Solve L' x = right, columns (d, k)."""
    d = lower.shape[0]

    def row(k: Any, x: Any) -> Any:
        j = d - 1 - k
        # what is already solved lies below; the unit diagonal is left out
        known = jnp.where(jnp.arange(d) > j, lower[:, j], 0.0)
        return x.at[j].add(-known @ x)

    return jax.lax.fori_loop(0, d, row, right)
