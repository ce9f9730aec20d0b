"""What the reader must be told, in the words of their parameters, each with its remedy."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from evidence.outcome import Outcome
from evidence.rungs.importance import Sample
from evidence.rungs.probes import FarEnds, Probes, name_axis
from evidence.rungs.record import Mode, Target

__all__ = [
    "describe_ends",
    "describe_prior_held",
    "describe_probes",
    "describe_spike",
    "describe_unreached_width",
    "missing_spread",
    "unseen_mass",
    "weak_weights",
]

PRIOR_HELD = 0.97  # posterior sd in prior sd above which the data hold nothing
FAR_FROM_MODES = 8.0  # sd, beyond the root of the dimension
UNSEEN_SHARE = 0.02
TOO_WIDE = 3.0  # posterior half-widths in prior sd
NEEDLE, NEEDLE_PER_COORDINATE = 10.0, 2.0  # nats above the typical height; a Gaussian has d/2
UNBOUNDED_REMEDY = (
    "a scale that can shrink to zero does this: use the non-centred form "
    "(effect = scale * standard effect), or a prior that keeps the scale away from zero"
)


Warned = tuple[str, str]


def describe_probes(
    target: Target, modes: Sequence[Mode], probes: Sequence[Probes]
) -> list[Warned]:
    """Name the walls and kinks beside the leading mode."""
    found = []
    for mode, seen in zip(modes[:1], probes[:1], strict=False):
        if seen.wall.any():
            found.append(_wall(_named(mode, seen.wall, target)))
        if seen.kink.any():
            found.append(_kink(_named(mode, seen.kink, target)))
    return found


def describe_ends(target: Target, ends: FarEnds) -> list[Warned]:
    """Name the coordinates along which the density has no finite integral."""
    names, found = np.array(target.names), []
    if ends.rising.any():
        where = ", ".join(names[ends.rising][:4])
        found.append(
            (
                f"the log density keeps rising along {where}: it is unbounded, and no number "
                "from it can be trusted",
                UNBOUNDED_REMEDY,
            )
        )
    if ends.flat.any():
        where = ", ".join(names[ends.flat][:4])
        found.append(
            (
                f"the log density does not fall off along {where}: its integral may be infinite",
                f"give {where} a proper prior",
            )
        )
    return found


def _named(mode: Mode, mask: np.ndarray, target: Target) -> str:
    names: dict[str, None] = {}
    for axis in np.flatnonzero(mask)[:3]:
        for name in name_axis(mode.axes[:, axis], target).split(", "):
            names[name] = None
    return ", ".join(list(names)[:4])


def _wall(where: str) -> Warned:
    return (
        f"the density drops to zero within three sd of the mode along {where}: a wall, which "
        "Laplace's method does not see",
        f"declare the bound as the support of the parameter behind {where}",
    )


def _kink(where: str) -> Warned:
    return (
        f"the density has a kink at its top along {where}, and the curvature there means nothing",
        "use a smooth form of the prior or likelihood (an abs() or a max() does this), or rely "
        "on the audit's number",
    )


def describe_spike(target: Target, mode: Mode, sample: Sample) -> list[Warned]:
    """Recognise a search that ended on a needle of density far above where the mass is."""
    top = np.max(sample.log_weights)
    if mode.status == Outcome.OK or not np.isfinite(top):
        return []
    weights = np.exp(sample.log_weights - top)
    held = weights > 0.0
    typical = np.average(sample.log_density[held], weights=weights[held])
    if mode.log_density - typical <= NEEDLE_PER_COORDINATE * target.dim + NEEDLE:
        return []
    off = np.abs(mode.z - target.centre) / target.spread
    where = target.names[int(np.argmax(off))]
    return [
        (
            f"the log density rises without a peak towards {where} = {mode.z[np.argmax(off)]:.3g}, "
            f"{mode.log_density - typical:.0f} nats above where the mass is: it looks unbounded",
            UNBOUNDED_REMEDY,
        )
    ]


def describe_prior_held(target: Target, mode: Mode) -> list[Warned]:
    """Name the directions in which the posterior is as wide as the prior."""
    if not target.spread_known or mode.status not in (Outcome.OK, Outcome.FLAT):
        return []
    widths = np.linalg.norm(mode.axes / target.spread[:, None], axis=0)
    held = np.flatnonzero((widths > PRIOR_HELD) | mode.capped)
    if not len(held):
        return []
    where = "; ".join(name_axis(mode.axes[:, i], target) for i in held[:3])
    return [
        (
            f"only the prior holds the direction of {where}: the data say next to nothing on it",
            "the log evidence depends on the width of that prior: justify it, or fix the parameter",
        )
    ]


def missing_spread() -> Warned:
    """Say that nobody told how far to look."""
    return (
        "no spread was given: distant mass was not looked for",
        "give spread={name: rough prior sd in the unconstrained coordinate}",
    )


def unseen_mass(target: Target, modes: Sequence[Mode], sample: Sample) -> list[Warned]:
    """Find mass that lies far from every mode, and say where."""
    distance = np.full(len(sample.draws), np.inf)
    for mode in modes:
        u = np.linalg.solve(mode.axes, (sample.draws - mode.z).T)
        distance = np.minimum(distance, np.linalg.norm(u, axis=0))
    top = np.max(sample.log_weights)
    weights = np.exp(sample.log_weights - top) if np.isfinite(top) else np.zeros(len(distance))
    far = distance > FAR_FROM_MODES + np.sqrt(target.dim)
    share = weights[far].sum() / max(weights.sum(), 1e-300)
    if share < UNSEEN_SHARE:
        return []
    best = np.flatnonzero(far)[np.argmax(sample.log_density[far])]
    place = sample.draws[best]
    off = np.argsort(-np.abs(place - modes[0].z) / target.spread, kind="stable")[:3]
    where = ", ".join(f"{target.names[i]} = {place[i]:.3g}" for i in off)
    return [
        (
            f"about {100 * share:.0f} % of the mass lies far from the modes found, near {where}",
            "give a start near there: another peak, a heavy tail or a curved ridge was not "
            "followed",
        )
    ]


def weak_weights(target: Target, sample: Sample) -> Warned:
    """Say that the importance weights degenerate, and which coordinates are to blame."""
    z = sample.draws
    order = np.argsort(-sample.log_weights, kind="stable")
    heavy = z[order[: max(len(z) // 200, 5)]]
    middle = np.median(z, axis=0)
    reach = np.abs(np.median(heavy, axis=0) - middle) / np.maximum(z.std(axis=0), 1e-300)
    worst = np.argsort(-reach, kind="stable")[:2]
    where = ", ".join(target.names[i] for i in worst)
    return (
        f"the importance weights degenerate (Pareto k {sample.pareto_k:.2f}), most along {where}",
        f"try depth='thorough', or another parametrisation of {where}",
    )


def describe_unreached_width(target: Target, sample: Sample) -> list[Warned]:
    """Say where the posterior is much wider than the spread that was given."""
    top = np.max(sample.log_weights)
    if not np.isfinite(top) or not target.spread_known:
        return []
    weights = np.exp(sample.log_weights - top)
    wide = np.array([_half_width(z, weights) for z in sample.draws.T]) / target.spread
    if wide.max() <= TOO_WIDE:
        return []
    names = np.array(target.names)
    where = ", ".join(
        names[np.argsort(-wide, kind="stable")][: min(3, int((wide > TOO_WIDE).sum()))]
    )
    return [
        (
            f"the posterior is {wide.max():.3g} times as wide as the prior scale given for "
            f"{where}: that scale cannot be right, and mass beyond its reach was not looked for",
            f"give a larger spread for {where}",
        )
    ]


def _half_width(values: np.ndarray, weights: np.ndarray) -> float:
    """Half the width that holds the middle 68 % of weighted values."""
    order = np.argsort(values)
    share = np.cumsum(weights[order])
    low, high = np.searchsorted(share, np.array([0.16, 0.84]) * share[-1])
    return 0.5 * float(values[order[min(high, len(values) - 1)]] - values[order[low]])
