"""The log evidence as a function of priors, constants, data and weights, for JAX to transform."""

from __future__ import annotations

import dataclasses
import functools
import warnings
from collections.abc import Callable, Mapping
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np

from evidence.compiling import as_numpy, float64
from evidence.complaints import DeclarationError, EvidenceWarning, near_name, sentence
from evidence.implicit import Scale, evidences
from evidence.mode import MATTERS, Findings, find_modes
from evidence.model import Model
from evidence.problem import Density, Problem

__all__ = ["EvidenceFunction", "evidence_function", "leading_starts"]

MODES = ("leading", "all")


def leading_starts(problem: Problem, findings: Findings, modes: str = "all") -> np.ndarray:
    """Modes (m, d) to follow: the leading one, or all within reach of it.

    Raises
    ------
    ArithmeticError
        No search found a smooth peak; the text says how they ended.
    """
    if problem.dim == 0:
        return np.zeros((1, 0))
    peaks = findings.peaks
    if not peaks:
        status = findings.failures[0].outcome
        raise ArithmeticError(f"{problem.model.name}: {status.sentence}. {status.remedy}.")
    kept = [p.z for p in peaks if p.laplace > peaks[0].laplace - MATTERS]
    return np.array(kept[:1] if modes == "leading" else kept)


@dataclasses.dataclass(frozen=True, eq=False, repr=False)
class EvidenceFunction:
    """Log evidence of one candidate as a function that JAX can transform.

    Call it with hyperparameters (all of ``model.hyperparameters()``, or the part that changes),
    data columns, observation weights, or nothing; it returns the log evidence in nats.

    Attributes
    ----------
    problem : Problem
        The candidate on its data.
    starts : (m, d)
        Modes at the declared numbers, from which each search begins [unconstrained].
    second_order : bool
        Whether the second-order term is added.
    """

    problem: Problem
    starts: np.ndarray
    second_order: bool

    @property
    def hyperparameters(self) -> dict[str, Any]:
        """The declared numbers: {"priors": {...}, "constants": {...}, "supports": {...}}."""
        return self.problem.model.hyperparameters()

    def __call__(self, hyperparameters: Any = None, data: Any = None, weights: Any = None) -> Any:
        """Log evidence: () [nats]; nan where the mode is lost.

        Parameters
        ----------
        hyperparameters : pytree, optional
            As ``hyperparameters``, or a part of it; the rest stays as declared.
        data : mapping of arrays, optional
            Columns that replace the declared ones, of the same shapes.
        weights : (n,), optional
            One per log-likelihood term; 1 counts an observation once, 0 leaves it out.

        Raises
        ------
        DeclarationError
            An unknown name, another shape or kind of prior, weights for a scalar log-likelihood.

        Warns
        -----
        EvidenceWarning
            JAX transforms the function outside ``jax.enable_x64(True)``: it then rounds
            arguments and results to float32, whatever is done in between.
        """
        arguments = self._arguments(hyperparameters, data, weights)
        leaves = jax.tree_util.tree_leaves((hyperparameters, data, weights))
        if any(isinstance(leaf, jax.core.Tracer) for leaf in leaves):
            return self._traced(arguments)
        return np.float64(self._program("value", _value)(*self._own(arguments)))

    def value_and_gradient(
        self, hyperparameters: Any = None, data: Any = None, weights: Any = None
    ) -> tuple[float, Any]:
        """Log evidence and its derivatives as NumPy arrays, in float64 in any context.

        Parameters
        ----------
        hyperparameters, data, weights
            As for a call.

        Returns
        -------
        value : float
            [nats]
        gradient : tuple
            Derivatives [nats per unit of the argument] with respect to all hyperparameters, and
            to the weights (None where none were given).
        """
        arguments = self._arguments(hyperparameters, data, weights)
        found = self._program("slope", _value_and_slope)(*self._own(arguments))
        value, gradient = as_numpy(found)
        return float(value), gradient

    def _traced(self, arguments: tuple[Any, Any, Any]) -> Any:
        ambient = jax.dtypes.canonicalize_dtype(np.float64)
        if ambient != np.float64:
            warnings.warn(
                "the evidence is transformed by JAX outside float64, where JAX rounds arguments "
                "and results to 7 digits. Type: with jax.enable_x64(True): ...",
                EvidenceWarning,
                stacklevel=3,
            )
        with float64():
            return self._jitted(*self._own(arguments)).astype(ambient)

    @functools.cached_property
    def _jitted(self) -> Callable[..., Any]:
        # a transformation that is not inside jit would compile each operation by itself
        return jax.jit(_value(self.problem.density, second_order=self.second_order))

    def _own(self, arguments: tuple[Any, Any, Any]) -> tuple[Any, ...]:
        scale = Scale(self.problem.centre, self.problem.spread)
        return self.starts, scale, *arguments

    def _program(self, kind: str, build: Callable[..., Any]) -> Callable[..., Any]:
        order = "second" if self.second_order else "first"
        return self.problem.program(
            f"{kind}_{order}", functools.partial(build, second_order=self.second_order)
        )

    def _arguments(self, hyper: Any, data: Any, weights: Any) -> tuple[Any, Any, Any]:
        problem = self.problem
        declared = self.hyperparameters
        hyper = declared if hyper is None else _merged_hyper(problem.model, declared, hyper)
        columns = dict(problem.arrays)
        if data is not None:
            _known(problem.model, "column", data, columns)
            columns |= {k: _like(f"column {k!r}", v, columns[k]) for k, v in data.items()}
        if weights is not None:
            weights = _like("the weights", weights, np.zeros(self._terms()))
        return hyper, columns, weights

    def _terms(self) -> int:
        if self.problem.terms is None or self.problem.model.bare:
            raise DeclarationError(
                sentence(
                    f"weights need one log-likelihood term per observation of "
                    f"{self.problem.model.name!r}",
                    "a scalar",
                    "Return the terms without adding them up: Normal(...).log_prob(data['y'])",
                )
            )
        return self.problem.terms

    def __repr__(self) -> str:
        order = " with its second-order term" if self.second_order else ""
        return (
            f"log evidence of {self.problem.model.name!r} [nats] by Laplace's method{order}, "
            f"{len(self.starts)} mode{'s' if len(self.starts) > 1 else ''}; call it with "
            "hyperparameters, data, weights"
        )


