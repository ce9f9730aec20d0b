"""Sequential Monte Carlo from the mixture to the posterior (rung 5).

Particles start in a mixture of the modes' components and a part on the prior's scale, and are
carried along the geometric path to the posterior: the temperature rises so that the effective
share stays at one half, particles are resampled and moved by Hamiltonian Monte Carlo. The
program is compiled only when this rung is reached.
"""

from __future__ import annotations

import functools
from collections.abc import Callable
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from evidence.rungs.proposal import Mixture
from evidence.rungs.record import Target
from evidence.rungs.weights import log_mean_exp

__all__ = ["Tempered", "run_sequential"]

LOCAL_SHARE = 0.7
KEPT_SHARE = 0.5
MOVES, LEAPS = 3, 4
WANTED_ACCEPTANCE = 0.75
MOST_TEMPERATURES = 60
SETTLED = 1.0 - 1e-6


@dataclass(frozen=True, kw_only=True)
class Tempered:
    """What sequential Monte Carlo found.

    Attributes
    ----------
    estimate : () log evidence [nats]
    standard_error : () larger of the replicates' scatter and the theory's [nats]
    reached : whether every replicate arrived at the posterior itself
    temperatures : mean number of temperatures
    acceptance : mean acceptance of the last moves
    draws : [replicates * particles, d] equally weighted
    evaluations : gradients taken
    """

    estimate: float
    standard_error: float
    reached: bool
    temperatures: float
    acceptance: float
    draws: np.ndarray
    evaluations: int


class _Parts(NamedTuple):
    """The start as arrays: [k, d] centres, [k, d, d] inverses, [k] log norms, [k] log shares."""

    centres: np.ndarray
    inverses: np.ndarray
    log_norms: np.ndarray
    log_shares: np.ndarray
    degrees: np.ndarray


class _State(NamedTuple):
    x: object
    temperature: object
    log_z: object
    step: object
    key: object
    count: object
    variance: object
    acceptance: object


def run_sequential(
    target: Target,
    mixture: Mixture,
    seed: int,
    *,
    replicates: int = 4,
    particles: int = 2000,
) -> Tempered:
    """Estimate the log evidence along a path from the mixture to the posterior.

    Parameters
    ----------
    target : Target
        ``log_density`` is traced by JAX and differentiated.
    mixture : Mixture
        Its local parts get 70 % of the particles, its broad parts the rest.
    seed : int
        Seed of the start and of the moves.
    replicates, particles : int
        Independent runs, and particles in each.

    Returns
    -------
    Tempered
        The estimate is the log of the mean over replicates.

    References
    ----------
    Del Moral, Doucet & Jasra (2006), J. R. Stat. Soc. B 68: sequential Monte Carlo.
    Neal (2011), Handbook of Markov Chain Monte Carlo: Hamiltonian moves.
    """
    import jax

    start = _start_shares(mixture)
    parts = _as_arrays(start)
    with jax.enable_x64(True):
        program = _program(target.log_density)
        runs = []
        for replicate in range(replicates):
            rng = np.random.default_rng([seed, 5, replicate])
            x = _draw_start(start, particles, rng)
            key = jax.random.key(int(rng.integers(2**31)))
            runs.append(jax.device_get(program(key, x, parts)))
    return _collect(runs, particles)


@functools.lru_cache(maxsize=4)
def _program(log_density: Callable) -> Callable:
    import jax

    return jax.jit(functools.partial(_run, log_density))


def _start_shares(mixture: Mixture) -> Mixture:
    """Give the local parts 70 % and forget their split scales, which have no gradient."""
    from evidence.rungs.proposal import component

    parts = [component(c.centre, c.axes, degrees=c.degrees) for c in mixture.components]
    shares = mixture.shares.copy()
    for mask, wanted in ((~mixture.broad, LOCAL_SHARE), (mixture.broad, 1.0 - LOCAL_SHARE)):
        if mask.any():
            shares[mask] *= wanted / shares[mask].sum()
    return Mixture.of(parts, shares, mixture.broad)


def _as_arrays(mixture: Mixture) -> _Parts:
    parts = mixture.components
    return _Parts(
        np.stack([p.centre for p in parts]),
        np.stack([p.inverse for p in parts]),
        np.array([p.log_norm for p in parts]),
        np.log(mixture.shares),
        np.array([p.degrees for p in parts]),
    )


