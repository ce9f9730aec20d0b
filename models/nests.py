"""Do nests succeed alike on all islands of the reed bed?

Invented data of the fictional Lowmere reed-bed station: of the nests found on each of twelve
islands, how many brought out young. Is there one rate for all, one for each island by itself, or
do islands differ around a common rate by an amount that the data tell? The last is written in its
non-centred form (each island's deviation in units of the spread), since in the centred form the
density grows without bound as the spread goes to zero.
"""

from pathlib import Path

import jax

import evidence as ev
from evidence.distributions import Binomial, HalfNormal, Normal

ISLANDS = 12
# Log odds: half of the nests succeed, give or take; one in twenty or nineteen would surprise.
LOG_ODDS = Normal(0.0, 1.5)

UNITS = {"island": "1", "nests": "1", "fledged": "1"}
NOTES = {
    "island": "number of the island",
    "nests": "nests found on it",
    "fledged": "nests that brought out young",
}


def alike(p, data):
    """One rate for all islands."""
    return p["log_odds"] + 0.0 * data["nests"]


def each_its_own(p, data):
    """A rate for each island, none telling of another."""
    return p["log_odds"][data["island"]]


def pooled(p, data):
    """Islands scatter around a common rate."""
    return p["log_odds"] + p["spread"] * p["deviation"][data["island"]]


def candidate(name, log_odds, priors, notes):
    """Join the islands' log odds with the counts of nests."""

    def counts(p, data):
        return Binomial(data["nests"], logit=log_odds(p, data))

    return ev.Model(
        name,
        priors,
        lambda p, data: counts(p, data).log_prob(data["fledged"]),
        simulate=lambda key, p, data: {"fledged": counts(p, data).sample(key)},
        predict=lambda p, data: {"fledged": data["nests"] * jax.nn.sigmoid(log_odds(p, data))},
        units={**UNITS, **dict.fromkeys(priors, "1")},
        notes={**NOTES, **notes},
    )


def models():
    """Return the candidates, from the plainest on."""
    return [
        candidate(
            "one rate",
            alike,
            {"log_odds": LOG_ODDS},
            {"log_odds": "log odds of success; prior: half, give or take"},
        ),
        candidate(
            "one per island",
            each_its_own,
            {"log_odds": Normal(0.0, 1.5, shape=(ISLANDS,))},
            {"log_odds": "log odds of success on each island; prior: half, give or take"},
        ),
        candidate(
            "partial pooling",
            pooled,
            {
                "log_odds": LOG_ODDS,
                "spread": HalfNormal(1.0),
                "deviation": Normal(0.0, 1.0, shape=(ISLANDS,)),
            },
            {
                "log_odds": "log odds of success on a usual island; prior: half, give or take",
                "spread": "sd between islands in log odds; prior: up to one or two",
                "deviation": "an island's deviation in units of the spread; prior: standard normal",
            },
        ),
    ]


def data(path=None):
    """Return island, nests and successes, one row an island."""
    return ev.read_data(path or Path(__file__).with_name("nests.csv"))
