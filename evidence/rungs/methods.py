"""The rungs in order: each makes one estimate and tests whether the climb may stop on it."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from evidence.rungs.adaptive import mixture_from_draws, sample_adapted
from evidence.rungs.expansion import Expanded, expand_rotated
from evidence.rungs.importance import Sample, sample_mixture
from evidence.rungs.proposal import Mixture
from evidence.rungs.record import Mode, Rung, Target
from evidence.rungs.sequential import run_sequential
from evidence.rungs.slices import find_driver, slice_mixture
from evidence.rungs.verdict import Attempt

__all__ = ["METHODS", "Method", "Standing"]

FLOOR_EXPANSION, FLOOR_DRAWS, FLOOR_PATH = 0.03 / 3, 0.02 / 3, 0.05 / 3
EXACT = 1e-8
LARGE_DIM = 20
FIRST_DRAWS, SECOND_DRAWS = 1024, 8192
ROUND_DRAWS, FINAL_DRAWS = 3000, 8192
MORE = 4.6
REPLICATED = 8
SLICED_SHARE = 0.8
COMPONENTS = {3: 8, 4: 16}  # learned on each of the adaptive rungs
PARTICLES, REPLICATES = 2000, 4


@dataclass(frozen=True, kw_only=True)
class Standing:
    """What every rung starts from.

    Attributes
    ----------
    target : the metered log density
    modes : the leading mode first
    mixture : the proposal built from modes and probes
    expanded : the sum over modes with its second-order term
    flagged : whether a status, a wall, a kink or a capped axis speaks against the expansion
    seed : of every draw
    """

    target: Target
    modes: tuple[Mode, ...]
    mixture: Mixture
    expanded: Expanded
    flagged: bool
    seed: int

    def rng(self, *stream: int) -> np.random.Generator:
        """Independent generator for a rung and its repetitions."""
        return np.random.default_rng([self.seed, *stream])


def check_expansion(standing: Standing) -> Attempt:
    """Rung 1: mode sum with its second-order term, checked by 1024 mixture draws."""
    target, expanded = standing.target, standing.expanded
    sample = sample_mixture(target, standing.mixture, FIRST_DRAWS, standing.rng(1))
    residual = _gaussian_residual(standing, sample)
    if residual <= EXACT:
        return _exact(standing, sample, residual)
    gap = sample.estimate - expanded.estimate
    close = abs(gap) <= max(0.03, min(2.0 * sample.standard_error, 0.05))
    believed = expanded.small and not expanded.cancels and not standing.flagged
    steady = sample.pareto_k < 0.5 and sample.standard_error < 0.04
    if believed and steady and close:
        error = max(FLOOR_EXPANSION, 0.5 * abs(gap), 0.1 * abs(expanded.term))
        return _told(
            "second-order term", expanded.estimate, error, True, sample,
            f"mode sum with second-order term {expanded.term:+.3f}; {FIRST_DRAWS} draws agree "
            f"within {abs(gap):.3f}", accepted=True, kind="expansion", gap=gap,
        )  # fmt: skip
    agreed = bool(close) if np.isfinite(gap) else None
    return _told(
        "first draws", sample.estimate, max(FLOOR_DRAWS, sample.standard_error), agreed, sample,
        f"{FIRST_DRAWS} mixture draws, Pareto k {sample.pareto_k:.2f}, against mode sum with "
        f"second-order term {expanded.estimate:.3f}", accepted=False, gap=gap,
    )  # fmt: skip


def _gaussian_residual(standing: Standing, sample: Sample) -> float:
    """Largest distance [nats] of log density and its parabola over all draws; inf if no peak."""
    mode = standing.modes[0]
    if standing.flagged or len(standing.modes) > 1 or not np.isfinite(mode.laplace):
        return np.inf
    away = sample.draws - mode.z
    curved = away @ mode.hessian
    fall = 0.5 * np.einsum("nd,nd->n", curved, away)
    with np.errstate(invalid="ignore"):
        residual = np.abs(sample.log_density - mode.log_density + fall)
    rounding = 1e-13 * (np.abs(curved) * np.abs(away)).sum(axis=1)
    return float(np.max(np.maximum(residual - rounding, 0.0), initial=0.0))


def _exact(standing: Standing, sample: Sample, residual: float) -> Attempt:
    return _told(
        "second-order term", standing.expanded.plain, EXACT, True, sample,
        f"the posterior is Gaussian: over {len(sample.draws)} draws the log density is its "
        f"parabola within {max(residual, EXACT):.0e}", accepted=True, kind="expansion",
    )  # fmt: skip


def check_large(standing: Standing) -> Attempt | None:
    """In 20 and more dimensions: accept the second-order term where draws must degenerate."""
    expanded, mode = standing.expanded, standing.modes[0]
    hopeless = standing.flagged or expanded.cancels or not expanded.small_per_coordinate
    if standing.target.dim < LARGE_DIM or hopeless or len(standing.modes) > 1:
        return None
    rotated = expand_rotated(standing.target, mode, standing.rng(6))
    d = standing.target.dim
    error = max(FLOOR_EXPANSION, 0.3 * expanded.term**2 / d, abs(rotated.term - expanded.term))
    rung = Rung(
        name="second whitening",
        estimate=expanded.estimate,
        standard_error=error,
        agreed=rotated.agrees,
        note=f"second-order term {expanded.term:+.3f}, and {rotated.term:+.3f} in a rotated "
        f"whitening; draws degenerate in {d} dimensions",
        evaluations=0,
        diagnostics={"term": expanded.term, "rotated_term": rotated.term},
    )
    return Attempt(rung=rung, accepted=rotated.agrees, kind="expansion")


def draw_more(standing: Standing, earlier: Sequence[Attempt]) -> Attempt:
    """Rung 2: 8192 draws of the modes' mixture."""
    sample = sample_mixture(standing.target, standing.mixture, SECOND_DRAWS, standing.rng(2))
    error = max(FLOOR_DRAWS, sample.standard_error)
    first = earlier[0].sample
    agreed = _agree(sample, first, 0.05) if first is not None else None
    accepted = sample.pareto_k < 0.4 and sample.standard_error < 0.015 and agreed is not False
    return _told(
        "mixture draws", sample.estimate, error, agreed, sample,
        f"{SECOND_DRAWS} draws of the modes' mixture, Pareto k {sample.pareto_k:.2f}, effective "
        f"share {sample.share:.2f}", accepted=accepted,
    )  # fmt: skip


