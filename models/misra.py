"""Which curve does a gas follow as it covers a surface?

Observed data: 14 volumes adsorbed in a single layer at given pressures, by D. Misra (1978), from a
study for dental research. Source: NIST/ITL StRD, Nonlinear Least Squares Regression, data sets
Misra1a to Misra1d, which are four rival curves through the same 14 points. The source gives no
units. Each curve has a capacity and an affinity, and starts with the slope capacity times affinity.
"""

from pathlib import Path

import jax.numpy as jnp

import evidence as ev
from evidence.distributions import LogNormal, Normal

# The source names no expectation. All four curves share the same priors, a factor of 2.7 wide
# either way, so that none is favoured. A full layer lies above what was reached within the range
# of the gauge, and is taken as a few hundred units of volume.
CAPACITY = LogNormal(5.7, 1.0)
# One over affinity is the pressure at which filling up begins to tell: within the range or
# several times beyond it, for a gauge that is read up to some hundreds.
AFFINITY = LogNormal(-8.0, 1.0)
# Volumes are written to 0.01; a reading is good to some hundredths or tenths.
NOISE = LogNormal(-2.3, 1.0)

UNITS = {
    "pressure": "as published",
    "volume": "as published",
    "capacity": "unit of volume",
    "affinity": "1/unit of pressure",
    "noise": "unit of volume",
}
NOTES = {
    "pressure": "pressure of the gas",
    "volume": "volume adsorbed",
    "capacity": "volume of a full layer (b1 of the source); prior: 300, factor 2.7 either way",
    "affinity": "initial slope over capacity (b2); prior: 1/3000, factor 2.7 either way",
    "noise": "sd of a reading; prior: 0.1, factor 2.7 either way",
}


def exponential(p, data):
    """Misra1a: places fill up at a steady share."""
    return p["capacity"] * -jnp.expm1(-p["affinity"] * data["pressure"])


def inverse_square(p, data):
    """Misra1b."""
    return p["capacity"] * (1.0 - (1.0 + p["affinity"] * data["pressure"] / 2.0) ** -2)


def inverse_root(p, data):
    """Misra1c."""
    return p["capacity"] * (1.0 - (1.0 + 2.0 * p["affinity"] * data["pressure"]) ** -0.5)


def hyperbola(p, data):
    """Misra1d: each place is taken or free, in balance with the gas (Langmuir 1918)."""
    reach = p["affinity"] * data["pressure"]
    return p["capacity"] * reach / (1.0 + reach)


def candidate(name, expected):
    """Join a curve with the priors and the scatter that all four share."""

    def response(p, data):
        return Normal(expected(p, data), p["noise"])

    return ev.Model(
        name,
        {"capacity": CAPACITY, "affinity": AFFINITY, "noise": NOISE},
        lambda p, data: response(p, data).log_prob(data["volume"]),
        simulate=lambda key, p, data: {"volume": response(p, data).sample(key)},
        predict=lambda p, data: {"volume": expected(p, data)},
        units=UNITS,
        notes=NOTES,
    )


def models():
    """Return the candidates, Misra1a to Misra1d."""
    return [
        candidate("exponential", exponential),
        candidate("inverse square", inverse_square),
        candidate("inverse square root", inverse_root),
        candidate("hyperbola", hyperbola),
    ]


def data(path=None):
    """Return pressure and volume, one row a reading."""
    return ev.read_data(path or Path(__file__).with_name("misra.csv"))
