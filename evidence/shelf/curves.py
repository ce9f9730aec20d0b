"""Curves: a response with normal scatter around a function of one column.

In all of them ``scale`` says how large the response is, in its unit and as known beforehand; the
parameters mean the same in every variant of a curve, so that variants can be compared.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np

from evidence.complaints import DeclarationError, sentence
from evidence.distributions import Dirichlet, HalfNormal, LogNormal, Normal, Uniform
from evidence.model import Model
from evidence.shelf.joining import Default, Given, Part, checked_range, chosen, declare, number

__all__ = ["change_point", "exponentials", "saturation", "sinusoid"]

# Share of the range over which a change is spread where no width is given.
SWIFT = 0.01
# Half of its height is reached where tanh is a half.
HALF_TANH = math.atanh(0.5)


def exponentials(
    name: str,
    response: str,
    time: str,
    terms: int = 1,
    *,
    scale: float,
    time_scale: float,
    offset: bool = False,
    priors: Mapping[str, Any] | None = None,
    fixed: Mapping[str, Any] | None = None,
    **more: Any,
) -> Model:
    """Declare a sum of decaying exponentials with normal scatter.

    Parameters
    ----------
    name : str
        How the candidate is called.
    response, time : str
        Columns.
    terms : int
        Number of exponentials.
    scale : float
        A usual amount at time zero [unit of the response], as known beforehand.
    time_scale : float
        A usual 1 / rate of the slowest term [unit of time].
    offset : bool
        Whether the response falls to a level other than zero.
    priors, fixed : mapping, optional
        Parameter to another prior; parameter to the value at which it is held.
    **more
        ``start``, ``constants``, ``units``, ``notes`` as of :class:`evidence.Model`.

    Returns
    -------
    Model
        Parameters ``amount``, ``rate``, ``noise``; with several terms ``excess`` [terms - 1] and
        ``share`` [terms], the slowest first; with an offset ``offset``.

    Raises
    ------
    DeclarationError
        An option that is no number, an unknown parameter.

    Notes
    -----
    Density: y ~ Normal(offset + amount sum_k share_k exp(-r_k t), noise), with r_1 = rate and
    r_(k+1) = r_k (1 + excess_k): ordered, so that the terms cannot change places. Priors: amount ~
    LogNormal(log scale, 1), rate ~ LogNormal(-log time_scale, 1), excess ~ LogNormal(log 4, 1),
    share ~ Dirichlet(2, ..., 2), offset ~ Normal(0, scale), noise ~ HalfNormal(scale). Amount and
    slowest rate mean the same for any number of terms.
    """
    if not isinstance(terms, int | np.integer) or isinstance(terms, bool) or terms < 1:
        raise DeclarationError(
            sentence("terms must be a whole number, 1 or above", repr(terms), "Type: terms=2")
        )
    scale, time_scale = number("scale", scale), number("time_scale", time_scale)

    def curve(p: Any, data: Any) -> Any:
        rates, share = jnp.reshape(p["rate"], (1,)), jnp.ones(1)
        if terms > 1:
            grown = jnp.concatenate([jnp.ones(1), 1.0 + jnp.reshape(p["excess"], (terms - 1,))])
            rates, share = p["rate"] * jnp.cumprod(grown), p["share"]
        left = jnp.exp(-data[time][:, None] * rates[None, :]) @ share
        return p["amount"] * left + (p["offset"] if offset else 0.0)

    defaults = {
        "amount": Default(
            LogNormal(np.log(scale), 1.0), f"all terms at time zero; {_about(scale)}"
        ),
        "rate": Default(
            LogNormal(-np.log(time_scale), 1.0), f"of the slowest term; {_about(1.0 / time_scale)}"
        ),
        **_several(int(terms)),
        **(
            {"offset": Default(Normal(0.0, scale), f"level at the end; {_within(0.0, scale)}")}
            if offset
            else {}
        ),
        "noise": _noise(scale),
    }
    return declare(name, _around(response, curve), defaults, Given(priors, fixed, more))


def _several(terms: int) -> dict[str, Default]:
    if terms == 1:
        return {}
    return {
        "excess": Default(
            LogNormal(np.log(4.0), 1.0, shape=(terms - 1,)),
            "rate over the next slower one, less 1; prior: 4, give or take a factor of 2.7",
        ),
        "share": Default(
            Dirichlet(np.full(terms, 2.0)), "share of each term, slowest first; prior: none tiny"
        ),
    }


def saturation(
    name: str,
    response: str,
    dose: str,
    kind: str = "hyperbola",
    *,
    scale: float,
    dose_scale: float,
    baseline: bool = False,
    priors: Mapping[str, Any] | None = None,
    fixed: Mapping[str, Any] | None = None,
    **more: Any,
) -> Model:
    """Declare a curve that rises from a dose of zero to a ceiling, with normal scatter.

    Parameters
    ----------
    name, response, priors, fixed, **more
        As of :func:`exponentials`.
    dose : str
        Column, zero or above: concentration, light, time.
    kind : {"hyperbola", "exponential", "tanh", "hill"}
        The shape g of the curve, see Notes.
    scale : float
        A usual height of the ceiling [unit of the response], as known beforehand.
    dose_scale : float
        A usual dose at which half of it is reached [unit of the dose].
    baseline : bool
        Whether the response at dose zero is something else than zero.

    Returns
    -------
    Model
        Parameters ``height``, ``half``, ``noise``; ``power`` of a "hill"; ``baseline``.

    Raises
    ------
    DeclarationError
        An option that is no number, an unknown kind or parameter.

    Notes
    -----
    Density: y ~ Normal(baseline + height g(dose / half), noise), where g(1) = 1/2 for every kind:
    "hyperbola" u / (1 + u) (Michaelis & Menten 1913), "exponential" 1 - 2^-u (Mitscherlich 1909),
    "tanh" tanh(u artanh(1/2)) (Jassby & Platt 1976), "hill" u^power / (1 + u^power) (Hill 1910).
    Priors: height ~ LogNormal(log scale, 1), half ~ LogNormal(log dose_scale, 1), power ~
    LogNormal(0, 0.7), baseline ~ Normal(0, scale), noise ~ HalfNormal(scale).
    """
    shape = chosen("kind", kind, SHAPES)
    scale, dose_scale = number("scale", scale), number("dose_scale", dose_scale)

    def curve(p: Any, data: Any) -> Any:
        risen = p["height"] * shape(data[dose] / p["half"], p)
        return risen + (p["baseline"] if baseline else 0.0)

    power = Default(LogNormal(0.0, 0.7), "steepness; prior: 1, give or take a factor of 2")
    defaults = {
        **(
            {"baseline": Default(Normal(0.0, scale), f"at dose zero; {_within(0.0, scale)}")}
            if baseline
            else {}
        ),
        "height": Default(LogNormal(np.log(scale), 1.0), f"of the ceiling; {_about(scale)}"),
        "half": Default(
            LogNormal(np.log(dose_scale), 1.0),
            f"dose at which half of it is reached; {_about(dose_scale)}",
        ),
        **({"power": power} if kind == "hill" else {}),
        "noise": _noise(scale),
    }
    return declare(name, _around(response, curve), defaults, Given(priors, fixed, more))


def _hill(u: Any, p: Any) -> Any:
    # the slope of u^power at zero is infinite below power 1, and nan in the derivatives
    nothing = u == 0
    risen = jax.nn.sigmoid(p["power"] * jnp.log(jnp.where(nothing, 1.0, u)))
    return jnp.where(nothing, 0.0, risen)


SHAPES: dict[str, Callable[..., Any]] = {
    "hyperbola": lambda u, _: u / (1.0 + u),
    "exponential": lambda u, _: -jnp.expm1(-math.log(2.0) * u),
    "tanh": lambda u, _: jnp.tanh(HALF_TANH * u),
    "hill": _hill,
}


def change_point(
    name: str,
    response: str,
    x: str,
    kind: str = "jump",
    *,
    between: tuple[float, float],
    scale: float,
    centre: float = 0.0,
    width: float | None = None,
    priors: Mapping[str, Any] | None = None,
    fixed: Mapping[str, Any] | None = None,
    **more: Any,
) -> Model:
    """Declare one change of level or of slope at an unknown place, with normal scatter.

    Parameters
    ----------
    name, response, priors, fixed, **more
        As of :func:`exponentials`.
    x : str
        Column along which the change happens.
    kind : {"jump", "bend"}
        A new level, or a new slope.
    between : (float, float)
        Where the change may lie [unit of x].
    scale : float
        How far the response may move [unit of the response], as known beforehand.
    centre : float
        Where the response lies at the beginning [unit of the response].
    width : float, optional
        Distance over which the change is spread [unit of x]; a hundredth of ``between`` where not
        given. Far below the spacing of x the density in ``where`` is a staircase, which no Hessian
        describes: about a quarter of the spacing does.

    Returns
    -------
    Model
        Parameters ``level``, ``jump`` or ``slope`` and ``bend``, ``where``, ``noise``.

    Raises
    ------
    DeclarationError
        An option that is no number, an unknown kind or parameter.

    Notes
    -----
    Density, with (a, b) = between and s = (x - where) / width: y ~ Normal(mean, noise), of mean
    level + jump / (1 + exp(-s)) for a "jump", and level + [slope (x - a) + bend width log(1 +
    exp(s))] / (b - a) for a "bend". Priors: level ~ Normal(centre, scale), jump, slope, bend ~
    Normal(0, scale) (a slope is the change over the range), where ~ Uniform(a, b), noise ~
    HalfNormal(scale). Several modes are usual.
    """
    low, high = checked_range("between", between)
    scale, centre = number("scale", scale), number("centre", centre, positive=False)
    width = number("width", SWIFT * (high - low) if width is None else width)

    def jump(p: Any, data: Any) -> Any:
        return p["level"] + p["jump"] * jax.nn.sigmoid((data[x] - p["where"]) / width)

    def bend(p: Any, data: Any) -> Any:
        past = width * jax.nn.softplus((data[x] - p["where"]) / width)
        return p["level"] + (p["slope"] * (data[x] - low) + p["bend"] * past) / (high - low)

    curve = chosen("kind", kind, {"jump": jump, "bend": bend})
    swing, moves = Normal(0.0, scale), {"jump": "change of level"}
    if kind == "bend":
        moves = {
            "slope": "change over the range before it bends",
            "bend": "what is added to it once it has bent",
        }
    defaults = {
        "level": Default(Normal(centre, scale), f"at the beginning; {_within(centre, scale)}"),
        **{key: Default(swing, f"{note}; {_within(0.0, scale)}") for key, note in moves.items()},
        "where": Default(Uniform(low, high), f"place of the change; prior: {low:g} to {high:g}"),
        "noise": _noise(scale),
    }
    return declare(name, _around(response, curve), defaults, Given(priors, fixed, more))


def sinusoid(
    name: str,
    response: str,
    time: str,
    *,
    periods: tuple[float, float] | float,
    scale: float,
    centre: float = 0.0,
    harmonics: int = 1,
    reference: float = 0.0,
    priors: Mapping[str, Any] | None = None,
    fixed: Mapping[str, Any] | None = None,
    **more: Any,
) -> Model:
    """Declare a periodic response, by its cosine and sine parts, with normal scatter.

    Parameters
    ----------
    name, response, priors, fixed, **more
        As of :func:`exponentials`.
    time : str
        Column.
    periods : (float, float) or float
        The shortest and the longest period thought possible, or the period where it is known
        [unit of time].
    scale : float
        How far the response moves [unit of the response], as known beforehand.
    centre : float
        Where its mean lies [unit of the response].
    harmonics : int
        Number of sinusoids: the period, its half, its third ...
    reference : float
        Time at which the cosines begin [unit of time]; in the middle of the data, phase and
        frequency are least entangled.

    Returns
    -------
    Model
        Parameters ``level``, ``cosine`` [harmonics], ``sine`` [harmonics], ``frequency`` (a
        constant where the period is known), ``noise``.

    Raises
    ------
    DeclarationError
        An option that is no number, an unknown parameter.

    Notes
    -----
    Density: y ~ Normal(level + sum_h [cosine_h cos(h w) + sine_h sin(h w)], noise) with w = 2 pi
    frequency (time - reference). Priors: level ~ Normal(centre, scale); cosine and sine ~
    Normal(0, scale), so that no phase is preferred and none wraps around; frequency ~ Uniform(1 /
    longest, 1 / shortest) [1 / unit of time]; noise ~ HalfNormal(scale). Many modes are usual.
    """
    if not isinstance(harmonics, int | np.integer) or isinstance(harmonics, bool) or harmonics < 1:
        raise DeclarationError(
            sentence("harmonics must be a whole number, 1 or above", repr(harmonics))
        )
    scale, centre = number("scale", scale), number("centre", centre, positive=False)
    reference = number("reference", reference, positive=False)
    orders = np.arange(1.0, harmonics + 1.0)

    def curve(p: Any, data: Any) -> Any:
        turn = 2.0 * jnp.pi * p["frequency"] * (data[time] - reference)
        angle = turn[:, None] * orders[None, :]
        return p["level"] + jnp.cos(angle) @ p["cosine"] + jnp.sin(angle) @ p["sine"]

    swing = Normal(0.0, scale, shape=(int(harmonics),))
    defaults = {
        "level": Default(Normal(centre, scale), f"in the mean; {_within(centre, scale)}"),
        "cosine": Default(swing, f"part in step with the reference time; {_within(0.0, scale)}"),
        "sine": Default(swing, f"part a quarter of a period later; {_within(0.0, scale)}"),
        "frequency": _frequency(periods),
        "noise": _noise(scale),
    }
    return declare(name, _around(response, curve), defaults, Given(priors, fixed, more))


def _frequency(periods: Any) -> Default:
    if np.ndim(periods) == 0:
        return Default(1.0 / number("periods", periods), "periods per unit of time, known")
    shortest, longest = checked_range("periods", periods, positive=True)
    note = f"periods per unit of time; prior: a period of {shortest:g} to {longest:g}"
    return Default(Uniform(1.0 / longest, 1.0 / shortest), note)


def _about(value: float) -> str:
    return f"prior: {value:.4g}, give or take a factor of 2.7"


def _within(centre: float, scale: float) -> str:
    return f"prior: {centre:.4g} +- {scale:.4g}"


def _noise(scale: float) -> Default:
    return Default(HalfNormal(scale), f"sd of the scatter; prior: seldom above {2 * scale:.4g}")


def _around(response: str, curve: Callable[..., Any]) -> Part:
    return Part.of(response, lambda p, data: Normal(curve(p, data), p["noise"]), curve)
