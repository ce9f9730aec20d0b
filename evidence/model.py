"""A candidate as its author declares it: priors, log-likelihood, constants, start.

Only the declaration and its checks live here; :mod:`evidence.problem` joins it with data.
"""

from __future__ import annotations

import inspect
from collections.abc import Callable, Mapping
from typing import Any

import jax
import numpy as np

from evidence.compiling import Programs
from evidence.complaints import DeclarationError, near_name, sentence
from evidence.distributions import discrete, real
from evidence.distributions.base import Distribution
from evidence.distributions.fields import float32_names
from evidence.distributions.foreign import adapt
from evidence.distributions.supports import Support
from evidence.fingerprint import Reading, read_functions
from evidence.report.html import model_fragment

__all__ = ["Model", "as_prior", "call_flexibly"]


class Model:
    """One candidate explanation of the data.

    Parameters
    ----------
    name : str
        How the candidate is called in tables and reports.
    priors : mapping of str to prior
        For each parameter, in order: a distribution of :mod:`evidence.distributions`, any numpyro
        distribution as it is, or a function ``f(p)`` or ``f(p, data)`` of the parameters declared
        before it that returns one.
    log_likelihood : callable
        ``log_likelihood(p, data)``. Receives ``p``, the named values of parameters and constants
        in their natural units, and ``data``, the named arrays. Returns a float64 scalar or one
        term per observation, in nats, *with* all constants (``log y!``, ``log 2 pi``). It is
        traced by JAX: use ``jax.numpy``, no Python ``if`` on values, and change nothing in place.
    constants : mapping of str to number or array, optional
        Fixed values that appear in ``p`` beside the parameters. They travel as float64 arguments:
        changing them compiles nothing. They count as hyperparameters.
    start : mapping of str to value, optional
        Natural values from which the first search for a mode begins; others take the prior's
        centre.
    simulate : callable, optional
        ``simulate(key, p, data)`` returns ``{response column: draw}``.
    predict : callable, optional
        ``predict(p, data)`` returns ``{response column: expected value}``.
    units, notes : mapping of str to str, optional
        Texts for parameters and columns, shown in tables and reports.

    Raises
    ------
    DeclarationError
        A prior that is none, an unknown name, a function that is not callable.

    Notes
    -----
    The mode that the package finds is the peak of the posterior in the unconstrained coordinates
    (elsewhere called MAP estimate, which depends on the coordinates).
    """

    def __init__(
        self,
        name: str,
        priors: Mapping[str, Any],
        log_likelihood: Callable[..., Any],
        *,
        constants: Mapping[str, Any] | None = None,
        start: Mapping[str, Any] | None = None,
        simulate: Callable[..., Any] | None = None,
        predict: Callable[..., Any] | None = None,
        units: Mapping[str, str] | None = None,
        notes: Mapping[str, str] | None = None,
    ) -> None:
        self.name = _checked_name(name)
        self.priors = _checked_priors(self.name, priors)
        self.log_likelihood = _checked_callable(self.name, "log_likelihood", log_likelihood)
        self.constants = _checked_constants(self.name, constants, self.priors)
        self.float32 = _float32(self.priors, constants)
        self.start = _checked_start(self.name, start, self.priors)
        self.simulate = _checked_callable(self.name, "simulate", simulate, optional=True)
        self.predict = _checked_callable(self.name, "predict", predict, optional=True)
        self.units = _checked_texts(self.name, "units", units)
        self.notes = _checked_texts(self.name, "notes", notes)
        self.supports: dict[str, Support] = {}
        self.spread: dict[str, np.ndarray] = {}
        self.bare = False
        self.programs = Programs()

    @classmethod
    def from_log_posterior(
        cls,
        name: str,
        log_posterior: Callable[..., Any],
        start: Mapping[str, Any],
        *,
        spread: Mapping[str, Any] | None = None,
        support: Mapping[str, Support] | None = None,
    ) -> Model:
        """Declare a candidate by its log posterior density alone.

        Parameters
        ----------
        name : str
            How the candidate is called.
        log_posterior : callable
            ``f(p)`` or ``f(p, data)``: log of likelihood times prior density in the natural units
            of ``p``, in nats, with all constants. The log Jacobian of ``support`` is added here.
        start : mapping of str to value
            Names, shapes and natural values at which the search begins.
        spread : mapping of str to positive value, optional
            Rough prior sd of each parameter in its unconstrained coordinate. It tells how far to
            look for other modes; without it distant mass cannot be looked for.
        support : mapping of str to support, optional
            Where a value is bounded, e.g. ``{"rate": positive}``.

        Raises
        ------
        DeclarationError
            No start, names that do not occur in it, a spread that is not positive.
        """
        if not isinstance(start, Mapping) or not start:
            raise DeclarationError(
                sentence(
                    f"from_log_posterior({name!r}) needs `start`, a name -> value mapping",
                    repr(start),
                    'Type: start={"rate": 0.1, "mass": 10.0}',
                )
            )
        model = cls(name, {}, log_posterior)
        model.bare = True
        model.start = {key: _number(name, f"start of {key!r}", v) for key, v in start.items()}
        model.supports = _checked_supports(model.name, support, model.start)
        model.spread = _checked_spread(model.name, spread, model.start, model.supports)
        return model

    @property
    def parameters(self) -> tuple[str, ...]:
        """Names of the parameters, in the order of declaration."""
        return tuple(self.start) if self.bare else tuple(self.priors)

    def hyperparameters(self) -> dict[str, Any]:
        """Every number of the declaration as float64 arrays: the arguments of its programs."""
        fixed = {k: v for k, v in self.priors.items() if isinstance(v, Distribution)}
        tree = {"priors": fixed, "constants": self.constants, "supports": self.supports}
        return jax.tree_util.tree_map(lambda leaf: np.asarray(leaf, dtype=np.float64), tree)

    def reading(self) -> Reading:
        """Fingerprint of what the traced functions of this model read from outside."""
        dependent = [v for v in self.priors.values() if not isinstance(v, Distribution)]
        return read_functions([self.log_likelihood, *dependent])

    def __getstate__(self) -> dict[str, Any]:
        return {**self.__dict__, "programs": None}

    def __setstate__(self, state: dict[str, Any]) -> None:
        self.__dict__.update(state, programs=Programs())

    def _repr_html_(self) -> str:
        rows = [
            (name, "" if self.bare else _prior_text(self.priors[name]), *self._told(name))
            for name in self.parameters
        ]
        return model_fragment(self.name, rows)

    def _told(self, name: str) -> tuple[str, str]:
        return self.units.get(name, ""), self.notes.get(name, "")

    def __repr__(self) -> str:
        if self.bare:
            shown = ", ".join(self.parameters)
            return f"Model({self.name!r}, log posterior of {shown})"
        lines = [f"  {name} ~ {_prior_text(prior)}" for name, prior in self.priors.items()]
        if len(lines) > 10:
            lines = [*lines[:9], f"  and {len(lines) - 9} more"]
        return "\n".join([f"Model({self.name!r})", *lines])


