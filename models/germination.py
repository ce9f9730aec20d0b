"""How does salt keep reed seed from germinating?

Invented data of the fictional Lowmere reed-bed station: dishes of 25 reed seeds each were kept in
water of nine salinities, three dishes of each, and the seedlings counted after three weeks. Does
salt not matter, does it matter smoothly, is there a threshold above which few germinate, or does
tolerance hold up to some salinity and then give way?
"""

from pathlib import Path

import jax

import evidence as ev
from evidence.distributions import Binomial, HalfNormal, Normal, Uniform

# Log odds in fresh or middling water: most seed germinates, or half, seldom hardly any.
LOG_ODDS = Normal(0.5, 1.5)
# Log odds lost with one gram of salt a litre: ten grams may take all or little.
LOSS = HalfNormal(0.5)
# Grams a litre: anywhere from fresh to half sea water.
PLACE = Uniform(0.0, 18.0)

MIDDLE = 9.0  # g/l, where the smooth curve's log odds are declared
SHARPNESS = 0.25  # g/l, within which a threshold acts; dishes are 2 g/l apart

UNITS = {"salinity": "g/l", "sown": "1", "germinated": "1"}
NOTES = {
    "salinity": "salt in the dish's water",
    "sown": "seeds in the dish",
    "germinated": "seedlings after three weeks",
}


def flat(p, data):
    """Salt does not matter."""
    return p["log_odds"] + 0.0 * data["salinity"]


def smooth(p, data):
    """Each gram of salt costs the same in log odds."""
    return p["log_odds"] - p["loss"] * (data["salinity"] - MIDDLE)


def threshold(p, data):
    """One rate below a salinity, a lower one above it."""
    above = jax.nn.sigmoid((data["salinity"] - p["threshold"]) / SHARPNESS)
    return p["log_odds"] - p["drop"] * above


def two_slopes(p, data):
    """Little is lost up to a salinity, more with each gram beyond it."""
    beyond = jax.nn.softplus((data["salinity"] - p["break"]) / SHARPNESS) * SHARPNESS
    return p["log_odds"] - p["loss"] * data["salinity"] - p["extra"] * beyond


def candidate(name, log_odds, priors, units, notes):
    """Join a curve of log odds with the counts in the dishes."""

    def counts(p, data):
        return Binomial(data["sown"], logit=log_odds(p, data))

    return ev.Model(
        name,
        {"log_odds": LOG_ODDS, **priors},
        lambda p, data: counts(p, data).log_prob(data["germinated"]),
        simulate=lambda key, p, data: {"germinated": counts(p, data).sample(key)},
        predict=lambda p, data: {"germinated": data["sown"] * jax.nn.sigmoid(log_odds(p, data))},
        units={**UNITS, "log_odds": "1", **units},
        notes={**NOTES, **notes},
    )


def models():
    """Return the candidates, from the plainest on."""
    fresh = "log odds in fresh water; prior: most germinate, or half"
    loss = "log odds lost with a gram a litre; prior: ten grams take much or little"
    return [
        candidate("flat", flat, {}, {}, {"log_odds": "log odds in any water; prior: half or most"}),
        candidate(
            "smooth",
            smooth,
            {"loss": LOSS},
            {"loss": "l/g"},
            {"log_odds": "log odds at 9 g/l; prior: half or most", "loss": loss},
        ),
        candidate(
            "threshold",
            threshold,
            {"drop": HalfNormal(3.0), "threshold": PLACE},
            {"drop": "1", "threshold": "g/l"},
            {
                "log_odds": fresh,
                "drop": "log odds lost above the threshold; prior: some or nearly all germination",
                "threshold": "salinity of the drop; prior: anywhere in the range tried",
            },
        ),
        candidate(
            "two slopes",
            two_slopes,
            {"loss": HalfNormal(0.1), "extra": LOSS, "break": PLACE},
            {"loss": "l/g", "extra": "l/g", "break": "g/l"},
            {
                "log_odds": fresh,
                "loss": "log odds lost with a gram up to the break; prior: little",
                "extra": "log odds lost with a gram beyond it; prior: as for the smooth curve",
                "break": "salinity at which tolerance gives way; prior: anywhere in the range",
            },
        ),
    ]


def data(path=None):
    """Return salinity, seeds sown and germinated, one row a dish."""
    return ev.read_data(path or Path(__file__).with_name("germination.csv"))
