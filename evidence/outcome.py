"""How a stage of the calculation ended: an integer inside jit and vmap, a sentence outside."""

from __future__ import annotations

import enum

__all__ = ["Outcome"]


class Outcome(enum.IntEnum):
    """The ways in which mathematics may end; each has a sentence and a remedy.

    ``OK`` is zero, so that ``outcome > 0`` marks trouble inside a compiled program.
    """

    OK = 0
    STEP_LIMIT = 1
    NO_PROGRESS = 2
    INDEFINITE = 3
    FLAT = 4
    RUNAWAY = 5
    INFINITE = 6
    NOT_FINITE = 7
    NAN_DERIVATIVE = 8

    @property
    def sentence(self) -> str:
        """What happened, as one sentence without the candidate's name."""
        return _TEXTS[self][0]

    @property
    def remedy(self) -> str:
        """What to do about it; empty where there is nothing to do."""
        return _TEXTS[self][1]


_TEXTS = {
    Outcome.OK: ("the log posterior has a smooth peak with a positive definite Hessian", ""),
    Outcome.STEP_LIMIT: (
        "the search for a mode ran out of steps",
        "give `start=` near the peak, or check that the priors have the scale of the data",
    ),
    Outcome.NO_PROGRESS: (
        "the search stopped where the gradient is not zero: the peak is at a wall, a kink or "
        "a jump of the log density",
        "look for abs(), clip, max or jnp.where in the log-likelihood, or bound the parameter by "
        "its prior instead of by -inf",
    ),
    Outcome.INDEFINITE: (
        "the Hessian is not positive definite where the gradient vanishes: a saddle, not a peak",
        "check the sign of the log-likelihood, and give `start=` near a peak",
    ),
    Outcome.FLAT: (
        "the Hessian is singular: some direction is flat to second order",
        "fix one of the parameters named, or give them a prior that holds the direction",
    ),
    Outcome.RUNAWAY: (
        "the search ran off to infinity: the log density has no peak in reach",
        "a scale that goes to zero or a prior without decay does this; use a proper prior, or the "
        "non-centred form of a group model",
    ),
    Outcome.INFINITE: (
        "the log density is +inf somewhere: it is unbounded, and its integral may not exist",
        "a standard deviation of zero does this; keep it away from zero by its prior",
    ),
    Outcome.NOT_FINITE: (
        "the log density is nan or -inf at every start",
        "give `start=` with values at which the data are possible, and check logarithms, roots "
        "and divisions in the log-likelihood",
    ),
    Outcome.NAN_DERIVATIVE: (
        "the log density is finite but a derivative is nan",
        "a branch that is not taken still has a derivative: make its argument safe first, "
        "safe = jnp.where(ok, x, 1.0), then jnp.where(ok, f(safe), other)",
    ),
}
