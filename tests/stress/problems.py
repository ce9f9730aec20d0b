"""Weighings that the tests of the stress share; all data are invented for the Lowmere station."""

from __future__ import annotations

import functools
import warnings

import numpy as np

import evidence as ev
from evidence.distributions import HalfNormal, Normal, StudentT

DEPTH = np.linspace(-1.0, 1.0, 14)
SLOPED = {"depth": DEPTH, "stems": 2.0 + 0.55 * DEPTH + 0.35 * np.cos(37.0 * DEPTH)}


def flat(p, data):
    return Normal(p["level"] + 0.0 * data["depth"], p["noise"]).log_prob(data["stems"])


def sloped(p, data):
    mean = p["level"] + p["slope"] * data["depth"]
    return Normal(mean, p["noise"]).log_prob(data["stems"])


def heavy(p, data):
    mean = p["level"] + p["slope"] * data["depth"]
    return StudentT(3.0, mean, p["noise"]).log_prob(data["stems"])


UNITS = {"slope": "1/m", "noise": "stems", "level": "stems"}


def weighed(*models, data=SLOPED, **options):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ev.EvidenceWarning)
        return ev.weigh(list(models), data, **options)


def flat_model(**options):
    priors = {"level": Normal(2.0, 1.0), "noise": HalfNormal(0.5)}
    return ev.Model("flat", priors, flat, units=UNITS, **options)


def sloped_model(sd=1.0, **options):
    priors = {"level": Normal(2.0, 1.0), "slope": Normal(0.0, sd), "noise": HalfNormal(0.5)}
    return ev.Model("sloped", priors, sloped, units=UNITS, **options)


@functools.cache
def two():
    """Flat against sloped: the leader has one parameter more."""
    return weighed(flat_model(), sloped_model(), depth="quick")


@functools.cache
def gaussian(z=2.4, n=20, sd=1.0):
    """A fixed mean against a free one: exact, and the textbook case of Jeffreys and Lindley."""
    y = np.array([z / np.sqrt(n)])
    free = ev.Model(
        "free",
        {"theta": Normal(0.0, sd)},
        lambda p, d: Normal(p["theta"], n**-0.5).log_prob(d["y"]),
    )
    fixed = ev.Model("fixed", {}, lambda p, d: Normal(0.0, n**-0.5).log_prob(d["y"]))
    return weighed(free, fixed, data={"y": y}, depth="quick")
