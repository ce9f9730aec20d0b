"""Arithmetic with log weights."""

from __future__ import annotations

import numpy as np

__all__ = ["log_mean_exp", "log_sum_exp", "relative_error", "truncated_share"]


def log_sum_exp(values: np.ndarray, axis: int | None = None) -> np.ndarray:
    """Return the log of a sum of exponentials; -inf where every term is -inf."""
    values = np.asarray(values, dtype=float)
    top = np.max(values, axis=axis, keepdims=True)
    top = np.where(np.isfinite(top), top, 0.0)
    with np.errstate(divide="ignore"):
        total = np.log(np.sum(np.exp(values - top), axis=axis, keepdims=True)) + top
    return total.item() if axis is None else np.squeeze(total, axis=axis)


def log_mean_exp(values: np.ndarray) -> float:
    """Return the log of a mean of exponentials of values [n]."""
    return float(log_sum_exp(values) - np.log(len(values)))


def relative_error(log_weights: np.ndarray) -> float:
    """Standard error of the log of the mean weight [nats], from independent weights [n]."""
    scaled = np.exp(log_weights - np.max(log_weights))
    return float(np.std(scaled) / np.mean(scaled) / np.sqrt(len(scaled)))


def truncated_share(log_weights: np.ndarray) -> np.ndarray:
    """Return normalised weights [n], truncated at the mean times sqrt(n) (Ionides 2008)."""
    n = len(log_weights)
    cut = log_mean_exp(log_weights) + 0.5 * np.log(n)
    kept = np.minimum(log_weights, cut)
    return np.exp(kept - log_sum_exp(kept))
