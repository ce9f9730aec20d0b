"""Random integrals with known answers, a fifth of them built to deceive local checks.

Run as a script to count how an audit does on many of them::

    python tests/truth/generate.py --count 200 --seed 1 --depth standard

A case is *silent* when its trust is "sound" or "corrected" and its error is above 0.1 nat.
"""

from __future__ import annotations

import argparse
import warnings
from collections.abc import Callable, Iterator
from dataclasses import dataclass

import jax
import jax.numpy as jnp
import numpy as np
from jax.scipy.special import logsumexp
from scipy import special, stats

LOG_2PI = float(np.log(2.0 * np.pi))
SILENT_ABOVE = 0.1
CLOSE = 0.05
DECEIVING_EVERY = 5


@dataclass(frozen=True)
class RandomIntegral:
    """A log density over R^d, what was known of its place before, and its log integral [nats]."""

    name: str
    log_density: Callable
    centre: np.ndarray
    spread: np.ndarray
    truth: float
    deceives: bool = False


@dataclass(frozen=True)
class Count:
    """How one case ended."""

    name: str
    error: float
    standard_error: float
    trust: str
    rung: str

    @property
    def covered(self) -> bool:
        return self.trust == "failed" or abs(self.error) <= 3.0 * self.standard_error + 1e-9

    @property
    def silent(self) -> bool:
        return self.trust in ("sound", "corrected") and abs(self.error) > SILENT_ABOVE

    @property
    def close(self) -> bool:
        return abs(self.error) < CLOSE


def draw_integrals(count: int, seed: int) -> Iterator[RandomIntegral]:
    """Draw cases, families in turn with random dimensions and numbers; every fifth deceives."""
    for index in range(count):
        rng = np.random.default_rng([seed, index])
        deceives = index % DECEIVING_EVERY == DECEIVING_EVERY - 1
        family = DECEIVING if deceives else PLAIN
        make = family[rng.integers(len(family))]
        name, log_density, centre, spread, truth = make(rng)
        d = len(centre)
        label = f"{index:03d} {name} in {d}"
        yield RandomIntegral(label, log_density, centre, spread, float(truth), deceives)


def audit_one(case: RandomIntegral, *, depth: str, seed: int = 0) -> Count:
    """Put a case through the public door."""
    import evidence as ev

    model = ev.Model.from_log_posterior(
        case.name,
        lambda p: case.log_density(p["z"]),
        start={"z": case.centre},
        spread={"z": case.spread},
    )
    with warnings.catch_warnings():  # they are counted by the word of trust
        warnings.simplefilter("ignore", ev.EvidenceWarning)
        found = ev.approximate(model, depth=depth, seed=seed)
    climbed = found.audit.rungs if found.audit is not None else ()
    rung = climbed[-1].name if climbed else "none"
    error = found.log_evidence - case.truth
    return Count(case.name, float(error), float(found.standard_error), found.trust, rung)


# ------------------------------------------------------------------------------ shared pieces


def rotation(d: int, rng: np.random.Generator) -> np.ndarray:
    return np.linalg.qr(rng.normal(size=(d, d)))[0]


def covariance(d: int, rng: np.random.Generator, scale: float = 1.0) -> np.ndarray:
    root = rotation(d, rng) * np.exp(rng.uniform(-0.7, 0.7, size=d))
    return scale**2 * root @ root.T


def log_gaussian(z, mean, precision, log_norm):
    away = z - mean
    return -0.5 * away @ precision @ away - log_norm


def log_norm_of(matrix: np.ndarray) -> float:
    return 0.5 * float(np.linalg.slogdet(matrix)[1]) + 0.5 * len(matrix) * LOG_2PI


def gaussian_mixture(means, covariances, weights):
    """Log density and log integral of a weighted sum of Gaussians."""
    precisions = np.stack([np.linalg.inv(c) for c in covariances])
    norms = np.array([log_norm_of(c) for c in covariances])
    means, weights = np.stack(means), np.asarray(weights)

    def log_density(z):
        away = z[None, :] - means
        square = jnp.einsum("ki,kij,kj->k", away, precisions, away)
        return logsumexp(np.log(weights) - norms - 0.5 * square)

    return log_density, np.log(weights.sum())


# ------------------------------------------------------------------------------ plain families


def regression(rng):
    """Gaussian linear regression with known noise: the evidence is a multivariate normal."""
    d, n = int(rng.integers(1, 9)), int(rng.integers(10, 40))
    design = rng.normal(size=(n, d)) * 10.0 ** rng.uniform(-1, 1, size=d)
    prior_sd = 2.0 / np.abs(design).mean(axis=0)
    y = design @ rng.normal(size=d) * 0.5 + rng.normal(size=n)

    def log_density(z):
        fit = -0.5 * jnp.sum((y - design @ z) ** 2) - 0.5 * n * LOG_2PI
        prior = -0.5 * jnp.sum((z / prior_sd) ** 2) - np.sum(np.log(prior_sd)) - 0.5 * d * LOG_2PI
        return fit + prior

    whole = np.eye(n) + (design * prior_sd) @ (design * prior_sd).T
    truth = stats.multivariate_normal(np.zeros(n), whole).logpdf(y)
    return "regression", log_density, np.zeros(d), prior_sd, truth


