"""What a rehearsal counts: who led, how often probabilities were right, what size settles it."""

from __future__ import annotations

import dataclasses
import functools
import math
from collections.abc import Sequence
from typing import Any, NamedTuple

import numpy as np

from evidence.batches.findings import TRUST_CODE
from evidence.comparison import JOINT_ERRORS, SETTLED_LEAD

__all__ = [
    "LEADER",
    "SETTLING",
    "Bin",
    "SizeRun",
    "binomial_band",
    "calibrate",
    "size_for",
    "wilson",
]

LEADER = "the leader"  # whose probability is meant where no candidate is named
SETTLING = (0.8, 0.95)  # shares of cases for which a sample size is told

EDGES = (0.0, 0.01, 0.05, 0.1, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9, 0.95, 0.99, 1.0)
BAND = 0.95
NORMAL_95 = 1.959963984540054


@dataclasses.dataclass(frozen=True, kw_only=True, eq=False)
class SizeRun:
    """All data sets of one size: K generators, R repeats of each, K candidates weighed.

    Attributes
    ----------
    size : int
        Number of observations.
    usable : (K, R)
        Whether the simulated data are finite.
    log_evidence, standard_error, probability : (K, R, K)
        [nats]; [nats]; [0 to 1]; nan where failed.
    trust : (K, R, K)
        Codes.
    """

    size: int
    usable: np.ndarray
    log_evidence: np.ndarray
    standard_error: np.ndarray
    probability: np.ndarray
    trust: np.ndarray

    @functools.cached_property
    def settled(self) -> np.ndarray:
        """Whether the comparison is settled (K, R), for whomever.

        The leader is ahead of every other candidate by at least 1 nat and by more than three joint
        errors. Numbers that are doubtful count with their stated errors: a rehearsal asks what the
        design can do, and the share of doubtful data sets is told beside it.
        """
        values = np.where(np.isnan(self.log_evidence), -np.inf, self.log_evidence)
        lead = values.argmax(axis=2)[:, :, None]
        top, error = (np.take_along_axis(x, lead, 2) for x in (values, self.standard_error))
        with np.errstate(invalid="ignore"):
            joint = JOINT_ERRORS * np.hypot(self.standard_error, error)
            # an error that is not known is none of zero: every comparison with nan is false
            behind = (top - values > joint) & (top - values >= SETTLED_LEAD)
        np.put_along_axis(behind, lead, True, 2)
        return behind.all(axis=2) & np.isfinite(self.log_evidence).all(axis=2)

    @property
    def led(self) -> np.ndarray:
        """Candidate (K, R) with the highest probability; -1 where none has one."""
        lead = np.argmax(np.nan_to_num(self.probability, nan=-1.0), axis=2)
        return np.where(np.isfinite(self.probability).any(axis=2), lead, -1)

    @property
    def right(self) -> np.ndarray:
        """Whether the generator led (K, R)."""
        return self.led == np.arange(len(self.usable))[:, None]

    @property
    def doubted(self) -> np.ndarray:
        """Whether some number of a data set is doubtful or failed (K, R)."""
        weak = [TRUST_CODE["doubtful"], TRUST_CODE["failed"]]
        return np.isin(self.trust, weak).any(axis=2)

    def confusion(self) -> np.ndarray:
        """Usable data sets (K, K + 1) by generator and leader; the last column: nobody led."""
        count = len(self.usable)
        rows = []
        for led, usable in zip(self.led, self.usable, strict=True):
            places = np.where(led < 0, count, led)[usable]
            rows.append(np.bincount(places, minlength=count + 1))
        return np.array(rows)

    def factors(self, generator: int, rival: int | None = None) -> np.ndarray:
        """Log Bayes factors (R,) of a generator against a rival, or the strongest one [nats]."""
        values = self.log_evidence[generator]
        if rival is not None:
            return values[:, generator] - values[:, rival]
        others = np.delete(values, generator, axis=1)
        strongest = np.where(np.isnan(others), -np.inf, others).max(axis=1)
        strongest = np.where(np.isinf(strongest), np.nan, strongest)
        return values[:, generator] - strongest

    def settled_for(self, *, lead: float = 0.0) -> np.ndarray:
        """Whether each data set (K, R) is settled for its generator, ahead by so many nats."""
        ahead = np.stack([self.factors(k) for k in range(len(self.usable))])
        with np.errstate(invalid="ignore"):
            return self.settled & self.right & (ahead >= lead)


