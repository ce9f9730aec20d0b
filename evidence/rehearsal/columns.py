"""What each column of a rehearsal's tables means, with its unit."""

from __future__ import annotations

__all__ = [
    "CALIBRATION",
    "CONFUSION",
    "FACTORS",
    "GROWTH",
    "MISLEADING",
    "QUANTILES",
    "TABLES",
]

QUANTILES = {"q05": 0.05, "q25": 0.25, "median": 0.5, "q75": 0.75, "q95": 0.95}
MISLEADING = 3.0  # nats: 2 log B of 6, "strong" of Kass & Raftery (1995)

GROWTH = {
    "size": "number of observations in a data set",
    "generator": "candidate that the data were simulated from",
    "data_sets": "simulated data sets that could be used",
    "led": "share of them in which the generator led [0 to 1]",
    "settled_right": "share in which it led and the comparison was settled: ahead of every other "
    "candidate by at least 1 nat and by more than three joint errors [0 to 1]",
    "low": "lower end of the 95 % interval of that share, of Wilson (1927)",
    "high": "its upper end",
    "settled_wrong": "share settled for another candidate [0 to 1]",
    "not_settled": "share not settled [0 to 1]",
    "mean_probability": "mean posterior probability of the generator [0 to 1]",
    "median_log_bayes_factor": "median log evidence of the generator minus that of its strongest "
    "rival [nats]",
    "simulations_failed": "simulated data sets with nan or inf, left out",
    "doubted": "share of data sets in which some number is doubtful or failed [0 to 1]",
}
CONFUSION = {
    "size": "number of observations in a data set",
    "generator": "candidate that the data were simulated from",
    "leader": "candidate with the highest posterior probability; empty: none had one",
    "data_sets": "how many data sets that could be used",
    "share": "of the generator's data sets [0 to 1]",
}
CALIBRATION = {
    "candidate": "whose probability is meant: a candidate's, or that of whoever led",
    "low": "lower edge of the bin of probabilities",
    "high": "its upper edge",
    "data_sets": "data sets whose probability fell into the bin",
    "mean_probability": "their mean probability: the share that should be right",
    "right": "share in which the candidate was the generator [0 to 1]",
    "band_low": "2.5 % quantile of that share if probabilities mean what they say (binomial)",
    "band_high": "97.5 % quantile",
    "inside": "whether the share lies inside the band, which 1 in 20 bins does not by chance",
    "chance": "two-sided probability of a share as far off",
}
FACTORS = {
    "size": "number of observations in a data set",
    "generator": "candidate that the data were simulated from",
    "rival": "candidate it is compared with",
    "mean": "mean log evidence of the generator minus that of the rival [nats]",
    **{name: f"{100 * q:.0f} % quantile of it [nats]" for name, q in QUANTILES.items()},
    "for_rival": "share of data sets in which the rival's evidence is higher [0 to 1]",
    "misleading": f"share in which it is higher by {MISLEADING:g} nats or more [0 to 1]",
}
TABLES = {"growth": GROWTH, "confusion": CONFUSION, "calibration": CALIBRATION,
          "log_bayes_factors": FACTORS}  # fmt: skip
