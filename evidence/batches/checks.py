"""The quick audit of many fits in compiled programs: second-order term, probes, mixture draws.

What :mod:`evidence.rungs` does for one fit at depth "quick" is done here for each row: the
second-order term by the same differences, probes for walls along the axes, and draws of a mixture
with a part on the prior's scale. There are fewer draws; a row that they leave open gets as many as
a single fit.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
from scipy.special import gammaincinv, gammaln

from evidence.batches.density import Given, RowDensity
from evidence.laplace import STEP
from evidence.rungs.importance import BROAD_SHARE
from evidence.rungs.probes import FAR, FLAT_WITHIN, LARGEST_SCALE, MATCHED_DROP, SMALLEST_SCALE
from evidence.rungs.proposal import DEGREES_OF_FREEDOM
from evidence.rungs.quasirandom import uniform_points

__all__ = [
    "Around",
    "Base",
    "Looks",
    "base_points",
    "build_draws",
    "build_looks",
    "build_values",
    "shifts",
    "unpack_looks",
]

PROBED = (1.0, 2.0, 3.0)  # sd along each axis, both ways
MOST_BROAD = 24
NUMBERS = 7  # in a packed row of looks, before the scales


class Looks(NamedTuple):
    """What is seen around modes, one row per mode.

    Attributes
    ----------
    term, cubic, quartic : (k,)
        Second-order term and its parts [nats].
    below, above : (k, d)
        Scales of the proposal on either side of each axis, in units of the axis.
    rise : (k,)
        Largest log density found, minus the mode's [nats].
    wall : (k,) bool
        The density is zero within three sd along an axis.
    widest : (k,)
        Longest posterior sd, in prior sd.
    endless : (k,) bool
        The density of a bare log posterior rises, or does not fall off, far away.
    """

    term: np.ndarray
    cubic: np.ndarray
    quartic: np.ndarray
    below: np.ndarray
    above: np.ndarray
    rise: np.ndarray
    wall: np.ndarray
    widest: np.ndarray
    endless: np.ndarray


class Base(NamedTuple):
    """Points in the unit cube from which the draws of all rows are made.

    Attributes
    ----------
    local, broad : (n, d), (m, d)
        Positions; each row shifts them by its own amount.
    local_stretch, broad_stretch : (n,), (m,)
        Roots of degrees of freedom over chi-square draws.
    """

    local: np.ndarray
    broad: np.ndarray
    local_stretch: np.ndarray
    broad_stretch: np.ndarray


def base_points(draws: int, modes: int, dim: int, rng: np.random.Generator) -> Base:
    """Draw the base points: ``draws`` in all, a part of them broad, the rest split over modes."""
    broad = max(int(np.ceil(BROAD_SHARE * draws)), min(MOST_BROAD, draws // 4))
    each = max((draws - broad) // modes, 16)
    local, wide = (uniform_points(n, dim + 1, rng)[0] for n in (each, broad))
    return Base(local[:, 1:], wide[:, 1:], _stretch(local[:, 0]), _stretch(wide[:, 0]))


def _stretch(uniform: np.ndarray) -> np.ndarray:
    chi_square = 2.0 * gammaincinv(0.5 * DEGREES_OF_FREEDOM, uniform)
    return np.sqrt(DEGREES_OF_FREEDOM / np.maximum(chi_square, 1e-300))


def build_looks(density: RowDensity, slots: int) -> Callable[..., Any]:
    """Program: (z (k, d), hessian, log density, spread, row of the data set, count, given)."""

    def look(z: Any, hessian: Any, top: Any, spread: Any, given: Given) -> Any:
        d = z.shape[0]
        axes = _axes(hessian, spread)[0]
        term, cubic, quartic = _expand(density, z, hessian, axes, given)
        steps = jnp.asarray(PROBED)
        signed = jnp.stack([-steps, steps])
        points = z + signed[:, None, :, None] * axes.T[None, :, None, :]
        values = jax.vmap(lambda x: density.log_density(x, given))(points.reshape(-1, d))
        values = jnp.where(jnp.isnan(values), -jnp.inf, values)
        drop = top - values.reshape(2, d, len(PROBED))
        widest = jnp.max(jnp.sqrt(jnp.sum(axes**2, axis=1)) / spread)
        rise, wall = -jnp.min(drop), jnp.any(drop == jnp.inf)
        endless = _is_endless(density, z, top, spread, given) if density.model.bare else False
        flags = [jnp.asarray(x, z.dtype) for x in (wall, endless)]
        numbers = jnp.stack([term, cubic, quartic, rise, widest, *flags])
        return jnp.concatenate([numbers, _matched_scales(drop).ravel()])

    def evidence_looks(
        z: Any, hessian: Any, top: Any, spread: Any, row: Any, count: Any, given: Given
    ) -> Any:
        width = NUMBERS + 2 * z.shape[1]
        return _in_chunks(look, (z, hessian, top, spread), row, count, given, slots, width)

    return evidence_looks


def unpack_looks(packed: np.ndarray) -> Looks:
    """Name the parts of the packed rows of :func:`build_looks`."""
    d = (packed.shape[1] - NUMBERS) // 2
    return Looks(
        term=packed[:, 0],
        cubic=packed[:, 1],
        quartic=packed[:, 2],
        below=packed[:, NUMBERS : NUMBERS + d],
        above=packed[:, NUMBERS + d :],
        rise=packed[:, 3],
        wall=packed[:, 5] > 0,
        widest=packed[:, 4],
        endless=packed[:, 6] > 0,
    )


class Around(NamedTuple):
    """Modes of one row and the scales of the proposal there: (M, d), (M, d, d), (M, d) twice."""

    z: Any
    hessian: Any
    below: Any
    above: Any


def build_draws(density: RowDensity, slots: int) -> Callable[..., Any]:
    """Program: (around (B, M, ...), centre, spread, shift (B, d), row, count, base, given).

    Gives the log weights (B, draws) of a mixture in which every draw has the same share.
    """

    def draw(around: Any, centre: Any, spread: Any, shift: Any, given: Given, base: Base) -> Any:
        _modes, d = around.z.shape
        place = jax.vmap(lambda h: _axes(h, spread))(around.hessian)
        local = (base.local + shift) % 1.0
        broad = (base.broad + shift) % 1.0
        steps = jax.vmap(lambda low, high: _sided(local, low, high))(around.below, around.above)
        steps = steps * base.local_stretch[:, None]
        near = around.z[:, None, :] + jnp.einsum("mnj,mij->mni", steps, place[0])
        wide = _sided(broad, jnp.ones(d), jnp.ones(d)) * base.broad_stretch[:, None]
        points = jnp.concatenate([near.reshape(-1, d), centre + spread * wide])
        values = jax.vmap(lambda x: density.log_density(x, given))(points)
        total = points.shape[0]
        parts = jax.vmap(lambda a, p: _log_t(points, a, p))(around, place)
        parts = parts + np.log(len(base.local) / total)
        flat = (points - centre) / spread
        outer = _log_norm(d) - jnp.sum(jnp.log(spread)) - _power(d) * _fall(flat)
        outer = outer + np.log(len(base.broad) / total)
        mixture = jax.nn.logsumexp(jnp.concatenate([parts, outer[None]]), axis=0)
        return jnp.where(jnp.isnan(values), -jnp.inf, values) - mixture

    def evidence_draws(
        around: Any, centre: Any, spread: Any, shift: Any, row: Any, count: Any, base: Base,
        given: Given,
    ) -> Any:  # fmt: skip
        width = around.z.shape[1] * base.local.shape[0] + base.broad.shape[0]
        items = (around, centre, spread, shift)
        return _in_chunks(lambda *own: draw(*own, base), items, row, count, given, slots, width)

    return evidence_draws


def build_values(density: RowDensity, slots: int) -> Callable[..., Any]:
    """Program: (row (k,), count, given) -> log density (k, 1) of a candidate without parameters."""

    def value(given: Given) -> Any:
        return density.log_density(jnp.zeros(0), given)[None]

    def evidence_values(row: Any, count: Any, given: Given) -> Any:
        return _in_chunks(value, (), row, count, given, slots, 1)

    return evidence_values


def shifts(position: np.ndarray, dim: int, seed: int) -> np.ndarray:
    """Uniform numbers (n, dim) that depend on seed and position alone, whatever the parts.

    The mixing function is that of Steele, Lea & Flood (2014), fast splittable generators.
    """
    with np.errstate(over="ignore"):
        mixed = np.asarray(position, np.uint64)[:, None] * np.uint64(0x9E3779B97F4A7C15)
        mixed = mixed + np.arange(1, dim + 1, dtype=np.uint64) * np.uint64(0xD1B54A32D192ED03)
        mixed = mixed + np.uint64(seed % 2**63) * np.uint64(0x8CB92BA72F3D8DD7)
        for shift, factor in ((30, 0xBF58476D1CE4E5B9), (27, 0x94D049BB133111EB)):
            mixed = (mixed ^ (mixed >> np.uint64(shift))) * np.uint64(factor)
    return ((mixed ^ (mixed >> np.uint64(31))) >> np.uint64(11)) * 2.0**-53


def _is_endless(density: RowDensity, z: Any, top: Any, spread: Any, given: Given) -> Any:
    """As :func:`evidence.rungs.probes.probe_far_ends`, along all coordinates."""
    d = z.shape[0]
    offsets = jnp.asarray(np.concatenate([-FAR, FAR]))
    points = z + offsets[:, None, None] * jnp.diag(spread)[None]
    values = jax.vmap(lambda x: density.log_density(x, given))(points.reshape(-1, d))
    values = jnp.where(jnp.isfinite(values), values, -jnp.inf).reshape(2, len(FAR), d)
    lost = values[:, 0] - values[:, -1]
    flat = jnp.isfinite(values[:, -1]) & (lost < FLAT_WITHIN)
    return jnp.any(values >= top + 1.0) | jnp.any(flat)


def _in_chunks(
    one: Callable[..., Any], items: Any, row: Any, count: Any, given: Given, slots: int, width: int
) -> Any:
    """Map over items (k, ...), some at a time, each with its data set; no more than ``count``."""
    rows = row.shape[0]
    many = jax.vmap(one, in_axes=(*(0 for _ in items), given.axes()))

    def body(carry: Any) -> Any:
        first, out = carry
        begin = jnp.minimum(first, rows - slots)
        here = jax.tree_util.tree_map(
            lambda x: jax.lax.dynamic_slice_in_dim(x, begin, slots), (items, row)
        )
        values = many(*here[0], given.at(here[1]))
        return first + slots, jax.lax.dynamic_update_slice_in_dim(out, values, begin, 0)

    start = (jnp.asarray(0), jnp.full((rows, width), jnp.nan))
    return jax.lax.while_loop(lambda carry: carry[0] < count, body, start)[1]


def _axes(hessian: Any, spread: Any) -> tuple[Any, Any, Any]:
    """One-sd axes as columns (d, d), their inverse, and the log of their volume."""
    scale = 1.0 / jnp.sqrt(jnp.maximum(jnp.abs(jnp.diagonal(hessian)), 1e-12 / spread**2))
    root = jnp.linalg.cholesky(hessian * scale[:, None] * scale[None, :])
    eye = jnp.eye(hessian.shape[0])
    inner = jax.lax.linalg.triangular_solve(root, eye, left_side=True, lower=True)
    log_volume = jnp.sum(jnp.log(scale)) - jnp.sum(jnp.log(jnp.diagonal(root)))
    return scale[:, None] * inner.T, root.T / scale[None, :], log_volume


def _expand(density: RowDensity, z: Any, middle: Any, axes: Any, given: Given) -> tuple[Any, ...]:
    """Second-order term with its parts, by the differences of :func:`evidence.laplace.expand`."""

    def whitened(x: Any) -> Any:
        return axes.T @ density.objective(x, given)[2] @ axes

    shifts = STEP * axes.T
    around = jax.vmap(whitened)(jnp.concatenate([z + shifts, z - shifts]))
    above, below = jnp.split(around, 2)
    first = (above - below) / (2 * STEP)
    second = above + below - 2 * (axes.T @ middle @ axes)
    trace = jnp.einsum("kii->k", first)
    cubic = jnp.sum(trace**2) / 8 + jnp.sum(first**2) / 12
    quartic = -jnp.einsum("kii->", second) / STEP**2 / 8
    return cubic + quartic, cubic, quartic


def _matched_scales(drop: Any) -> Any:
    """Scales (2, d) of the normal density with the same drop two sd out (Geweke 1989)."""
    root = jnp.sqrt(2.0 * jnp.maximum(drop, 0.0))
    root = jnp.minimum(jnp.where(jnp.isfinite(root), root, 50.0), 50.0)
    beyond = PROBED[-1] / jnp.maximum(root[..., -1], 0.75)
    scale, low, before = beyond, 0.0, 0.0
    found = jnp.zeros(beyond.shape, bool)
    for k, step in enumerate(PROBED):
        high = root[..., k]
        part = (MATCHED_DROP - low) / jnp.maximum(high - low, 1e-12)
        crossing = before + jnp.clip(part, 0.0, 1.0) * (step - before)
        scale = jnp.where(~found & (high >= MATCHED_DROP), crossing / MATCHED_DROP, scale)
        found = found | (high >= MATCHED_DROP)
        low, before = high, step
    return jnp.clip(scale, SMALLEST_SCALE, LARGEST_SCALE)


def _sided(position: Any, below: Any, above: Any) -> Any:
    """Split normal quantiles (n, d) of positions in the unit cube."""
    mass = below / (below + above)
    left = position < mass
    upper = 0.5 + 0.5 * (position - mass) / (1.0 - mass)
    inside = jnp.clip(jnp.where(left, 0.5 * position / mass, upper), 1e-12, 1 - 1e-12)
    return jax.scipy.special.ndtri(inside) * jnp.where(left, below, above)


def _log_t(points: Any, around: Any, place: tuple[Any, Any, Any]) -> Any:
    """Log density (n,) of the split Student-t around one mode [nats]."""
    _, inverse, log_volume = place
    u = (points - around.z) @ inverse.T
    u = u / jnp.where(u < 0.0, around.below, around.above)
    d = points.shape[1]
    log_volume = log_volume + jnp.sum(jnp.log(0.5 * (around.below + around.above)))
    return _log_norm(d) - log_volume - _power(d) * _fall(u)


def _fall(u: Any) -> Any:
    return jnp.log1p(jnp.sum(u**2, axis=-1) / DEGREES_OF_FREEDOM)


def _power(d: int) -> float:
    return 0.5 * (DEGREES_OF_FREEDOM + d)


def _log_norm(d: int) -> float:
    half = 0.5 * DEGREES_OF_FREEDOM
    return float(gammaln(_power(d)) - gammaln(half) - 0.5 * d * np.log(DEGREES_OF_FREEDOM * np.pi))
