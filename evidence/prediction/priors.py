"""prior_predictive(): data drawn from a candidate before it has seen any.

Priors that look harmless parameter by parameter may say absurd things about data; a log evidence
is then small for a reason that has nothing to do with the candidate's idea (Box 1980, Journal of
the Royal Statistical Society A 143:383).
"""

from __future__ import annotations

import dataclasses
import functools
import warnings
from collections.abc import Callable, Mapping
from typing import Any

import numpy as np

from evidence.complaints import DataError, DeclarationError, EvidenceWarning, sentence
from evidence.model import Model
from evidence.simulation import draw_prior, finite_draws, respond
from evidence.tables import NamedArrays, named_arrays

__all__ = ["COLUMNS", "PriorPredictive", "prior_predictive"]

BAND, MIDDLE = (0.025, 0.975), (0.25, 0.75)
OUTER = 0.005  # beyond this tail on either side a feature lies outside nearly all draws
MOST_OUTSIDE = 0.5  # share of rows that may lie outside their own central 99 %
FAR_TOO_WIDE = 100.0  # times the observed range, from which the width is told of
COLUMNS = {
    "column": "response column",
    "feature": "what is compared, a number per data set",
    "observed": "in the data [unit of the column]; empty without the column",
    "low": "2.5 % quantile over data sets drawn from the prior [unit of the column]",
    "median": "median over them [unit of the column]",
    "high": "97.5 % quantile over them [unit of the column]",
    "share_above": "share of drawn data sets with a larger value, ties counting one half",
    "outside": "whether the observed value lies outside the central 99 % of the drawn ones",
}
FEATURES: dict[str, Callable[[np.ndarray], np.ndarray]] = {
    "mean": lambda x: np.mean(x, axis=-1),
    "sd": lambda x: np.std(x, axis=-1),
    "smallest value": lambda x: np.min(x, axis=-1),
    "largest value": lambda x: np.max(x, axis=-1),
}


@dataclasses.dataclass(frozen=True, kw_only=True, eq=False, repr=False)
class PriorPredictive:
    """Data sets drawn from the prior of one candidate, beside the observed one.

    Attributes
    ----------
    name : str
        The candidate's.
    parameters : dict
        Name -> (draws, *shape) draws from the priors [natural units].
    simulated : dict
        Column -> (draws, ...) data drawn at them, failed draws left out.
    observed : dict
        Column -> (...) of the data; only columns that were simulated in the same shape.
    failed : tuple of (int, str)
        Draws whose data are nan or inf: position and why.
    draws, seed : int, int
        As asked for.
    """

    name: str
    parameters: dict[str, np.ndarray]
    simulated: dict[str, np.ndarray]
    observed: dict[str, np.ndarray]
    failed: tuple[tuple[int, str], ...]
    draws: int
    seed: int
    data: NamedArrays = dataclasses.field(repr=False)
    units: Mapping[str, str] = dataclasses.field(default_factory=dict, repr=False)

    @functools.cached_property
    def rows(self) -> list[dict[str, Any]]:
        """One plain dict per column and feature; the keys are those of COLUMNS."""
        found = []
        for column, drawn in self.simulated.items():
            flat = drawn.reshape(len(drawn), -1).astype(np.float64)
            y = self.observed.get(column)
            for feature, measure in FEATURES.items():
                if feature != "mean" and flat.shape[1] == 1:
                    continue  # of one number all features are the number
                at = None if y is None else float(measure(np.ravel(y).astype(np.float64)))
                found.append({"column": column, "feature": feature, **_compare(at, measure(flat))})
        return found

    def table(self) -> Any:
        """Features of the data against those of draws, as a pandas table."""
        import pandas as pd

        frame = pd.DataFrame(self.rows, columns=list(COLUMNS))
        frame.attrs["columns"] = dict(COLUMNS)
        return frame

    @functools.cached_property
    def rows_outside(self) -> dict[str, float]:
        """Column -> share of observations outside the central 99 % of their own draws."""
        found = {}
        for column, y in self.observed.items():
            low, high = np.quantile(self.simulated[column], [OUTER, 1.0 - OUTER], axis=0)
            found[column] = float(np.mean((y < low) | (y > high)))
        return found

    @property
    def warning(self) -> str | None:
        """What a reader must be told: data that the priors all but exclude; None otherwise."""
        out = [f"the {r['feature']} of {r['column']!r}" for r in self.rows if r["outside"]]
        for column, share in self.rows_outside.items():
            if share > MOST_OUTSIDE:
                out.append(f"{share:.0%} of the rows of {column!r}")
        if not out:
            return None
        return (
            f"the data lie outside nearly all that the priors of {self.name!r} expect: outside 99 "
            f"in 100 drawn data sets lie {_listed(out)}. Its log evidence says that the priors do "
            "not fit the data or their units; look at .plot() and declare priors in the units of "
            "the data"
        )

    @property
    def summary(self) -> str:
        """One or two sentences: where the prior puts the data, and where they are."""
        pieces = [self._range(column) for column in self.simulated]
        text = f"{self.name}, drawn from its priors: " + "; ".join(pieces)
        if self.failed:
            text += (
                f". {len(self.failed)} of {self.draws} draws gave nan or inf and are left out "
                f"(the first: {self.failed[0][1]})"
            )
        return f"{text}. Beware: {self.warning}." if self.warning else f"{text}."

    def _range(self, column: str) -> str:
        low, high = np.quantile(self.simulated[column], BAND)
        text = f"95 % of {column!r} lie between {low:.3g} and {high:.3g}"
        y = self.observed.get(column)
        if y is None:
            return text
        text += f", the observed ones between {np.min(y):.3g} and {np.max(y):.3g}"
        width = float(np.ptp(y))
        if width > 0 and (high - low) / width > FAR_TOO_WIDE:
            text += f", a range {(high - low) / width:.0f} times narrower"
        return text

    def plot(self) -> Any:
        """Bands of drawn data with the observed ones, as a matplotlib figure.

        Raises
        ------
        ImportError
            matplotlib is not installed.
        """
        from evidence.prediction.pictures import draw_prior_predictive

        return draw_prior_predictive(self)

    def __repr__(self) -> str:
        lines = [f"Prior predictive: {self.summary}"]
        lines += [
            f"  {r['column']}, {r['feature']}: {r['low']:.4g} to {r['high']:.4g}"
            + ("" if r["observed"] is None else f", observed {r['observed']:.4g}")
            for r in self.rows[:8]
        ]
        more = len(self.rows) - 8
        return "\n".join([*lines, *([f"  and {more} more: .table()"] if more > 0 else [])])


