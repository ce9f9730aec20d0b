"""Empirical Bayes: the hyperparameters under which the log evidence is largest.

The log evidence is climbed with its exact gradient by L-BFGS (Liu & Nocedal 1989); positive
numbers move in log units. What comes out has been fitted to the data: the evidence at the maximum
is that of a prior chosen by the same data, and says less for the candidate than the evidence of a
prior stated beforehand (Kass & Steffey 1989, J. Am. Stat. Assoc. 84:717).
"""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Sequence
from typing import TYPE_CHECKING, Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np

from evidence.compiling import Program, float64
from evidence.complaints import DeclarationError, near_name, sentence
from evidence.derivatives import evidence_function
from evidence.distributions.base import Distribution
from evidence.implicit import Scale, evidences
from evidence.model import Model
from evidence.problem import Density

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["HyperFit", "fit_hyperparameters"]

STEPS = 200
SLOPE = 1e-8  # largest derivative [nats per log unit or unit] at which the climb has ended
RESTING = 1e-5  # the same, at which it counts as having come to rest
ARMIJO = 1e-4
SMALLEST = 1e-10  # part of a step
POSITIVE = ("positive", "nonnegative")
COLUMNS = {
    "hyperparameter": 'short name: "rate.sd" for the sd of the prior on rate, or a constant',
    "entry": "index within an array; empty for a number",
    "declared": "value in the declaration [unit]",
    "fitted": "value at the largest log evidence [unit]",
    "slope": "derivative of the log evidence there, per log unit of a positive number [nats]",
}


@dataclasses.dataclass(frozen=True, kw_only=True, eq=False, repr=False)
class HyperFit:
    """The maximum of a log evidence over hyperparameters.

    Attributes
    ----------
    model : Model
        The candidate with the fitted numbers.
    declared, fitted : dict
        Short name -> number or array, before and after.
    log_evidence, declared_log_evidence : (), ()
        By Laplace's method, at the fitted and the declared numbers [nats].
    slopes : dict
        Derivatives at the end, per log unit of a positive number [nats].
    steps : int
        Steps of the climb.
    path : (steps,)
        Log evidence on the way [nats].
    converged : bool
        Whether every derivative vanishes at the end.
    """

    model: Model
    declared: dict[str, Any]
    fitted: dict[str, Any]
    log_evidence: float
    declared_log_evidence: float
    slopes: dict[str, Any]
    steps: int
    path: np.ndarray
    converged: bool

    def table(self) -> Any:
        """One row per number as a pandas table; see ``table().attrs["columns"]``."""
        import pandas as pd

        rows = []
        for name, value in self.fitted.items():
            for index in np.ndindex(np.shape(value)):
                entries = (np.asarray(x[name])[index] for x in (self.declared, self.slopes))
                before, slope = map(float, entries)
                rows.append(
                    {
                        "hyperparameter": name,
                        "entry": str(list(index)) if index else "",
                        "declared": before,
                        "fitted": float(np.asarray(value)[index]),
                        "slope": slope,
                    }
                )
        frame = pd.DataFrame(rows, columns=list(COLUMNS))
        frame.attrs["columns"] = dict(COLUMNS)
        return frame

    @property
    def summary(self) -> str:
        """One sentence."""
        shown = [f"{name} {_brief(value)}" for name, value in list(self.fitted.items())[:4]]
        more = f" and {len(self.fitted) - 4} more" if len(self.fitted) > 4 else ""
        end = "" if self.converged else "; the climb did not come to rest: no maximum is near"
        return (
            f"{self.model.name}: log evidence {self.log_evidence:.4f} nats at {', '.join(shown)}"
            f"{more}, from {self.declared_log_evidence:.4f} as declared{end}"
        )

    def plot(self) -> Figure:
        """Draw the log evidence on the way up.

        Raises
        ------
        ImportError
            matplotlib is not installed.
        """
        from evidence.report.figures.canvas import BLUE, new_figure, picture

        @picture
        def draw() -> Figure:
            figure, (axes,) = new_figure(height=1.8)
            axes.plot(np.arange(len(self.path)), self.path, "o-", color=BLUE, markersize=2.5)
            axes.set_xlabel("step")
            axes.set_ylabel("log evidence [nats]")
            return figure

        return draw()

    def __repr__(self) -> str:
        lines = [self.summary]
        for name, value in list(self.fitted.items())[:8]:
            lines.append(f"  {name}: {_brief(value)}, declared {_brief(self.declared[name])}")
        return "\n".join(lines)


