"""Laplace's method at a mode that moves with its arguments, for JAX to differentiate.

log Z(a) = -h(m(a), a) + d/2 log 2 pi - 1/2 log det H(m(a), a), where the mode m moves with its
arguments a by the implicit function theorem, dm/da = -H^-1 d2h/dz da. The mode is found by the
same search as everywhere; its derivative is given to JAX by that rule, so that the derivative of
log det H contains the third derivatives of h along dm/da. A mode held constant gives the right
derivative of the peak and a wrong one of the volume.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import jax.scipy.linalg as jsl
import numpy as np

from evidence import newton
from evidence.laplace import LOG_2PI, STEP
from evidence.mode import SAME_MODE
from evidence.problem import Density

__all__ = ["Evidences", "Scale", "evidences"]

SETTLED = 1e-8  # g' H^-1 g at the mode [nats], above which there is no number


class Scale(NamedTuple):
    """What a search for a mode measures its steps by.

    Attributes
    ----------
    centre, spread : (d,), (d,)
        Prior centre and sd as declared [unconstrained].
    """

    centre: Any
    spread: Any


class Evidences(NamedTuple):
    """Laplace's method at the modes reached from several starts.

    Attributes
    ----------
    laplace : (m,)
        Plain Laplace value of each mode [nats]; -inf where the mode was reached before or lost.
    second_order_term : (m,)
        [nats]; zero where it was not asked for.
    z : (m, d)
        The modes [unconstrained].
    """

    laplace: Any
    second_order_term: Any
    z: Any

    @property
    def total(self) -> Any:
        """Sum over the modes, each with its second-order term: () [nats]; nan without a mode."""
        total = jax.nn.logsumexp(self.laplace + self.second_order_term)
        return jnp.where(jnp.any(jnp.isfinite(self.laplace)), total, jnp.nan)


def evidences(
    density: Density,
    starts: Any,
    scale: Scale,
    hyper: Any,
    data: Any,
    weights: Any = None,
    *,
    second_order: bool = False,
) -> Evidences:
    """Laplace's method at the modes reached from starts (m, d); traceable and differentiable.

    Parameters
    ----------
    density : Density
    starts : (m, d)
        Where the searches begin [unconstrained]; nothing is differentiated with respect to them.
    scale : Scale
    hyper, data : pytrees
        As for :class:`Density`.
    weights : (n,), optional
        One per log-likelihood term.
    second_order : bool
        Whether the second-order term is computed as well: 2d Hessians more per mode.
    """

    if density.layout.dim == 0:
        value = density.log_density(jnp.zeros(0), hyper, data, weights)
        return Evidences(value[None], jnp.zeros(1), jnp.zeros((1, 0)))

    def one(start: Any) -> Any:
        return _at_one_mode(density, start, scale, (hyper, data, weights), second_order)

    laplace, term, z, hessian = jax.vmap(one)(starts)
    return Evidences(_without_repeats(laplace, z, hessian), term, z)


def _at_one_mode(
    density: Density, start: Any, scale: Scale, arguments: Any, second_order: bool
) -> tuple[Any, Any, Any, Any]:
    """Laplace value (-inf where the mode is lost), second-order term, mode and Hessian."""
    peak = _differentiable_peak(density)(start, scale, arguments)
    lost = ~peak.settled
    term = jnp.zeros(())
    if second_order:
        # what is left of a lost mode must not make the sum nan
        hessian = _safe(density.evaluate(peak.z, *arguments).hessian, peak.settled)
        term = jnp.where(lost, 0.0, _second_order(density, peak.z, hessian, arguments))
    return jnp.where(lost, -jnp.inf, peak.laplace), term, peak.z, peak.hessian


class Found(NamedTuple):
    """A mode as a search leaves it.

    Attributes
    ----------
    laplace : ()
        Its Laplace value [nats], with all derivatives.
    z : (d,)
        Its place [unconstrained], with first derivatives.
    hessian : (d, d)
        Of minus the log density there, without derivatives; the identity where there is no peak.
    settled : () bool
        Whether there is a peak.
    """

    laplace: Any
    z: Any
    hessian: Any
    settled: Any


def _differentiable_peak(density: Density) -> Callable[..., Found]:
    """The search as a function of a start, a scale and the arguments that move the mode."""

    @jax.custom_jvp
    def peak(start: Any, scale: Scale, arguments: Any) -> Found:
        return _search(density, start, scale, arguments)

    @peak.defjvp
    def peak_jvp(primals: Any, tangents: Any) -> tuple[Found, Found]:
        start, scale, arguments = primals
        moves = tangents[2]
        found = peak(start, scale, arguments)
        hessian = _safe(density.evaluate(found.z, *arguments).hessian, found.settled)
        factor = jnp.linalg.cholesky(hessian)

        def slope(arguments: Any) -> Any:
            return jax.grad(density.log_density)(found.z, *arguments)

        z_moves = _solve(factor, jax.jvp(slope, (arguments,), (moves,))[1])
        value = _adjoint(density, found.z, factor, arguments)
        laplace_moves = jax.jvp(value, (arguments,), (moves,))[1]
        still = jnp.zeros_like(found.hessian), np.zeros((), jax.dtypes.float0)
        return found, Found(laplace_moves, z_moves, *still)

    return peak


def _search(density: Density, start: Any, scale: Scale, arguments: Any) -> Found:
    def step(search: newton.Search) -> newton.Search:
        here = density.evaluate(search.trial, *arguments)
        return newton.advance(jnp, search, -here.log_density, -here.gradient, here.hessian, *scale)

    first = newton.begin(jnp, start)
    end = jax.lax.while_loop(lambda s: s.phase != newton.ENDED, step, first)
    factor = jnp.linalg.cholesky(end.hessian)
    decrement = jnp.sum(jsl.solve_triangular(factor, end.gradient, lower=True) ** 2)
    settled = jnp.isfinite(end.objective) & jnp.all(jnp.isfinite(factor)) & (decrement < SETTLED)
    half_log_det = jnp.sum(jnp.log(jnp.diagonal(factor)))
    laplace = -end.objective + 0.5 * len(start) * LOG_2PI - half_log_det
    return Found(laplace, end.z, _safe(end.hessian, settled), settled)


def _adjoint(density: Density, z: Any, factor: Any, arguments: Any) -> Callable[[Any], Any]:
    """A function of the arguments with the derivative of the Laplace value at a fixed z.

    -h - 1/2 sum_k D2h[s_k, s_k] + Dh[u] with S = sum_k s_k s_k' and u = S v, where v is the
    derivative of the middle sum in z: by the implicit function theorem the last term carries how
    the volume changes as the mode moves.
    """
    d = len(z)
    axes = jsl.solve_triangular(factor.T, jnp.eye(d), lower=False)

    def along(place: Any, direction: Any, arguments: Any) -> Any:
        """First derivative of the log density along a direction."""
        return jax.jvp(lambda z: density.log_density(z, *arguments), (place,), (direction,))[1]

    def half_trace(place: Any, arguments: Any) -> Any:
        def second(column: Any) -> Any:
            return jax.jvp(lambda z: along(z, column, arguments), (place,), (column,))[1]

        return -0.5 * jnp.sum(jax.vmap(second, in_axes=1)(axes))

    moving = _solve(factor, jax.grad(half_trace)(z, arguments))

    def value(arguments: Any) -> Any:
        height = density.log_density(z, *arguments)
        return height - half_trace(z, arguments) - along(z, moving, arguments)

    return value


def _solve(factor: Any, right: Any) -> Any:
    """H^-1 times a vector (d,), from the lower Cholesky factor of H."""
    return jsl.cho_solve((factor, True), right)


def _safe(hessian: Any, settled: Any) -> Any:
    return jnp.where(settled, hessian, jnp.eye(len(hessian)))


def _second_order(density: Density, z: Any, hessian: Any, arguments: Any) -> Any:
    """Second-order term by differences of the Hessian, as :func:`evidence.laplace.expand`."""
    d = len(z)
    factor = jnp.linalg.cholesky(hessian)
    axes = jsl.solve_triangular(factor.T, jnp.eye(d), lower=False)

    def whitened(step: Any) -> Any:
        return axes.T @ density.evaluate(z + step, *arguments).hessian @ axes

    steps = STEP * axes.T
    above, below = jnp.split(jax.vmap(whitened)(jnp.concatenate([steps, -steps])), 2)
    first = (above - below) / (2 * STEP)
    fourth = (jnp.trace(above + below, axis1=1, axis2=2) - 2 * d) / STEP**2
    squared_trace = jnp.trace(first, axis1=1, axis2=2) ** 2
    return jnp.sum(squared_trace) / 8 + jnp.sum(first**2) / 12 - jnp.sum(fourth) / 8


def _without_repeats(laplace: Any, z: Any, hessian: Any) -> Any:
    """-inf for each mode that an earlier start reached: two may merge as the arguments move."""
    if len(laplace) == 1:
        return laplace
    step = jax.lax.stop_gradient(z[:, None, :] - z[None, :, :])
    square = jnp.einsum("ijk,jkl,ijl->ij", step, jax.lax.stop_gradient(hessian), step)
    near = square < SAME_MODE**2 * z.shape[1]
    earlier = np.tri(len(laplace), k=-1, dtype=bool) & jnp.isfinite(laplace)[None, :]
    return jnp.where(jnp.any(near & earlier, axis=1), -jnp.inf, laplace)