def prior_predictive(
    model: Model, data: Any = None, *, draws: int = 1000, seed: int = 0
) -> PriorPredictive:
    """Draw data sets from the priors of a candidate and set the observed one beside them.

    Parameters
    ----------
    model : Model
        With `simulate`.
    data : mapping of arrays, DataFrame, xarray Dataset or None
        What `simulate` sees. Where it holds the simulated columns as well, they are compared.
    draws : int
        Data sets to draw.
    seed : int
        The same seed gives the same digits.

    Returns
    -------
    PriorPredictive

    Raises
    ------
    DeclarationError
        The candidate has no `simulate` or no priors, or draws is not a positive whole number.
    DataError
        Every draw gave nan or inf.

    Warns
    -----
    EvidenceWarning
        The data lie outside nearly all of what was drawn.
    """
    check_draws(model, draws, seed)
    arrays = named_arrays(data)
    values = draw_prior(model, arrays, draws, seed=[seed, 0x9D])
    drawn = respond(model, values, arrays, draws, seed=[seed, 0x9E], parts=("simulated",))
    columns = drawn["simulated"]
    usable, reasons = finite_draws(columns, draws)
    if not usable.any():
        raise DataError(
            sentence(
                f"every one of {draws} data sets drawn from the priors of {model.name!r} has nan "
                "or inf",
                reasons[0],
                "Look at simulate= and at the priors' scales",
            )
        )
    found = PriorPredictive(
        name=model.name,
        parameters=values,
        simulated={name: x[usable] for name, x in columns.items()},
        observed={
            name: np.asarray(arrays[name])
            for name, x in columns.items()
            if name in arrays and np.shape(arrays[name]) == x.shape[1:]
        },
        failed=tuple((int(k), reasons[k]) for k in np.flatnonzero(~usable)),
        draws=int(draws),
        seed=int(seed),
        data=arrays,
        units=model.units,
    )
    if found.warning:
        warnings.warn(f"{found.warning}.", EvidenceWarning, stacklevel=2)
    return found


def check_draws(model: Any, draws: Any, seed: Any) -> None:
    """Refuse what cannot be drawn.

    Raises
    ------
    DeclarationError
        No candidate, one without `simulate`, or a number that is none.
    """
    if not isinstance(model, Model):
        raise DeclarationError(
            sentence("prior_predictive needs one candidate", type(model).__name__)
        )
    if model.simulate is None:
        raise DeclarationError(
            sentence(
                f"{model.name!r} cannot draw data",
                "no simulate=",
                "Type: ev.Model(..., simulate=lambda key, p, data: {'y': ...sample(key)})",
            )
        )
    for what, value, least in (("draws", draws, 1), ("seed", seed, 0)):
        whole = isinstance(value, int | np.integer) and not isinstance(value, bool)
        if not whole or value < least:
            raise DeclarationError(
                sentence(f"{what} must be a whole number from {least} on", repr(value))
            )


def _compare(observed: float | None, drawn: np.ndarray) -> dict[str, Any]:
    low, median, high = np.quantile(drawn, [BAND[0], 0.5, BAND[1]])
    found = {"observed": observed, "low": float(low), "median": float(median), "high": float(high)}
    if observed is None:
        return {**found, "share_above": None, "outside": False}
    above = float(np.mean(drawn > observed) + 0.5 * np.mean(drawn == observed))
    return {**found, "share_above": above, "outside": bool(min(above, 1.0 - above) < OUTER)}


def _listed(words: list[str]) -> str:
    shown = words[:4] + ([f"{len(words) - 4} more"] if len(words) > 4 else [])
    return shown[0] if len(shown) == 1 else ", ".join(shown[:-1]) + " and " + shown[-1]
