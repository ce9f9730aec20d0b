"""How far the verdict hangs on single observations."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from evidence.comparison import SETTLED_LEAD
from evidence.complaints import DeclarationError, near_name, sentence
from evidence.stress import wording
from evidence.stress.reweighing import left_out_by_draws, pulls, recomputed_without
from evidence.stress.saving import frame, save
from evidence.stress.standing import Standing, stand
from evidence.weighing import Weighing

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["COLUMNS", "ObservationStress", "PairStress", "stress_observations"]

RECOMPUTED = 5
UNRELIABLE = 0.7  # Pareto k above which a re-weighted value is recomputed where that is affordable
MOST_RECOMPUTED = 40
COLUMNS = {
    "observation": "place of the log-likelihood term, from 0 on",
    "candidate": "the rival; log Bayes factors are those of the leader against it",
    "pull": "derivative of the log Bayes factor in the weight of the observation: how much of it "
    "the observation carries in place; not the effect of leaving it out [nats]",
    "left_out": "change of the log Bayes factor when the observation is left out; negative where "
    "the observation speaks for the leader [nats]",
    "pareto_k": "shape of the weights behind a re-weighted value, the larger of both candidates; "
    "above 0.7 it is not to be relied on",
    "recomputed": "whether left_out was computed again without the observation",
    "lead_without": "log posterior odds of the leader without it [nats]",
    "rank": "1 for the strongest, by the size of left_out",
}


@dataclasses.dataclass(frozen=True, kw_only=True, eq=False)
class PairStress:
    """The observations' part in the lead over one rival.

    Attributes
    ----------
    candidate : str
        The rival.
    lead : ()
        Log posterior odds of the leader with all observations [nats].
    pull, left_out, pareto_k : (n,), (n,), (n,)
        As in the table [nats, nats, 1].
    recomputed : (n,) bool
        Whether left_out was computed again.
    without_two : () or nan
        The lead without the two observations that support it most [nats].
    two : tuple of int
        These.
    """

    candidate: str
    lead: float
    pull: np.ndarray
    left_out: np.ndarray
    pareto_k: np.ndarray
    recomputed: np.ndarray
    without_two: float
    two: tuple[int, ...]

    @property
    def order(self) -> np.ndarray:
        """(n,) observations by the size of left_out, the strongest first."""
        size = np.where(np.isnan(self.left_out), -np.inf, np.abs(self.left_out))
        return np.argsort(-size, kind="stable")

    @property
    def carrier(self) -> int | None:
        """The observation without which the lead would be lost, if there is one."""
        lost = self.lead + self.left_out <= 0
        return int(np.nanargmin(self.left_out)) if np.any(lost) else None

    def rows(self) -> list[dict[str, Any]]:
        """As rows of the table, in the order of the data."""
        ranks = np.empty(len(self.order), dtype=int)
        ranks[self.order] = np.arange(1, len(self.order) + 1)
        return [
            {
                "observation": i,
                "candidate": self.candidate,
                "pull": float(self.pull[i]),
                "left_out": float(self.left_out[i]),
                "pareto_k": float(self.pareto_k[i]),
                "recomputed": bool(self.recomputed[i]),
                "lead_without": float(self.lead + self.left_out[i]),
                "rank": int(ranks[i]),
            }
            for i in range(len(self.left_out))
        ]


@dataclasses.dataclass(frozen=True, kw_only=True, eq=False, repr=False)
class ObservationStress:
    """What single observations do to a verdict.

    Attributes
    ----------
    leader : str
    pairs : tuple of PairStress
        One per rival, the closest first.
    warnings : tuple of str
        Where one or two observations carry the verdict.
    left_out : tuple of str
        Sentences on candidates that could not be looked at.
    columns : dict
        Numeric data columns (n,) along which the picture can be drawn.
    """

    leader: str
    pairs: tuple[PairStress, ...]
    warnings: tuple[str, ...]
    left_out: tuple[str, ...]
    columns: dict[str, np.ndarray] = dataclasses.field(repr=False)

    def table(self) -> Any:
        """One row per observation and rival as a pandas table; see ``attrs["columns"]``."""
        return frame([row for pair in self.pairs for row in pair.rows()], COLUMNS)

    @property
    def summary(self) -> str:
        """One sentence or two: who carries the verdict."""
        return wording.observation_summary(self)

    def plot(self, candidate: str | None = None, *, along: str | None = None) -> Figure:
        """Draw what leaving out each observation does, along the data.

        Parameters
        ----------
        candidate : str, optional
            The rival; the closest where none is named.
        along : str, optional
            A data column with one value per observation; the order of the data otherwise.

        Raises
        ------
        DeclarationError
            An unknown rival or column.
        ImportError
            matplotlib is not installed.
        """
        from evidence.stress.pictures import draw_observations

        names = [pair.candidate for pair in self.pairs]
        name = names[0] if candidate is None else candidate
        for what, asked, known in (("rival", name, names), ("column", along, self.columns)):
            if asked is not None and asked not in known:
                raise DeclarationError(
                    f"{asked!r} is no {what} here. There are: {', '.join(known) or 'none'}."
                    f"{near_name(str(asked), known)}"
                )
        pair = self.pairs[names.index(name)]
        places = None if along is None else self.columns[along]
        return draw_observations(self.leader, pair, places, along)

    def to_dict(self) -> dict[str, Any]:
        """Everything as plain numbers and texts."""
        return {
            "format": "evidence observation stress",
            "version": 1,
            "leader": self.leader,
            "summary": self.summary,
            "warnings": list(self.warnings),
            "columns": dict(COLUMNS),
            "rows": [row for pair in self.pairs for row in pair.rows()],
            "pairs": [
                {"candidate": p.candidate, "lead": p.lead, "two": list(p.two),
                 "without_two": p.without_two}
                for p in self.pairs
            ],
            "left_out": list(self.left_out),
        }  # fmt: skip

    def report(self, path: str | Path) -> None:
        """Write the result to a .json or .csv file, whole or not at all.

        Raises
        ------
        DeclarationError
            Another suffix.
        DataError
            A path that cannot be written.
        """
        save(self.to_dict(), path)

    def __repr__(self) -> str:
        return wording.observation_text(self)


def stress_observations(
    weighing: Weighing,
    *,
    recompute: int = RECOMPUTED,
    progress: Callable[[str], None] | None = None,
) -> ObservationStress:
    """Find out how far the verdict hangs on single observations.

    Parameters
    ----------
    weighing : Weighing
        As computed; a result read back from a file holds no candidates to compute with.
    recompute : int
        How many of the strongest observations are left out in earnest; so are those whose
        re-weighted value cannot be relied on, up to 40 for each rival.
    progress : callable, optional
        Told in a few words what goes on.

    Raises
    ------
    DeclarationError
        A saved result, a log-likelihood that returns the sum and not the terms, or no rival.

    Notes
    -----
    An observation is one term of the log-likelihood; leaving it out leaves the covariates of the
    others as they are.
    """
    standing = stand(weighing, "stress_observations")
    if isinstance(recompute, bool) or not isinstance(recompute, int) or recompute < 0:
        raise DeclarationError(
            sentence("recompute must be a whole number from 0 on", repr(recompute))
        )
    left_out = list(standing.left_out)
    usable = _with_terms(standing, left_out)
    rivals = sorted((n for n in usable if n != standing.leader), key=standing.lead)
    if not rivals:
        raise DeclarationError(
            sentence(
                "stress_observations compares the leader with a rival, and there is none",
                "; ".join(left_out) or None,
                "Weigh at least two candidates",
            )
        )
    found = {}
    for name in [standing.leader, *rivals]:
        if progress is not None:
            progress(f"{name}: draws without each observation")
        found[name] = (pulls(weighing[name]), *left_out_by_draws(weighing[name]))
    cache: dict[tuple[str, tuple[int, ...]], float] = {}
    pairs = []
    for rival in rivals:
        if progress is not None:
            progress(f"{rival}: the strongest observations again")
        pairs.append(_pair(standing, rival, found, recompute, cache))
    return ObservationStress(
        leader=standing.leader,
        pairs=tuple(pairs),
        warnings=tuple(text for pair in pairs for text in _warnings(standing.leader, pair)),
        left_out=tuple(left_out),
        columns=_columns(standing),
    )


def _with_terms(standing: Standing, left_out: list[str]) -> list[str]:
    """Candidates whose log-likelihood gives terms; refuses where the leader's does not."""
    usable = []
    for name, one in standing.recomputed.items():
        model = one.problem.model
        if one.problem.terms is not None and not model.bare:
            usable.append(name)
            continue
        what = "is a bare log posterior" if model.bare else "returns the sum of its terms"
        remedy = (
            "Declare it as ev.Model(name, priors, log_likelihood)"
            if model.bare
            else "Return the terms: `return Normal(mean, sd).log_prob(data['y'])` without "
            ".sum() or jnp.sum"
        )
        if name == standing.leader:
            raise DeclarationError(
                f"stress_observations needs one log-likelihood term per observation; {name!r} "
                f"{what}. {remedy}."
            )
        left_out.append(f"{name} {what} and is left out. {remedy}")
    return usable


