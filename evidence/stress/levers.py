"""The numbers of a declaration that may be moved, in the trade's words and in comparable steps.

Scales (sd, width, rate, shape, ...) and constants move in log units: a step of 1 multiplies by
e. Locations move in prior sd. An array moves as a whole: all entries by the same factor, or each
by so many of its own prior sd; entry by entry is what :func:`evidence.evidence_function` gives.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Callable
from typing import Any

import jax
import numpy as np

from evidence.distributions.base import Distribution
from evidence.model import Model

__all__ = ["FACTOR_LIMIT", "Lever", "find_levers"]

FACTOR_LIMIT = 100.0  # beyond which a prior is not a neighbour of the declared one any more
PLACES = ("mean", "location", "log_mean", "loc")
BOUNDS = ("low", "high", "lower_bound", "upper_bound")
POSITIVE = ("positive", "nonnegative")
WORDS = {"a": "shape a", "b": "shape b", "df": "degrees of freedom"}


@dataclasses.dataclass(frozen=True, kw_only=True)
class Lever:
    """One number, or one array of numbers, of a candidate's declaration.

    Attributes
    ----------
    candidate, parameter, field : str
        Whose it is; for a constant the field is "constant".
    label : str
        "sd of the prior on rate", "constant g".
    unit : str
        Of its value, in the user's words; empty where none was declared.
    kind : str
        "scale", "location" or "constant".
    value : ()
        As declared [unit]; nan for an array.
    step : ()
        One prior sd [unit] for a location, nan for an array of different ones; 1 otherwise.
    entries : int
        How many numbers move together.
    width : ()
        Power with which the prior's width follows it: 1 for an sd, -1 for the rate of an
        exponential prior, 0 where it is no scale of the prior's width.
    """

    candidate: str
    parameter: str
    field: str
    label: str
    unit: str
    kind: str
    value: float
    step: float
    entries: int
    width: int
    move: Callable[[Any, float], Any] = dataclasses.field(repr=False, compare=False)

    @property
    def name(self) -> str:
        """Short name, as in ``over=["rate.sd", "g"]``."""
        return self.parameter if self.kind == "constant" else f"{self.parameter}.{self.field}"

    def moved(self, hyper: dict[str, Any], step: float) -> dict[str, Any]:
        """The hyperparameters with this one moved by so many log units or prior sd."""
        kind = "constants" if self.kind == "constant" else "priors"
        values = {**hyper[kind], self.parameter: self.move(hyper[kind][self.parameter], step)}
        return {**hyper, kind: values}

    def value_at(self, step: float) -> float:
        """Its value after a move [unit]; nan for an array."""
        if self.kind == "location":
            return self.value + step * self.step
        return self.value * float(np.exp(step))

    def per_unit(self, slope: float) -> float:
        """A derivative per step as one per unit of the value; nan for an array."""
        return slope / (self.step if self.kind == "location" else self.value)


def find_levers(model: Model) -> tuple[tuple[Lever, ...], tuple[str, ...]]:
    """Everything of a candidate that may be moved, and a sentence for each thing that may not.

    Parameters
    ----------
    model : Model
    """
    if model.bare:
        return (), (f"{model.name} is a bare log posterior: its priors are not known by name",)
    found: list[Lever] = []
    refused: list[str] = []
    for parameter, prior in model.priors.items():
        if not isinstance(prior, Distribution):
            refused.append(
                f"the prior on {parameter} of {model.name} is a function: write its numbers as "
                'constants= and use p["name"] in it to have them moved'
            )
        elif not prior.hyperparameters:
            refused.append(
                f"the prior on {parameter} of {model.name}, {type(prior).__name__}, keeps copies "
                "of its numbers that would not follow: declare it with a distribution of "
                "evidence.distributions to have them moved"
            )
        else:
            levers, left_out = _of_prior(model, parameter, prior)
            found += levers
            refused += left_out
    for name, value in model.constants.items():
        if np.any(value != 0):
            found.append(_constant(model, name, value))
        else:
            refused.append(f"constant {name} of {model.name} is zero and has no scale to move by")
    return tuple(found), tuple(refused)


def _constant(model: Model, name: str, value: np.ndarray) -> Lever:
    return Lever(
        candidate=model.name,
        parameter=name,
        field="constant",
        label=f"constant {name}",
        unit=model.units.get(name, ""),
        kind="constant",
        value=_single(value),
        step=1.0,
        entries=int(np.size(value)),
        width=0,
        move=lambda value, step: value * np.exp(step),
    )


def _of_prior(model: Model, parameter: str, prior: Any) -> tuple[list[Lever], list[str]]:
    fields = [field for field, _ in prior.hyperparameters]
    if fields == ["low", "high"]:
        return _of_bounds(model, parameter, prior), []
    found, refused = [], []
    for field, label in prior.hyperparameters:
        last = field.split(".")[-1]
        if last in BOUNDS or not (last in PLACES or _is_scale(prior, field)):
            refused.append(
                f"{label} of the prior on {parameter} of {model.name} is left as it is: neither "
                "a scale nor a location"
            )
            continue
        found.append(_of_field(model, parameter, prior, field, label))
    return found, refused


def _of_field(model: Model, parameter: str, prior: Any, field: str, label: str) -> Lever:
    value = np.asarray(_leaf(prior, field), dtype=np.float64)
    place = field.split(".")[-1] in PLACES
    matrix = field == "covariance"
    shift = _prior_sd(prior, field) if place else np.ones(())
    step = np.unique(shift)

    def move(prior: Any, amount: float) -> Any:
        leaf = np.asarray(_leaf(prior, field), dtype=np.float64)
        factor = np.exp(2 * amount if matrix else amount)
        return _with(prior, {field: leaf + amount * shift if place else leaf * factor})

    word = "sd (all together)" if matrix else WORDS.get(label, label.replace("_", " "))
    return Lever(
        candidate=model.name,
        parameter=parameter,
        field=field,
        label=f"{word} of the prior on {parameter}",
        unit="" if matrix else _unit(model.units.get(parameter, ""), field),
        kind="location" if place else "scale",
        value=np.nan if matrix else _single(value),
        step=float(step[0]) if len(step) == 1 else np.nan,
        entries=int(value.shape[-1] if matrix else np.size(value)),
        width=_width(field),
        move=move,
    )


def _of_bounds(model: Model, parameter: str, prior: Any) -> list[Lever]:
    """A uniform prior by its centre and its width, which keep low below high."""
    low, high = (np.asarray(_leaf(prior, name), np.float64) for name in ("low", "high"))
    sd = np.unique((high - low) / np.sqrt(12.0))

    def shifted(prior: Any, amount: float) -> Any:
        low, high = (np.asarray(_leaf(prior, name), np.float64) for name in ("low", "high"))
        by = amount * (high - low) / np.sqrt(12.0)
        return _with(prior, {"low": low + by, "high": high + by})

    def widened(prior: Any, amount: float) -> Any:
        low, high = (np.asarray(_leaf(prior, name), np.float64) for name in ("low", "high"))
        middle, half = (low + high) / 2, np.exp(amount) * (high - low) / 2
        return _with(prior, {"low": middle - half, "high": middle + half})

    common = {
        "candidate": model.name,
        "parameter": parameter,
        "unit": model.units.get(parameter, ""),
        "entries": int(np.size(high - low)),
    }
    return [
        Lever(field="centre", label=f"centre of the prior on {parameter}", kind="location",
              value=_single((low + high) / 2), step=float(sd[0]) if len(sd) == 1 else np.nan,
              width=0, move=shifted, **common),
        Lever(field="width", label=f"width of the prior on {parameter}", kind="scale",
              value=_single(high - low), step=1.0, width=1, move=widened, **common),
    ]  # fmt: skip


def _leaf(prior: Any, field: str) -> Any:
    structure = getattr(prior, "structure", None)
    if structure is None:
        return getattr(prior, field)
    return prior.leaves[structure.names.index(field)]


def _with(prior: Any, changed: dict[str, Any]) -> Any:
    """A prior with some of its numbers replaced, unchecked."""
    keyed, structure = jax.tree_util.tree_flatten_with_path(prior)
    leaves = [changed.get(path[-1].name, leaf) for path, leaf in keyed]
    return jax.tree_util.tree_unflatten(structure, leaves)


def _is_scale(prior: Any, field: str) -> bool:
    """Whether a hyperparameter must be positive, by its declaration."""
    if field == "covariance":
        return True
    for one in getattr(prior, "_leaf_fields", ()):
        if one.name == field:
            return one.metadata["check"] in POSITIVE
    foreign = getattr(prior, "distribution", None)
    for part in field.split(".")[:-1]:
        foreign = getattr(foreign, part, None)
    asked = getattr(foreign, "arg_constraints", {}).get(field.split(".")[-1])
    return "positive" in type(asked).__name__.lower() or "GreaterThan" in type(asked).__name__


def _prior_sd(prior: Any, field: str) -> np.ndarray:
    """Prior sd [shape of the location] in the location's own unit, or the scale that is there."""
    shape = np.shape(_leaf(prior, field))
    if hasattr(prior, "covariance"):
        sd = np.sqrt(np.diagonal(np.asarray(prior.covariance), axis1=-2, axis2=-1))
        return np.broadcast_to(sd, shape)
    for name in ("sd", "log_sd", "scale"):
        if hasattr(prior, name):
            sd = np.asarray(getattr(prior, name), dtype=np.float64)
            return np.broadcast_to(sd, shape) if sd.ndim <= len(shape) else np.mean(sd)
    # of a foreign prior the spread in the unconstrained coordinate, in which it lies
    spread = prior.centre_and_spread()[1]
    return np.broadcast_to(spread, shape) if np.ndim(spread) <= len(shape) else np.mean(spread)


def _unit(unit: str, field: str) -> str:
    if field in ("log_mean", "log_sd"):
        return f"log {unit}" if unit not in ("", "1") else ""
    if field in ("alpha", "a", "b", "df", "concentration"):
        return ""
    if field == "rate":
        return f"1/({unit})" if unit not in ("", "1") else ""
    return unit


def _width(field: str) -> int:
    """How the prior's width follows a scale: 1, -1, or 0 where it changes the shape instead."""
    last = field.split(".")[-1]
    if last == "rate":
        return -1
    return int(last in ("sd", "log_sd", "scale", "covariance"))


def _single(value: Any) -> float:
    value = np.asarray(value, dtype=np.float64)
    return float(value.item()) if value.size == 1 else np.nan