def as_prior(owner: str, name: str, prior: Any) -> Any:
    """Return a distribution or a function that returns one; adapt numpyro's.

    Raises
    ------
    DeclarationError
        The value is no prior, or a discrete distribution.
    """
    # numpyro objects are callable, so their log_prob is asked for first
    is_class = isinstance(prior, type)
    if not isinstance(prior, Distribution) and hasattr(prior, "log_prob") and not is_class:
        prior = adapt(prior)
    if isinstance(prior, Distribution):
        if prior.support is discrete:
            raise DeclarationError(
                sentence(
                    f"the prior of {name!r} in {owner!r} must be continuous",
                    repr(prior),
                    "Sum a discrete parameter out in the log-likelihood with jax.nn.logsumexp",
                )
            )
        return prior
    if callable(prior) and not is_class:
        return prior
    raise DeclarationError(
        sentence(
            f"the prior of {name!r} in {owner!r} must be a distribution or a function of the "
            "parameters before it",
            repr(prior),
            f"Type: {{{name!r}: Normal(0.0, 1.0)}}, and put fixed values into constants=",
        )
    )


def call_flexibly(function: Callable[..., Any], p: Any, data: Any) -> Any:
    """Call ``f(p, data)``, or ``f(p)`` where the function takes one argument."""
    return function(p, data) if _takes_two(function) else function(p)


def _takes_two(function: Callable[..., Any]) -> bool:
    try:
        parameters = inspect.signature(function).parameters.values()
    except (TypeError, ValueError):
        return True
    kinds = (inspect.Parameter.POSITIONAL_ONLY, inspect.Parameter.POSITIONAL_OR_KEYWORD)
    required = [x for x in parameters if x.kind in kinds and x.default is x.empty]
    variadic = any(x.kind is inspect.Parameter.VAR_POSITIONAL for x in parameters)
    return variadic or len(required) >= 2 or len([x for x in parameters if x.name == "data"]) == 1


def _prior_text(prior: Any) -> str:
    if isinstance(prior, Distribution):
        text = repr(prior)
        return text if len(text) <= 88 else text[:85] + "..."
    return f"{getattr(prior, '__name__', 'function')}(p)"


def _checked_name(name: Any) -> str:
    if not isinstance(name, str) or not name.strip():
        raise DeclarationError(
            sentence("the name of a candidate must be a text", repr(name), 'Type: Model("one pool"')
        )
    return name