def log_gamma(rng):
    """A rotated product of logs of gamma variables: skew of every strength."""
    d = int(rng.choice([1, 1, 2, 3, 5, 8, 12, 25, 40]))
    low = 0.3 if d <= 3 else 1.5
    shape = np.exp(rng.uniform(np.log(low), np.log(20.0), size=d))
    turn = rotation(d, rng)
    place = special.digamma(shape)

    def log_density(z):
        w = turn @ z
        return jnp.sum(shape * w - jnp.exp(w))

    spread = np.full(d, float(rng.uniform(1.0, 3.0)) * np.sqrt(special.polygamma(1, shape).max()))
    return "log gamma", log_density, turn.T @ place, spread, np.sum(special.gammaln(shape))


def near_peaks(rng):
    """Two or three Gaussians that overlap or lie a few sd apart, within the spread."""
    d, k = int(rng.integers(1, 6)), int(rng.integers(2, 4))
    spread = np.full(d, 3.0)
    means = [rng.normal(size=d) * 2.0 for _ in range(k)]
    covariances = [covariance(d, rng, float(rng.uniform(0.5, 1.2))) for _ in range(k)]
    log_density, truth = gaussian_mixture(means, covariances, rng.uniform(0.2, 1.0, size=k))
    return "near peaks", log_density, np.zeros(d), spread, truth


def far_peaks(rng):
    """Two Gaussians many sd apart, both within the spread."""
    d = int(rng.integers(1, 5))
    direction = rng.normal(size=d)
    direction *= rng.uniform(4.0, 7.0) / np.linalg.norm(direction)
    covariances = [covariance(d, rng, 0.7) for _ in range(2)]
    log_density, truth = gaussian_mixture(
        [direction, -direction], covariances, rng.uniform(0.1, 1, 2)
    )
    return "far peaks", log_density, np.zeros(d), np.full(d, 5.0), truth


def banana(rng):
    """A Gaussian bent by a map that keeps volume, in two dimensions and more."""
    pairs = int(rng.integers(1, 3))
    bend, sd = float(rng.uniform(0.05, 0.4)), float(rng.uniform(0.8, 2.0))
    turn = rotation(2 * pairs, rng)

    def log_density(z):
        w = (turn @ z).reshape(pairs, 2)
        second = w[:, 1] + bend * (w[:, 0] ** 2 - sd**2)
        return jnp.sum(-0.5 * (w[:, 0] / sd) ** 2 - 0.5 * second**2 - np.log(sd) - LOG_2PI)

    reach = max(sd, 1.0 + 2.0 * bend * sd**2)
    return "banana", log_density, np.zeros(2 * pairs), np.full(2 * pairs, reach), 0.0


def voigt(rng):
    """Cauchy priors against Gaussian data, rotated: heavy tails, sometimes two peaks."""
    d, sd = int(rng.integers(1, 4)), float(np.exp(rng.uniform(np.log(0.5), np.log(6.0))))
    y, turn = rng.normal(size=d) * 2.0, rotation(d, rng)

    def log_density(z):
        w = turn @ z
        prior = -jnp.log(np.pi) - jnp.log1p(w**2)
        return jnp.sum(prior - 0.5 * ((y - w) / sd) ** 2 - np.log(sd) - 0.5 * LOG_2PI)

    truth = np.sum(np.log(special.voigt_profile(y, sd, 1.0)))
    return "voigt", log_density, np.zeros(d), np.full(d, 4.0), truth


def beta_binomial(rng):
    """Counts of successes in logit coordinates, rotated."""
    d = int(rng.integers(1, 7))
    n = rng.integers(3, 30, size=d).astype(float)
    y = rng.binomial(n.astype(int), rng.uniform(0.05, 0.95, size=d)).astype(float)
    turn = rotation(d, rng)

    def log_density(z):
        w = turn @ z
        up, down = (y + 1.0) * jax.nn.log_sigmoid(w), (n - y + 1.0) * jax.nn.log_sigmoid(-w)
        return jnp.sum(up + down)

    truth = np.sum(special.betaln(y + 1.0, n - y + 1.0))
    return "beta binomial", log_density, np.zeros(d), np.full(d, 1.8), truth


def student(rng):
    """A rotated multivariate Student-t."""
    d, df = int(rng.integers(1, 6)), float(rng.uniform(2.0, 12.0))
    precision = np.linalg.inv(covariance(d, rng))

    def log_density(z):
        return -0.5 * (df + d) * jnp.log1p(z @ precision @ z / df)

    truth = special.gammaln(0.5 * df) - special.gammaln(0.5 * (df + d)) + 0.5 * d * np.log(
        df * np.pi
    ) - 0.5 * np.linalg.slogdet(precision)[1]  # fmt: skip
    return "student", log_density, np.zeros(d), np.full(d, 2.0), truth


# ------------------------------------------------------------------------------ built to deceive


