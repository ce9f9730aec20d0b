"""What moving numbers of a declaration does: one number's effects, and a change that overturns."""

from __future__ import annotations

import dataclasses
from typing import Any

import numpy as np

from evidence.stress import wording
from evidence.stress.levers import Lever

__all__ = ["JointChange", "LeverEffect"]

LEAST_AGREEMENT = 0.03  # nats within which an audit counts as even, whatever its error


@dataclasses.dataclass(frozen=True, kw_only=True)
class LeverEffect:
    """What moving one number does.

    Attributes
    ----------
    lever : Lever
        The number.
    derivative : ()
        Of the candidate's log evidence [nats per log unit or prior sd].
    halved, doubled : (), ()
        Change of the log evidence at half and twice the value; one prior sd down and up for a
        location [nats].
    lead : ()
        Log posterior odds that are at stake [nats].
    step : ()
        Change at which they are even [log units or prior sd]; nan where none is near.
    overtaken_by : str
        Who leads beyond it; empty where nobody does.
    leads : bool
        Whether the candidate is the leader, so that a fall of its evidence endangers the verdict.
    note : str
        In words.
    """

    lever: Lever
    derivative: float
    halved: float
    doubled: float
    lead: float
    step: float
    overtaken_by: str
    leads: bool
    note: str

    def row(self) -> dict[str, Any]:
        """As a row of the table."""
        lever, tips = self.lever, bool(np.isfinite(self.step))
        is_place = lever.kind == "location"
        return {
            "candidate": lever.candidate,
            "hyperparameter": lever.label,
            "unit": lever.unit,
            "kind": lever.kind,
            "value": lever.value,
            "derivative": self.derivative,
            "derivative_per_unit": lever.per_unit(self.derivative),
            "bayes_factor_derivative": -self.derivative if self.leads else self.derivative,
            "halved": self.halved,
            "doubled": self.doubled,
            "lead": self.lead,
            "tipping": (self.step if is_place else float(np.exp(self.step))) if tips else np.nan,
            "tipping_value": lever.value_at(self.step) if tips else np.nan,
            "overtaken_by": self.overtaken_by,
            "note": self.note,
        }


@dataclasses.dataclass(frozen=True, kw_only=True)
class JointChange:
    """Changes of one or several numbers at which two candidates are even.

    Attributes
    ----------
    levers : tuple of Lever
        The numbers.
    steps : tuple of float
        Log units or prior sd, one per lever.
    difference : ()
        Recomputed log posterior odds there, held gaps included [nats]; zero but for rounding.
    audited : ()
        The same by a full audit at the point [nats]; nan where none was made.
    audited_error : ()
        Its standard error [nats].
    """

    levers: tuple[Lever, ...]
    steps: tuple[float, ...]
    difference: float
    audited: float
    audited_error: float

    @property
    def norm(self) -> float:
        """Euclidean norm of the steps [log units and prior sd]."""
        return float(np.linalg.norm(self.steps))

    @property
    def confirmed(self) -> bool | None:
        """Whether the audit finds the candidates even within its error; None without an audit."""
        if not np.isfinite(self.audited):
            return None
        return bool(abs(self.audited) <= max(3 * self.audited_error, LEAST_AGREEMENT))

    @property
    def text(self) -> str:
        """The change in words, the largest steps first."""
        return wording.joint(self.levers, self.steps)

    def to_dict(self) -> dict[str, Any]:
        """As plain numbers and texts."""
        moved = [
            {"candidate": x.candidate, "hyperparameter": x.label, "step": s, "kind": x.kind}
            for x, s in zip(self.levers, self.steps, strict=True)
        ]
        return {
            "moved": moved, "norm": self.norm, "difference": self.difference,
            "audited": self.audited, "audited_error": self.audited_error,
            "confirmed": self.confirmed, "text": self.text,
        }  # fmt: skip
