"""blend(): predictions averaged over the candidates by their probabilities.

The mean is sum w_k m_k; the variance is sum w_k v_k within the candidates plus
sum w_k (m_k - mean)^2 between them (Hoeting, Madigan, Raftery & Volinsky 1999, Statistical Science
14:382, section 1). Intervals are quantiles of the mixture of all candidates' draws.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping
from typing import Any

import numpy as np

from evidence.complaints import DataError, DeclarationError, sentence
from evidence.estimate import Approximation
from evidence.model import Model
from evidence.prediction.mixture import Share, mix
from evidence.simulation import Columns, finite_draws, respond
from evidence.tables import NamedArrays, named_arrays
from evidence.weighing import Weighing

__all__ = ["COLUMNS", "Blend", "blend"]

NEGLIGIBLE = 1e-6  # probability below which a candidate is not drawn from
COLUMNS = {
    "column": "response column",
    "row": "row of the new data, from 0 on",
    "mean": "expected value, averaged over the candidates by their probabilities [unit of the "
    "column]",
    "sd": "standard deviation of the expected value: within and between candidates [unit]",
    "low": "lower end of the interval of the expected value [unit]; empty without predict=",
    "high": "its upper end [unit]",
    "within": "variance of the expected value within candidates, averaged [unit squared]",
    "between": "variance of the candidates' means around the blend's [unit squared]",
    "share_between": "between over within plus between [0 to 1]",
    "new_sd": "standard deviation of a new observation: its scatter within the candidates, and "
    "between [unit]; empty without simulate=",
    "new_low": "lower end of the interval of a new observation [unit]",
    "new_high": "its upper end [unit]",
    "new_within": "variance of a new observation within candidates, averaged [unit squared]",
}


@dataclasses.dataclass(frozen=True, kw_only=True, eq=False, repr=False)
class Blend:
    """Predictions averaged over the candidates.

    Attributes
    ----------
    probabilities : dict
        Name -> probability with which a candidate counts; they add up to 1.
    refined : tuple of str
        Candidates whose draws are those that the audit accepted; the others' are Gaussian.
    left_out : dict
        Name -> why a candidate does not count.
    columns : dict
        Response column -> the columns of COLUMNS from "mean" on, each (rows,), and "means":
        name -> (rows,) expected value of each candidate.
    level : float
        Probability inside the intervals.
    failed : dict
        Name -> draws with nan or inf, left out.
    draws, seed : int, int
    """

    probabilities: dict[str, float]
    refined: tuple[str, ...]
    left_out: dict[str, str]
    columns: dict[str, dict[str, Any]]
    level: float
    failed: dict[str, int]
    draws: int
    seed: int
    data: NamedArrays = dataclasses.field(repr=False)
    units: Mapping[str, str] = dataclasses.field(default_factory=dict, repr=False)

    def table(self) -> Any:
        """One row per response column and row of the new data, as a pandas table."""
        import pandas as pd

        names = list(COLUMNS)[2:]
        frames = []
        for column, found in self.columns.items():
            rows = len(found["mean"])
            front = {"column": [column] * rows, "row": np.arange(rows)}
            frames.append(pd.DataFrame({**front, **{name: found[name] for name in names}}))
        frame = pd.concat(frames, ignore_index=True)
        frame.attrs["columns"] = dict(COLUMNS)
        return frame

    def means(self) -> Any:
        """Expected value of each candidate beside the blend's, as a pandas table."""
        import pandas as pd

        frames = []
        for column, found in self.columns.items():
            rows = len(found["mean"])
            front = {"column": [column] * rows, "row": np.arange(rows), "blend": found["mean"]}
            frames.append(pd.DataFrame({**front, **found["means"]}))
        return pd.concat(frames, ignore_index=True)

    @property
    def summary(self) -> str:
        """One sentence or two: who counts, and how much of the variance lies between them."""
        ordered = sorted(self.probabilities.items(), key=lambda pair: -pair[1])
        who = ", ".join(f"{name} {chance:.3f}" for name, chance in ordered[:4])
        who += f" and {len(ordered) - 4} more" if len(ordered) > 4 else ""
        text = f"Prediction averaged over {who}"
        for column, found in self.columns.items():
            total = found["within"] + found["between"]
            share = np.mean(found["between"]) / np.mean(total) if np.mean(total) > 0 else 0.0
            text += f"; {share:.0%} of the variance of {column!r} lies between the candidates"
        if self.left_out:
            text += ". Left out: " + "; ".join(f"{n} ({w})" for n, w in self.left_out.items())
        if any(self.failed.values()):
            bad = ", ".join(f"{n} {k}" for n, k in self.failed.items() if k)
            text += f". Draws with nan or inf, left out: {bad} of {self.draws}"
        return f"{text}."

    def plot(self) -> Any:
        """The blend with its bands, and each candidate's mean, as a matplotlib figure.

        Raises
        ------
        ImportError
            matplotlib is not installed.
        """
        from evidence.prediction.pictures import draw_blend

        return draw_blend(self)

    def __repr__(self) -> str:
        lines = [f"Blend: {self.summary}"]
        for column, found in list(self.columns.items())[:2]:
            for row in range(min(3, len(found["mean"]))):
                lines.append(
                    f"  {column}[{row}]: {found['mean'][row]:.5g}, sd {found['sd'][row]:.3g}, "
                    f"new {found['new_low'][row]:.5g} to {found['new_high'][row]:.5g}"
                )
        return "\n".join([*lines, "  all rows: .table()"])


