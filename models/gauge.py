"""Did the water level at the reed edge change, or does it only breathe with the moon?

Invented data of the fictional Lowmere reed-bed station: the level of the water over its gauge's
zero, read once a day for 90 days. Is the level constant, does it drift, did it jump on one day (a
sluice opened, the gauge was knocked), or does it rise and fall with a tide whose period nobody
wrote down?
"""

from pathlib import Path

import jax
import jax.numpy as jnp

import evidence as ev
from evidence.distributions import HalfNormal, Normal, Uniform

# Metres. The gauge was set so that the usual level reads about half a metre.
LEVEL = Normal(0.5, 0.2)
# Metres. Wind and the reader's eye: some centimetres.
NOISE = HalfNormal(0.1)
# Metres. What a drift over the season, a jump or a tide may amount to at this lake: decimetres.
CHANGE = Normal(0.0, 0.1)

SEASON = 90.0  # days
# A gauge that is knocked, or a sluice, changes the level within half a day.
SWIFTNESS = 0.25

UNITS = {"day": "d", "metres": "m", "level": "m", "noise": "m"}
NOTES = {
    "day": "days since the first reading",
    "metres": "water over the gauge's zero",
    "level": "level at the start, or in the mean; prior: set to read half a metre",
    "noise": "sd of a reading; prior: some centimetres",
}


def constant(p, data):
    """Nothing but weather."""
    return p["level"] + 0.0 * data["day"]


def drift(p, data):
    """A straight line over the season."""
    return p["level"] + p["drift"] * data["day"] / SEASON


def jump(p, data):
    """One level before a day, another after it."""
    return p["level"] + p["jump"] * jax.nn.sigmoid((data["day"] - p["when"]) / SWIFTNESS)


def tide(p, data):
    """One sinusoid, written by its cosine and sine parts so that no phase wraps around."""
    turn = 2.0 * jnp.pi * data["day"] * p["turns"] / SEASON
    return p["level"] + p["cosine"] * jnp.cos(turn) + p["sine"] * jnp.sin(turn)


def candidate(name, expected, priors, units, notes):
    """Join an expected level with the scatter that all candidates share."""

    def reading(p, data):
        return Normal(expected(p, data), p["noise"])

    return ev.Model(
        name,
        {"level": LEVEL, **priors, "noise": NOISE},
        lambda p, data: reading(p, data).log_prob(data["metres"]),
        simulate=lambda key, p, data: {"metres": reading(p, data).sample(key)},
        predict=lambda p, data: {"metres": expected(p, data)},
        units={**UNITS, **units},
        notes={**NOTES, **notes},
    )


def models():
    """Return the candidates, from the plainest on."""
    return [
        candidate("constant", constant, {}, {}, {}),
        candidate(
            "drift",
            drift,
            {"drift": CHANGE},
            {"drift": "m"},
            {"drift": "change over the season; prior: a decimetre up or down"},
        ),
        candidate(
            "jump",
            jump,
            {"jump": CHANGE, "when": Uniform(0.0, SEASON)},
            {"jump": "m", "when": "d"},
            {
                "jump": "change of level; prior: a decimetre up or down",
                "when": "day of the change; prior: any day of the season",
            },
        ),
        candidate(
            "tide",
            tide,
            # Turns a season: a period from five days (the shortest that a daily reading shows
            # well) to a month and a half.
            {"cosine": CHANGE, "sine": CHANGE, "turns": Uniform(2.0, 18.0)},
            {"cosine": "m", "sine": "m", "turns": "1/(90 d)"},
            {
                "cosine": "part in step with the first day; prior: a decimetre",
                "sine": "part a quarter of a period later; prior: a decimetre",
                "turns": "periods in a season; prior: any period from 5 to 45 days",
            },
        ),
    ]


def data(path=None):
    """Return day and level, one row a reading."""
    return ev.read_data(path or Path(__file__).with_name("gauge.csv"))
