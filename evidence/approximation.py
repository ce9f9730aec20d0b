"""One candidate on one data set: modes, Hessian, log evidence with its error, posterior."""

from __future__ import annotations

import dataclasses
import time
import warnings as python_warnings
from collections.abc import Callable
from typing import Any

import numpy as np

from evidence import rungs
from evidence.complaints import Caution, DeclarationError, EvidenceWarning, near_name, sentence
from evidence.curvature import Curvature, measure_curvature, whitened_axes
from evidence.laplace import NOT_EXPANDED, Mode, describe_mode, expand, sum_modes
from evidence.mode import MATTERS, Findings, Peak, find_likelihood_peak, find_modes
from evidence.outcome import Outcome
from evidence.posterior import Posterior, RecordedPosterior, WeightedDraws
from evidence.problem import Evaluation, Problem

__all__ = ["DEPTHS", "Approximation", "approximate", "audit", "check_options"]

DEPTHS = ("none", "quick", "standard", "thorough")
EXPANDED_PLAINLY = 150  # dimension up to which the second-order term is computed without an audit
EXPANDED_BY_AUDIT = 400
NOTICEABLE = 0.25  # second-order term above which plain Laplace is said to be off [nats]


@dataclasses.dataclass(frozen=True, kw_only=True)
class Approximation:
    """Log evidence and posterior of one candidate, with how far they can be trusted.

    Attributes
    ----------
    name : str
        The candidate's.
    log_evidence : ()
        The accepted estimate [nats]; nan where the status is a failure.
    standard_error : ()
        Three of them must cover the truth [nats]; nan at depth "none".
    laplace : ()
        Plain Laplace approximation at the leading mode [nats].
    laplace_all_modes : ()
        The same summed over all modes [nats].
    second_order_term, cubic_part, quartic_part : (), (), ()
        At the leading mode [nats].
    mode : dict
        The peak in the unconstrained coordinates, shown in natural units by name.
    log_posterior_at_mode : ()
        With the log Jacobian [nats].
    log_likelihood_at_mode : ()
        [nats]; nan for a bare log posterior.
    bic : ()
        Schwarz (1978) at the maximum of the likelihood [2 nats]; nan where there is none.
    curvature : Curvature or None
    posterior : Posterior or None
        Gaussian posterior; None where there is no smooth peak.
    modes : tuple of Mode
        All of them, the leading one first.
    audit : Audit or None
        The story of the checks, in order.
    trust : str
        sound, corrected, rough, doubtful, failed or unchecked.
    warnings : tuple of Caution
        Sentences with remedies.
    status : Outcome
        How the mode search ended.
    dimension : int
        Number of unconstrained coordinates d.
    terms : int or None
        Number of log-likelihood terms; None for a scalar.
    depth, seed : str, int
        As asked for.
    starts, seconds : int, float
        Number of starts of the mode search; wall time [s].
    """

    name: str
    log_evidence: float
    standard_error: float
    laplace: float
    laplace_all_modes: float
    second_order_term: float
    cubic_part: float
    quartic_part: float
    mode: dict[str, Any]
    log_posterior_at_mode: float
    log_likelihood_at_mode: float
    bic: float
    curvature: Curvature | None
    posterior: Posterior | RecordedPosterior | None
    modes: tuple[Mode, ...]
    audit: Any
    trust: str
    warnings: tuple[Caution, ...]
    status: Outcome
    dimension: int
    terms: int | None
    depth: str
    seed: int
    starts: int
    seconds: float
    problem: Problem | None = dataclasses.field(default=None, repr=False, compare=False)

    @property
    def log_occam_factor(self) -> float:
        """Log evidence minus log-likelihood at the mode [nats]; depends on the coordinates."""
        return self.log_evidence - self.log_likelihood_at_mode

    @property
    def well_determined(self) -> float:
        """Number of well-determined parameters (MacKay 1992); nan where unknown."""
        return np.nan if self.curvature is None else self.curvature.well_determined

    @property
    def summary(self) -> str:
        """One sentence that leads with the number."""
        if not np.isfinite(self.log_evidence):
            return f"{self.name}: no log evidence ({self.trust}): {self.status.sentence}"
        return f"{self.name}: log evidence {_number(self)} nats ({self.trust})"

    def require(self) -> Approximation:
        """Return self where there is a number; raise where there is none.

        Raises
        ------
        ArithmeticError
            The log evidence is nan; the text says why and what to do.
        """
        if not np.isfinite(self.log_evidence):
            raise ArithmeticError(f"{self.summary}. {self.status.remedy}.")
        return self

    def table(self) -> Any:
        """The audit's rungs as a pandas table: rung, estimate, standard_error, agreed, note."""
        import pandas as pd

        columns = {
            "rung": "what was computed",
            "estimate": "log evidence by it [nats]",
            "standard_error": "its own error [nats]; nan where it has none",
            "agreed": "whether it agreed with an independent estimate",
            "note": "in words",
        }
        frame = pd.DataFrame(self.story(), columns=list(columns))
        frame.attrs["columns"] = columns
        return frame

    def story(self) -> list[dict[str, Any]]:
        """The estimates in the order in which they were made, one dict each."""
        order = 0.0 if np.isnan(self.second_order_term) else self.second_order_term
        rows = [
            _story("Laplace at the leading mode", self.laplace, ""),
            _story("sum over modes", self.laplace_all_modes, f"{len(self.modes)} found"),
            _story("with the second-order term", self.laplace_all_modes + order, f"{order:+.4f}"),
        ]
        for rung in () if self.audit is None else self.audit.rungs:
            rows.append(
                {
                    "rung": rung.name,
                    "estimate": rung.estimate,
                    "standard_error": rung.standard_error,
                    "agreed": rung.agreed,
                    "note": rung.note,
                }
            )
        return rows

    def __repr__(self) -> str:
        volume = self.laplace - self.log_posterior_at_mode
        lines = [self.summary]
        if np.isfinite(self.laplace):
            lines.append(
                f"  Laplace {self.laplace:.4f} = peak {self.log_posterior_at_mode:.4f} + volume "
                f"{volume:+.4f}; second-order term {self.second_order_term:+.4f}"
            )
        if len(self.modes) > 1:
            lines.append(f"  {len(self.modes)} modes, summed: {self.laplace_all_modes:.4f}")
        shown = [f"{k} {np.array2string(np.asarray(v), precision=4)}" for k, v in self.mode.items()]
        if shown:
            text = ", ".join(shown).replace("\n", " ")
            lines.append(f"  mode: {text if len(text) < 200 else text[:197] + '...'}")
        if self.curvature is not None:
            lines.append(f"  {self.curvature.summary}")
        lines += [f"  ! {caution}" for caution in self.warnings[:5]]
        return "\n".join(lines)


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
    known = {caution.sentence for caution in approximation.warnings}
    found = tuple(Caution(*x) for x in climbed.warnings if x[0] not in known)
    return dataclasses.replace(
        approximation,
        log_evidence=climbed.log_evidence,
        standard_error=climbed.standard_error,
        trust=climbed.trust,
        audit=climbed,
        warnings=_without_alarm(approximation.warnings) + found,
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
    failure = findings.failures[0] if findings.failures else None
    higher = failure is not None and _is_higher(failure, peaks)
    if higher:
        peaks.append(failure)
    modes, curvatures, here = [], [], None
    for index, peak in enumerate(peaks):
        mode, curvature, point = _one_mode(problem, peak, findings, depth, leading=index == 0)
        modes.append(mode)
        curvatures.append(curvature)
        here = point if index == 0 else here
    leading = modes[0] if modes else None
    smooth = tuple(m for m in modes if m.status is Outcome.OK)
    laplace = leading.laplace if leading is not None else np.nan
    total = sum_modes([m.laplace for m in modes])
    bare = problem.model.bare
    status = failure.outcome if higher or leading is None else leading.status
    curvature = curvatures[0] if modes else None
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
        log_likelihood_at_mode=np.nan if bare or here is None else float(here.log_likelihood),
        bic=_bic(problem, leading),
        curvature=curvature,
        posterior=Posterior(problem=problem, modes=smooth, seed=seed) if smooth else None,
        modes=tuple(modes),
        audit=None,
        trust="unchecked" if np.isfinite(total) and not higher else "failed",
        warnings=_cautions(problem, status, leading, curvature),
        status=status,
        dimension=problem.dim,
        terms=problem.terms,
        depth="none",
        seed=int(seed),
        starts=findings.starts,
        seconds=time.perf_counter() - began,
        problem=problem,
    )