def _pair(
    standing: Standing,
    rival: str,
    found: dict[str, tuple[np.ndarray, np.ndarray, np.ndarray]],
    recompute: int,
    cache: dict[tuple[str, tuple[int, ...]], float],
) -> PairStress:
    ours, theirs = found[standing.leader], found[rival]
    left_out = np.array(ours[1] - theirs[1])
    shapes = np.fmax(ours[2], theirs[2])
    again = np.zeros(len(left_out), dtype=bool)
    for index in _to_recompute(left_out, shapes, recompute):
        value = _without(standing, rival, (int(index),), cache)
        if np.isfinite(value):
            left_out[index], again[index] = value, True
    supporting = [int(i) for i in np.argsort(left_out, kind="stable")[:2] if left_out[i] < 0]
    lead, without_two = standing.lead(rival), np.nan
    if len(supporting) == 2 and recompute:
        change = _without(standing, rival, tuple(sorted(supporting)), cache)
        without_two = lead + change
    return PairStress(
        candidate=rival,
        lead=lead,
        pull=ours[0] - theirs[0],
        left_out=left_out,
        pareto_k=shapes,
        recomputed=again,
        without_two=without_two,
        two=tuple(supporting),
    )


def _to_recompute(left_out: np.ndarray, shapes: np.ndarray, number: int) -> Sequence[int]:
    """The strongest, and those whose weights mislead, the strongest of these first."""
    if not number:
        return []
    size = np.where(np.isnan(left_out), np.inf, np.abs(left_out))
    order = np.argsort(-size, kind="stable")
    misled = [i for i in order if shapes[i] > UNRELIABLE or np.isnan(left_out[i])]
    return list(dict.fromkeys([*order[:number], *misled[:MOST_RECOMPUTED]]))