def wall(rng):
    """A Gaussian cut by an oblique plane through its peak or a little beside it."""
    d = int(rng.integers(1, 5))
    shape = covariance(d, rng)
    precision, log_norm = np.linalg.inv(shape), log_norm_of(shape)
    normal = rng.normal(size=d)
    normal /= np.sqrt(normal @ shape @ normal)
    distance = float(rng.uniform(0.0, 1.8))

    def log_density(z):
        inside = log_gaussian(z, np.zeros(d), precision, log_norm)
        return jnp.where(normal @ z > -distance, inside, -jnp.inf)

    spread = np.sqrt(np.diag(shape)) * 1.5
    inwards = shape @ normal
    return "wall", log_density, inwards, spread, stats.norm.logcdf(distance)


def kink(rng):
    """Double-exponential priors against Gaussian data: a kink near or at the peak."""
    d, rate = int(rng.integers(1, 4)), float(rng.uniform(1.0, 3.0))
    y = rng.normal(size=d) * 1.5

    def log_density(z):
        prior = np.log(rate / 2.0) - rate * jnp.abs(z)
        return jnp.sum(prior - 0.5 * (y - z) ** 2 - 0.5 * LOG_2PI)

    right = stats.norm.logcdf(y - rate) - rate * y + rate**2 / 2.0
    left = stats.norm.logcdf(-y - rate) + rate * y + rate**2 / 2.0
    truth = np.sum(np.log(rate / 2.0) + np.logaddexp(left, right))
    return "kink", log_density, np.zeros(d), np.ones(d), truth


def pedestal(rng):
    """A narrow peak on a wide base that holds most of the mass and adds no curvature."""
    d = int(rng.integers(1, 4))
    ratio, share = float(rng.uniform(4.0, 10.0)), float(rng.uniform(0.2, 0.9))
    log_density, truth = gaussian_mixture(
        [np.zeros(d), rng.normal(size=d)],
        [covariance(d, rng, 0.3), covariance(d, rng, 0.3 * ratio)],
        [1.0 - share, share],
    )
    return "pedestal", log_density, np.zeros(d), np.full(d, 0.3 * ratio), truth


def small_far_peak(rng):
    """A second, narrower peak two spreads away."""
    d = int(rng.integers(1, 4))
    direction = rng.normal(size=d)
    direction *= 2.0 / np.linalg.norm(direction)
    share = float(rng.uniform(0.1, 0.8))
    sizes = [covariance(d, rng, 0.25), covariance(d, rng, float(rng.uniform(0.08, 0.2)))]
    log_density, truth = gaussian_mixture([np.zeros(d), direction], sizes, [1 - share, share])
    return "small far peak", log_density, np.zeros(d), np.ones(d), truth


def mild_funnel(rng):
    """Effects whose scale is itself unknown, without data."""
    d, sd = int(rng.integers(2, 5)), float(rng.uniform(0.5, 1.3))

    def log_density(z):
        scale = jnp.exp(z[0])
        effects = -0.5 * (z[1:] / scale) ** 2 - jnp.log(scale) - 0.5 * LOG_2PI
        return -0.5 * (z[0] / sd) ** 2 - np.log(sd) - 0.5 * LOG_2PI + jnp.sum(effects)

    spread = np.concatenate([[sd], np.full(d - 1, np.exp(sd**2))])
    return "mild funnel", log_density, np.zeros(d), spread, 0.0


def ripple(rng):
    """A Gaussian with a ripple finer than its width: many peaks, or a curvature that misleads."""
    depth, waves = float(rng.uniform(0.3, 0.9)), float(rng.uniform(1.0, 8.0))
    d = int(rng.integers(1, 4))

    def log_density(z):
        return -0.5 * jnp.sum(z**2) - 0.5 * d * LOG_2PI + jnp.log1p(depth * jnp.cos(waves * z[0]))

    truth = np.log1p(depth * np.exp(-0.5 * waves**2))  # characteristic function of a normal
    return "ripple", log_density, np.zeros(d), np.full(d, 1.5), truth


PLAIN = (
    regression, log_gamma, near_peaks, far_peaks, banana, voigt, beta_binomial, student,
)  # fmt: skip
DECEIVING = (wall, kink, pedestal, small_far_peak, mild_funnel, ripple)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--count", type=int, default=200)
    parser.add_argument("--first", type=int, default=0)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--depth", default="standard")
    options = parser.parse_args()
    counts = []
    for index, case in enumerate(draw_integrals(options.count, options.seed)):
        if index < options.first:
            continue
        done = audit_one(case, depth=options.depth)
        counts.append(done)
        marks = [] if done.close else ["off"]
        marks += (["not covered"] if not done.covered else []) + (["SILENT"] if done.silent else [])
        print(
            f"{done.name:26s} {done.error:+8.4f} ({done.standard_error:.4f}) {done.trust:9s} "
            f"{done.rung:24s} {', '.join(marks)}",
            flush=True,
        )
    n = len(counts)
    print(f"{sum(c.close for c in counts)} of {n} within {CLOSE} nat")
    print(f"{sum(c.covered for c in counts)} of {n} covered by three standard errors")
    print(f"{sum(c.silent for c in counts)} of {n} silent")


if __name__ == "__main__":
    main()