def _is_higher(failure: Peak, peaks: list[Peak]) -> bool:
    """Whether a search that found no peak ended above all those that did."""
    if failure.outcome is Outcome.INFINITE:
        return True
    top = max((p.log_density for p in peaks), default=-np.inf)
    return bool(np.isfinite(failure.log_density)) and failure.log_density > top + 1e-6


def _one_mode(
    problem: Problem, peak: Peak, findings: Findings, depth: str, *, leading: bool
) -> tuple[Mode, Curvature | None, Evaluation]:
    here = problem.evaluate(peak.z)
    axes = whitened_axes(peak.hessian, problem.spread)
    smooth = peak.outcome is Outcome.OK and axes.positive
    limit = EXPANDED_PLAINLY if depth == "none" else EXPANDED_BY_AUDIT
    matters = leading or peak.laplace > findings.peaks[0].laplace - MATTERS
    expansion = NOT_EXPANDED
    if smooth and matters and problem.dim <= limit:
        expansion = expand(problem.hessian, peak.z, peak.hessian, problem.spread)
    mode = describe_mode(peak, axes, expansion, here.values)
    curvature = None
    if leading:
        part = None if problem.model.bare else here.likelihood_hessian
        curvature = measure_curvature(peak.hessian, part, axes, problem.names)
    return mode, curvature, here