class Bin(NamedTuple):
    """Data sets whose probability fell between two edges.

    ``band`` is where the number right lies in 95 % of cases if probabilities mean what they say,
    ``chance`` the two-sided probability of a number as far off as the one seen.
    """

    low: float
    high: float
    count: int
    mean: float
    right: int
    band: tuple[int, int]
    chance: float

    @property
    def inside(self) -> bool:
        """Whether the number right lies inside the band."""
        return self.band[0] <= self.right <= self.band[1]


def calibrate(probability: np.ndarray, right: np.ndarray) -> list[Bin]:
    """Among data sets (n,) given a probability, how many were right; empty bins left out."""
    known = np.isfinite(probability)
    probability, right = probability[known], right[known]
    place = np.clip(np.digitize(probability, EDGES) - 1, 0, len(EDGES) - 2)
    bins = []
    for index in np.unique(place):
        here = place == index
        count, hits = int(here.sum()), int(right[here].sum())
        mean = float(probability[here].mean())
        low, high, chance = binomial_band(count, mean, hits)
        bins.append(Bin(EDGES[index], EDGES[index + 1], count, mean, hits, (low, high), chance))
    return bins


def binomial_band(count: int, mean: float, hits: int) -> tuple[int, int, float]:
    """Central 95 % of a binomial number, and the two-sided probability of one that was seen.

    With unequal probabilities in the bin the number varies less than a binomial of their mean
    (Hoeffding 1956, Annals of Mathematical Statistics 27:713), so the band is no narrower than
    it should be.
    """
    k = np.arange(count + 1)
    log_fact = np.array([math.lgamma(x + 1.0) for x in k])
    p = min(max(mean, 1e-300), 1.0 - 1e-16)
    log_mass = log_fact[-1] - log_fact - log_fact[::-1] + k * np.log(p) + (count - k) * np.log1p(-p)
    mass = np.exp(log_mass)
    below = np.minimum(np.cumsum(mass), 1.0)
    tail = 0.5 * (1.0 - BAND)
    low = int(np.searchsorted(below, tail, side="right"))
    high = int(np.searchsorted(below, 1.0 - tail))
    upper = float(mass[hits:].sum())
    return low, high, float(min(1.0, 2.0 * min(below[hits], upper)))


def wilson(hits: int, count: int) -> tuple[float, float]:
    """95 % interval of a share (Wilson 1927, J. Am. Stat. Assoc. 22:209)."""
    if not count:
        return math.nan, math.nan
    z2, share = NORMAL_95**2, hits / count
    middle = (share + z2 / (2 * count)) / (1 + z2 / count)
    half = NORMAL_95 * math.sqrt(share * (1 - share) / count + z2 / (4 * count**2))
    half /= 1 + z2 / count
    low, high = max(middle - half, 0.0), min(middle + half, 1.0)
    return (low if hits else 0.0), (high if hits < count else 1.0)  # without rounding


def size_for(target: float, sizes: Sequence[int], shares: Sequence[float]) -> dict[str, Any]:
    """Number of observations from which on a share reaches a target.

    Between two sizes the share is taken as linear in the log of the size.

    Returns
    -------
    dict
        ``size`` (nan where no size reaches it), ``bound``: "" for an interpolated size, "at most"
        where the smallest size reaches it already, "more than" where the largest does not.
    """
    reached = np.asarray(shares) >= target
    if not reached[-1]:
        return {"size": math.nan, "bound": "more than", "beyond": int(sizes[-1])}
    first = len(reached) - int(np.argmin(reached[::-1])) if not reached.all() else 0
    if first == 0:
        return {"size": float(sizes[0]), "bound": "at most", "beyond": int(sizes[0])}
    a, b = shares[first - 1], shares[first]
    step = (target - a) / (b - a)
    log_size = math.log(sizes[first - 1]) + step * math.log(sizes[first] / sizes[first - 1])
    return {"size": float(math.ceil(math.exp(log_size) - 1e-9)), "bound": "", "beyond": 0}
