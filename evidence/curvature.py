"""The Hessian at a mode: conditioning, directions in the user's words, what the data determine."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence
from typing import Any

import numpy as np

__all__ = ["Axes", "Curvature", "Direction", "measure_curvature", "whitened_axes"]

AXIS_LIMIT = 3.0  # longest one-sd axis, in prior sd
SINGULAR = 1e-10  # scaled eigenvalue at or below which a direction counts as flat
BAD_CONDITION = 1e6  # scaled condition number above which the reader is warned
PRIOR_ALONE = 0.02  # share of a direction's curvature from the data, below which he is warned
SHOWN_PART = 0.2  # of the largest coefficient, below which a parameter is left out of a direction
SHOWN_TERMS = 4
DIRECTIONS_KEPT = 50
LINE_WIDTH = 1e-12


@dataclasses.dataclass(frozen=True, kw_only=True, eq=False)
class Axes:
    """Principal axes of the posterior's Gaussian, after unit-diagonal scaling of the Hessian.

    Attributes
    ----------
    columns : (d, d)
        One-sd axes L with L L' = H^-1, as columns, in the order of the eigenvalues
        [unconstrained]. Axes longer than three prior sd are shortened to that.
    eigenvalues : (d,)
        Of the scaled Hessian, smallest first.
    directions : (d, d)
        The axes before they were shortened, as columns.
    capped : (d,) bool
        Whether an axis was shortened.
    half_log_det : ()
        0.5 log det H [nats]; nan where H is not positive definite.
    """

    columns: np.ndarray
    eigenvalues: np.ndarray
    directions: np.ndarray
    capped: np.ndarray
    half_log_det: float

    @property
    def scaled_condition(self) -> float:
        """Condition number of the Hessian after unit-diagonal scaling."""
        size = np.abs(self.eigenvalues)
        if not len(size):
            return 1.0
        return float(size.max() / size.min()) if size.min() > 0 else np.inf

    @property
    def positive(self) -> bool:
        """Whether the Hessian is positive definite beyond rounding."""
        return bool(np.all(self.eigenvalues > SINGULAR))


@dataclasses.dataclass(frozen=True, kw_only=True)
class Direction:
    """One direction of the unconstrained space, in the user's words.

    Attributes
    ----------
    combination : str
        E.g. "0.71 log rate_1 - 0.70 log rate_2".
    sd : ()
        Posterior sd along the direction, which is scaled to unit length [unconstrained].
    share_from_data : ()
        Share of its curvature that comes from the log-likelihood; outside 0..1 where prior or
        likelihood curve the other way; nan where the parts are unknown.
    """

    combination: str
    sd: float
    share_from_data: float


@dataclasses.dataclass(frozen=True, kw_only=True, eq=False)
class Curvature:
    """The Hessian of minus the log posterior at a mode, and what it says.

    Attributes
    ----------
    hessian : (d, d)
        Of minus the log posterior density, all parts [nats per unconstrained unit squared].
    scaled_condition : ()
        Condition number after unit-diagonal scaling; the raw one says little.
    half_log_det : ()
        0.5 log det H [nats].
    well_determined : ()
        tr(H^-1 H_likelihood), the number of well-determined parameters (MacKay 1992, Neural
        Computation 4:415); nan where the parts are unknown.
    directions : tuple of Direction
        Principal directions, the loosest first: by the eigenvalue of the scaled Hessian.
    from_prior : tuple of Direction
        Directions by the share of the data in their curvature, the smallest share first.
    """

    hessian: np.ndarray
    scaled_condition: float
    half_log_det: float
    well_determined: float
    directions: tuple[Direction, ...]
    from_prior: tuple[Direction, ...]

    @property
    def badly_conditioned(self) -> bool:
        """Whether the scaled condition number is above 1e6."""
        return self.scaled_condition > BAD_CONDITION

    @property
    def held_by_prior(self) -> tuple[Direction, ...]:
        """Directions of which less than 2 % of the curvature comes from the data."""
        return tuple(x for x in self.from_prior if abs(x.share_from_data) < PRIOR_ALONE)

    @property
    def summary(self) -> str:
        """One sentence."""
        text = f"scaled condition number {self.scaled_condition:.3g}"
        if self.directions:
            loosest = self.directions[0]
            text += f"; loosest direction {loosest.combination} (sd {loosest.sd:.3g})"
        return text

    def table(self) -> Any:
        """Directions as a pandas table: combination, sd, share_from_data."""
        import pandas as pd

        frame = pd.DataFrame([dataclasses.asdict(x) for x in self.directions])
        frame.attrs["columns"] = {
            "combination": "direction of unit length in unconstrained coordinates",
            "sd": "posterior sd along it [unconstrained]",
            "share_from_data": "share of its curvature that comes from the data",
        }
        return frame

    def plot(self) -> Any:
        """Directions by their curvature, with the shares of data and prior: a matplotlib figure."""
        from evidence.report.figures.spectrum import spectrum

        return spectrum([dataclasses.asdict(x) for x in self.directions])

    def __repr__(self) -> str:
        lines = [f"Curvature: {self.summary}"]
        if np.isfinite(self.well_determined):
            d = len(self.hessian)
            lines.append(f"  well-determined parameters {self.well_determined:.2f} of {d}")
        lines += [
            f"  sd {x.sd:.3g}, {_share(x.share_from_data)} from the data: {x.combination}"
            for x in self.directions[:6]
        ]
        return "\n".join(lines)


def whitened_axes(hessian: np.ndarray, spread: np.ndarray) -> Axes:
    """Principal axes of a Hessian (d, d), with the prior's spread (d,) as a limit.

    Scaling to a unit diagonal first keeps units out: a raw condition number of 1e10 may be 3.
    """
    scale = _scale(hessian, spread)
    values, vectors = np.linalg.eigh(hessian * np.outer(scale, scale))
    # far below rounding an eigenvalue is a sign only: its axis would be a random number
    size = np.maximum(np.abs(values), 1e-14)
    directions = scale[:, None] * vectors / np.sqrt(size)
    length = np.max(np.abs(directions) / spread[:, None], axis=0, initial=0.0)
    capped = length > AXIS_LIMIT
    columns = directions * np.where(capped, AXIS_LIMIT / np.maximum(length, LINE_WIDTH), 1.0)
    positive = bool(np.all(values > SINGULAR))
    half_log_det = 0.5 * np.sum(np.log(values)) - np.sum(np.log(scale)) if positive else np.nan
    return Axes(
        columns=columns,
        eigenvalues=values,
        directions=directions,
        capped=capped,
        half_log_det=float(half_log_det),
    )


def measure_curvature(
    hessian: np.ndarray,
    likelihood_hessian: np.ndarray | None,
    axes: Axes,
    names: Sequence[str],
) -> Curvature:
    """Conditioning, directions and well-determined parameters at a mode.

    Parameters
    ----------
    hessian, likelihood_hessian : (d, d)
        Of minus the log posterior and of minus the log-likelihood; None where unknown.
    axes : Axes
        Of the first.
    names : sequence of str
        (d,) labels of the coordinates.
    """
    loose = [
        _direction(column, hessian, likelihood_hessian, names)
        for column in axes.directions.T[:DIRECTIONS_KEPT]
    ]
    if likelihood_hessian is None or not axes.positive:
        shares, from_prior, determined = None, [], np.nan
    else:
        # eigenvalues of the likelihood part against the whole, in whitened coordinates
        part = axes.directions.T @ likelihood_hessian @ axes.directions
        shares, vectors = np.linalg.eigh(part)
        columns = axes.directions @ vectors[:, :DIRECTIONS_KEPT]
        from_prior = [_direction(c, hessian, likelihood_hessian, names) for c in columns.T]
        determined = float(np.sum(shares))
    return Curvature(
        hessian=hessian,
        scaled_condition=axes.scaled_condition,
        half_log_det=axes.half_log_det,
        well_determined=determined,
        directions=tuple(loose),
        from_prior=tuple(from_prior),
    )


def _direction(
    column: np.ndarray, hessian: np.ndarray, part: np.ndarray | None, names: Sequence[str]
) -> Direction:
    length = float(np.linalg.norm(column))
    unit = column / length if length > 0 else column
    whole = float(unit @ hessian @ unit)
    share = float(unit @ part @ unit) / whole if part is not None and whole != 0 else np.nan
    return Direction(
        combination=combination(unit, names),
        sd=1.0 / np.sqrt(whole) if whole > 0 else np.inf,
        share_from_data=share,
    )


def combination(unit: np.ndarray, names: Sequence[str]) -> str:
    """A direction in words: its largest coefficients with the names, signs made positive first."""
    order = np.argsort(-np.abs(unit), kind="stable")
    largest = abs(unit[order[0]])
    kept = [i for i in order if abs(unit[i]) >= SHOWN_PART * largest][:SHOWN_TERMS]
    if len(kept) == 1:
        return names[kept[0]]
    sign = np.sign(unit[kept[0]])
    words = [f"{abs(unit[i]):.2f} {names[i]}" for i in kept]
    text = words[0]
    for index, word in zip(kept[1:], words[1:], strict=True):
        text += (" + " if sign * unit[index] > 0 else " - ") + word
    more = int(np.sum(np.abs(unit) >= SHOWN_PART * largest)) - len(kept)
    return f"{text} and {more} more" if more > 0 else text


def _scale(hessian: np.ndarray, spread: np.ndarray) -> np.ndarray:
    return 1.0 / np.sqrt(np.maximum(np.abs(np.diagonal(hessian)), 1e-12 / spread**2))


def _share(share: float) -> str:
    return f"{100 * share:.0f} %" if np.isfinite(share) else "unknown share"
