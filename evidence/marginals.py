"""One parameter at a time: histograms of draws, and how far two sets of intervals lie apart."""

from __future__ import annotations

from typing import Any

import numpy as np

__all__ = ["END_DENSITY", "interval_shift", "marginal"]

BINS = 48
SHOWN = (0.001, 0.999)  # share of the draws between which a histogram is drawn
SMOOTHING = (0.25, 0.5, 0.25)
FIRM = 5000  # draws of equal weight from which a histogram needs little smoothing
END_DENSITY = 0.0584  # of a standard normal at its 2.5 % quantile: the noise of a quantile there


def marginal(
    gaussian: np.ndarray, refined: np.ndarray | None, *, effective: float = np.inf
) -> dict[str, Any]:
    """Histograms of one parameter on common edges.

    Parameters
    ----------
    gaussian, refined : (n,)
        Draws in natural units; None where there are no refined ones.
    effective : float
        How many independent draws the refined ones are worth: the fewer, the smoother both.

    Returns
    -------
    dict
        ``edges`` (48 + 1), ``gaussian`` and ``refined`` (48) densities [per natural unit];
        neighbouring bins are averaged with weights 1, 2, 1, up to six times.
    """
    ranges = [np.quantile(x, SHOWN) for x in (gaussian, refined) if x is not None]
    low, high = float(min(r[0] for r in ranges)), float(max(r[1] for r in ranges))
    if not (np.isfinite(low) and np.isfinite(high)) or high <= low:
        return {"edges": [], "gaussian": [], "refined": None}
    edges = np.linspace(low, high, BINS + 1)
    times = 1 if effective > FIRM else 3 if effective > FIRM / 5 else 6
    return {
        "edges": edges.tolist(),
        "gaussian": _density(gaussian, edges, times),
        "refined": None if refined is None else _density(refined, edges, times),
    }


def _density(draws: np.ndarray, edges: np.ndarray, times: int) -> list[float]:
    density = np.histogram(draws, edges)[0] / len(draws) / np.diff(edges)
    for _ in range(times):
        padded = np.concatenate([density[:1], density, density[-1:]])
        density = np.convolve(padded, SMOOTHING, mode="valid")
    return density.tolist()


def interval_shift(gaussian: tuple[float, float], refined: tuple[float, float], sd: float) -> float:
    """How far the farther end of one interval lies from that of another, in sd of the first."""
    if not sd > 0:
        return 0.0
    return max(abs(a - b) for a, b in zip(gaussian, refined, strict=True)) / sd