def _checked_priors(owner: str, priors: Any) -> dict[str, Any]:
    if not isinstance(priors, Mapping):
        raise DeclarationError(
            sentence(
                f"priors of {owner!r} must be a mapping of parameter name to distribution",
                type(priors).__name__,
                'Type: {"rate": LogNormal(-5.0, 1.0)}',
            )
        )
    for name in priors:
        if not isinstance(name, str):
            raise DeclarationError(
                sentence(f"parameter names of {owner!r} must be texts", repr(name))
            )
    return {name: as_prior(owner, name, prior) for name, prior in priors.items()}


def _checked_callable(owner: str, what: str, value: Any, *, optional: bool = False) -> Any:
    if callable(value) or (optional and value is None):
        return value
    raise DeclarationError(
        sentence(f"{what} of {owner!r} must be a function", type(value).__name__)
    )


def _number(owner: str, what: str, value: Any) -> np.ndarray:
    try:
        array = np.array(value, dtype=np.float64)
    except (TypeError, ValueError):
        array = np.array(np.nan)
    if not np.all(np.isfinite(array)):
        raise DeclarationError(
            sentence(f"the {what} in {owner!r} must be a finite number or array", repr(value))
        )
    return array


def _checked_constants(owner: str, constants: Any, priors: Mapping[str, Any]) -> dict[str, Any]:
    constants = _mapping(owner, "constants", constants)
    for name in constants:
        if name in priors:
            raise DeclarationError(
                sentence(
                    f"{name!r} of {owner!r} is declared twice, in priors and in constants",
                    remedy="Remove one of them",
                )
            )
    return {k: _number(owner, f"constant {k!r}", v) for k, v in constants.items()}


def _float32(priors: Mapping[str, Any], constants: Any) -> tuple[str, ...]:
    """What of the declaration came in single precision: the lost digits do not come back."""
    found = [f"constant {name!r}" for name in float32_names((constants or {}).items())]
    for name, prior in priors.items():
        found += [f"{x} of the prior of {name!r}" for x in getattr(prior, "float32_leaves", ())]
    return tuple(found)


def _checked_start(owner: str, start: Any, priors: Mapping[str, Any]) -> dict[str, Any]:
    start = _mapping(owner, "start", start)
    _known(owner, "start", start, priors)
    return {k: _number(owner, f"start of {k!r}", v) for k, v in start.items()}


def _checked_supports(owner: str, support: Any, start: Mapping[str, Any]) -> dict[str, Support]:
    support = _mapping(owner, "support", support)
    _known(owner, "support", support, start)
    for name, value in support.items():
        if not isinstance(value, Support) or value is discrete:
            raise DeclarationError(
                sentence(
                    f"the support of {name!r} in {owner!r} must be a continuous support",
                    repr(value),
                    f"Type: {{{name!r}: positive}} with `from evidence.distributions import "
                    "positive`",
                )
            )
        if not np.all(value.contains(start[name])):
            raise DeclarationError(
                sentence(
                    f"the start of {name!r} in {owner!r} lies outside its support", str(start[name])
                )
            )
    return {name: support.get(name, real) for name in start}


def _checked_spread(
    owner: str, spread: Any, start: Mapping[str, Any], supports: Mapping[str, Support]
) -> dict[str, np.ndarray]:
    spread = _mapping(owner, "spread", spread)
    _known(owner, "spread", spread, start)
    if spread and (missing := [name for name in start if name not in spread]):
        raise DeclarationError(
            sentence(f"spread of {owner!r} lacks {missing[0]!r}", remedy="Give one per parameter")
        )
    checked = {}
    for name, value in spread.items():
        array = _number(owner, f"spread of {name!r}", value)
        shape = supports[name].z_shape(np.shape(start[name]))
        if np.any(array <= 0) or not _fits(array.shape, shape):
            raise DeclarationError(
                sentence(
                    f"the spread of {name!r} in {owner!r} must be positive and of the shape "
                    f"{tuple(shape)}, the prior sd in the unconstrained coordinate",
                    str(value),
                )
            )
        checked[name] = np.broadcast_to(array, shape).copy()
    return checked


def _fits(given: tuple[int, ...], wanted: tuple[int, ...]) -> bool:
    try:
        return np.broadcast_shapes(given, wanted) == tuple(wanted)
    except ValueError:
        return False


def _checked_texts(owner: str, what: str, texts: Any) -> dict[str, str]:
    return {str(k): str(v) for k, v in _mapping(owner, what, texts).items()}


def _mapping(owner: str, what: str, value: Any) -> dict[str, Any]:
    if value is None:
        return {}
    if not isinstance(value, Mapping):
        raise DeclarationError(
            sentence(f"{what} of {owner!r} must be a mapping of names", type(value).__name__)
        )
    return dict(value)


def _known(owner: str, what: str, given: Mapping[str, Any], known: Mapping[str, Any]) -> None:
    for name in given:
        if name not in known:
            raise DeclarationError(
                f"{what} of {owner!r} names {name!r}, which is no parameter. Declared: "
                f"{', '.join(known) or 'none'}.{near_name(name, known)}"
            )
