"""From a candidate and data to its result: modes, Hessian, log evidence, posterior, audit."""

from __future__ import annotations

import dataclasses
import time
import warnings as python_warnings
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np

from evidence.cautions import after_audit, find_cautions
from evidence.complaints import Caution, DeclarationError, EvidenceWarning, near_name, sentence
from evidence.curvature import Curvature, measure_curvature, whitened_axes
from evidence.estimate import Approximation
from evidence.laplace import NOT_EXPANDED, Mode, describe_mode, expand, sum_modes
from evidence.mode import MATTERS, Findings, Peak, find_likelihood_peak, find_modes
from evidence.model import Model
from evidence.outcome import Outcome
from evidence.posterior import Posterior, WeightedDraws
from evidence.problem import PriorPart, Problem

__all__ = ["DEPTHS", "Approximation", "approximate", "audit", "check_options"]

DEPTHS = ("none", "quick", "standard", "thorough")
EXPANDED_PLAINLY = 150  # dimension up to which the second-order term is computed without an audit
EXPANDED_BY_AUDIT = 400


def approximate(
    model: Any,
    data: Any = None,
    *,
    depth: str = "standard",
    seed: int = 0,
    progress: Callable[[str], None] | None = None,
) -> Approximation:
    """Log evidence, its error and the posterior of one candidate.

    Parameters
    ----------
    model : Model
    data : None, mapping of arrays, DataFrame or xarray Dataset
        Named arrays, as from :func:`evidence.read_data`.
    depth : {"none", "quick", "standard", "thorough"}
        How far the number is checked by independent methods.
    seed : int
        Of the starts and of the audit's draws: the same seed gives the same digits.
    progress : callable, optional
        Told in a few words what goes on.

    Returns
    -------
    Approximation
        Also where the mathematics failed: look at ``trust``, ``status`` and ``warnings``.

    Raises
    ------
    DeclarationError
        The candidate or an option is declared wrongly.
    DataError
        The data hold nan or text.

    Warns
    -----
    EvidenceWarning
        The Hessian is badly conditioned or indefinite, the prior alone holds a direction, or the
        Gaussian picture fails; the text names the parameters.
    """
    result = fit(model, data, depth=depth, seed=seed, progress=progress)
    announce(result)
    return result


def announce(result: Approximation, *, stacklevel: int = 3) -> None:
    """Issue the cautions of a result as one EvidenceWarning."""
    if result.warnings:
        text = " ".join(f"{caution}." for caution in result.warnings)
        python_warnings.warn(f"{result.name}: {text}", EvidenceWarning, stacklevel=stacklevel)


def fit(
    model: Any,
    data: Any,
    *,
    depth: str,
    seed: int,
    progress: Callable[[str], None] | None = None,
) -> Approximation:
    """As :func:`approximate`, without issuing warnings."""
    check_options(depth, seed)
    if not isinstance(model, Model):
        raise DeclarationError(
            sentence(
                "approximate needs a candidate made with evidence.Model",
                type(model).__name__,
                "Type: ev.approximate(ev.Model(...), data)",
            )
        )
    began = time.perf_counter()
    problem = Problem(model, data)
    if problem.dim == 0:
        return _without_parameters(problem, depth, seed, began)
    findings = find_modes(problem, seed=seed, progress=progress)
    plain = _describe(problem, findings, depth, seed, began)
    return plain if depth == "none" else audit(plain, depth=depth, progress=progress)


def audit(
    approximation: Approximation,
    *,
    depth: str,
    progress: Callable[[str], None] | None = None,
) -> Approximation:
    """Climb further with what is there: the modes are kept, the checks are made.

    Raises
    ------
    DeclarationError
        An unknown depth, or a result read back from a file.
    """
    check_options(depth, approximation.seed)
    problem = approximation.problem
    if problem is None:
        raise DeclarationError("a saved result cannot be audited; weigh the study again.")
    if depth == "none" or problem.dim == 0:
        return approximation
    if not approximation.modes:  # nowhere to climb from: the status says why
        return dataclasses.replace(approximation, depth=depth, trust="failed")
    from evidence import rungs  # what depth "none" does not need is not loaded

    began = time.perf_counter()
    climbed = rungs.climb(
        problem, approximation.modes, depth=depth, seed=approximation.seed, progress=progress
    )
    weighted = None
    if climbed.draws is not None:
        weighted = WeightedDraws(z=climbed.draws, log_weights=climbed.log_weights)
    posterior = approximation.posterior
    if isinstance(posterior, Posterior):
        posterior = dataclasses.replace(posterior, weighted=weighted)
    before = () if approximation.audit is None else approximation.audit.warnings
    return dataclasses.replace(
        approximation,
        log_evidence=climbed.log_evidence,
        standard_error=climbed.standard_error,
        trust=climbed.trust,
        audit=climbed,
        warnings=after_audit(approximation.warnings, before, climbed.warnings),
        posterior=posterior,
        depth=depth,
        seconds=approximation.seconds + time.perf_counter() - began,
    )


def check_options(depth: Any, seed: Any) -> None:
    """Refuse an unknown depth or a seed that is no whole number.

    Raises
    ------
    DeclarationError
    """
    if depth not in DEPTHS:
        raise DeclarationError(
            sentence(f"depth must be one of {', '.join(DEPTHS)}", repr(depth)).rstrip()
            + near_name(str(depth), DEPTHS)
        )
    if isinstance(seed, bool) or not isinstance(seed, (int, np.integer)) or seed < 0:
        raise DeclarationError(
            sentence("seed must be a whole number from 0 on", repr(seed), "Type: seed=0")
        )


