"""Do frogs gather, or are some ponds just empty?

Invented data of the fictional Lowmere reed-bed station: frogs heard in one night at each of 60
ponds, and the depth of the water. All candidates let the expected count grow by the same factor
with each 10 cm of water. They differ in what lies around it: chance alone, frogs that gather, or
a share of ponds where none can live.
"""

from pathlib import Path

import jax
import jax.numpy as jnp

import evidence as ev
from evidence.distributions import Bernoulli, Beta, LogNormal, NegativeBinomial, Normal, Poisson

# Log of the count at 50 cm: some frogs in a usual pond, one to twenty.
LEVEL = Normal(1.5, 0.75)
# Per 10 cm: half a metre of water could triple the count or cut it to a third.
SLOPE = Normal(0.0, 0.2)

UNITS = {"depth": "cm", "frogs": "1", "level": "1", "slope": "1/(10 cm)"}
NOTES = {
    "depth": "depth of the water",
    "frogs": "frogs heard in one night",
    "level": "log of the expected count at 50 cm, a usual depth; prior: one to twenty frogs",
    "slope": "its change with 10 cm of water; prior: half a metre triples or cuts to a third",
}


def log_mean(p, data):
    """Log of the expected count of a pond that frogs can live in."""
    # 50 cm and not the mean of the data: each row must speak for itself.
    return p["level"] + p["slope"] * (data["depth"] - 50.0) / 10.0


def chance(p, data):
    """Frogs are heard independently of each other."""
    return Poisson(log_rate=log_mean(p, data))


def gathering(p, data):
    """A pond's own attraction varies around the mean."""
    return NegativeBinomial(jnp.exp(log_mean(p, data)), p["size"])


def empty_ponds(p, data):
    """Log-likelihood when a share of ponds is empty for good, the others as by chance."""
    living = jnp.log1p(-p["empty"]) + chance(p, data).log_prob(data["frogs"])
    none = jnp.logaddexp(jnp.log(p["empty"]), living)
    return jnp.where(data["frogs"] == 0, none, living)


def draw_empty_ponds(key, p, data):
    """Draw which ponds are empty, and the counts of the others."""
    which, how_many = jax.random.split(key)
    empty = Bernoulli(p["empty"]).sample(which, data["depth"].shape)
    return {"frogs": jnp.where(empty, 0, chance(p, data).sample(how_many))}


def models():
    """Return the candidates, from the plainest on."""
    shared = {"level": LEVEL, "slope": SLOPE}
    return [
        ev.Model(
            "chance alone",
            shared,
            lambda p, data: chance(p, data).log_prob(data["frogs"]),
            simulate=lambda key, p, data: {"frogs": chance(p, data).sample(key)},
            predict=lambda p, data: {"frogs": jnp.exp(log_mean(p, data))},
            units=UNITS,
            notes=NOTES,
        ),
        ev.Model(
            "frogs gather",
            # Variance is mean + mean^2 / size: 3 makes a usual pond vary clearly more than chance.
            {**shared, "size": LogNormal(1.1, 1.0)},
            lambda p, data: gathering(p, data).log_prob(data["frogs"]),
            simulate=lambda key, p, data: {"frogs": gathering(p, data).sample(key)},
            predict=lambda p, data: {"frogs": jnp.exp(log_mean(p, data))},
            units={**UNITS, "size": "1"},
            notes={
                **NOTES,
                "size": "variance is mean + mean^2 / size; prior: 3, give or take a factor of 2.7",
            },
        ),
        ev.Model(
            "empty ponds",
            {**shared, "empty": Beta(1.0, 4.0)},
            empty_ponds,
            simulate=draw_empty_ponds,
            predict=lambda p, data: {"frogs": (1.0 - p["empty"]) * jnp.exp(log_mean(p, data))},
            units={**UNITS, "empty": "1"},
            notes={
                **NOTES,
                "empty": "share of ponds without frogs for good; prior: a fifth, seldom above half",
            },
        ),
    ]


def data(path=None):
    """Return depth and count, one row a pond."""
    return ev.read_data(path or Path(__file__).with_name("frogs.csv"))