def adapt(standing: Standing, _earlier: Sequence[Attempt]) -> Attempt:
    """Rung 3: an adaptive mixture, run with and without the part on the prior's scale."""
    return _adapt_twice(standing, 3, 1.0, largest_k=0.6, largest_error=0.03)


def adapt_longer(standing: Standing, _earlier: Sequence[Attempt]) -> Attempt:
    """Rung 4: the same with 4.6 times the draws."""
    return _adapt_twice(standing, 4, MORE, largest_k=0.7, largest_error=np.inf)


def _adapt_twice(
    standing: Standing, stream: int, factor: float, *, largest_k: float, largest_error: float
) -> Attempt:
    def run(start: Mixture, repetition: int) -> Sample:
        return sample_adapted(
            standing.target,
            start,
            standing.rng(stream, repetition),
            draws_per_round=int(ROUND_DRAWS * factor),
            final_draws=int(FINAL_DRAWS * factor) // REPLICATED * REPLICATED,
            size=COMPONENTS[stream],
        )

    wide = run(standing.mixture, 0)
    second = run(standing.mixture.narrow(), 1)
    agreed, partner = _agree(wide, second, 0.05), "without the broad part"
    if not agreed and wide.estimate > second.estimate and wide.pareto_k < largest_k:
        second, partner = run(standing.mixture, 2), "again with the broad part"
        agreed = _agree(wide, second, 0.05)
    better, other = sorted((wide, second), key=lambda s: s.standard_error)
    worst_k = max(wide.pareto_k, second.pareto_k)
    accepted = agreed and worst_k < largest_k and better.standard_error < largest_error
    error = max(FLOOR_DRAWS, better.standard_error)
    return _told(
        "adaptive mixture" if stream == 3 else "longer adaptive mixture",
        better.estimate, error, agreed, better,
        f"adaptive mixture, {other.estimate - better.estimate:+.3f} {partner}; Pareto k "
        f"{wide.pareto_k:.2f} and {second.pareto_k:.2f}", accepted=accepted, other_k=other.pareto_k,
    )  # fmt: skip


def draw_slices(standing: Standing, earlier: Sequence[Attempt]) -> Attempt | None:
    """Rung 3, where all widths hang on one coordinate: conditional expansions along it."""
    target = standing.target
    learned = [a.sample for a in earlier if a.sample is not None][-1]
    driver = find_driver(learned)
    if driver is None:
        return None
    samples = []
    for repetition, shift in enumerate((0.0, 0.5)):
        row = slice_mixture(target, driver, learned, shift=shift).mixture
        start = standing.mixture if repetition == 0 else standing.mixture.narrow()
        mixture = start.joined(row, SLICED_SHARE)
        rng = standing.rng(7, repetition)
        samples.append(sample_mixture(target, mixture, 2 * FINAL_DRAWS, rng))
    better, other = sorted(samples, key=lambda s: s.standard_error)
    agreed = _agree(better, other, 0.05)
    steady = max(s.pareto_k for s in samples) < 0.6 and better.standard_error < 0.03
    return _told(
        "conditional expansions", better.estimate, max(FLOOR_DRAWS, better.standard_error), agreed,
        better, f"conditional expansions along {target.names[driver]}, "
        f"{other.estimate - better.estimate:+.3f} on another grid; Pareto k "
        f"{samples[0].pareto_k:.2f} and {samples[1].pareto_k:.2f}", accepted=agreed and steady,
    )  # fmt: skip


