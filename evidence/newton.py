"""One step of the damped Newton search for a mode: the arithmetic shared by all drivers.

:func:`begin` and :func:`advance` are functions of an array module ``xp`` (numpy or jax.numpy) and
hold no loop, so that a NumPy loop, a compiled ``while_loop`` and a batch take the same steps.

The objective is h = -log posterior density. Steps use the exact Hessian after unit-diagonal
scaling, with the absolute values of its eigenvalues (so that a step always goes down), a cap in
prior sd and backtracking by the rule of Armijo (1966). Near the end one full step is taken
without conditions: the evidence depends on the start through the distance to the mode, and this
step squares that distance.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, NamedTuple

from evidence.outcome import Outcome

__all__ = ["Directions", "Search", "advance", "begin", "principal_directions", "settle"]

DECREMENT_SETTLED = 1e-11  # g' H^-1 g at which the last full step is taken
DECREMENT_STUCK = 1e-7  # the same, below which a rejected step is put down to rounding
DECREMENT_CONVERGED = 1e-10  # the same, at or below which a search counts as converged
ROUNDING = 1e-14  # relative rounding error allowed in a comparison of two densities
ARMIJO = 1e-4
EIGENVALUE_FLOOR = 1e-9  # of the scaled Hessian
FLAT_EIGENVALUE = 1e-10  # of the scaled Hessian, below which a direction counts as flat
CAP = 2.0  # longest first step in prior sd
CAP_MOST = 1e3
RUNAWAY = 1e4  # distance from the prior's centre in prior sd
STRAYED = 50.0  # the same, from which derivatives that are not finite count as running away
HALVINGS = 45
STEPS = 200

SEARCHING, FINISHING, ENDED = 0, 1, 2


class Search(NamedTuple):
    """State of one search; every field is an array, so that it passes through jit and vmap.

    Attributes
    ----------
    z : (d,)
        Best point so far [unconstrained].
    objective : ()
        h at z [nats].
    gradient, hessian : (d,), (d, d)
        Of h at z.
    direction, trial : (d,), (d,)
        Search direction at z, and the next point to evaluate.
    shrink, cap : (), ()
        Backtracking factor, and the longest step in prior sd.
    decrement : ()
        g' H^-1 g with absolute eigenvalues, the squared Newton decrement at z [nats].
    smallest : ()
        Smallest eigenvalue of the scaled Hessian at z.
    halvings, steps, phase, outcome : (), (), (), ()
        Rejections in a row, evaluations, phase of the search, Outcome as an integer.
    """

    z: Any
    objective: Any
    gradient: Any
    hessian: Any
    direction: Any
    trial: Any
    shrink: Any
    cap: Any
    decrement: Any
    smallest: Any
    halvings: Any
    steps: Any
    phase: Any
    outcome: Any


class Directions(NamedTuple):
    """Where a search may go from a point.

    Attributes
    ----------
    newton, escape : (d,), (d,)
        A step that goes down, the Newton step where the Hessian is positive definite; a way off
        a saddle, zero where it is none.
    decrement : ()
        Squared Newton decrement [nats].
    smallest : ()
        Smallest eigenvalue of the scaled Hessian, or a bound on it of the same sign.
    """

    newton: Any
    escape: Any
    decrement: Any
    smallest: Any


def begin(xp: Any, start: Any) -> Search:
    """State before the first evaluation, at a start (d,)."""
    d = start.shape[0]
    return Search(
        z=start,
        objective=xp.asarray(xp.inf),
        gradient=xp.zeros(d),
        hessian=xp.eye(d),
        direction=xp.zeros(d),
        trial=start,
        shrink=xp.asarray(1.0),
        cap=xp.asarray(CAP),
        decrement=xp.asarray(xp.inf),
        smallest=xp.asarray(0.0),
        halvings=xp.asarray(0),
        steps=xp.asarray(0),
        phase=xp.asarray(SEARCHING),
        outcome=xp.asarray(int(Outcome.OK)),
    )


def advance(
    xp: Any,
    search: Search,
    objective: Any,
    gradient: Any,
    hessian: Any,
    centre: Any,
    spread: Any,
    *,
    find: Callable[[Any, Any, Any, Any], Directions] | None = None,
) -> Search:
    """Take h, its gradient and Hessian at ``search.trial``; accept or reject, and step on.

    Parameters
    ----------
    xp : module
        numpy or jax.numpy.
    search : Search
    objective, gradient, hessian : (), (d,), (d, d)
        At ``search.trial``; may hold nan or inf.
    centre, spread : (d,), (d,)
        Prior centre and sd in z.
    find : callable, optional
        ``find(xp, gradient, hessian, spread)`` returns Directions; by eigenvectors where left
        out. A batch finds them by a factorisation, which is cheaper.
    """
    find = principal_directions if find is None else find
    first, finishing = search.steps == 0, search.phase == FINISHING
    value_ok = xp.isfinite(objective)
    derivative_ok = xp.all(xp.isfinite(gradient)) & xp.all(xp.isfinite(hessian))
    accept = value_ok & derivative_ok & (first | finishing | _is_lower(xp, search, objective))
    here = _moved(xp, search, accept, objective, gradient, hessian, spread)
    found = find(xp, here.gradient, here.hessian, spread)

    stuck = ~accept & (found.decrement < DECREMENT_STUCK)
    still = (found.decrement < DECREMENT_SETTLED) | stuck
    finish = still & (found.smallest > FLAT_EIGENVALUE) & ~finishing
    flat = still & (xp.abs(found.smallest) <= FLAT_EIGENVALUE)
    exhausted = here.halvings > HALVINGS
    direction = _capped_direction(xp, found, here.cap, spread)

    distance = xp.max(xp.abs(here.z - centre) / spread, initial=0.0)
    lost = value_ok & ~derivative_ok & (first | exhausted)
    outcome = _outcome(
        xp,
        infinite=objective == -xp.inf,
        no_value=first & ~value_ok,
        no_derivative=lost & (distance <= STRAYED),
        # a scale on its way to zero overflows in the derivatives before it is far in prior sd
        far=(distance > RUNAWAY) | (lost & (distance > STRAYED)),
        limit=here.steps >= STEPS,
    )
    ended = (outcome > 0) | finishing | flat | exhausted
    by_itself = settle(xp, found.decrement, found.smallest)
    return here._replace(
        direction=direction,
        trial=xp.where(finish, here.z + found.newton, here.z + here.shrink * direction),
        decrement=found.decrement,
        smallest=found.smallest,
        phase=xp.where(ended, ENDED, xp.where(finish, FINISHING, SEARCHING)),
        outcome=xp.where(ended & (outcome == 0), by_itself, outcome),
    )


def _is_lower(xp: Any, search: Search, objective: Any) -> Any:
    """Whether h at the trial has fallen enough; at the end, whether it fell within rounding."""
    slack = ROUNDING * (1.0 + xp.abs(objective))
    slope = -xp.sum(search.gradient * search.direction)
    wanted = search.objective - ARMIJO * search.shrink * slope
    return (objective <= wanted) | (objective <= search.objective + slack) & (slope < 1e-6)


def _moved(
    xp: Any,
    search: Search,
    accept: Any,
    objective: Any,
    gradient: Any,
    hessian: Any,
    spread: Any,
) -> Search:
    """The search at the trial where that is accepted, else at its place with half the step."""

    def pick(new: Any, old: Any) -> Any:
        return xp.where(accept, new, old)

    was_capped = xp.max(xp.abs(search.direction) / spread, initial=0.0) >= search.cap * 0.999
    widen = accept & was_capped & (search.steps > 0)
    return search._replace(
        z=pick(search.trial, search.z),
        objective=pick(objective, search.objective),
        gradient=pick(xp.where(xp.isfinite(gradient), gradient, 0.0), search.gradient),
        hessian=pick(xp.where(xp.isfinite(hessian), hessian, 0.0), search.hessian),
        shrink=pick(1.0, 0.5 * search.shrink),
        cap=xp.where(widen, xp.minimum(2 * search.cap, CAP_MOST), search.cap),
        halvings=pick(0, search.halvings + 1),
        steps=search.steps + 1,
    )


def _capped_direction(xp: Any, found: Directions, cap: Any, spread: Any) -> Any:
    """Newton direction, off the saddle where the gradient vanishes, of at most ``cap`` prior sd."""
    still = found.decrement < DECREMENT_SETTLED
    direction = xp.where(still, found.newton + found.escape, found.newton)
    longest = xp.max(xp.abs(direction) / spread, initial=0.0)
    return direction / xp.maximum(1.0, longest / cap)


def settle(xp: Any, decrement: Any, smallest: Any) -> Any:
    """Outcome of a search that ended by itself, from the decrement and the scaled eigenvalue."""
    moving = decrement > DECREMENT_CONVERGED
    singular = xp.where(
        smallest < -FLAT_EIGENVALUE,
        int(Outcome.INDEFINITE),
        xp.where(smallest <= FLAT_EIGENVALUE, int(Outcome.FLAT), int(Outcome.OK)),
    )
    return xp.where(moving, int(Outcome.NO_PROGRESS), singular)


def principal_directions(xp: Any, gradient: Any, hessian: Any, spread: Any) -> Directions:
    """Directions by the eigenvectors of the scaled Hessian (d, d), with absolute eigenvalues."""
    diagonal = xp.abs(xp.diagonal(hessian))
    scale = 1.0 / xp.sqrt(xp.maximum(diagonal, 1e-12 / spread**2))
    values, vectors = xp.linalg.eigh(hessian * scale[:, None] * scale[None, :])
    along = vectors.T @ (scale * gradient)
    kept = xp.maximum(xp.abs(values), EIGENVALUE_FLOOR)
    newton = -scale * (vectors @ (along / kept))
    decrement = xp.sum(along**2 / kept)
    downhill = scale * vectors[:, 0]
    # at a saddle the gradient gives no side; the largest component decides
    side = xp.where(xp.sum(downhill / spread) >= 0, 1.0, -1.0)
    escape = xp.where(values[0] < -FLAT_EIGENVALUE, side, 0.0) * downhill
    return Directions(newton, escape, decrement, values[0])


def _outcome(
    xp: Any,
    *,
    infinite: Any,
    no_value: Any,
    no_derivative: Any,
    far: Any,
    limit: Any,
) -> Any:
    """The first trouble that applies, as an integer; zero while there is none."""
    outcome = xp.where(limit, int(Outcome.STEP_LIMIT), int(Outcome.OK))
    outcome = xp.where(far, int(Outcome.RUNAWAY), outcome)
    outcome = xp.where(no_value, int(Outcome.NOT_FINITE), outcome)
    outcome = xp.where(no_derivative, int(Outcome.NAN_DERIVATIVE), outcome)
    return xp.where(infinite, int(Outcome.INFINITE), outcome)
