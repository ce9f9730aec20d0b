"""Candidates and data sets for the tests of batches; all data are invented."""

from __future__ import annotations

import functools

import jax.numpy as jnp
import numpy as np

import evidence as ev
from evidence.distributions import LogNormal, Normal

TIMES = np.linspace(0.0, 6.0, 20)


def decay(p, data):
    """Litter that vanishes by a constant share."""
    return Normal(p["mass"] * jnp.exp(-p["rate"] * data["t"]), 0.2).log_prob(data["y"])


def constant(p, data):
    """Litter that stays."""
    return Normal(p["mass"] + 0.0 * data["t"], 0.2).log_prob(data["y"])


@functools.cache  # compiled programs are kept on the model
def decaying():
    return ev.Model("decay", {"mass": LogNormal(1.0, 0.5), "rate": LogNormal(-1.5, 0.7)}, decay)


@functools.cache
def staying():
    return ev.Model("constant", {"mass": LogNormal(1.0, 0.5)}, constant)


def both():
    return [decaying(), staying()]


def stacked(n, seed=0):
    """The first n of 3000 stacked data sets (n, 20), one in three of which does not decay."""
    rng = np.random.default_rng(seed)
    rate = np.where(np.arange(3000) % 3 == 0, 0.0, rng.uniform(0.1, 0.4, 3000))
    mean = rng.uniform(2.0, 4.0, 3000)[:, None] * np.exp(-rate[:, None] * TIMES)
    return {"y": (mean + 0.2 * rng.normal(size=(3000, len(TIMES))))[:n]}


def listed(n, seed=0, lengths=(20,)):
    """The same as a list of dicts, of some lengths in turn."""
    y = stacked(n, seed)["y"]
    return [{"t": TIMES[: lengths[k % len(lengths)]], "y": y[k, : lengths[k % len(lengths)]]}
            for k in range(n)]  # fmt: skip


def same_tables(one, other):
    """Whether two tables hold the same rows, with the same digits."""
    numbers = ["log_evidence", "standard_error", "laplace", "probability"]
    words = ["data_set", "candidate", "trust", "status"]
    alike = all(list(one[w].astype(str)) == list(other[w].astype(str)) for w in words)
    return alike and all(
        np.array_equal(one[c].to_numpy(), other[c].to_numpy(), equal_nan=True) for c in numbers
    )