def _without(
    standing: Standing,
    rival: str,
    chosen: tuple[int, ...],
    cache: dict[tuple[str, tuple[int, ...]], float],
) -> float:
    """Change of the lead without some observations, recomputed [nats]."""
    for name in (standing.leader, rival):
        if (name, chosen) not in cache:
            cache[name, chosen] = recomputed_without(standing.recomputed[name], chosen)
    return cache[standing.leader, chosen] - cache[rival, chosen]


def _warnings(leader: str, pair: PairStress) -> list[str]:
    """What must be told where one or two observations carry the lead."""
    one = pair.carrier
    if one is not None:
        return [
            f"without observation {one} alone {pair.candidate} would lead by "
            f"{-(pair.lead + pair.left_out[one]):.2f} nats: it carries the lead of {leader}"
        ]
    if pair.without_two <= 0:
        return [
            f"without observations {pair.two[0]} and {pair.two[1]} {pair.candidate} would lead "
            f"by {-pair.without_two:.2f} nats: they carry the lead of {leader}"
        ]
    if pair.lead >= SETTLED_LEAD and pair.without_two < SETTLED_LEAD:
        return [
            f"without observations {pair.two[0]} and {pair.two[1]} the lead of {leader} over "
            f"{pair.candidate} falls from {pair.lead:.2f} to {pair.without_two:.2f} nats"
        ]
    return []


def _columns(standing: Standing) -> dict[str, np.ndarray]:
    problem = standing.recomputed[standing.leader].problem
    return {
        name: np.asarray(values, dtype=np.float64)
        for name, values in problem.arrays.items()
        if np.shape(values) == (problem.terms,)
    }
