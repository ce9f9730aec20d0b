"""How does leaf litter vanish in the reeds?

Invented data of the fictional Lowmere reed-bed station: 40 mesh bags were filled with 10 g of dry
reed litter each and laid out together; four were fetched on each of ten days and what was left in
them was dried and weighed. Does nothing vanish, one share a day, two pools at their own pace, or
does decay slow down by a power of time?
"""

from pathlib import Path

import jax.numpy as jnp

import evidence as ev
from evidence.distributions import Beta, HalfNormal, LogNormal, Normal

# The bags were filled with 10 g on a kitchen balance: a bag is within a tenth of that.
MASS = LogNormal(2.3, 0.05)
# Grams. Bags lying side by side differ by some tenths of a gram, hardly by more than one.
NOISE = HalfNormal(0.5)
# Per day. Litter halves within months to years: 0.003 is 8 months, 0.001 and 0.01 still likely.
RATE = LogNormal(-5.8, 1.0)

UNITS = {"days": "d", "grams": "g", "mass": "g", "noise": "g"}
NOTES = {
    "days": "days in the water until the bag was fetched",
    "grams": "dry litter left in the bag",
    "mass": "litter at the start; prior: filled with 10 g, within a tenth",
    "noise": "sd of a bag; prior: neighbours differ by tenths of a gram",
}


def no_loss(p, data):
    """What is laid out stays."""
    return p["mass"] + 0.0 * data["days"]


def one_pool(p, data):
    """The same share of what is left vanishes every day."""
    return p["mass"] * jnp.exp(-p["rate"] * data["days"])


def two_pools(p, data):
    """A fast part and a slow part, each losing its own share a day."""
    slow, fast = p["slow"], p["slow"] * (1.0 + p["excess"])
    part = p["fraction"]
    left = part * jnp.exp(-fast * data["days"]) + (1.0 - part) * jnp.exp(-slow * data["days"])
    return p["mass"] * left


def power_law(p, data):
    """The daily share falls as the litter ages: the best is eaten first."""
    return p["mass"] * (1.0 + data["days"] / p["age"]) ** -p["power"]


def candidate(name, expected, priors, units, notes):
    """Join an expected curve with the scatter that all candidates share."""

    def response(p, data):
        return Normal(expected(p, data), p["noise"])

    return ev.Model(
        name,
        {"mass": MASS, **priors, "noise": NOISE},
        lambda p, data: response(p, data).log_prob(data["grams"]),
        simulate=lambda key, p, data: {"grams": response(p, data).sample(key)},
        predict=lambda p, data: {"grams": expected(p, data)},
        units={**UNITS, **units},
        notes={**NOTES, **notes},
    )


def models():
    """Return the candidates, from the plainest on."""
    return [
        candidate("no loss", no_loss, {}, {}, {}),
        candidate(
            "one pool",
            one_pool,
            {"rate": RATE},
            {"rate": "1/d"},
            {"rate": "share lost a day; prior: halves in 8 months, give or take a factor of 2.7"},
        ),
        candidate(
            "two pools",
            two_pools,
            {"fraction": Beta(2.0, 2.0), "slow": RATE, "excess": LogNormal(2.3, 1.0)},
            {"fraction": "1", "slow": "1/d", "excess": "1"},
            {
                "fraction": "share of the fast pool; prior: both pools are there, neither tiny",
                "slow": "share the slow pool loses a day; prior: as for one pool",
                # Two free rates would give each fit a twin with the pools exchanged.
                "excess": "fast rate over slow rate, less 1: above zero, so that the pools cannot "
                "change places; prior: 11 times as fast, give or take a factor of 2.7",
            },
        ),
        candidate(
            "power law",
            power_law,
            {"age": LogNormal(4.0, 1.0), "power": LogNormal(-0.7, 0.7)},
            {"age": "d", "power": "1"},
            {
                "age": "age at which decay begins to slow; prior: 2 months, 20 days to 5 months",
                "power": "power of time; prior: about 1/2, a quarter to one",
            },
        ),
    ]


def data(path=None):
    """Return days in the water and grams left, one row a bag."""
    return ev.read_data(path or Path(__file__).with_name("litter.csv"))
