"""What all ready parts share: defaults joined with what the user gives, and checked options."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Mapping
from typing import Any, NamedTuple

import numpy as np

from evidence.complaints import DeclarationError, near_name, sentence
from evidence.distributions import Distribution
from evidence.model import Model

__all__ = ["Default", "Given", "Part", "checked_range", "chosen", "declare", "number"]

PLAIN_OPTIONS = ("start", "constants", "units", "notes")


class Default(NamedTuple):
    """What a part declares for one parameter: a prior, or a number at which it is held."""

    prior: Distribution | float
    note: str


class Given(NamedTuple):
    """What the user gives beside the part's own arguments.

    Attributes
    ----------
    priors, fixed : mapping or None
        Parameter to its prior, and to the value at which it is held.
    more : dict
        Further keyword arguments of :class:`evidence.Model`.
    """

    priors: Mapping[str, Any] | None
    fixed: Mapping[str, Any] | None
    more: dict[str, Any]


@dataclasses.dataclass(frozen=True, kw_only=True)
class Part:
    """The three functions of a model, all of ``p`` and ``data``."""

    log_likelihood: Callable[..., Any]
    simulate: Callable[..., Any]
    predict: Callable[..., Any]

    @classmethod
    def of(cls, response: str, density: Callable[..., Any], expected: Callable[..., Any]) -> Part:
        """Rows that are independent given the parameters.

        Parameters
        ----------
        response : str
            Column of the data.
        density : callable
            ``density(p, data)``: distribution of the response, one entry per row.
        expected : callable
            ``expected(p, data)``: its mean [n].
        """
        return cls(
            log_likelihood=lambda p, data: density(p, data).log_prob(data[response]),
            simulate=lambda key, p, data: {response: density(p, data).sample(key)},
            predict=lambda p, data: {response: expected(p, data)},
        )


def declare(name: str, part: Part, defaults: Mapping[str, Default], given: Given) -> Model:
    """Join a part with its default priors and what the user gives.

    Raises
    ------
    DeclarationError
        An unknown parameter or option, a parameter both fixed and given a prior, and all that
        :class:`evidence.Model` raises.
    """
    _check_names(name, defaults, given)
    replaced, held = dict(given.priors or {}), dict(given.fixed or {})
    priors: dict[str, Any] = {}
    for key, default in defaults.items():
        prior = replaced.get(key, default.prior)
        if key in held or not (key in replaced or isinstance(prior, Distribution)):
            held.setdefault(key, prior)
        else:
            priors[key] = prior
    # a prior that is a function may read any other: it comes after them
    priors = dict(sorted(priors.items(), key=lambda item: not hasattr(item[1], "log_prob")))
    notes = {key: d.note for key, d in defaults.items() if key not in replaced}
    return Model(
        name,
        priors,
        part.log_likelihood,
        start=given.more.get("start"),
        constants={**(given.more.get("constants") or {}), **held},
        simulate=part.simulate,
        predict=part.predict,
        units=given.more.get("units"),
        notes={**notes, **(given.more.get("notes") or {})},
    )


def _check_names(name: str, defaults: Mapping[str, Default], given: Given) -> None:
    for what, named in (("priors", given.priors), ("fixed", given.fixed)):
        if named is not None and not isinstance(named, Mapping):
            raise DeclarationError(
                sentence(f"{what} of {name!r} must be a mapping of names", type(named).__name__)
            )
        for key in named or ():
            if key not in defaults:
                raise DeclarationError(
                    f"{what} of {name!r} names {key!r}, which is no parameter. There are: "
                    f"{', '.join(defaults)}.{near_name(key, defaults)}"
                )
    if both := set(given.priors or ()) & set(given.fixed or ()):
        raise DeclarationError(
            sentence(
                f"{min(both)!r} of {name!r} is named in priors and in fixed",
                remedy="Remove one of them",
            )
        )
    for key in given.more:
        if key not in PLAIN_OPTIONS:
            raise DeclarationError(
                f"{name!r} has no option {key!r}. Besides its own there are priors, fixed, "
                f"{', '.join(PLAIN_OPTIONS)}.{near_name(key, PLAIN_OPTIONS)}"
            )


def number(what: str, value: Any, *, positive: bool = True) -> float:
    """Return an option as a finite float, above zero unless told otherwise.

    Raises
    ------
    DeclarationError
        It is something else.
    """
    wanted = "finite number above zero" if positive else "finite number"
    try:
        found = float(value)
    except (TypeError, ValueError):
        found = np.nan
    if not np.isfinite(found) or (positive and found <= 0):
        raise DeclarationError(
            sentence(f"{what} must be a {wanted}, in the unit of the column", repr(value))
        )
    return found


def checked_range(what: str, value: Any, *, positive: bool = False) -> tuple[float, float]:
    """Return an option as a pair of finite numbers, the lower one first.

    Raises
    ------
    DeclarationError
        It is something else.
    """
    try:
        low, high = (number(what, x, positive=positive) for x in value)
    except (TypeError, ValueError):
        low, high = np.nan, np.nan
    if not low < high:
        raise DeclarationError(
            sentence(
                f"{what} must be two numbers, the lower one first"
                + (", both above zero" if positive else ""),
                repr(value),
            )
        )
    return low, high


def chosen(what: str, value: Any, known: Mapping[str, Any]) -> Any:
    """Return what stands under a word.

    Raises
    ------
    DeclarationError
        The word is unknown.
    """
    if not isinstance(value, str) or value not in known:
        raise DeclarationError(
            f"{what} must be one of {', '.join(map(repr, known))}; got {value!r}."
            f"{near_name(value, known)}"
        )
    return known[value]
