"""What a rung sees of a problem, and what the climb hands back."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Protocol

import numpy as np

__all__ = ["Audit", "Mode", "Rung", "Target"]


class Target(Protocol):
    """A log density in unconstrained coordinates z.

    Attributes
    ----------
    dim : number of coordinates d
    centre, spread : [d] centre and standard deviation of the prior in z
    spread_known : False where nobody said how wide the prior is
    names : [d] labels of the coordinates in the user's words
    log_density : JAX function z [d] -> () in nats
    seconds_per_call : measured cost of one log density within a batch [s]
    """

    dim: int
    centre: np.ndarray
    spread: np.ndarray
    spread_known: bool
    names: tuple[str, ...]
    log_density: Callable
    seconds_per_call: float

    def batch(self, z: np.ndarray) -> np.ndarray:
        """Log density [n] in nats at points [n, d]; nan counts as -inf, +inf is kept."""

    def hessian(self, z: np.ndarray) -> np.ndarray:
        """Hessian [d, d] of minus the log density at a point [d]; may hold nan."""


class Mode(Protocol):
    """A peak (or the best point of a search that found none) and its expansion.

    Attributes
    ----------
    z : [d] position, unconstrained coordinates
    log_density : value there [nats]
    hessian : [d, d] of minus the log density
    converged : whether the Newton search ended at a smooth stationary point
    status : an Outcome; 0 is a peak
    axes : [d, d] columns are whitened axes, one standard deviation long
    capped : [d] True where an axis was cut at three prior standard deviations
    laplace : plain Laplace value [nats], nan where there is no peak
    second_order_term, cubic_part, quartic_part : corrections [nats]
    """

    z: np.ndarray
    log_density: float
    hessian: np.ndarray
    converged: bool
    decrement: float
    status: int
    axes: np.ndarray
    capped: np.ndarray
    laplace: float
    second_order_term: float
    cubic_part: float
    quartic_part: float
    hits: int


@dataclass(frozen=True, kw_only=True)
class Rung:
    """One estimate of the log evidence by one method.

    Attributes
    ----------
    name : the method
    estimate : () log evidence [nats]; nan where the method gave none
    standard_error : () [nats]
    agreed : True or False where there was something to agree with, else None
    note : one sentence
    evaluations : log densities evaluated
    diagnostics : numbers behind the note, by name
    """

    name: str
    estimate: float
    standard_error: float
    agreed: bool | None
    note: str
    evaluations: int
    diagnostics: Mapping[str, float] = field(default_factory=dict)


@dataclass(frozen=True, kw_only=True)
class Audit:
    """The story of a climb.

    Attributes
    ----------
    rungs : the rungs in the order climbed
    log_evidence : () accepted estimate [nats]
    standard_error : () [nats]; three of them are meant to cover the truth
    trust : sound, corrected, rough, doubtful or failed
    warnings : pairs (sentence, remedy)
    draws : [n, d] draws of the accepted mixture in unconstrained coordinates, or None
    log_weights : [n] their log importance weights [nats], or None
    stopped_because : one sentence
    """

    rungs: tuple[Rung, ...]
    log_evidence: float
    standard_error: float
    trust: str
    warnings: tuple[tuple[str, str], ...]
    draws: np.ndarray | None
    log_weights: np.ndarray | None
    stopped_because: str