def fit_hyperparameters(
    model: Model,
    data: Any = None,
    *,
    over: Sequence[str],
    modes: str = "leading",
    second_order: bool = False,
) -> HyperFit:
    """Maximise the log evidence over named hyperparameters and constants.

    Parameters
    ----------
    model : Model
    data : None, mapping of arrays, DataFrame or xarray Dataset
    over : sequence of str
        "rate.sd" for the sd of the prior on rate; the name of a constant for that. Arrays move
        entry by entry. What must be positive (by the prior's declaration, or a constant that is
        declared above zero) is moved in log units.
    modes, second_order
        As for :func:`evidence.evidence_function`.

    Raises
    ------
    DeclarationError
        Nothing to move, or a name that is not there.
    DataError
        The data hold nan or text.
    ArithmeticError
        No search found a smooth peak at the declared numbers.

    Notes
    -----
    Where the log evidence has no maximum (a variance that wants to be zero) the climb runs until
    its steps are used up, and ``converged`` is False.
    """
    function = evidence_function(model, data, modes=modes, second_order=second_order)
    free = _free(model, over)
    hyper = function.hyperparameters
    first = np.concatenate([_to_line(one, hyper) for one in free])
    names = ",".join(one.name for one in free)
    program = function.problem.program(
        f"hyperfit_{second_order}_{names}", lambda density: _slope(density, free, second_order)
    )
    scale = Scale(function.problem.centre, function.problem.spread)

    def height(line: np.ndarray) -> tuple[float, np.ndarray]:
        value, slope = program(line, function.starts, scale)
        return float(value), np.asarray(slope)

    end = _climb(height, first)
    fitted = _placed(hyper, free, end.line, np)
    moved = _with_numbers(model, fitted)
    return HyperFit(
        model=moved,
        declared={one.name: _value(one, hyper) for one in free},
        fitted={one.name: _value(one, fitted) for one in free},
        log_evidence=float(function(_only_given(fitted, hyper))),
        declared_log_evidence=float(function()),
        slopes=_split(free, end.slope),
        steps=len(end.path) - 1,
        path=np.array(end.path),
        converged=bool(np.max(np.abs(end.slope), initial=0.0) < RESTING),
    )


@dataclasses.dataclass(frozen=True)
class Free:
    """A number or an array that is moved, and where it lies on the line of all of them."""

    parameter: str
    field: str
    shape: tuple[int, ...]
    positive: bool

    @property
    def name(self) -> str:
        """Short name, as in ``over=``."""
        return f"{self.parameter}.{self.field}" if self.field else self.parameter

    @property
    def size(self) -> int:
        """How many numbers."""
        return int(np.prod(self.shape))


def _free(model: Model, over: Any) -> tuple[Free, ...]:
    known = _known(model)
    names = [over] if isinstance(over, str) else list(over)
    if not names:
        raise DeclarationError(
            sentence("over must name what is fitted", "nothing", f"There are: {', '.join(known)}")
        )
    for name in names:
        if name not in known:
            raise DeclarationError(
                f"{name!r} is no hyperparameter of {model.name!r} that can be fitted. There are: "
                f"{', '.join(known) or 'none'}.{near_name(str(name), known)} A prior given as a "
                "function is fitted through constants."
            )
    return tuple(known[name] for name in dict.fromkeys(names))


def _known(model: Model) -> dict[str, Free]:
    """Everything that may be fitted, by its short name."""
    found = []
    for parameter, prior in model.priors.items():
        names = {f.name: f.metadata["check"] for f in getattr(prior, "_leaf_fields", ())}
        for field, _ in prior.hyperparameters if isinstance(prior, Distribution) else ():
            if field in names:
                shape = np.shape(getattr(prior, field))
                found.append(Free(parameter, field, shape, names[field] in POSITIVE))
    for name, value in model.constants.items():
        found.append(Free(name, "", np.shape(value), bool(np.all(np.asarray(value) > 0))))
    return {one.name: one for one in found}


def _value(one: Free, hyper: Any) -> Any:
    if not one.field:
        return hyper["constants"][one.parameter]
    return getattr(hyper["priors"][one.parameter], one.field)


