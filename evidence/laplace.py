"""Laplace's method at one mode and over several, with the second-order term.

log Z ~ log density at the mode + d/2 log 2 pi - 1/2 log det H (Laplace 1774; Tierney & Kadane
1986, J. Am. Stat. Assoc. 81:82; Kass & Raftery 1995, J. Am. Stat. Assoc. 90:773).
"""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Sequence

import numpy as np

from evidence.arithmetic import log_sum_exp
from evidence.curvature import Axes, whitened_axes
from evidence.mode import Peak
from evidence.outcome import Outcome

__all__ = ["Expansion", "Mode", "describe_mode", "expand", "sum_modes"]

LOG_2PI = float(np.log(2.0 * np.pi))
STEP = 0.01  # in posterior sd, for differences of the Hessian
EXPANSION_LIMIT = 150  # dimension above which the second-order term is left to the audit
UNKNOWN_ABOVE = 1.0  # |c| above which c says only that Laplace's method is off


@dataclasses.dataclass(frozen=True, kw_only=True)
class Expansion:
    """The second-order term c of Laplace's method: log Z ~ Laplace + c.

    Attributes
    ----------
    total : ()
        c [nats].
    cubic, quartic : (), ()
        Parts from third and fourth derivatives [nats]; both large with c near 0 means unknown.
    """

    total: float
    cubic: float
    quartic: float


NOT_EXPANDED = Expansion(total=np.nan, cubic=np.nan, quartic=np.nan)


@dataclasses.dataclass(frozen=True, kw_only=True, eq=False)
class Mode:
    """One mode with its Laplace approximation.

    Attributes
    ----------
    z : (d,)
        Place of the peak [unconstrained].
    log_density : ()
        Log posterior density there, with the Jacobian [nats].
    hessian : (d, d)
        Of minus the log density.
    laplace : ()
        Plain Laplace approximation of the log evidence of this mode alone [nats]; nan where it
        is no peak.
    second_order_term, cubic_part, quartic_part : (), (), ()
        See Expansion [nats].
    axes : (d, d)
        One-sd axes as columns, at most three prior sd long.
    capped : (d,) bool
        Whether an axis was shortened to that.
    converged : bool
    decrement : ()
        Newton decrement.
    status : Outcome
    hits : int
        Starts that ended here.
    mode : dict
        The peak's place in natural units, by name.
    """

    z: np.ndarray
    log_density: float
    hessian: np.ndarray
    laplace: float
    second_order_term: float
    cubic_part: float
    quartic_part: float
    axes: np.ndarray
    capped: np.ndarray
    converged: bool
    decrement: float
    status: Outcome
    hits: int
    mode: dict[str, np.ndarray]

    def __repr__(self) -> str:
        return (
            f"Mode: Laplace {self.laplace:.4f} nats, second-order term "
            f"{self.second_order_term:+.4f}, from {self.hits} starts"
        )


def describe_mode(
    peak: Peak,
    axes: Axes,
    expansion: Expansion,
    values: dict[str, np.ndarray],
) -> Mode:
    """Join a peak with its axes, second-order term and natural values."""
    status = peak.outcome
    if status is Outcome.OK and not axes.positive:
        status = Outcome.FLAT if np.min(axes.eigenvalues) > -1e-8 else Outcome.INDEFINITE
    d = len(peak.z)
    laplace = peak.log_density + 0.5 * d * LOG_2PI - axes.half_log_det
    return Mode(
        z=peak.z,
        log_density=peak.log_density,
        hessian=peak.hessian,
        laplace=float(laplace) if status is Outcome.OK else np.nan,
        second_order_term=expansion.total,
        cubic_part=expansion.cubic,
        quartic_part=expansion.quartic,
        axes=axes.columns,
        capped=axes.capped,
        converged=status is Outcome.OK,
        decrement=peak.decrement,
        status=status,
        hits=peak.hits,
        mode=values,
    )


def sum_modes(values: Sequence[float]) -> float:
    """Log of the sum of the evidences of several modes [nats]; nan ones are left out."""
    kept = [value for value in values if np.isfinite(value)]
    return log_sum_exp(kept) if kept else np.nan


def expand(
    hessian_at: Callable[[np.ndarray], np.ndarray],
    z: np.ndarray,
    hessian: np.ndarray,
    spread: np.ndarray,
    *,
    rotation: np.ndarray | None = None,
) -> Expansion:
    """Second-order term of Laplace's method by differences of the Hessian.

    Parameters
    ----------
    hessian_at : callable
        z (d,) -> Hessian of minus the log density (d, d); may hold nan.
    z, hessian : (d,), (d, d)
        The mode and the Hessian there, positive definite.
    spread : (d,)
        Prior sd in z.
    rotation : (d, d), optional
        Orthogonal matrix that turns the whitened axes: an independent second value.

    Notes
    -----
    With z = mode + L u and h the objective in u, c = -1/8 sum h_iijj + 1/8 sum_k (sum_i h_iik)^2
    + 1/12 sum h_ijk^2 (Tierney, Kass & Kadane 1989, J. Am. Stat. Assoc. 84:710; Shun & McCullagh
    1995, J. R. Stat. Soc. B 57:749). c is added to log Z and not log(1 + c): it is additive over
    independent pieces. Central differences of step 0.01 sd need 2d Hessians and no array of
    third or fourth derivatives, and they see a wall that automatic derivatives do not.
    """
    if not len(z):
        return Expansion(total=0.0, cubic=0.0, quartic=0.0)
    axes = whitened_axes(hessian, spread)
    if not axes.positive:
        return NOT_EXPANDED
    columns = axes.directions if rotation is None else axes.directions @ rotation
    middle = columns.T @ hessian @ columns
    fourth = squared_trace = squared_norm = 0.0
    for column in columns.T:
        above = columns.T @ hessian_at(z + STEP * column) @ columns
        below = columns.T @ hessian_at(z - STEP * column) @ columns
        first = (above - below) / (2 * STEP)
        fourth += np.trace(above + below - 2 * middle) / STEP**2
        squared_trace += np.trace(first) ** 2
        squared_norm += np.sum(first**2)
    cubic = squared_trace / 8 + squared_norm / 12
    quartic = -fourth / 8
    return Expansion(total=float(cubic + quartic), cubic=float(cubic), quartic=float(quartic))
