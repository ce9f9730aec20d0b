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

GAUGE = {
    "seed": 1607,
    "days": 90,
    # Spring and neap: a tide of half a lunar month, nothing else.
    "level": 0.52,
    "amplitude": 0.05,
    "period": 14.77,
    "phase": 0.8,
    "noise": 0.05,
}

GERMINATION = {
    "seed": 29,
    "salinities": (0, 2, 4, 6, 8, 10, 12, 14, 16),
    "dishes": 3,
    "sown": 25,
    # Tolerance holds up to 7 g/l and gives way beyond.
    "log odds": 1.6,
    "loss": 0.02,
    "break": 7.0,
    "extra": 0.45,
}

NESTS = {
    "seed": 12,
    "islands": 12,
    "fewest": 6,
    "most": 24,
    # Islands differ around a common rate.
    "log odds": 0.3,
    "spread": 0.7,
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


def gauge(truth=GAUGE):
    """Return the lines of gauge.csv: metres over the gauge's zero on each day."""
    rng = np.random.default_rng(truth["seed"])
    day = np.arange(truth["days"])
    turn = 2 * np.pi * day / truth["period"] + truth["phase"]
    metres = truth["level"] + truth["amplitude"] * np.sin(turn)
    metres = metres + truth["noise"] * rng.standard_normal(day.size)
    rows = [f"{d},{level:.3f}" for d, level in zip(day, metres, strict=True)]
    return ["day,metres", *rows]


def germination(truth=GERMINATION):
    """Return the lines of germination.csv: salinity, seeds sown and germinated in each dish."""
    rng = np.random.default_rng(truth["seed"])
    salinity = np.repeat(truth["salinities"], truth["dishes"])
    beyond = np.maximum(salinity - truth["break"], 0.0)
    log_odds = truth["log odds"] - truth["loss"] * salinity - truth["extra"] * beyond
    germinated = rng.binomial(truth["sown"], 1.0 / (1.0 + np.exp(-log_odds)))
    rows = [f"{s},{truth['sown']},{n}" for s, n in zip(salinity, germinated, strict=True)]
    return ["salinity,sown,germinated", *rows]


def nests(truth=NESTS):
    """Return the lines of nests.csv: island, nests found and nests that fledged young."""
    rng = np.random.default_rng(truth["seed"])
    found = rng.integers(truth["fewest"], truth["most"] + 1, truth["islands"])
    log_odds = truth["log odds"] + truth["spread"] * rng.standard_normal(found.size)
    fledged = rng.binomial(found, 1.0 / (1.0 + np.exp(-log_odds)))
    rows = [f"{i},{n},{k}" for i, (n, k) in enumerate(zip(found, fledged, strict=True))]
    return ["island,nests,fledged", *rows]


TABLES = {
    "litter.csv": litter,
    "frogs.csv": frogs,
    "gauge.csv": gauge,
    "germination.csv": germination,
    "nests.csv": nests,
}


def write(folder):
    """Write every table into a folder."""
    for name, make in TABLES.items():
        lines = make()
        (Path(folder) / name).write_text("\n".join(lines) + "\n", encoding="utf-8")


if __name__ == "__main__":
    write(Path(__file__).parent)
