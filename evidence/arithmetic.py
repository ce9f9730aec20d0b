"""Small NumPy arithmetic that would otherwise cost the import of scipy.special (0.1 s or more)."""

from __future__ import annotations

from statistics import NormalDist
from typing import Any

import numpy as np

__all__ = ["log_sum_exp", "normal_quantile"]

_QUANTILE = np.frompyfunc(NormalDist().inv_cdf, 1, 1)


def log_sum_exp(values: Any, axis: int | None = None, *, keepdims: bool = False) -> Any:
    """Log of the sum of exponentials along an axis, without overflow; -inf where all are.

    Parameters
    ----------
    values : array_like
        Logs [nats].
    """
    values = np.asarray(values, dtype=np.float64)
    top = np.max(values, axis=axis, keepdims=True, initial=-np.inf)
    shift = np.where(np.isfinite(top), top, 0.0)
    with np.errstate(divide="ignore"):
        total = np.log(np.sum(np.exp(values - shift), axis=axis, keepdims=True)) + shift
    if keepdims:
        return total
    return float(total.item()) if axis is None else np.squeeze(total, axis=axis)


def normal_quantile(probability: np.ndarray) -> np.ndarray:
    """Quantiles of the standard normal, entry by entry (Wichura 1988, Algorithm AS 241)."""
    return _QUANTILE(probability).astype(np.float64)
