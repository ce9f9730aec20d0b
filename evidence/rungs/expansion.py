"""Whether the second-order term of Laplace's method may be believed, and the sum over modes."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from evidence.laplace import expand, sum_modes
from evidence.rungs.record import Mode, Target

__all__ = ["Expanded", "Rotated", "expand_modes", "expand_rotated"]

LARGEST_USED = 0.5  # per mode: beyond it the term says "unknown", not "this much"
LARGEST_TRUSTED = 0.25
LARGEST_PER_COORDINATE = 0.05
LARGEST_CANCELLATION = 6.0  # |cubic| + |quartic| against |term|; 4 for a log-gamma piece
SMALL_PARTS = 0.5
MATTERS = 3.0  # nats below the leading mode


@dataclass(frozen=True, kw_only=True)
class Expanded:
    """The sum over modes with the second-order term.

    Attributes
    ----------
    plain : () Laplace value of the leading mode [nats], nan where there is no peak
    estimate : () sum over modes, each with its second-order term [nats]
    term : () largest second-order term of a mode that matters [nats]
    cancels : whether large cubic and quartic parts cancel in it
    small : the term is at most 0.25, and at most 0.05 per coordinate
    small_per_coordinate : the term is at most 0.05 per coordinate
    """

    plain: float
    estimate: float
    term: float
    cancels: bool
    small: bool
    small_per_coordinate: bool


@dataclass(frozen=True, kw_only=True)
class Rotated:
    """The term in a second whitening, turned at random.

    Attributes
    ----------
    term : () second value of the second-order term [nats]
    agrees : within 20 % or 0.03 nat of the first
    """

    term: float
    agrees: bool


def expand_modes(modes: Sequence[Mode], dim: int) -> Expanded:
    """Add up the modes with their second-order terms.

    The term is added to the log of the evidence, being additive over independent pieces; where
    it exceeds 0.5 (and 0.05 per coordinate) it is dropped.
    """
    peaks = [m for m in modes if np.isfinite(m.laplace)]
    if not peaks:
        return Expanded(plain=np.nan, estimate=np.nan, term=np.nan, cancels=False, small=False,
                        small_per_coordinate=False)  # fmt: skip
    laplace = np.array([m.laplace for m in peaks])
    terms = np.array([m.second_order_term for m in peaks])
    limit = max(LARGEST_USED, LARGEST_PER_COORDINATE * dim)
    used = np.where(np.abs(terms) <= limit, terms, 0.0)
    matter = laplace > laplace.max() - MATTERS
    size = np.where(np.isfinite(terms), np.abs(terms), np.inf)
    worst = peaks[int(np.argmax(np.where(matter, size, -1.0)))]
    term = worst.second_order_term
    parts = abs(worst.cubic_part) + abs(worst.quartic_part)
    per_coordinate = bool(abs(term) / dim <= LARGEST_PER_COORDINATE)
    return Expanded(
        plain=float(laplace.max()),
        estimate=sum_modes(laplace + used),
        term=float(term),
        cancels=bool(parts > max(LARGEST_CANCELLATION * abs(term), SMALL_PARTS)),
        small=bool(abs(term) <= LARGEST_TRUSTED) and per_coordinate,
        small_per_coordinate=per_coordinate,
    )


def expand_rotated(target: Target, mode: Mode, rng: np.random.Generator) -> Rotated:
    """Compute the second-order term of a mode in a randomly rotated whitening and compare.

    The term does not depend on the whitening where four derivatives exist; differences of the
    Hessian across a wall or a kink do.
    """
    rotation = np.linalg.qr(rng.normal(size=(target.dim, target.dim)))[0]
    again = expand(target.hessian, mode.z, mode.hessian, target.spread, rotation=rotation).total
    allowed = max(0.2 * abs(mode.second_order_term), 0.03)
    agrees = bool(abs(again - mode.second_order_term) <= allowed)
    return Rotated(term=float(again), agrees=agrees)
