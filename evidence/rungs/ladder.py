"""The audit: climb from the cheap check to the dear one until an estimate is accepted."""

from __future__ import annotations

import dataclasses
import operator
import warnings
from collections.abc import Callable, Sequence

import numpy as np

from evidence.complaints import DeclarationError, EvidenceWarning, near_name, sentence
from evidence.outcome import Outcome
from evidence.rungs import findings, methods
from evidence.rungs.expansion import expand_modes
from evidence.rungs.importance import Sample, mode_mixture, with_peaks
from evidence.rungs.probes import FarEnds, Probes, probe, probe_far_ends
from evidence.rungs.proposal import Component
from evidence.rungs.record import Audit, Mode, Rung, Target
from evidence.rungs.unseen import find_unseen
from evidence.rungs.verdict import Attempt, Verdict, best_available, trust_word

__all__ = ["DEPTHS", "climb"]

DEPTHS = {"quick": 0, "standard": 3, "thorough": 5}  # methods after the first rung
SECONDS_ASKED = 60.0
UNBOUNDED = (Outcome.RUNAWAY, Outcome.INFINITE)
RISE_ALLOWED = 1e-6
WEAK_K = 0.7


class Metered:
    """A target that counts its evaluations and remembers whether +inf was seen."""

    def __init__(self, target: Target) -> None:
        self.inner = target
        self.evaluations = 0
        self.infinite = False

    def __getattr__(self, name: str) -> object:
        return getattr(self.inner, name)

    def batch(self, z: np.ndarray) -> np.ndarray:
        """Log density [n] at points [n, d]; nan counts as -inf."""
        values = np.asarray(self.inner.batch(z), dtype=float)
        self.evaluations += len(z)
        self.infinite = self.infinite or bool(np.isposinf(values).any())
        return np.where(np.isnan(values), -np.inf, values)


def climb(
    target: Target,
    modes: Sequence[Mode],
    *,
    depth: str = "standard",
    seed: int = 0,
    budget: float = SECONDS_ASKED,
    progress: Callable[[str], None] | None = None,
) -> Audit:
    """Check a Laplace approximation by independent methods, the cheapest first.

    Parameters
    ----------
    target : Target
        The log density in unconstrained coordinates, in nats.
    modes : sequence of Mode
        The leading one first; a search that found no peak belongs in it where it ended higher.
    depth : str
        "quick" (second-order term checked by draws), "standard" (up to the adaptive mixture) or
        "thorough" (up to sequential Monte Carlo).
    seed : int
        Of every draw; the same seed gives the same digits.
    budget : float
        Seconds a rung may be expected to take; beyond it the rung is announced, and begun only
        at depth "thorough".
    progress : callable, optional
        Told in a few words what goes on; without it an announcement is an EvidenceWarning.

    Returns
    -------
    Audit
        The accepted estimate or the best available one, with its error, its word of trust, and
        the story. An interruption keeps what there is.

    Raises
    ------
    DeclarationError
        If ``depth`` is not one of the words, or ``seed`` is not an integer.

    References
    ----------
    Each rung names its own: :mod:`evidence.rungs.importance`, ``adaptive``, ``sequential``.
    """
    steps = _steps(depth)
    seed = _whole(seed)
    metered = Metered(target)
    usable = _usable(modes, target)
    if not usable:
        return _without_peak(modes)
    ascent = _Ascent(metered, usable, seed, budget, depth == "thorough", progress)
    with np.errstate(over="ignore", under="ignore"):
        ascent.go(steps)
        return ascent.audit()


def _steps(depth: str) -> int:
    if depth not in DEPTHS:
        known = ", ".join(repr(d) for d in DEPTHS)
        hint = near_name(depth, DEPTHS)
        raise DeclarationError(sentence(f"depth is one of {known}", repr(depth)) + hint)
    return DEPTHS[depth]


def _whole(seed: int) -> int:
    try:
        value = operator.index(seed)
    except TypeError:
        value = -1
    if value < 0 or isinstance(seed, bool):
        raise DeclarationError(
            sentence("seed is an integer of at least 0", repr(seed), "Type, for example, seed=0")
        )
    return value


def _usable(modes: Sequence[Mode], target: Target) -> tuple[Mode, ...]:
    """Keep modes with a finite height; axes that are not finite become the prior's."""
    kept = []
    for mode in modes:
        if not (np.isfinite(mode.log_density) and np.all(np.isfinite(mode.z))):
            continue
        axes = np.asarray(mode.axes, dtype=float)
        if not np.all(np.isfinite(axes)) or np.linalg.matrix_rank(axes, tol=0.0) < target.dim:
            mode = dataclasses.replace(mode, axes=np.diag(target.spread))
        kept.append(mode)
    return tuple(kept)


