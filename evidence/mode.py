"""The modes of a log posterior, from several starts.

Three thin drivers of :mod:`evidence.newton`: a NumPy loop around one compiled program (nothing
else to compile: the first answer), a compiled loop over several starts at once (from the second
fit of the same shapes on), and L-BFGS before the NumPy loop in large dimension.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Iterable
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np

from evidence import newton
from evidence.arithmetic import normal_quantile
from evidence.compiling import as_numpy
from evidence.outcome import Outcome
from evidence.problem import Density, Problem

__all__ = [
    "Findings",
    "Peak",
    "find_likelihood_peak",
    "find_modes",
    "search_compiled",
    "search_numpy",
]

FIRST_STARTS = 8
MOST_STARTS = 128
MOST_STARTS_LARGE = 16
LARGE = 100  # dimension above which L-BFGS goes before Newton
MATTERS = 12.0  # nats below the leader at which a mode is still counted
STARTS_PER_MODE = 4  # with several modes: with five of six found, no single hit need tell
SAME_MODE = 0.1  # root mean square distance, in sd of the higher mode
LBFGS_STEPS = 500
COMPILED_FROM = 32  # starts from which compiling the whole search pays
CARRIED_ON = 10  # times that a search which ran out of steps is taken up again


@dataclasses.dataclass(frozen=True, kw_only=True, eq=False)
class Peak:
    """Where searches ended.

    Attributes
    ----------
    z : (d,)
        Place [unconstrained].
    log_density : ()
        Log posterior density there, with the Jacobian [nats].
    gradient : (d,)
        Of the log density.
    hessian : (d, d)
        Of minus the log density.
    decrement : ()
        Newton decrement, sqrt(g' H^-1 g).
    outcome : Outcome
    hits : int
        Starts that ended here.
    """

    z: np.ndarray
    log_density: float
    gradient: np.ndarray
    hessian: np.ndarray
    decrement: float
    outcome: Outcome
    hits: int = 1

    @property
    def laplace(self) -> float:
        """Plain Laplace approximation of the log evidence of this peak [nats]; -inf if none."""
        if self.outcome is not Outcome.OK:
            return -np.inf
        sign, log_det = np.linalg.slogdet(self.hessian)
        d = len(self.z)
        return (
            self.log_density + 0.5 * d * np.log(2 * np.pi) - 0.5 * log_det if sign > 0 else -np.inf
        )


@dataclasses.dataclass(frozen=True, kw_only=True)
class Findings:
    """All peaks, by their Laplace value, and how the other searches ended.

    Attributes
    ----------
    peaks : tuple of Peak
        Smooth peaks, the leading one first.
    failures : tuple of Peak
        Ends of the searches that found none, the highest first.
    starts : int
        Number of starts used.
    """

    peaks: tuple[Peak, ...]
    failures: tuple[Peak, ...]
    starts: int

    @property
    def that_matter(self) -> tuple[Peak, ...]:
        """Peaks whose Laplace value is within 12 nats of the leading one's."""
        return tuple(p for p in self.peaks if p.laplace > self.peaks[0].laplace - MATTERS)

    @property
    def seen_once(self) -> int:
        """Number of peaks that matter and were reached by one start only."""
        return sum(p.hits == 1 for p in self.that_matter)

    @property
    def thin(self) -> bool:
        """Whether so few starts found these peaks that others may have been missed."""
        several = len(self.that_matter) > 1
        few = several and self.starts < STARTS_PER_MODE * len(self.that_matter)
        return bool(self.seen_once) or few


def find_modes(
    problem: Problem, *, seed: int = 0, progress: Callable[[str], None] | None = None
) -> Findings:
    """Search from several starts, doubling their number while they seem too few.

    Parameters
    ----------
    problem : Problem
    seed : int
        Of the quasi-random starts.
    progress : callable, optional
        Told in a few words what goes on.

    Notes
    -----
    Starts are the user's, the prior's centre, and a Kronecker sequence with square roots of primes
    (Richtmyer 1951), mapped to a Gaussian with the prior's centre and spread. A mode that a single
    start found, or several modes from few starts, are signs that others were missed.
    """
    large = problem.dim > LARGE
    seen_before = problem.count_fit()
    most = MOST_STARTS_LARGE if large else MOST_STARTS
    ends: list[Peak] = []
    number = FIRST_STARTS
    while True:
        new = starting_points(problem, number, seed)[len(ends) :]
        if progress is not None:
            progress(f"mode search from {number} starts")
        search = _pick_driver(large=large, compiled=seen_before or number >= COMPILED_FROM)
        ends = _carried_on(problem, search, ends + search(problem, new))
        findings = gather(ends)
        if number >= most or not findings.thin:
            return findings
        number *= 2


def starting_points(problem: Problem, number: int, seed: int) -> np.ndarray:
    """Starts (number, d): the user's, the prior's centre, then quasi-random prior draws."""
    known = [problem.centre]
    if problem.start is not None and not np.array_equal(problem.start, problem.centre):
        known.insert(0, problem.start)
    rng = np.random.default_rng([seed, 0x5EED])
    steps = np.sqrt(_primes(problem.dim)) % 1.0
    index = np.arange(1, number - len(known) + 1)[:, None]
    uniform = (rng.random(problem.dim) + index * steps) % 1.0
    drawn = problem.centre + problem.spread * normal_quantile(np.clip(uniform, 1e-6, 1 - 1e-6))
    return np.concatenate([np.array(known), drawn])[:number]


def gather(ends: Iterable[Peak]) -> Findings:
    """Merge searches that ended at the same mode, by distance in sd of the higher one."""
    ends = sorted(ends, key=lambda end: -_finite(end.log_density))
    peaks: list[Peak] = []
    failures: list[Peak] = []
    for end in ends:
        if end.outcome is not Outcome.OK:
            failures.append(end)
            continue
        for index, peak in enumerate(peaks):
            if _distance(peak, end) < SAME_MODE:
                peaks[index] = dataclasses.replace(peak, hits=peak.hits + 1)
                break
        else:
            peaks.append(end)
    peaks.sort(key=lambda peak: -peak.laplace)
    return Findings(peaks=tuple(peaks), failures=tuple(failures), starts=len(ends))


def search_numpy(problem: Problem, starts: np.ndarray) -> list[Peak]:
    """Newton's method in NumPy around the one compiled program, from each start (s, d)."""
    return [_search_one(problem, start) for start in starts]


def find_likelihood_peak(problem: Problem, start: np.ndarray) -> Peak:
    """Peak of the likelihood alone, by Newton's method from a start (d,)."""

    def objective(z: np.ndarray) -> tuple[Any, Any, Any]:
        here = problem.likelihood_part(z)
        return -here.log_density, -here.gradient, here.hessian

    return _descend_numpy(problem, objective, start)


def _search_one(problem: Problem, start: np.ndarray) -> Peak:
    def objective(z: np.ndarray) -> tuple[Any, Any, Any]:
        here = problem.evaluate(z)
        return -here.log_density, -here.gradient, here.hessian

    return _descend_numpy(problem, objective, start)


def _descend_numpy(
    problem: Problem, objective: Callable[[np.ndarray], tuple[Any, Any, Any]], start: np.ndarray
) -> Peak:
    state = newton.begin(np, start)
    with np.errstate(all="ignore"):
        while state.phase != newton.ENDED:
            state = newton.advance(
                np, state, *objective(state.trial), problem.centre, problem.spread
            )
    return _peak(state)


def search_compiled(problem: Problem, starts: np.ndarray) -> list[Peak]:
    """The same in one compiled program, eight starts at a time."""
    program = problem.program("search", _compiled_search)
    peaks: list[Peak] = []
    for first in range(0, len(starts), FIRST_STARTS):
        some = starts[first : first + FIRST_STARTS]
        padded = np.concatenate([some, np.repeat(some[-1:], FIRST_STARTS - len(some), axis=0)])
        found = as_numpy(program(padded, problem.centre, problem.spread))
        problem.evaluations += int(np.sum(found.steps[: len(some)]))
        for index in range(len(some)):
            peaks.append(_peak(jax.tree_util.tree_map(lambda x, i=index: x[i], found)))
    return peaks


def _compiled_search(density: Density) -> Callable[..., Any]:
    def evidence_search(starts: Any, centre: Any, spread: Any, hyper: Any, data: Any) -> Any:
        def step(state: newton.Search) -> newton.Search:
            here = density.evaluate(state.trial, hyper, data)
            return newton.advance(
                jnp, state, -here.log_density, -here.gradient, here.hessian, centre, spread
            )

        def one(start: Any) -> newton.Search:
            return jax.lax.while_loop(
                lambda state: state.phase != newton.ENDED, step, newton.begin(jnp, start)
            )

        return jax.vmap(one)(starts)

    return evidence_search


def search_large(problem: Problem, starts: np.ndarray) -> list[Peak]:
    """L-BFGS (Liu & Nocedal 1989) from each start, then Newton from each distinct end.

    A quasi-Newton inverse Hessian is not the curvature: the exact Hessian is taken at the end.
    """
    program = problem.program("descend", _descend)
    ends = [np.asarray(program(start, problem.spread)) for start in starts]
    peaks: list[Peak] = []
    for end in ends:
        near = [p for p in peaks if np.max(np.abs(p.z - end) / problem.spread) < 1e-3]
        if near and near[0].outcome is Outcome.OK:
            peaks.append(near[0])
        else:
            peaks.append(_search_one(problem, end))
    return peaks


def _descend(density: Density) -> Callable[..., Any]:
    import optax

    def evidence_descend(start: Any, spread: Any, hyper: Any, data: Any) -> Any:
        def objective(u: Any) -> Any:  # in units of the prior sd
            value = -density.log_density(u * spread, hyper, data)
            return jnp.where(jnp.isnan(value), jnp.inf, value)

        solver = optax.lbfgs(memory_size=20)
        value_and_slope = optax.value_and_grad_from_state(objective)

        def step(carry: Any) -> Any:
            u, state, count, _ = carry
            value, slope = value_and_slope(u, state=state)
            update, state = solver.update(
                slope, state, u, value=value, grad=slope, value_fn=objective
            )
            size = jnp.max(jnp.abs(update))
            return optax.apply_updates(u, update), state, count + 1, size

        def going(carry: Any) -> Any:
            return (carry[2] < LBFGS_STEPS) & (carry[3] > 1e-6)

        first = start / spread
        u = jax.lax.while_loop(going, step, (first, solver.init(first), 0, jnp.inf))[0]
        return jnp.where(jnp.all(jnp.isfinite(u)), u * spread, start)

    return evidence_descend


def _pick_driver(*, large: bool, compiled: bool) -> Callable[..., list[Peak]]:
    if large:
        return search_large
    return search_compiled if compiled else search_numpy


def _carried_on(
    problem: Problem, search: Callable[..., list[Peak]], ends: list[Peak]
) -> list[Peak]:
    """Go on where a search ran out of steps above every peak: long bent valleys need more."""
    for _ in range(CARRIED_ON):
        top = max(ends, key=lambda end: _finite(end.log_density))
        if top.outcome is not Outcome.STEP_LIMIT:
            break
        ends = [end for end in ends if end is not top] + search(problem, top.z[None])
    return ends


def _peak(state: newton.Search) -> Peak:
    return Peak(
        z=np.array(state.z),
        log_density=-float(state.objective),
        gradient=-np.array(state.gradient),
        hessian=np.array(state.hessian),
        decrement=float(np.sqrt(max(float(state.decrement), 0.0))),
        outcome=Outcome(int(state.outcome)),
    )


def _distance(peak: Peak, other: Peak) -> float:
    step = other.z - peak.z
    return float(np.sqrt(max(step @ peak.hessian @ step, 0.0) / max(len(step), 1)))


def _finite(value: float) -> float:
    return value if np.isfinite(value) else -np.inf


def _primes(number: int) -> np.ndarray:
    """The first primes."""
    most = max(16, int(number * (np.log(number + 2) + np.log(np.log(number + 3)) + 2)))
    sieve = np.ones(most + 1, dtype=bool)
    sieve[:2] = False
    for k in range(2, int(most**0.5) + 1):
        if sieve[k]:
            sieve[k * k :: k] = False
    return np.flatnonzero(sieve)[:number].astype(float)