def follow_path(standing: Standing, _earlier: Sequence[Attempt]) -> Attempt:
    """Rung 5: sequential Monte Carlo, and draws of a mixture fitted to its particles."""
    path = run_sequential(
        standing.target, standing.mixture, standing.seed, replicates=REPLICATES,
        particles=PARTICLES,
    )  # fmt: skip
    error = max(FLOOR_PATH, path.standard_error)
    note = f"sequential Monte Carlo over {path.temperatures:.0f} temperatures, indicative"
    if not path.reached:
        note = "sequential Monte Carlo did not reach the posterior: its number is left out"
        return _path_attempt(np.nan, np.nan, None, note, path.evaluations, None, False)
    sample = _draw_from_particles(standing, path.draws)
    distance = abs(sample.estimate - path.estimate)
    agreed = bool(distance <= max(0.05, 3.0 * np.hypot(error, sample.standard_error)))
    steady = sample.pareto_k < 0.6 and sample.standard_error < 0.05
    if agreed and steady:
        error = max(FLOOR_PATH, sample.standard_error, distance / 3.0)
        note += f"; draws fitted to its particles agree within {distance:.3f}"
        return _path_attempt(sample.estimate, error, True, note, path.evaluations, sample, True)
    return _path_attempt(path.estimate, error, agreed, note, path.evaluations, None, False)


def _draw_from_particles(standing: Standing, particles: np.ndarray) -> Sample:
    rng = standing.rng(5)
    size = 12 if standing.target.dim <= 15 else 3
    fitted = mixture_from_draws(particles, size, rng).joined(standing.mixture, 0.2)
    return sample_mixture(standing.target, fitted, 2 * FINAL_DRAWS, rng)


def _path_attempt(
    estimate: float,
    error: float,
    agreed: bool | None,
    note: str,
    evaluations: int,
    sample: Sample | None,
    accepted: bool,
) -> Attempt:
    rung = Rung(
        name="sequential Monte Carlo",
        estimate=estimate,
        standard_error=error,
        agreed=agreed,
        note=note,
        evaluations=evaluations,
    )
    return Attempt(rung=rung, accepted=accepted, kind="path", sample=sample)


def _agree(one: Sample, other: Sample, allowed: float) -> bool:
    joint = np.hypot(one.standard_error, other.standard_error)
    with np.errstate(invalid="ignore"):
        return bool(abs(one.estimate - other.estimate) <= max(allowed, 3.0 * joint))


def _told(
    name: str,
    estimate: float,
    error: float,
    agreed: bool | None,
    sample: Sample,
    note: str,
    *,
    accepted: bool,
    kind: str = "draws",
    **numbers: float,
) -> Attempt:
    k = sample.pareto_k
    diagnostics = {"pareto_k": k, "effective_share": sample.share, **numbers}
    rung = Rung(
        name=name, estimate=estimate, standard_error=error, agreed=agreed, note=note,
        evaluations=len(sample.draws), diagnostics=diagnostics,
    )  # fmt: skip
    return Attempt(rung=rung, accepted=bool(accepted), kind=kind, pareto_k=k, sample=sample)


@dataclass(frozen=True, kw_only=True)
class Method:
    """A rung after the first: what it runs, and how many log densities that costs."""

    title: str
    run: Callable[[Standing, Sequence[Attempt]], Attempt | None]
    evaluations: int


_ONE_ADAPTED = 4 * ROUND_DRAWS + FINAL_DRAWS
_GRADIENT = 4  # cost of a gradient in evaluations
METHODS = (
    Method(title="mixture draws", run=draw_more, evaluations=SECOND_DRAWS),
    Method(title="adaptive mixture", run=adapt, evaluations=2 * _ONE_ADAPTED),
    Method(title="conditional expansions", run=draw_slices, evaluations=6 * FINAL_DRAWS),
    Method(
        title="longer adaptive mixture", run=adapt_longer, evaluations=int(2 * MORE * _ONE_ADAPTED)
    ),
    Method(
        title="sequential Monte Carlo",
        run=follow_path,
        evaluations=_GRADIENT * REPLICATES * PARTICLES * 14 * 12,
    ),
)