def _without_peak(modes: Sequence[Mode]) -> Audit:
    """Report that there is nothing to check."""
    statuses = [Outcome(m.status) for m in modes if m.status != Outcome.OK]
    reason = statuses[0] if statuses else Outcome.NOT_FINITE
    if any(np.isposinf(m.log_density) for m in modes):
        reason = Outcome.INFINITE
    return _failed(reason.sentence, reason.remedy)


def _failed(sentence_: str, remedy: str, rungs: tuple[Rung, ...] = ()) -> Audit:
    return Audit(
        rungs=rungs,
        log_evidence=float("nan"),
        standard_error=float("nan"),
        trust="failed",
        warnings=((sentence_, remedy),),
        draws=None,
        log_weights=None,
        stopped_because=sentence_,
    )


class _Ascent:
    """One climb: its standing, the attempts made, and what must be told."""

    def __init__(
        self,
        target: Metered,
        modes: tuple[Mode, ...],
        seed: int,
        budget: float,
        thorough: bool,
        progress: Callable[[str], None] | None,
    ) -> None:
        self.target, self.modes, self.seed = target, modes, seed
        self.budget, self.thorough, self.progress = budget, thorough, progress
        self.attempts: list[Attempt] = []
        self.probes: tuple[Probes, ...] = ()
        self.ends: FarEnds | None = None
        self.counted = 0
        self.unseen: list[Component] = []
        self.expanded = expand_modes(modes, target.dim)
        self.stopped = "the climb ended"
        self.interrupted = False

    def go(self, steps: int) -> None:
        """Climb until a rung accepts, the depth is used up, time is short, or the user stops."""
        try:
            self._climb(steps)
        except KeyboardInterrupt:
            self.interrupted = True
            self.stopped = "interrupted: what there was is kept"

    def _climb(self, steps: int) -> None:
        first = methods.FIRST_DRAWS + 18 * self.target.dim * len(self.modes)
        if not self._affordable("first draws", first):
            return
        standing = self._stand()
        if self._try(lambda: methods.check_expansion(standing)):
            return
        if self._endless():
            self.stopped = "the density has no finite integral that draws could find"
            return
        if self._try(lambda: self._check_large(standing)):
            return
        for method in methods.METHODS[:steps]:
            if not self._affordable(method.title, method.evaluations):
                return
            if self._try(lambda run=method.run: run(standing, self.attempts)):
                return
        self.stopped = "no rung of this depth was accepted"

    def _stand(self) -> methods.Standing:
        """Probe every mode and build the proposal."""
        self.probes = tuple(probe(self.target, m) for m in self.modes)
        self.ends = probe_far_ends(self.target.inner, self.modes[0])
        mixture = mode_mixture(self.modes, self.probes, self.target)
        rng = np.random.default_rng([self.seed, 0])
        self.unseen = find_unseen(self.target, self.modes, mixture, rng)
        return methods.Standing(
            target=self.target,
            modes=self.modes,
            mixture=with_peaks(mixture, self.unseen, self.target),
            expanded=self.expanded,
            flagged=self._flagged() or bool(self.unseen),
            seed=self.seed,
        )

    def _flagged(self) -> bool:
        trouble = any(m.status != Outcome.OK or np.any(m.capped) for m in self.modes)
        for seen in self.probes:
            trouble = trouble or bool(seen.wall.any() or seen.kink.any())
        rise = self.probes[0].rise > RISE_ALLOWED
        return trouble or rise or bool(self.ends.rising.any() or self.ends.flat.any())

    def _check_large(self, standing: methods.Standing) -> Attempt | None:
        d = self.target.dim
        if d < methods.LARGE_DIM or not self._affordable("second whitening", 2 * d * 2 * d):
            return None
        attempt = methods.check_large(standing)
        if attempt is None or not attempt.accepted:
            return attempt
        drawn = self.attempts[0].rung  # draws that degenerate err low: a higher value is a veto
        above = drawn.estimate - attempt.rung.estimate
        vetoed = above > max(0.1, 3.0 * drawn.standard_error)
        return dataclasses.replace(attempt, accepted=not vetoed)

    def _try(self, run: Callable[[], Attempt | None]) -> bool:
        attempt = run()
        if attempt is None:
            return False
        spent = self.target.evaluations - self.counted
        self.counted += spent
        if attempt.kind == "path":  # its compiled program counts by itself
            spent += attempt.rung.evaluations
        rung = dataclasses.replace(attempt.rung, evaluations=spent)
        self.attempts.append(dataclasses.replace(attempt, rung=rung))
        self._tell(f"{rung.name}: {rung.estimate:.3f}")
        if attempt.accepted:
            self.stopped = f"{rung.name} was accepted: its tests passed"
        return attempt.accepted or self.target.infinite

    def _affordable(self, title: str, evaluations: int) -> bool:
        """Announce what is dear; begin it only if it was asked for."""
        self._tell(title)
        seconds = evaluations * self.target.seconds_per_call
        if seconds <= self.budget:
            return True
        cost = f"{title} will take about {_duration(seconds)} ({evaluations} log densities)"
        if self.thorough:
            self._announce(f"{cost}; interrupt to keep what there is")
            return True
        self.stopped = f"{cost}; it is begun only with depth='thorough'"
        self._announce(self.stopped)
        return False

    def _tell(self, text: str) -> None:
        if self.progress is not None:
            self.progress(text)

    def _announce(self, text: str) -> None:
        if self.progress is not None:
            self.progress(text)
        else:
            warnings.warn(text, EvidenceWarning, stacklevel=5)

    def audit(self) -> Audit:
        """Decide estimate, error, trust and warnings."""
        rungs = tuple(a.rung for a in self.attempts)
        if self.target.infinite or any(m.status == Outcome.INFINITE for m in self.modes):
            return _failed(Outcome.INFINITE.sentence, Outcome.INFINITE.remedy, rungs)
        if self._endless():
            return _failed(*findings.describe_ends(self.target, self.ends)[0], rungs)
        verdict = self._verdict()
        told = self._warnings(verdict)
        accepted = bool(self.attempts) and self.attempts[-1].accepted
        sample = verdict.sample
        return Audit(
            rungs=rungs,
            log_evidence=verdict.estimate,
            standard_error=verdict.standard_error,
            trust=trust_word(verdict, accepted, self._doubts(verdict), self.expanded.plain),
            warnings=tuple(told),
            draws=None if sample is None else sample.draws,
            log_weights=None if sample is None else sample.log_weights,
            stopped_because=self.stopped,
        )

    def _verdict(self) -> Verdict:
        if self.attempts:
            return best_available(self.attempts)
        error = max(0.1, abs(self.expanded.term))  # nothing was drawn: the term is all there is
        return Verdict(
            estimate=self.expanded.estimate, standard_error=error, agreed=False, sample=None
        )

    def _doubts(self, verdict: Verdict) -> bool:
        """Say whether the methods are known to be blind here, whatever they agree on."""
        blind = not self.target.spread_known or any(m.status in UNBOUNDED for m in self.modes)
        return blind or any(self._doubtful_findings(s) for s in self._samples(verdict))

    def _doubtful_findings(self, sample: Sample) -> list[tuple[str, str]]:
        wide = findings.describe_unreached_width(self.target, sample)
        needles = (findings.describe_spike(self.target, m, sample) for m in self.modes)
        return wide + [told for needle in needles for told in needle]

    def _endless(self) -> bool:
        """Say whether the density was seen to rise without end, or not to fall off."""
        return self.ends is not None and bool(self.ends.rising.any() or self.ends.flat.any())

    def _warnings(self, verdict: Verdict) -> list[tuple[str, str]]:
        told = findings.describe_probes(self.target, self.modes, self.probes)
        if not self.target.spread_known:
            told.append(findings.missing_spread())
        doubtful = [d for s in self._samples(verdict) for d in self._doubtful_findings(s)]
        if doubtful:
            return told + doubtful
        told += findings.describe_prior_held(self.target, self.modes[0])
        for sample in self._samples(verdict):
            told += findings.unseen_mass(self.target, self.modes, sample)
            if sample.pareto_k > WEAK_K:
                told.append(findings.weak_weights(self.target, sample))
        return told

    def _samples(self, verdict: Verdict) -> list[Sample]:
        if verdict.sample is not None:
            return [verdict.sample]
        drawn = [a.sample for a in self.attempts if a.sample is not None]
        return drawn[-1:] if not (self.attempts and self.attempts[-1].accepted) else []


def _duration(seconds: float) -> str:
    """Write a time as a reader would say it."""
    if seconds < 120.0:
        return f"{seconds:.0f} seconds"
    if seconds < 7200.0:
        return f"{seconds / 60.0:.0f} minutes"
    return f"{seconds / 3600.0:.0f} hours"