def _to_line(one: Free, hyper: Any) -> np.ndarray:
    value = np.ravel(np.asarray(_value(one, hyper), dtype=np.float64))
    return np.log(value) if one.positive else value


def _split(free: Sequence[Free], line: np.ndarray) -> dict[str, Any]:
    ends = np.cumsum([one.size for one in free])[:-1]
    pieces = np.split(line, ends)
    return {x.name: np.reshape(p, x.shape) for x, p in zip(free, pieces, strict=True)}


def _placed(hyper: Any, free: Sequence[Free], line: Any, xp: Any) -> dict[str, Any]:
    """The hyperparameters with those on the line (k,) in their places."""
    priors, constants = dict(hyper["priors"]), dict(hyper["constants"])
    first = 0
    for one in free:
        piece = xp.reshape(line[first : first + one.size], one.shape)
        first += one.size
        value = xp.exp(piece) if one.positive else piece
        if not one.field:
            constants[one.parameter] = value
        else:
            priors[one.parameter] = _replaced(priors[one.parameter], one.field, value)
    return {**hyper, "priors": priors, "constants": constants}


def _replaced(prior: Any, field: str, value: Any) -> Any:
    keyed, structure = jax.tree_util.tree_flatten_with_path(prior)
    leaves = [value if path[-1].name == field else leaf for path, leaf in keyed]
    return jax.tree_util.tree_unflatten(structure, leaves)


def _slope(density: Density, free: tuple[Free, ...], second_order: bool) -> Callable[..., Any]:
    def evidence_hyperfit(line: Any, starts: Any, scale: Any, hyper: Any, data: Any) -> Any:
        def height(line: Any) -> Any:
            moved = _placed(hyper, free, line, jnp)
            return evidences(density, starts, scale, moved, data, second_order=second_order).total

        return jax.value_and_grad(height)(line)

    return evidence_hyperfit


class Climb(NamedTuple):
    """Where a climb ended: the line (k,), the slopes (k,) there, and the heights on the way."""

    line: np.ndarray
    slope: np.ndarray
    path: list[float]


def _climb(height: Callable[[np.ndarray], tuple[float, np.ndarray]], first: np.ndarray) -> Climb:
    """L-BFGS steps, each halved until the height rises by the rule of Armijo (1966)."""
    directions = _Directions(first)
    line, (value, slope) = first, height(first)
    path = [value]
    while len(path) <= STEPS and np.isfinite(value) and np.max(np.abs(slope)) > SLOPE:
        direction = directions(slope, line)
        if not slope @ direction > 0:
            direction = slope
        size = 1.0
        while size > SMALLEST:
            there = line + size * direction
            new_value, new_slope = height(there)
            enough = value + ARMIJO * size * (slope @ direction)
            if np.isfinite(new_value) and np.all(np.isfinite(new_slope)) and new_value >= enough:
                break
            size *= 0.5
        else:  # as high as rounding allows
            break
        line, value, slope = there, new_value, new_slope
        path.append(value)
    return Climb(line, slope, path)


class _Directions:
    """Directions of L-BFGS by optax, which sees minus the height; one small program."""

    def __init__(self, first: np.ndarray) -> None:
        import optax

        self._solver = optax.scale_by_lbfgs(memory_size=10)
        with float64():
            self._state = jax.jit(self._solver.init)(first)
        self._update = Program(lambda slope, state, line: self._solver.update(slope, state, line))

    def __call__(self, slope: np.ndarray, line: np.ndarray) -> np.ndarray:
        update, self._state = self._update(-slope, self._state, line)
        return -np.asarray(update)


def _only_given(fitted: Any, hyper: Any) -> dict[str, Any]:
    """Without the supports, which no fit moves."""
    return {kind: fitted[kind] for kind in hyper if kind != "supports"}


def _with_numbers(model: Model, hyper: Any) -> Model:
    """The candidate with other numbers."""
    priors = {name: hyper["priors"].get(name, prior) for name, prior in model.priors.items()}
    return Model(
        model.name,
        priors,
        model.log_likelihood,
        constants=hyper["constants"],
        start=model.start or None,
        simulate=model.simulate,
        predict=model.predict,
        units=model.units,
        notes=model.notes,
    )


def _brief(value: Any) -> str:
    return np.array2string(np.asarray(value), precision=4, threshold=6).replace("\n", " ")