def _draw_start(mixture: Mixture, n: int, rng: np.random.Generator) -> np.ndarray:
    counts = rng.multinomial(n, mixture.shares)
    d = len(mixture.components[0].centre)
    drawn = [
        part.draw(np.clip(rng.random((count, d + 1)), 1e-12, 1 - 1e-12))
        for part, count in zip(mixture.components, counts, strict=True)
    ]
    return np.concatenate(drawn)


def _collect(runs: list[_State], particles: int) -> Tempered:
    estimates = np.array([float(r.log_z) for r in runs])
    estimate = log_mean_exp(estimates)
    n = len(runs)
    scatter = float(np.std(np.exp(estimates - estimate), ddof=1) / np.sqrt(n)) if n > 1 else 0.0
    theory = float(np.mean([np.sqrt(r.variance) for r in runs]) / np.sqrt(n))
    steps = np.array([int(r.count) for r in runs])
    return Tempered(
        estimate=estimate,
        standard_error=max(scatter, theory),
        reached=all(float(r.temperature) > SETTLED for r in runs),
        temperatures=float(steps.mean()),
        acceptance=float(np.mean([r.acceptance for r in runs])),
        draws=np.concatenate([np.asarray(r.x) for r in runs]),
        evaluations=int(steps.sum() * particles * (MOVES * LEAPS + 2)),
    )


def _run(log_density: Callable, key: object, x: object, parts: _Parts) -> _State:
    """Compiled: carry particles x [n, d] from the mixture to the posterior."""
    import jax.numpy as jnp
    from jax import lax

    log_f, log_q = _both_ends(log_density, parts)
    d = x.shape[1]
    zero = jnp.zeros(())
    start = _State(x, zero, zero, jnp.asarray(0.5 / d**0.25), key, jnp.asarray(0), zero, zero)

    def unfinished(state: _State) -> object:
        return (state.temperature < 1.0 - 1e-9) & (state.count < MOST_TEMPERATURES)

    return lax.while_loop(unfinished, functools.partial(_advance, log_f, log_q), start)


def _both_ends(log_density: Callable, parts: _Parts) -> tuple[Callable, Callable]:
    """Log density of the target, trouble counted as zero density, and of the mixture."""
    import jax.numpy as jnp
    from jax.nn import logsumexp

    def log_f(z: object) -> object:
        value = log_density(z)
        return jnp.where(jnp.isfinite(value), value, -jnp.inf)

    def log_q(z: object) -> object:
        d = z.shape[0]
        u = jnp.einsum("kij,kj->ki", parts.inverses, z[None, :] - parts.centres)
        tail = jnp.log1p(jnp.sum(u**2, axis=1) / parts.degrees)
        return logsumexp(parts.log_shares + parts.log_norms - 0.5 * (parts.degrees + d) * tail)

    return log_f, log_q


def _advance(log_f: Callable, log_q: Callable, state: _State) -> _State:
    """Compiled: one temperature: weigh, resample, move."""
    import jax
    import jax.numpy as jnp
    from jax.nn import logsumexp

    n = state.x.shape[0]
    values = jax.vmap(log_f)(state.x)
    alive = jnp.isfinite(values)
    ratio = jnp.where(alive, values - jax.vmap(log_q)(state.x), -jnp.inf)
    rise = _next_rise(ratio, alive, 1.0 - state.temperature)
    weights = jnp.where(alive, rise * ratio, -jnp.inf)
    total = logsumexp(weights)
    share = jnp.exp(weights - total)
    key, draw_key, move_key = jax.random.split(state.key, 3)
    grid = (jnp.arange(n, dtype=share.dtype) + jax.random.uniform(draw_key)) / n
    kept = jnp.clip(jnp.searchsorted(jnp.cumsum(share), grid), 0, n - 1)
    temperature = state.temperature + rise
    x, step, acceptance = _move(log_f, log_q, state.x[kept], temperature, state.step, move_key)
    return _State(
        x,
        temperature,
        state.log_z + total - jnp.log(float(n)),
        step,
        key,
        state.count + 1,
        state.variance + (n * jnp.sum(share**2) - 1.0) / n,
        acceptance,
    )


