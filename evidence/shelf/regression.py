"""Regressions: a response that depends on a weighted sum of predictors.

All four share the linear predictor

    eta = intercept + sum over j of slope_j (x_j - reference_j) / step_j,

where reference and step are numbers fixed in the declaration, so that each row speaks for itself
and new data are read on the same scale. A slope is the change with one step.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np

from evidence.complaints import DataError, DeclarationError, near_name, sentence
from evidence.distributions import (
    Bernoulli,
    Binomial,
    HalfNormal,
    LogNormal,
    NegativeBinomial,
    Normal,
    Poisson,
)
from evidence.model import Model
from evidence.shelf.joining import Default, Given, Part, declare, number

__all__ = [
    "linear_regression",
    "logistic_regression",
    "negative_binomial_regression",
    "poisson_regression",
    "standardise",
]

Predictors = Mapping[str, tuple[float, float]] | Sequence[str]


def standardise(data: Mapping[str, Any], predictors: Sequence[str]) -> dict[str, tuple]:
    """Return reference and step of each predictor: its mean and its standard deviation.

    Parameters
    ----------
    data : mapping of str to array
        Named arrays, as of :func:`evidence.read_data`.
    predictors : sequence of str
        Names of columns.

    Returns
    -------
    dict
        Column -> (mean, sd) [unit of the column], to be given as ``predictors``.

    Raises
    ------
    DataError
        A column that is missing, does not vary, or holds codes of categories.
    """
    found = {}
    for name in [predictors] if isinstance(predictors, str) else predictors:
        if name not in data:
            raise DataError(
                f"there is no column {name!r}. There are: {', '.join(data)}.{near_name(name, data)}"
            )
        if name in getattr(data, "labels", {}):
            raise DataError(
                sentence(
                    f"the column {name!r} holds codes of categories, whose order means nothing",
                    remedy="Make one column of 0 and 1 for each category but the first",
                )
            )
        column = np.asarray(data[name], dtype=np.float64)
        sd = float(column.std())
        if not sd > 1e-12 * float(np.abs(column).max(initial=0.0)):
            raise DataError(
                sentence(f"the column {name!r} does not vary, so it has no sd to be scaled by")
            )
        found[name] = (float(column.mean()), sd)
    return found


def linear_regression(
    name: str,
    response: str,
    predictors: Predictors = (),
    *,
    scale: float,
    centre: float = 0.0,
    slope_sd: float | None = None,
    priors: Mapping[str, Any] | None = None,
    fixed: Mapping[str, Any] | None = None,
    **more: Any,
) -> Model:
    """Declare a linear regression with normal scatter.

    Parameters
    ----------
    name : str
        How the candidate is called.
    response : str
        Column of the response.
    predictors : mapping of str to (reference, step), or sequence of str
        Columns; of a sequence the reference is 0 and the step 1. See :func:`standardise`. None:
        a constant level.
    scale : float
        How far the response lies from its centre [unit of the response], as known beforehand.
    centre : float
        Where the response lies at the references [unit of the response].
    slope_sd : float, optional
        Prior sd of each slope [unit of the response per step]; ``scale`` where not given.
    priors, fixed : mapping, optional
        Parameter to another prior; parameter to the value at which it is held.
    **more
        ``start``, ``constants``, ``units``, ``notes`` as of :class:`evidence.Model`.

    Returns
    -------
    Model
        Parameters ``intercept``, ``slope_<column>`` for each predictor, ``noise``.

    Raises
    ------
    DeclarationError
        An option that is no number, an unknown parameter.

    Notes
    -----
    Density: y ~ Normal(eta, noise). Priors: intercept ~ Normal(centre, scale), slope ~ Normal(0,
    slope_sd), noise ~ HalfNormal(scale). A change of the response's unit, with centre and scale in
    the new unit, changes all log evidences by the same number. For slopes in units of the noise
    (Zellner 1986) give ``priors={"slope_x": lambda p: Normal(0.0, 3.0 * p["noise"])}``.
    """
    scale, centre = number("scale", scale), number("centre", centre, positive=False)
    eta, slopes = _linear(predictors, response, scale if slope_sd is None else slope_sd)
    part = Part.of(response, lambda p, data: Normal(eta(p, data), p["noise"]), eta)
    defaults = {
        "intercept": Default(
            Normal(centre, scale), f"at the references; prior: {centre:g} +- {scale:g}"
        ),
        **slopes,
        "noise": Default(
            HalfNormal(scale), f"sd of the scatter; prior: seldom above {2 * scale:.4g}"
        ),
    }
    return declare(name, part, defaults, Given(priors, fixed, more))


def logistic_regression(
    name: str,
    response: str,
    predictors: Predictors = (),
    *,
    trials: str | None = None,
    slope_sd: float = 1.0,
    priors: Mapping[str, Any] | None = None,
    fixed: Mapping[str, Any] | None = None,
    **more: Any,
) -> Model:
    """Declare a logistic regression of yes and no, or of successes in so many trials.

    Parameters
    ----------
    name, response, predictors, priors, fixed, **more
        As of :func:`linear_regression`; the response holds 0 and 1, or numbers of successes.
    trials : str, optional
        Column with the number of trials of each row.
    slope_sd : float
        Prior sd of each slope [log odds per step].

    Returns
    -------
    Model
        Parameters ``intercept`` and ``slope_<column>`` for each predictor.

    Raises
    ------
    DeclarationError
        An option that is no number, an unknown parameter.

    Notes
    -----
    Density: y ~ Bernoulli(p), or Binomial(trials, p), with log(p / (1 - p)) = eta; binomial
    coefficients included. Priors: intercept ~ Normal(0, 1.5), which is nearly flat in p; slope ~
    Normal(0, slope_sd).
    """
    eta, slopes = _linear(predictors, response, slope_sd)

    def density(p: Any, data: Any) -> Any:
        if trials is None:
            return Bernoulli(logit=eta(p, data))
        return Binomial(data[trials], logit=eta(p, data))

    def expected(p: Any, data: Any) -> Any:
        return jax.nn.sigmoid(eta(p, data)) * (1.0 if trials is None else data[trials])

    defaults = {
        "intercept": Default(Normal(0.0, 1.5), "log odds at the references; prior: nearly any"),
        **slopes,
    }
    return declare(name, Part.of(response, density, expected), defaults, Given(priors, fixed, more))


def poisson_regression(
    name: str,
    response: str,
    predictors: Predictors = (),
    *,
    typical: float,
    exposure: str | None = None,
    slope_sd: float = 1.0,
    priors: Mapping[str, Any] | None = None,
    fixed: Mapping[str, Any] | None = None,
    **more: Any,
) -> Model:
    """Declare a regression of counts that scatter by chance alone.

    Parameters
    ----------
    name, response, predictors, priors, fixed, **more
        As of :func:`linear_regression`; the response holds counts.
    typical : float
        A usual count at the references [counts per unit of exposure], as known beforehand.
    exposure : str, optional
        Column of time, area or effort, above zero, to which counts are proportional.
    slope_sd : float
        Prior sd of each slope [log count per step].

    Returns
    -------
    Model
        Parameters ``intercept`` and ``slope_<column>`` for each predictor.

    Raises
    ------
    DeclarationError
        An option that is no number, an unknown parameter.

    Notes
    -----
    Density: y ~ Poisson(exposure exp(eta)), log y! included. Priors: intercept ~
    Normal(log(typical), 1), which is a factor of 2.7 either way; slope ~ Normal(0, slope_sd).
    """
    log_mean, defaults = _log_linear(predictors, response, typical, exposure, slope_sd)
    part = Part.of(
        response,
        lambda p, data: Poisson(log_rate=log_mean(p, data)),
        lambda p, data: jnp.exp(log_mean(p, data)),
    )
    return declare(name, part, defaults, Given(priors, fixed, more))


def negative_binomial_regression(
    name: str,
    response: str,
    predictors: Predictors = (),
    *,
    typical: float,
    exposure: str | None = None,
    slope_sd: float = 1.0,
    priors: Mapping[str, Any] | None = None,
    fixed: Mapping[str, Any] | None = None,
    **more: Any,
) -> Model:
    """Declare a regression of counts that cluster: their variance exceeds their mean.

    Parameters
    ----------
    name, response, predictors, typical, exposure, slope_sd, priors, fixed, **more
        As of :func:`poisson_regression`.

    Returns
    -------
    Model
        Parameters ``intercept``, ``slope_<column>`` for each predictor, ``size``.

    Raises
    ------
    DeclarationError
        An option that is no number, an unknown parameter.

    Notes
    -----
    Density: y ~ NegativeBinomial(mean, size) with mean = exposure exp(eta) and variance mean +
    mean^2 / size. Priors: as of :func:`poisson_regression`, and size ~ LogNormal(log 3, 1).
    """
    log_mean, defaults = _log_linear(predictors, response, typical, exposure, slope_sd)

    def expected(p: Any, data: Any) -> Any:
        return jnp.exp(log_mean(p, data))

    part = Part.of(
        response, lambda p, data: NegativeBinomial(expected(p, data), p["size"]), expected
    )
    defaults["size"] = Default(
        LogNormal(np.log(3.0), 1.0),
        "variance is mean + mean^2 / size; prior: 3, give or take a factor of 2.7",
    )
    return declare(name, part, defaults, Given(priors, fixed, more))


def _linear(
    predictors: Predictors, response: str, slope_sd: float
) -> tuple[Callable[..., Any], dict[str, Default]]:
    """The linear predictor as a function of (p, data), and the slopes' defaults."""
    terms = _checked(predictors)
    sd = number("slope_sd", slope_sd)
    # a level alone takes the number of rows from the response
    rows = next(iter(terms), response)

    def eta(p: Any, data: Any) -> Any:
        total = p["intercept"] + jnp.zeros(jnp.shape(data[rows]))
        for name, (reference, step) in terms.items():
            total = total + p[f"slope_{name}"] * ((data[name] - reference) / step)
        return total

    def note(name: str, reference: float, step: float) -> str:
        return f"change with {step:.4g} more of {name}, from {reference:.4g} on; prior: sd {sd:g}"

    slopes = {
        f"slope_{name}": Default(Normal(0.0, sd), note(name, *pair)) for name, pair in terms.items()
    }
    return eta, slopes