def _describe(
    problem: Problem, findings: Findings, depth: str, seed: int, began: float
) -> Approximation:
    """Everything about the modes that were found, without an audit."""
    peaks = list(findings.peaks)
    failure = _worst(findings.failures)
    higher = failure is not None and _is_higher(failure, peaks)
    if higher:
        peaks.append(failure)
    parts = [problem.prior_part(peak.z) for peak in peaks]
    modes = [
        _one_mode(problem, peak, part, findings, depth)
        for peak, part in zip(peaks, parts, strict=True)
    ]
    leading = modes[0] if modes else None
    smooth = tuple(m for m in modes if m.status is Outcome.OK)
    laplace = leading.laplace if leading is not None else np.nan
    total = np.nan if higher else sum_modes([m.laplace for m in modes])
    bare = problem.model.bare
    blamed = failure if higher or leading is None else None
    status = leading.status if blamed is None else blamed.outcome
    curvature = _curvature(problem, leading, parts[0]) if leading else None
    fit = leading.log_density - parts[0].log_prior - parts[0].log_jacobian if leading else np.nan
    return Approximation(
        name=problem.model.name,
        log_evidence=total,
        standard_error=np.nan,
        laplace=laplace,
        laplace_all_modes=total,
        second_order_term=leading.second_order_term if leading else np.nan,
        cubic_part=leading.cubic_part if leading else np.nan,
        quartic_part=leading.quartic_part if leading else np.nan,
        mode=leading.mode if leading else {},
        log_posterior_at_mode=leading.log_density if leading else np.nan,
        log_likelihood_at_mode=np.nan if bare else float(fit),
        bic=_bic(problem, leading),
        curvature=curvature,
        posterior=Posterior(problem=problem, modes=smooth, seed=seed) if smooth else None,
        modes=tuple(modes),
        audit=None,
        trust="unchecked" if np.isfinite(total) else "failed",
        warnings=find_cautions(problem, findings, blamed, leading, curvature),
        status=status,
        dimension=problem.dim,
        terms=problem.terms,
        depth="none",
        seed=int(seed),
        starts=findings.starts,
        seconds=time.perf_counter() - began,
        problem=problem,
    )


def _worst(failures: Sequence[Peak]) -> Peak | None:
    """The search that found no peak to be told of: where +inf was met, else the highest."""
    infinite = [end for end in failures if end.outcome is Outcome.INFINITE]
    return next(iter([*infinite, *failures]), None)


def _is_higher(failure: Peak, peaks: list[Peak]) -> bool:
    """Whether a search that found no peak ended above all those that did."""
    if failure.outcome is Outcome.INFINITE:
        return True
    top = max((p.log_density for p in peaks), default=-np.inf)
    return bool(np.isfinite(failure.log_density)) and failure.log_density > top + 1e-6


def _one_mode(
    problem: Problem, peak: Peak, part: PriorPart, findings: Findings, depth: str
) -> Mode:
    axes = whitened_axes(peak.hessian, problem.spread)
    smooth = peak.outcome is Outcome.OK and axes.positive
    limit = EXPANDED_PLAINLY if depth == "none" else EXPANDED_BY_AUDIT
    expansion = NOT_EXPANDED
    if smooth and problem.dim <= limit and peak.laplace > findings.peaks[0].laplace - MATTERS:
        expansion = expand(problem.hessian, peak.z, peak.hessian, problem.spread)
    return describe_mode(peak, axes, expansion, part.values)


def _curvature(problem: Problem, leading: Mode, part: PriorPart) -> Curvature:
    likelihood = None if problem.model.bare else leading.hessian - part.hessian
    axes = whitened_axes(leading.hessian, problem.spread)
    return measure_curvature(leading.hessian, likelihood, axes, problem.names)


def _bic(problem: Problem, leading: Mode | None) -> float:
    """k log n - 2 log L at the maximum of the likelihood; nan where there is none."""
    if problem.model.bare or problem.terms is None or leading is None:
        return np.nan
    if leading.status is not Outcome.OK:
        return np.nan
    top = find_likelihood_peak(problem, leading.z)
    if top.outcome not in (Outcome.OK, Outcome.FLAT):
        return np.nan
    return float(problem.dim * np.log(problem.terms) - 2 * top.log_density)


def _without_parameters(problem: Problem, depth: str, seed: int, began: float) -> Approximation:
    """A candidate with everything fixed: its evidence is its likelihood, exactly."""
    value = float(problem.evaluate(np.zeros(0)).log_density)
    finite = np.isfinite(value)
    status = Outcome.OK if finite else Outcome.NOT_FINITE
    exact = value if finite else np.nan
    return Approximation(
        name=problem.model.name,
        log_evidence=exact,
        standard_error=0.0 if finite and depth != "none" else np.nan,
        laplace=exact,
        laplace_all_modes=exact,
        second_order_term=0.0,
        cubic_part=0.0,
        quartic_part=0.0,
        mode={},
        log_posterior_at_mode=exact,
        log_likelihood_at_mode=exact,
        bic=-2 * exact if problem.terms is not None else np.nan,
        curvature=None,
        posterior=None,
        modes=(),
        audit=None,
        trust=("unchecked" if depth == "none" else "sound") if finite else "failed",
        warnings=() if finite else (Caution(status.sentence, status.remedy),),
        status=status,
        dimension=0,
        terms=problem.terms,
        depth=depth,
        seed=int(seed),
        starts=0,
        seconds=time.perf_counter() - began,
        problem=problem,
    )
