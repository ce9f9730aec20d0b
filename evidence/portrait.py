"""What the pictures of one candidate need of the live problem, as plain lists of numbers.

Computed only when a picture, a page or a saved JSON asks for it: the densities along directions,
marginals, predictions and predictive checks cost some tenths of a second.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from evidence.complaints import DataError, DeclarationError
from evidence.curvature import combination
from evidence.laplace import Mode
from evidence.posterior import Posterior
from evidence.problem import Problem
from evidence.replicas import check_replicas, prediction_record, replicate

__all__ = ["paint", "profiles"]

REACH = 4.0  # sd on either side of a mode
POINTS = 81
MODES_SHOWN = 3
SKEW_AT = 1.5  # sd at which the two sides of a mode are compared
DIRECTIONS_TRIED = 200
DRAWS = 1000
DIGITS = 6


def paint(problem: Problem | None, modes: Sequence[Mode], posterior: Any) -> dict[str, Any]:
    """Everything that the pictures of one candidate need beyond its record.

    Parameters
    ----------
    problem : Problem or None
        None for a result read back from a file.
    modes : sequence of Mode
        The leading one first.
    posterior : Posterior or None

    Returns
    -------
    dict
        ``profiles``, ``marginals``, ``predictions`` and ``checks``, lists of plain dicts, and
        ``trouble``: why predictions are missing, or an empty text.
    """
    if problem is None:
        return {}
    found: dict[str, Any] = {
        "profiles": profiles(problem, modes),
        "marginals": posterior.marginals() if isinstance(posterior, Posterior) else [],
        "source": "",
        "predictions": [],
        "checks": [],
        "trouble": "",
    }
    if isinstance(posterior, Posterior):
        found |= _predicted(problem, posterior)
    return _rounded(found)


def _predicted(problem: Problem, posterior: Posterior) -> dict[str, Any]:
    """Predictions and checks, by the refined draws where an audit accepted any."""
    accepted = posterior.refined or posterior
    draws = accepted.draws_z(DRAWS)
    try:
        columns = replicate(problem, draws, seed=posterior.seed)
    except (DeclarationError, DataError) as error:
        # the numbers stand without it, and were dear: the report tells instead of ending
        return {"trouble": str(error)}
    return {
        "source": accepted.source,
        "predictions": [prediction_record(problem, column) for column in columns],
        "checks": [check for column in columns for check in check_replicas(problem, column)],
    }


def profiles(problem: Problem, modes: Sequence[Mode]) -> list[dict[str, Any]]:
    """The log density through each of the first modes along two directions, with its Gaussian.

    Returns
    -------
    list of dict
        ``mode`` (1 is the leading one), ``kind``, ``direction`` in the user's words, ``steps``
        (81) [sd], ``log_density`` and ``gaussian`` (81) less the peak [nats]; None where the
        density is zero.
    """
    found = []
    for number, mode in enumerate(modes[:MODES_SHOWN], start=1):
        if not np.all(np.isfinite(mode.axes)) or not len(mode.z):
            continue
        for index, kind in _directions(problem, mode):
            found.append({"mode": number, "kind": kind, **_profile(problem, mode, index)})
    return found


def _directions(problem: Problem, mode: Mode) -> list[tuple[int, str]]:
    """The loosest axis, and of the others the one whose two sides differ most."""
    tried = min(len(mode.z), DIRECTIONS_TRIED)
    steps = SKEW_AT * mode.axes.T[:tried]
    both = problem.batch(np.concatenate([mode.z + steps, mode.z - steps])).reshape(2, tried)
    with np.errstate(invalid="ignore"):
        skew = np.nan_to_num(np.abs(both[0] - both[1]), nan=0.0)
    if tried == 1:
        return [(0, "the only direction")]
    most = int(np.argmax(skew[1:])) + 1
    if skew[0] >= skew[most]:
        return [(0, "loosest, most skewed"), (most, "next in skewness")]
    return [(0, "loosest"), (most, "most skewed")]


def _profile(problem: Problem, mode: Mode, index: int) -> dict[str, Any]:
    column = mode.axes[:, index]
    steps = np.linspace(-REACH, REACH, POINTS)
    values = problem.batch(mode.z + steps[:, None] * column) - mode.log_density
    # an axis cut at three prior sd is shorter than one sd of the Gaussian
    curve = float(column @ mode.hessian @ column)
    return {
        "direction": combination(column / np.linalg.norm(column), problem.names),
        "steps": steps.tolist(),
        "log_density": [float(v) if np.isfinite(v) else None for v in values],
        "gaussian": (-0.5 * curve * steps**2).tolist(),
    }


def _rounded(value: Any) -> Any:
    """Lists of numbers with six digits: what a picture can show."""
    if isinstance(value, dict):
        return {key: _rounded(item) for key, item in value.items()}
    if isinstance(value, list):
        return [_rounded(item) for item in value]
    return float(f"{value:.{DIGITS}g}") if isinstance(value, float) else value