def _cautions(
    problem: Problem, status: Outcome, leading: Mode | None, curvature: Curvature | None
) -> tuple[Caution, ...]:
    found: list[Caution] = []
    if status is not Outcome.OK:
        found.append(Caution(status.sentence + _where(problem, status, leading), status.remedy))
    if problem.float32:
        found.append(
            Caution(
                f"{', '.join(problem.float32[:3])} is float32, which keeps 7 of 16 digits",
                "Make it with NumPy, or inside the function, so that it is float64",
            )
        )
    if curvature is not None and status is Outcome.OK:
        found += _curvature_cautions(curvature, leading)
    if leading is not None and abs(leading.second_order_term) > NOTICEABLE:
        found.append(
            Caution(
                f"{ALARM} {leading.second_order_term:+.2f} nats: plain Laplace is off by about "
                "as much",
                'Audit it with depth="standard"',
            )
        )
    return tuple(found)


ALARM = "the second-order term is"


def _without_alarm(cautions: tuple[Caution, ...]) -> tuple[Caution, ...]:
    """An audit answers the alarm about the second-order term."""
    return tuple(c for c in cautions if not c.sentence.startswith(ALARM))


def _curvature_cautions(curvature: Curvature, leading: Mode | None) -> list[Caution]:
    found = []
    if curvature.badly_conditioned:
        loosest = curvature.directions[0]
        found.append(
            Caution(
                f"the Hessian is badly conditioned (scaled condition number "
                f"{curvature.scaled_condition:.1e}); the loosest direction is "
                f"{loosest.combination}",
                "Fix or combine these parameters, or give them tighter priors",
            )
        )
    for direction in curvature.held_by_prior[:3]:
        found.append(
            Caution(
                f"{direction.combination} is held by the prior alone "
                f"({100 * direction.share_from_data:.1f} % of its curvature comes from the data)",
                "The evidence depends directly on this prior: justify it, or drop the parameter",
            )
        )
    if leading is not None and np.any(leading.capped):
        found.append(
            Caution(
                "along some direction the posterior is flatter than three prior sd: "
                f"{curvature.directions[0].combination}",
                "The Gaussian picture fails there; rely on the audit's estimate",
            )
        )
    return found


def _where(problem: Problem, status: Outcome, leading: Mode | None) -> str:
    """Which parameter is meant, where that can be said."""
    if status is Outcome.NAN_DERIVATIVE and leading is not None:
        here = problem.evaluate(leading.z)
        bad = ~np.isfinite(here.gradient) | ~np.isfinite(here.hessian).all(axis=0)
        names = [name for name, is_bad in zip(problem.names, bad, strict=True) if is_bad]
        return f" (with respect to {', '.join(names[:4])})" if names else ""
    if status in (Outcome.FLAT, Outcome.INDEFINITE) and leading is not None:
        axes = whitened_axes(leading.hessian, problem.spread)
        curvature = measure_curvature(leading.hessian, None, axes, problem.names)
        return f": {curvature.directions[0].combination}"
    return ""


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
    value = float(problem.evaluate(np.zeros(0)).log_likelihood)
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


def _story(rung: str, estimate: float, note: str) -> dict[str, Any]:
    return {
        "rung": rung,
        "estimate": estimate,
        "standard_error": np.nan,
        "agreed": None,
        "note": note,
    }


def _number(result: Approximation) -> str:
    if not np.isfinite(result.standard_error):
        return f"{result.log_evidence:.4f}"
    digits = 2 if result.standard_error >= 0.005 else 4
    return f"{result.log_evidence:.{digits}f} ± {result.standard_error:.{digits}f}"
