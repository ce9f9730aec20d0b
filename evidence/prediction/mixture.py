"""Mean, variance and quantiles of a mixture of draws, one share per candidate."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, NamedTuple

import numpy as np

from evidence.complaints import DeclarationError, sentence

__all__ = ["Share", "mix", "weighted_quantiles"]


class Share(NamedTuple):
    """What one candidate brings: its probability, expected and simulated columns (draws, ...)."""

    name: str
    chance: float
    expected: dict[str, np.ndarray]
    simulated: dict[str, np.ndarray]


def mix(shares: Sequence[Share], level: float) -> dict[str, dict[str, Any]]:
    """Column -> mean, sd, interval, within, between and the like, each (rows,).

    Raises
    ------
    DeclarationError
        The candidates predict different columns, or columns of different shapes.
    """
    named = {share.name: dict.fromkeys([*share.expected, *share.simulated]) for share in shares}
    first = next(iter(named))
    for name, columns in named.items():
        if set(columns) != set(named[first]):
            raise DeclarationError(
                sentence(
                    "the candidates must predict the same columns",
                    f"{first!r}: {', '.join(named[first])}; {name!r}: {', '.join(columns)}",
                )
            )
    return {column: _column(column, shares, level) for column in named[first]}


def _column(column: str, shares: Sequence[Share], level: float) -> dict[str, Any]:
    weights = np.array([share.chance for share in shares])
    expected = [_flat(share.expected.get(column)) for share in shares]
    simulated = [_flat(share.simulated.get(column)) for share in shares]
    # the mean of expected values scatters less than that of simulated ones
    best = [s if e is None else e for e, s in zip(expected, simulated, strict=True)]
    sizes = {x.shape[1] for x in best}
    if len(sizes) > 1:
        raise DeclarationError(
            sentence(f"the candidates must predict {column!r} in the same shape", str(sizes))
        )
    means = np.array([x.mean(axis=0) for x in best])
    mean = weights @ means
    between = weights @ (means - mean) ** 2
    open_ = np.full(len(mean), np.nan)
    within, (low, high) = _spread(expected, weights, level) or (open_, (open_, open_))
    new_within, (new_low, new_high) = _spread(simulated, weights, level) or (open_, (open_, open_))
    total = within + between
    with np.errstate(invalid="ignore", divide="ignore"):
        share_between = np.where(total > 0, between / total, np.where(np.isnan(total), np.nan, 0.0))
    return {
        "mean": mean, "sd": np.sqrt(total), "low": low, "high": high,
        "within": within, "between": between, "share_between": share_between,
        "new_sd": np.sqrt(new_within + between), "new_low": new_low, "new_high": new_high,
        "new_within": new_within,
        "means": {share.name: m for share, m in zip(shares, means, strict=True)},
    }  # fmt: skip


def _flat(columns: np.ndarray | None) -> np.ndarray | None:
    return None if columns is None else columns.reshape(len(columns), -1).astype(np.float64)


def _spread(
    draws: Sequence[np.ndarray | None], weights: np.ndarray, level: float
) -> tuple[np.ndarray, np.ndarray] | None:
    """Variance within, averaged, and the interval's ends (2, rows); None where one has no draws."""
    if any(x is None for x in draws):
        return None
    within = weights @ np.array([x.var(axis=0, ddof=1) for x in draws])
    each = np.concatenate(
        [np.full(len(x), w / len(x)) for x, w in zip(draws, weights, strict=True)]
    )
    tails = np.array([0.5 - 0.5 * level, 0.5 + 0.5 * level])
    return within, weighted_quantiles(np.concatenate(draws), each, tails)


def weighted_quantiles(
    values: np.ndarray, weights: np.ndarray, probabilities: np.ndarray
) -> np.ndarray:
    """Quantiles (q, rows) of draws (n, rows) with weights (n,) that add up to 1."""
    out = np.empty((len(probabilities), values.shape[1]))
    for row in range(values.shape[1]):
        order = np.argsort(values[:, row], kind="stable")
        # the middle of each draw's own share
        reached = np.cumsum(weights[order]) - 0.5 * weights[order]
        out[:, row] = np.interp(probabilities, reached, values[order, row])
    return out
