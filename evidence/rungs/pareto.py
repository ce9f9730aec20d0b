"""Shape of the upper tail of importance weights (Pareto k)."""

from __future__ import annotations

import numpy as np

__all__ = ["pareto_k"]

FEWEST_WEIGHTS = 25
FEWEST_IN_TAIL = 5
SMALLEST_KEPT = np.log(np.finfo(float).tiny)


def pareto_k(log_weights: np.ndarray) -> float:
    """Fit a generalised Pareto distribution to the largest weights and return its shape.

    Parameters
    ----------
    log_weights : numpy.ndarray
        [n] log importance weights in nats, up to a constant; -inf is a weight of zero.

    Returns
    -------
    float
        The shape k, shrunk towards 0.5: below 0.5 the weights have a finite variance. ``inf``
        where fewer than 25 draws or five tail weights remain, ``-inf`` where the tail is flat.

    References
    ----------
    Zhang & Stephens (2009), Technometrics 51: the fit.
    Vehtari, Simpson, Gelman, Yao & Gabry (2024), J. Mach. Learn. Res. 25: tail size and shrinkage.
    """
    n = len(log_weights)
    if n < FEWEST_WEIGHTS or not np.isfinite(log_weights).any():
        return float("inf")
    shifted = np.asarray(log_weights) - np.max(log_weights)
    size = int(np.ceil(min(0.2 * n, 3.0 * np.sqrt(n))))
    ordered = np.partition(shifted, n - size - 1)
    cutoff = max(ordered[n - size - 1], SMALLEST_KEPT)
    tail = np.sort(shifted[shifted > cutoff])
    if len(tail) == 0 or tail[-1] - cutoff < 1e-10:
        return float("-inf")
    if len(tail) < FEWEST_IN_TAIL:
        return float("inf")
    return _shape(np.exp(tail) - np.exp(cutoff))


def _shape(excess: np.ndarray) -> float:
    """Return the shrunk shape for excesses [m] in increasing order."""
    m = len(excess)
    grid = 30 + int(np.sqrt(m))
    index = np.arange(1, grid + 1)
    quarter = excess[int(m / 4 + 0.5) - 1]
    # Zhang & Stephens (2009): weighted grid over b = k / sigma, prior on the scale of the data
    b = 1.0 / excess[-1] + (1.0 - np.sqrt(grid / (index - 0.5))) / (3.0 * quarter)
    shapes = np.log1p(-b[:, None] * excess).mean(axis=1)
    profile = m * (np.log(-b / shapes) - shapes - 1.0)
    weights = np.exp(profile - profile.max())
    b_mean = np.sum(b * weights) / np.sum(weights)
    k = np.log1p(-b_mean * excess).mean()
    return float((m * k + 5.0) / (m + 10.0))