def evidence_function(
    model: Model, data: Any = None, *, modes: str = "leading", second_order: bool = False
) -> EvidenceFunction:
    """Return the log evidence as a JAX function of hyperparameters, data and weights.

    Parameters
    ----------
    model : Model
    data : None, mapping of arrays, DataFrame or xarray Dataset
    modes : {"leading", "all"}
        Follow the leading mode alone, or add up all that are found at the declared numbers.
    second_order : bool
        Add the second-order term: better by an order where Laplace's method is off, at 2d
        Hessians more for each value.

    Returns
    -------
    EvidenceFunction
        ``f(hyperparameters, data, weights)`` in nats, all optional. The first has the structure
        of ``model.hyperparameters()``: {"priors": {name: distribution}, "constants": {name:
        value}, "supports": {name: support}}; parts may be left out. A prior given as a function
        has no numbers there: write them as ``constants`` and use ``p["name"]`` in the function.
        The derivative with respect to a distribution is a distribution that holds the derivatives.

    Raises
    ------
    DeclarationError
        The candidate or an option is declared wrongly.
    DataError
        The data hold nan or text.
    ArithmeticError
        No search found a smooth peak.

    Notes
    -----
    Composes with ``jax.jit``, ``vmap``, ``grad``, ``jacfwd`` and ``hessian``. Transform it inside
    ``with jax.enable_x64(True):``, since JAX itself rounds what it passes to a transformed
    function. A plain call and ``value_and_gradient`` need no context: they open one for their own
    duration and leave JAX's settings alone.

    Each search begins at a mode of the declared numbers: a mode that appears only elsewhere is
    not seen; :func:`evidence.approximate` looks for modes afresh.

    Examples
    --------
    >>> import jax, evidence as ev
    >>> f = ev.evidence_function(model, data)                            # doctest: +SKIP
    >>> with jax.enable_x64(True):                                       # doctest: +SKIP
    ...     slope = jax.grad(f)({"priors": {"rate": LogNormal(-5.0, 1.0)}})
    >>> slope["priors"]["rate"].log_sd                                   # doctest: +SKIP
    """
    if modes not in MODES:
        raise DeclarationError(
            sentence(f"modes must be one of {', '.join(MODES)}", repr(modes))
            + near_name(str(modes), MODES)
        )
    if not isinstance(model, Model):
        raise DeclarationError(
            sentence(
                "evidence_function needs a candidate made with evidence.Model",
                type(model).__name__,
                "Type: ev.evidence_function(ev.Model(...), data)",
            )
        )
    problem = Problem(model, data)
    findings = find_modes(problem) if problem.dim else Findings(peaks=(), failures=(), starts=0)
    starts = leading_starts(problem, findings, modes)
    return EvidenceFunction(problem, starts, bool(second_order))


