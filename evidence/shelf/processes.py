"""Gaussian processes: a response without a formula, smooth over a distance."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
from jax.scipy.linalg import cho_solve, solve_triangular

from evidence.complaints import DeclarationError, sentence
from evidence.distributions import HalfNormal, LogNormal, Normal
from evidence.model import Model
from evidence.shelf.joining import Default, Given, Part, chosen, declare, number
from evidence.tables import named_arrays

__all__ = ["gaussian_process"]

HALF_LOG_2PI = 0.5 * math.log(2.0 * math.pi)


def _squared_exponential(distance: Any, p: Any) -> Any:
    return jnp.exp(-0.5 * (distance / p["length"]) ** 2)


def _matern_3(distance: Any, p: Any) -> Any:
    r = math.sqrt(3.0) * distance / p["length"]
    return (1.0 + r) * jnp.exp(-r)


def _matern_5(distance: Any, p: Any) -> Any:
    r = math.sqrt(5.0) * distance / p["length"]
    return (1.0 + r + r**2 / 3.0) * jnp.exp(-r)


def _periodic(distance: Any, p: Any) -> Any:
    return jnp.exp(-2.0 * (jnp.sin(jnp.pi * distance / p["period"]) / p["length"]) ** 2)


KERNELS: dict[str, Callable[..., Any]] = {
    "squared exponential": _squared_exponential,
    "matern 3/2": _matern_3,
    "matern 5/2": _matern_5,
    "periodic": _periodic,
}


def gaussian_process(
    name: str,
    response: str,
    x: str | Sequence[str],
    kernel: str = "squared exponential",
    *,
    scale: float,
    centre: float = 0.0,
    length: float | None = None,
    period: float | None = None,
    observed: Mapping[str, Any] | None = None,
    priors: Mapping[str, Any] | None = None,
    fixed: Mapping[str, Any] | None = None,
    **more: Any,
) -> Model:
    """Declare a Gaussian process with a constant mean and normal scatter.

    The process itself is integrated out in closed form; what remains are a few hyperparameters.

    Parameters
    ----------
    name : str
        How the candidate is called.
    response : str
        Column of the response.
    x : str or sequence of str
        Column, or columns of one unit: then the distance is the Euclidean one.
    kernel : {"squared exponential", "matern 3/2", "matern 5/2", "periodic"}
        Correlation of two rows at a distance r, see Notes.
    scale : float
        How far the response moves [unit of the response], as known beforehand.
    centre : float
        Where it lies in the mean [unit of the response].
    length : float
        A distance over which it moves clearly [unit of x]. Of "periodic" it has no unit and may
        be left out: 1, a fair part of a turn.
    period : float
        Of "periodic" [unit of x]: held at this value unless ``priors`` names it.
    observed : mapping of str to array, optional
        Rows on which ``predict`` rests, to predict at other x. Else it rests on the response in
        the data that it is given, and where that holds none it returns the level.
    priors, fixed : mapping, optional
        Parameter to another prior; parameter to the value at which it is held.
    **more
        ``start``, ``constants``, ``units``, ``notes`` as of :class:`evidence.Model`.

    Returns
    -------
    Model
        Parameters ``level``, ``amplitude``, ``length``, ``noise``; of "periodic" the constant
        ``period``.

    Raises
    ------
    DeclarationError
        An option that is missing or no number, an unknown kernel or parameter.

    Notes
    -----
    Density: y ~ Normal(level, amplitude^2 K + noise^2 I), jointly over the rows, with K_ij = k(r)
    and u = r / length: "squared exponential" exp(-u^2 / 2); "matern 3/2" (1 + sqrt(3) u)
    exp(-sqrt(3) u); "matern 5/2" (1 + sqrt(5) u + 5 u^2 / 3) exp(-sqrt(5) u) (Rasmussen & Williams
    2006, section 4.2); "periodic" exp(-2 sin^2(pi r / period) / length^2) (MacKay 1998).
    Priors: level ~ Normal(centre, scale), amplitude ~ HalfNormal(scale), length ~
    LogNormal(log(length), 1), noise ~ HalfNormal(scale).

    The terms of the log-likelihood are those of each row given the rows before it: their sum is
    the joint density, and they are as many as those of a regression. Nothing is added to the
    diagonal but the noise: where the covariance is singular to 16 digits the density is nan.

    References
    ----------
    MacKay, D. J. C. (1998). Introduction to Gaussian processes. In C. M. Bishop (ed.), Neural
    Networks and Machine Learning. Springer.
    Rasmussen, C. E. & Williams, C. K. I. (2006). Gaussian Processes for Machine Learning. MIT
    Press.
    """
    columns = (x,) if isinstance(x, str) else tuple(x)
    shape = chosen("kernel", kernel, KERNELS)
    defaults = _defaults(kernel, columns, scale, centre, length, period)
    rests_on = None if observed is None else dict(named_arrays(observed))
    part = _process(response, columns, shape, rests_on)
    return declare(name, part, defaults, Given(priors, fixed, more))


def _defaults(
    kernel: str,
    columns: tuple[str, ...],
    scale: float,
    centre: float,
    length: float | None,
    period: float | None,
) -> dict[str, Default]:
    turning, centre = kernel == "periodic", number("centre", centre, positive=False)
    scale = number("scale", scale)
    seldom = f"prior: seldom above {2 * scale:.4g}"
    if turning != (period is not None) or (turning and len(columns) != 1):
        raise DeclarationError(
            sentence(
                "the kernel 'periodic', and no other, takes period= and one column",
                f"kernel={kernel!r}, period={period!r} and {len(columns)} column(s)",
                "Type: kernel='periodic', period=12.4",
            )
        )
    if length is None and turning:
        length = 1.0
    defaults = {
        "level": Default(Normal(centre, scale), f"in the mean; prior: {centre:.4g} +- {scale:.4g}"),
        "amplitude": Default(HalfNormal(scale), f"sd of the process; {seldom}"),
        "length": Default(
            LogNormal(math.log(number("length", length)), 1.0),
            f"distance over which it moves; prior: {length:.4g}, give or take a factor of 2.7",
        ),
    }
    if turning:
        defaults["period"] = Default(number("period", period), "known")
    return {**defaults, "noise": Default(HalfNormal(scale), f"sd of a row around it; {seldom}")}


def _process(
    response: str,
    columns: tuple[str, ...],
    shape: Callable[..., Any],
    observed: Mapping[str, np.ndarray] | None,
) -> Part:
    """Likelihood, draws and predictions of the process."""

    def factor(p: Any, data: Any) -> Any:
        alike = p["amplitude"] ** 2 * shape(_distance(columns, data, data), p)
        return jnp.linalg.cholesky(alike + p["noise"] ** 2 * jnp.eye(alike.shape[0]))

    def log_likelihood(p: Any, data: Any) -> Any:
        lower = factor(p, data)
        white = solve_triangular(lower, data[response] - p["level"], lower=True)
        return -0.5 * white**2 - jnp.log(jnp.diagonal(lower)) - HALF_LOG_2PI

    def simulate(key: Any, p: Any, data: Any) -> dict[str, Any]:
        lower = factor(p, data)
        white = jax.random.normal(key, lower.shape[:1], dtype=float)
        return {response: p["level"] + lower @ white}

    def predict(p: Any, data: Any) -> dict[str, Any]:
        known = data if observed is None else observed
        level = p["level"] + jnp.zeros(jnp.shape(data[columns[0]]))
        if response not in known:
            return {response: level}
        pull = cho_solve((factor(p, known), True), known[response] - p["level"])
        across = p["amplitude"] ** 2 * shape(_distance(columns, data, known), p)
        return {response: level + across @ pull}

    return Part(log_likelihood=log_likelihood, simulate=simulate, predict=predict)


def _distance(columns: tuple[str, ...], some: Any, others: Any) -> Any:
    """Euclidean distances of the rows of two data sets: (n, m) [unit of x]."""
    steps = [some[c][:, None] - others[c][None, :] for c in columns]
    if len(steps) == 1:
        return jnp.abs(steps[0])
    square = sum(step**2 for step in steps)
    same = square == 0  # the root has no derivative there
    return jnp.where(same, 0.0, jnp.sqrt(jnp.where(same, 1.0, square)))
