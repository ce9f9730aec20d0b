"""Invents the data of the Lowmere reed-bed station, the same to the last digit each time.

The station is fictional. Run ``python models/make_data.py`` to write the CSV files beside this
file again; seeds and the truth behind each table are below. The files of other studies, with
observed data, are not made here.
"""

from pathlib import Path

import numpy as np

LITTER = {
    "seed": 1871,
    "days": (0, 7, 14, 30, 60, 90, 150, 240, 365, 540),
    "bags": 4,
    # Two pools: a third goes within weeks, the rest over years.
    "mass": 10.0,
    "fast share": 0.3,
    "fast rate": 0.03,
    "slow rate": 0.002,
    "noise": 0.35,
}

FROGS = {
    "seed": 4,
    "ponds": 60,
    "shallowest": 8.0,
    "deepest": 110.0,
    # Clustered counts: negative binomial around a log-linear mean, no surplus of empty ponds.
    "frogs at 50 cm": 5.0,
    "slope per 10 cm": 0.12,
    "size": 4.0,
}


def litter(truth=LITTER):
    """Return the lines of litter.csv: dry grams left in bags fetched after so many days."""
    rng = np.random.default_rng(truth["seed"])
    days = np.repeat(truth["days"], truth["bags"])
    share = truth["fast share"]
    left = share * np.exp(-truth["fast rate"] * days)
    left += (1 - share) * np.exp(-truth["slow rate"] * days)
    grams = truth["mass"] * left + truth["noise"] * rng.standard_normal(days.size)
    rows = [f"{day},{mass:.2f}" for day, mass in zip(days, grams, strict=True)]
    return ["days,grams", *rows]


def frogs(truth=FROGS):
    """Return the lines of frogs.csv: frogs counted in one night and depth of each pond."""
    rng = np.random.default_rng(truth["seed"])
    depth = np.round(rng.uniform(truth["shallowest"], truth["deepest"], truth["ponds"]), 1)
    mean = truth["frogs at 50 cm"] * np.exp(truth["slope per 10 cm"] * (depth - 50.0) / 10.0)
    count = rng.poisson(mean * rng.gamma(truth["size"], 1.0 / truth["size"], depth.size))
    rows = [f"{d:.1f},{n}" for d, n in zip(depth, count, strict=True)]
    return ["depth,frogs", *rows]


def write(folder):
    """Write every table into a folder."""
    for name, lines in {"litter.csv": litter(), "frogs.csv": frogs()}.items():
        (Path(folder) / name).write_text("\n".join(lines) + "\n", encoding="utf-8")


if __name__ == "__main__":
    write(Path(__file__).parent)
