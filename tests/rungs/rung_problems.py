"""Targets and modes for the tests of the rungs, without the mode search."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable

import jax
import jax.numpy as jnp
import numpy as np

from evidence.curvature import whitened_axes
from evidence.laplace import NOT_EXPANDED, Expansion, Mode, describe_mode, expand
from evidence.mode import Peak
from evidence.outcome import Outcome

LOG_2PI = float(np.log(2.0 * np.pi))


class Target:
    """A log density written in jax.numpy, as a rung sees it; counts its evaluations."""

    def __init__(
        self,
        log_density: Callable,
        dim: int,
        *,
        centre: float = 0.0,
        spread: float = 1.0,
        names: tuple[str, ...] | None = None,
        spread_known: bool = True,
        seconds_per_call: float = 1e-6,
    ) -> None:
        self.log_density, self.dim = log_density, dim
        self.centre, self.spread = np.full(dim, float(centre)), np.full(dim, float(spread))
        self.names = names or tuple(f"z[{i}]" for i in range(dim))
        self.spread_known, self.seconds_per_call = spread_known, seconds_per_call
        self.calls = 0
        self._many = jax.jit(jax.vmap(log_density))
        self._hessian = jax.jit(jax.hessian(lambda z: -log_density(z)))

    def batch(self, z):
        self.calls += len(z)
        padded = np.concatenate([z, np.repeat(z[-1:], -len(z) % 1024, axis=0)])
        with jax.enable_x64(True):
            values = [np.asarray(self._many(part)) for part in padded.reshape(-1, 1024, self.dim)]
        values = np.concatenate(values)[: len(z)]
        return np.where(np.isnan(values), -np.inf, values)

    def hessian(self, z):
        with jax.enable_x64(True):
            return np.asarray(self._hessian(np.asarray(z, dtype=float)))


def mode_at(target: Target, z, *, status: Outcome = Outcome.OK, expanded: bool = True) -> Mode:
    """Describe a known mode."""
    z = np.asarray(z, dtype=float)
    hessian = target.hessian(z)
    height = float(target.batch(z[None])[0])
    peak = Peak(
        z=z, log_density=height, gradient=np.zeros_like(z), hessian=hessian, decrement=0.0,
        outcome=status,
    )  # fmt: skip
    axes = whitened_axes(hessian, target.spread)
    expansion: Expansion = NOT_EXPANDED
    if expanded and axes.positive and status is Outcome.OK:
        expansion = expand(target.hessian, z, hessian, target.spread)
    return describe_mode(peak, axes, expansion, {})


def without_axes(mode: Mode) -> Mode:
    """Return a mode whose Hessian and axes came out as nan."""
    nan = np.full_like(mode.axes, np.nan)
    return dataclasses.replace(
        mode, axes=nan, hessian=nan, laplace=np.nan, status=Outcome.NAN_DERIVATIVE
    )


def gaussian(dim: int, *, spread: float = 3.0, mean: float = 0.5, **how) -> Target:
    """Return a normalised correlated Gaussian: log integral 0."""
    root = np.eye(dim) + 0.4 * np.tri(dim, k=-1) / dim
    precision = np.linalg.inv(root @ root.T)
    constant = float(np.linalg.slogdet(root)[1]) + 0.5 * dim * LOG_2PI

    def log_density(z):
        away = z - mean
        return -0.5 * away @ precision @ away - constant

    return Target(log_density, dim, spread=spread, **how)


def log_gamma(dim: int, shape: float, *, spread: float = 1.5, turned: bool = False) -> Target:
    """Return a (rotated) product of normalised logs of gamma variables: log integral 0."""
    rng = np.random.default_rng(0)
    turn = np.linalg.qr(rng.normal(size=(dim, dim)))[0] if turned else np.eye(dim)
    constant = float(jax.scipy.special.gammaln(shape))

    def log_density(z):
        w = turn @ z + np.log(shape)
        return jnp.sum(shape * w - jnp.exp(w)) - dim * constant

    return Target(log_density, dim, spread=spread)


def two_peaks(distance: float, width: float, share: float, *, spread: float = 1.0) -> Target:
    """Return a sum of two Gaussians in the plane, the second at (distance, 0): log integral 0."""

    def log_density(z):
        first = -0.5 * (z[0] ** 2 + z[1] ** 2) / 0.3**2 - 2.0 * np.log(0.3)
        second = -0.5 * ((z[0] - distance) ** 2 + z[1] ** 2) / width**2 - 2.0 * np.log(width)
        both = jnp.logaddexp(np.log1p(-share) + first, np.log(share) + second)
        return both - LOG_2PI

    return Target(log_density, 2, spread=spread)