def _log_linear(
    predictors: Predictors, response: str, typical: float, exposure: str | None, slope_sd: float
) -> tuple[Callable[..., Any], dict[str, Default]]:
    """Log of the expected count as a function of (p, data), and the defaults."""
    eta, slopes = _linear(predictors, response, slope_sd)
    centre = float(np.log(number("typical", typical)))

    def log_mean(p: Any, data: Any) -> Any:
        return eta(p, data) if exposure is None else eta(p, data) + jnp.log(data[exposure])

    note = f"log of the count at the references; prior: {typical:.4g}, give or take a factor of 2.7"
    return log_mean, {"intercept": Default(Normal(centre, 1.0), note), **slopes}


def _checked(predictors: Predictors) -> dict[str, tuple[float, float]]:
    if isinstance(predictors, str):
        predictors = (predictors,)
    if not isinstance(predictors, Mapping):
        predictors = dict.fromkeys(predictors, (0.0, 1.0))
    found = {}
    for name, pair in predictors.items():
        try:
            reference, step = pair
        except (TypeError, ValueError):
            raise DeclarationError(
                sentence(
                    f"the predictor {name!r} needs a reference and a step",
                    repr(pair),
                    f"Type: {{{name!r}: (0.0, 1.0)}}, or give names alone",
                )
            ) from None
        found[name] = (
            number(f"the reference of {name!r}", reference, positive=False),
            number(f"the step of {name!r}", step),
        )
    return found