def _next_rise(ratio: object, alive: object, left: object) -> object:
    """Compiled: the largest rise in temperature that keeps half of the living particles."""
    import jax.numpy as jnp
    from jax import lax
    from jax.nn import logsumexp

    wanted = KEPT_SHARE * jnp.sum(alive)

    def effective(rise: object) -> object:
        scaled = jnp.where(alive, rise * ratio, -jnp.inf)
        return jnp.exp(2.0 * logsumexp(scaled) - logsumexp(2.0 * scaled))

    def halve(_: object, bracket: tuple) -> tuple:
        low, high = bracket
        middle = 0.5 * (low + high)
        enough = effective(middle) > wanted
        return jnp.where(enough, middle, low), jnp.where(enough, high, middle)

    low, _ = lax.fori_loop(0, 40, halve, (jnp.zeros(()), left))
    return jnp.where(effective(left) > wanted, left, jnp.minimum(jnp.maximum(low, 1e-9), left))


def _move(
    log_f: Callable, log_q: Callable, x: object, temperature: object, step: object, key: object
) -> tuple:
    """Compiled: Hamiltonian moves with the particles' own covariance as the metric."""
    import jax
    import jax.numpy as jnp

    def tempered(z: object) -> object:
        return temperature * log_f(z) + (1.0 - temperature) * log_q(z)

    def safe(z: object) -> tuple:
        value, slope = jax.value_and_grad(tempered)(z)
        value = jnp.where(jnp.isnan(value), -jnp.inf, value)
        return value, jnp.where(jnp.isfinite(slope), slope, 0.0)

    both = jax.vmap(safe)
    root = _metric_root(x)
    value, slope = both(x)

    def one(carry: tuple, key: object) -> tuple:
        carry, acceptance = _leap(both, root, carry, key)
        return carry, acceptance

    start = (x, value, slope, step)
    (x, _, _, step), accepted = jax.lax.scan(one, start, jax.random.split(key, MOVES))
    return x, step, accepted[-1]


def _metric_root(x: object) -> object:
    """Compiled: a Cholesky root of the particles' covariance, drawn a little to its diagonal."""
    import jax.numpy as jnp

    d = x.shape[1]
    away = x - jnp.mean(x, axis=0, keepdims=True)
    covariance = away.T @ away / x.shape[0]
    scale = jnp.sqrt(jnp.maximum(jnp.diag(covariance), 1e-20))
    correlation = covariance / (scale[:, None] * scale[None, :])
    return jnp.linalg.cholesky(0.98 * correlation + 0.02 * jnp.eye(d)) * scale[:, None]


def _leap(both: Callable, root: object, carry: tuple, key: object) -> tuple:
    """Compiled: leapfrog all particles, accept or refuse each, adapt the step."""
    import jax
    import jax.numpy as jnp

    x, value, slope, step = carry
    push_key, accept_key, jitter_key = jax.random.split(key, 3)
    push = jax.random.normal(push_key, x.shape)
    length = step * jax.random.uniform(jitter_key, (x.shape[0], 1), minval=0.6, maxval=1.2)

    def leapfrog(_: object, state: tuple) -> tuple:
        y, p, _, g = state
        p = p + 0.5 * length * (g @ root)
        y = y + (length * p) @ root.T
        v, g = both(y)
        return y, p + 0.5 * length * (g @ root), v, g

    y, p, new_value, new_slope = jax.lax.fori_loop(0, LEAPS, leapfrog, (x, push, value, slope))
    gain = new_value - value - 0.5 * jnp.sum(p**2 - push**2, axis=1)
    gain = jnp.where(jnp.isnan(gain), -jnp.inf, gain)
    accept = jnp.log(jax.random.uniform(accept_key, value.shape)) < gain
    rate = jnp.mean(accept.astype(value.dtype))
    step = jnp.clip(step * jnp.exp(0.8 * (rate - WANTED_ACCEPTANCE)), 1e-4, 1.5)
    x = jnp.where(accept[:, None], y, x)
    slope = jnp.where(accept[:, None], new_slope, slope)
    return (x, jnp.where(accept, new_value, value), slope, step), rate
