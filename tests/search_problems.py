"""Twenty log posteriors on which the drivers of the mode search must agree."""

from __future__ import annotations

import functools

import jax
import jax.numpy as jnp
import numpy as np

import evidence as ev
from evidence.problem import Problem


def _gaussian(p, data):
    step = p["x"] - data["mean"]
    return -0.5 * step @ data["precision"] @ step


def _logistic(p, data):
    line = data["design"] @ p["x"]
    return jnp.sum(data["y"] * line - jax.nn.softplus(line)) - 0.5 * jnp.sum(p["x"] ** 2)


def _poisson(p, data):
    line = data["design"] @ p["x"]
    return jnp.sum(data["y"] * line - jnp.exp(line)) - 0.5 * jnp.sum(p["x"] ** 2)


def _banana(p, data):
    a, b = p["x"]
    return -0.5 * (1.0 - a) ** 2 - 0.5 * data["steep"] * (b - a**2) ** 2


def _mixture(p, data):
    distance = jnp.sum((p["x"] - data["places"]) ** 2, axis=1)
    return jax.nn.logsumexp(jnp.log(data["shares"]) - 0.5 * distance / data["width"] ** 2)


def _saddle(p, data):
    a, b = p["x"]
    return -data["steep"] * (a**2 - 1.0) ** 2 - 0.5 * b**2 + 0.1 * a**2 * b


def _skewed(p, data):
    return jnp.sum(data["shape"] * p["x"] - data["rate"] * jnp.exp(p["x"]))


def _heavy(p, data):
    return -2.0 * jnp.sum(jnp.log1p((data["y"] - p["x"][0]) ** 2 / 3.0)) - 0.5 * p["x"][0] ** 2


FAMILIES = {
    "gaussian": (_gaussian, 4),
    "logistic": (_logistic, 3),
    "poisson": (_poisson, 3),
    "banana": (_banana, 2),
    "mixture": (_mixture, 2),
    "saddle": (_saddle, 2),
    "skewed": (_skewed, 3),
    "heavy": (_heavy, 1),
}


@functools.cache
def family(name: str) -> ev.Model:
    """One model per family: what varies travels as data, so that it is compiled once."""
    function, dimension = FAMILIES[name]
    start, spread = np.zeros(dimension), np.full(dimension, 3.0)
    return ev.Model.from_log_posterior(name, function, {"x": start}, spread={"x": spread})


def _data(name: str, seed: int) -> dict[str, np.ndarray]:
    rng = np.random.default_rng([seed, len(name)])
    if name == "gaussian":
        turn = np.linalg.qr(rng.normal(size=(4, 4)))[0]
        scale = 10.0 ** np.array([0.0, -1.5, -3.0, 1.0])
        return {"mean": rng.normal(size=4), "precision": turn @ np.diag(scale**-2) @ turn.T}
    if name in ("logistic", "poisson"):
        design = rng.normal(size=(20, 3))
        y = rng.poisson(np.exp(design @ [0.5, -0.5, 0.2]))
        y = np.minimum(y, 1) if name == "logistic" else y
        return {"design": design, "y": y.astype(float)}
    if name == "mixture":
        shares = rng.dirichlet([5.0, 5.0, 5.0])
        return {"places": 3.0 * rng.normal(size=(3, 2)), "shares": shares, "width": np.float64(0.7)}
    if name == "skewed":
        return {"shape": rng.uniform(0.5, 5.0, size=3), "rate": rng.uniform(0.1, 9.0, size=3)}
    if name == "heavy":
        return {"y": np.append(rng.normal(size=6), 9.0 + rng.normal(size=3))}
    return {"steep": np.float64({1: 1.0, 2: 20.0, 3: 200.0}[seed])}


CASES = [(name, seed) for name in FAMILIES for seed in (1, 2, 3)][:-4]


def make(name: str, seed: int) -> Problem:
    return Problem(family(name), _data(name, seed))
