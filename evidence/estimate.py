"""The result for one candidate: numbers with their errors, and the words around them."""

from __future__ import annotations

import dataclasses
import functools
from collections.abc import Mapping
from typing import Any

import numpy as np

from evidence.complaints import Caution
from evidence.curvature import Curvature
from evidence.laplace import Mode
from evidence.outcome import Outcome
from evidence.portrait import paint
from evidence.posterior import Posterior, RecordedPosterior
from evidence.problem import Problem
from evidence.record import candidate_record
from evidence.report.html import candidate_fragment

__all__ = ["Approximation"]


@dataclasses.dataclass(frozen=True, kw_only=True, eq=False)
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
    problem : Problem or None
        The candidate joined with the data; None for a saved result.
    recorded : mapping or None
        The candidate's record, for a saved result.
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
    recorded: Mapping[str, Any] | None = dataclasses.field(default=None, repr=False, compare=False)

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
        if self.recorded is not None:
            return [dict(step) for step in self.recorded["audit"]]
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

    @functools.cached_property
    def portrait(self) -> Mapping[str, Any]:
        """What the pictures need beyond the tables, as plain lists: see :mod:`.portrait`.

        Computed when first asked for; a saved result has what was saved with it.
        """
        if self.recorded is not None:
            return self.recorded.get("pictures") or {}
        return paint(self.problem, self.modes, self.posterior)

    def plot(self, picture: str = "profiles") -> Any:
        """A picture of this candidate as a matplotlib figure.

        Parameters
        ----------
        picture : {"profiles", "audit", "curvature", "marginals", "predictions"}
            The log density through each mode against its Gaussian; the audit's estimates; the
            Hessian's directions; marginals, Gaussian against refined; data against prediction.

        Raises
        ------
        DeclarationError
            Another word.
        ImportError
            matplotlib is not installed.
        """
        from evidence.report.figures.gallery import draw_candidate

        directions = () if self.curvature is None else self.curvature.directions
        drawn = {
            "candidate": self.name,
            "log_evidence": self.log_evidence,
            "standard_error": self.standard_error,
            "audit": self.story(),
            "curvature": {"directions": [dataclasses.asdict(x) for x in directions]},
            "units": self._units(),
            "pictures": self.portrait,
        }
        return draw_candidate(drawn, picture)

    def _units(self) -> dict[str, str]:
        if self.recorded is not None:
            return dict(self.recorded.get("units") or {})
        return {} if self.problem is None else dict(self.problem.model.units)

    def _repr_html_(self) -> str:
        return candidate_fragment(candidate_record(self))

    def __repr__(self) -> str:
        volume = self.laplace - self.log_posterior_at_mode
        lines = [self.summary]
        if np.isfinite(self.laplace):
            lines.append(
                f"  Laplace {self.laplace:.4f} = peak {self.log_posterior_at_mode:.4f} + volume "
                f"{volume:+.4f}; second-order term {self.second_order_term:+.4f}"
            )
        if len(self.modes) > 1 and np.isfinite(self.laplace_all_modes):
            lines.append(f"  {len(self.modes)} modes, summed: {self.laplace_all_modes:.4f}")
        shown = [f"{k} {np.array2string(np.asarray(v), precision=4)}" for k, v in self.mode.items()]
        if shown:
            text = ", ".join(shown).replace("\n", " ")
            lines.append(f"  mode: {text if len(text) < 200 else text[:197] + '...'}")
        if self.curvature is not None:
            lines.append(f"  {self.curvature.summary}")
        lines += [f"  ! {caution}" for caution in self.warnings[:5]]
        return "\n".join(lines)


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