def blend(
    weighing: Weighing,
    new_data: Any = None,
    *,
    draws: int = 2000,
    level: float = 0.95,
    seed: int = 0,
) -> Blend:
    """Predict new observations from all candidates, each by its probability.

    Parameters
    ----------
    weighing : Weighing
        Of this session: a saved one holds no draws.
    new_data : mapping of arrays, DataFrame, xarray Dataset, optional
        What `predict` and `simulate` see, the response left out; the data that were weighed
        where nothing is given.
    draws : int
        Draws from the posterior of each candidate.
    level : float
        Probability inside the intervals.
    seed : int
        The same seed gives the same digits.

    Returns
    -------
    Blend

    Raises
    ------
    DeclarationError
        A saved weighing, a candidate that counts and declares neither `predict` nor `simulate`,
        or candidates that predict different columns.
    DataError
        No candidate has a probability, or every draw of one gave nan or inf.
    """
    _check(weighing, draws, level, seed)
    chances, left_out = _who_counts(weighing)
    if not chances:
        raise DataError("no candidate has a probability, so there is nothing to average over.")
    arrays = _new_data(weighing, new_data, next(iter(chances)))
    shares, failed, refined = [], {}, []
    for name, chance in chances.items():
        result = weighing[name]
        values, better = _posterior_draws(result, draws, seed)
        refined += [name] if better else []
        place = list(weighing).index(name)
        found = respond(_model(result), values, arrays, draws, seed=[seed, 0xB1, place])
        share, failed[name] = _share(name, chance, found, draws)
        shares.append(share)
    units = {k: v for name in chances for k, v in _model(weighing[name]).units.items()}
    return Blend(
        probabilities=chances,
        refined=tuple(refined),
        left_out=left_out,
        columns=mix(shares, level),
        level=float(level),
        failed=failed,
        draws=int(draws),
        seed=int(seed),
        data=arrays,
        units=units,
    )


def _check(weighing: Any, draws: Any, level: Any, seed: Any) -> None:
    if not isinstance(weighing, Weighing):
        raise DeclarationError(
            sentence("blend needs a weighing", type(weighing).__name__,
                     "Type: ev.blend(ev.weigh(models, data), new_data)")
        )  # fmt: skip
    for what, value, least in (("draws", draws, 2), ("seed", seed, 0)):
        whole = isinstance(value, int | np.integer) and not isinstance(value, bool)
        if not whole or value < least:
            raise DeclarationError(
                sentence(f"{what} must be a whole number from {least} on", repr(value))
            )
    if not isinstance(level, int | float | np.number) or not 0.0 < level < 1.0:
        raise DeclarationError(sentence("level must lie between 0 and 1", repr(level)))


def _who_counts(weighing: Weighing) -> tuple[dict[str, float], dict[str, str]]:
    """Probabilities that add up to 1, and why the others are left out."""
    chances, left_out = {}, {}
    for name, chance in weighing.probabilities.items():
        if not np.isfinite(chance):
            left_out[name] = "failed"
        elif chance < NEGLIGIBLE:
            left_out[name] = f"probability below {NEGLIGIBLE:g}"
        else:
            chances[name] = float(chance)
    total = sum(chances.values())
    return {name: chance / total for name, chance in chances.items()}, left_out


def _new_data(weighing: Weighing, new_data: Any, first: str) -> NamedArrays:
    problem = weighing[first].problem
    if problem is None:
        raise DeclarationError(
            "a saved weighing holds tables and no draws, so nothing can be predicted from it. "
            "Weigh the study again."
        )
    return problem.arrays if new_data is None else named_arrays(new_data)


def _model(result: Approximation) -> Model:
    return result.problem.model


def _posterior_draws(result: Approximation, draws: int, seed: int) -> tuple[Columns, bool]:
    """Draws in natural units, and whether they are those that the audit accepted."""
    if result.dimension == 0:
        return {}, False
    if result.posterior is None:
        raise DataError(
            f"{result.name!r} has a probability but no smooth peak to draw from, so the blend "
            "cannot be made. Weigh without it, or declare it in other parameters."
        )
    refined = result.posterior.refined
    chosen = result.posterior if refined is None else refined
    return chosen.draws(draws, seed=seed), refined is not None


def _share(name: str, chance: float, found: Mapping[str, Columns], draws: int) -> tuple[Share, int]:
    if not found:
        raise DeclarationError(
            sentence(
                f"{name!r} cannot predict",
                "neither predict= nor simulate=",
                "Type: ev.Model(..., predict=lambda p, data: {'y': ...})",
            )
        )
    usable, reason = np.ones(draws, bool), ""
    for columns in found.values():
        fine, reasons = finite_draws(columns, draws)
        reason = reason or next((r for r in reasons if r), "")
        usable &= fine
    if usable.sum() < 2:
        raise DataError(
            f"the predictions of {name!r} are nan or inf at nearly every draw ({reason}), so the "
            "blend cannot be made."
        )
    kept = {part: {k: x[usable] for k, x in c.items()} for part, c in found.items()}
    return Share(name, chance, kept.get("expected", {}), kept.get("simulated", {})), int(
        (~usable).sum()
    )