def _value(density: Density, *, second_order: bool) -> Callable[..., Any]:
    def evidence_value(
        starts: Any, scale: Any, hyper: Any, data: Any, weights: Any, *declared: Any
    ) -> Any:
        del declared
        found = evidences(density, starts, scale, hyper, data, weights, second_order=second_order)
        return found.total

    return evidence_value


def _value_and_slope(density: Density, *, second_order: bool) -> Callable[..., Any]:
    value = _value(density, second_order=second_order)

    def evidence_slope(
        starts: Any, scale: Any, hyper: Any, data: Any, weights: Any, *declared: Any
    ) -> Any:
        def moved(hyper: Any, weights: Any) -> Any:
            return value(starts, scale, hyper, data, weights, *declared)

        return jax.value_and_grad(moved, argnums=(0, 1))(hyper, weights)

    return evidence_slope


def _merged_hyper(model: Model, declared: dict[str, Any], given: Any) -> dict[str, Any]:
    """The declared numbers with those given in their place, as float64."""
    if not isinstance(given, Mapping):
        raise DeclarationError(
            sentence(
                f"hyperparameters of {model.name!r} must be a mapping like hyperparameters()",
                type(given).__name__,
                'Type: {"priors": {"rate": LogNormal(-5.0, 1.0)}, "constants": {}}',
            )
        )
    _known(model, "kind of hyperparameter", given, declared)
    merged = {kind: dict(values) for kind, values in declared.items()}
    for kind, values in given.items():
        _known(model, kind[:-1], values, declared[kind])
        for name, value in values.items():
            merged[kind][name] = _like(f"{kind[:-1]} {name!r}", value, declared[kind][name])
    return merged


def _known(model: Model, what: str, given: Any, known: Mapping[str, Any]) -> None:
    for name in given:
        if name not in known:
            listed = ", ".join(map(str, known)) or "none"
            raise DeclarationError(
                f"{name!r} is no {what} of {model.name!r}. There are: {listed}."
                f"{near_name(str(name), map(str, known))}"
            )


def _like(what: str, given: Any, declared: Any) -> Any:
    """The given tree of numbers with the dtypes of the declared one; refuses other shapes."""
    leaves, structure = jax.tree_util.tree_flatten(declared)
    mine, other = jax.tree_util.tree_flatten(given)
    if not (isinstance(declared, np.ndarray) or other == structure):
        raise DeclarationError(
            sentence(f"{what} must be of the declared kind", repr(given), f"Declared: {declared!r}")
        )
    if isinstance(declared, np.ndarray):
        mine = [given]
    for one, first in zip(mine, leaves, strict=True):
        if np.shape(one) != np.shape(first):
            raise DeclarationError(
                sentence(f"{what} must have the shape {np.shape(first)}", str(np.shape(one)))
            )
    cast = [_cast(one, first.dtype) for one, first in zip(mine, leaves, strict=True)]
    return jax.tree_util.tree_unflatten(structure, cast)


def _cast(value: Any, dtype: Any) -> Any:
    if isinstance(value, jax.Array):
        with float64():
            return jnp.asarray(value, dtype=dtype)
    return np.asarray(value, dtype=dtype)
