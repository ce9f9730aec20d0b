"""A batch as a plain record: what the forms of a report take."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from evidence.batches.findings import Finding, status_code, status_text

if TYPE_CHECKING:
    from evidence.batches.batch import Batch

__all__ = ["overview"]

# 2 log B of 2, 6 and 10 are the grades of Kass & Raftery (1995)
EDGES = (-np.inf, -5.0, -3.0, -1.0, 0.0, 1.0, 3.0, 5.0, np.inf)
BAD_SHOWN = 100


def overview(batch: Batch) -> dict[str, Any]:
    """Counts, candidates, histograms of log Bayes factors against the first, what is bad."""
    counts = batch.counts
    groups = batch.groups()
    mean = _mean_probability(batch)
    candidates = [
        {
            "candidate": name,
            "settled_for": counts["settled_for"][name],
            "mean_probability": float(mean[k]),
            "summed_log_evidence": float(groups.summed_log_evidence[k]),
            "expected_frequency": float(groups.expected_frequency[k]),
            "exceedance": float(groups.exceedance[k]),
            "protected_exceedance": float(groups.protected_exceedance[k]),
        }
        for k, name in enumerate(batch.candidates)
    ]
    return {
        "summary": batch.summary,
        "manifest": batch.manifest,
        "counts": counts,
        "candidates": candidates,
        "log_bayes_factors": _histograms(batch),
        "status": [
            {"status": word, "rows": count, "meaning": status_text(status_code(word))}
            for word, count in counts["status"].items()
        ],
        "bad": _bad(batch),
        "set_aside": list(batch.set_aside),
    }


def _mean_probability(batch: Batch) -> np.ndarray:
    total, count = np.zeros(len(batch.candidates)), np.zeros(len(batch.candidates))
    for part in batch.parts():
        total += np.nansum(part.probability, axis=0)
        count += np.isfinite(part.probability).sum(axis=0)
    return total / np.where(count > 0, count, np.nan)


def _histograms(batch: Batch) -> list[dict[str, Any]]:
    values = batch.log_evidences()
    first = batch.candidates[0]
    found = []
    for k, name in enumerate(batch.candidates[1:], start=1):
        factor = values[:, k] - values[:, 0]
        counts = np.histogram(factor[np.isfinite(factor)], bins=EDGES)[0]
        found.append({"candidate": name, "against": first, "edges": list(EDGES),
                      "counts": counts.tolist()})  # fmt: skip
    return found


def _bad(batch: Batch) -> list[dict[str, Any]]:
    found: list[dict[str, Any]] = []
    for part in batch.parts():
        codes = part.status.max(axis=1)
        for place, note in part.notes.items():
            if len(found) == BAD_SHOWN:
                return found
            known = int(codes[place]) in (Finding.BAD_DATA, Finding.WRONG_COLUMNS)
            if known:
                found.append({"data_set": str(part.names[place]), "note": note})
    return found
