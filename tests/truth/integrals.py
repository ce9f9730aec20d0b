"""Forty integrals with known answers: what a case is, the list of them, shared densities.

Every case is a log density over R^d without a prior of its own to lean on, a centre and a spread
("what was known before the data"), and the true log integral with the way it is known. About a
fifth of them are built to deceive a local method: mass out of sight, walls, kinks, funnels.
All data are drawn from the seeds written in the cases.
"""

from __future__ import annotations

import functools
import importlib
import json
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import jax.numpy as jnp
import numpy as np

LOG_2PI = float(np.log(2.0 * np.pi))
FILES = (
    "integrals_linear",
    "integrals_counts",
    "integrals_curves",
    "integrals_groups",
    "integrals_shapes",
)
CASES: dict[str, Callable[[], Integral]] = {}


@dataclass(frozen=True)
class Quadrature:
    """What is left to integrate by a trapezoid rule once the easy coordinates are done.

    ``log_density`` takes [k]; the grid runs from ``low`` to ``high`` with ``points`` per axis,
    in coordinates whitened at the peak found from ``whiten_from`` when that is given, and
    ``copies`` counts equal peaks of which one is integrated.
    """

    log_density: Callable
    low: tuple[float, ...]
    high: tuple[float, ...]
    points: tuple[int, ...]
    whiten_from: tuple[float, ...] | None = None
    copies: int = 1


@dataclass(frozen=True)
class Integral:
    """One log density, where to look for it, and the answer [nats]."""

    name: str
    log_density: Callable
    centre: np.ndarray
    spread: np.ndarray
    how: str
    closed_form: float | None = None
    quadrature: Quadrature | None = None

    @property
    def dimension(self) -> int:
        return len(self.centre)

    @property
    def truth(self) -> float:
        """The true log integral: closed form where there is one, else stored quadrature."""
        if self.closed_form is not None:
            return self.closed_form
        return stored("quadrature.json")[self.name]["log_integral"]

    def model(self):
        """The case as a user would declare it."""
        import evidence as ev

        log_density = self.log_density

        def log_posterior(p):
            return log_density(p["z"])

        return ev.Model.from_log_posterior(
            self.name, log_posterior, start={"z": self.centre}, spread={"z": self.spread}
        )


@functools.cache
def stored(file: str) -> dict:
    """Read one JSON file beside this one."""
    return json.loads((Path(__file__).parent / file).read_text())


def case(build: Callable[[], Integral]) -> Callable[[], Integral]:
    """Enter a case in the list under the name of the function that builds it."""
    cached = functools.cache(build)
    CASES[build.__name__] = cached
    return cached


def every_case() -> dict[str, Callable[[], Integral]]:
    """All forty, in the order of the files."""
    for file in FILES:
        importlib.import_module(file)
    return CASES


def place(dimension: int, centre, spread) -> dict[str, np.ndarray]:
    """Centre and spread as full vectors [d]."""
    return {
        "centre": np.broadcast_to(np.asarray(centre, float), (dimension,)).copy(),
        "spread": np.broadcast_to(np.asarray(spread, float), (dimension,)).copy(),
    }


def rotation(dimension: int, seed: int) -> np.ndarray:
    """An orthogonal matrix [d, d]."""
    return np.linalg.qr(np.random.default_rng(seed).normal(size=(dimension, dimension)))[0]


def log_normal(x, mean, sd):
    return -0.5 * ((x - mean) / sd) ** 2 - jnp.log(sd) - 0.5 * LOG_2PI


def log_cauchy(x, scale):
    return -jnp.log(np.pi * scale) - jnp.log1p((x / scale) ** 2)


def log_flat_fraction(z):
    """Log density of z when sigmoid(z) is uniform on (0, 1)."""
    return -jnp.logaddexp(0.0, z) - jnp.logaddexp(0.0, -z)


def log_gaussian_data(y, covariance) -> float:
    """Log density of y [n] under N(0, covariance), in NumPy."""
    sign, log_det = np.linalg.slogdet(covariance)
    assert sign > 0
    return float(-0.5 * (y @ np.linalg.solve(covariance, y) + log_det + len(y) * LOG_2PI))


def log_linear_data(y, basis, prior_sd, noise_sd):
    """Log density of y [n] = basis @ w + noise with w ~ N(0, prior_sd^2) integrated out.

    By the determinant identity on the k x k side, so that it is cheap under vmap.
    """
    scaled = basis * prior_sd / noise_sd
    inner = jnp.eye(basis.shape[1]) + scaled.T @ scaled
    factor = jnp.linalg.cholesky(inner)
    part = jnp.linalg.solve(factor, scaled.T @ (y / noise_sd))
    quadratic = jnp.sum((y / noise_sd) ** 2) - jnp.sum(part**2)
    log_det = 2.0 * jnp.sum(jnp.log(jnp.diag(factor))) + 2.0 * len(y) * jnp.log(noise_sd)
    return -0.5 * (quadratic + log_det + len(y) * LOG_2PI)
