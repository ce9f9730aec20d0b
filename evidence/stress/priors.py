"""How far the verdict hangs on the priors, and the smallest change that would overturn it."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Iterable, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from evidence.complaints import DeclarationError, near_name, sentence
from evidence.stress import wording
from evidence.stress.changes import JointChange, LeverEffect
from evidence.stress.levers import Lever, find_levers
from evidence.stress.recomputing import Recomputed
from evidence.stress.saving import frame, save
from evidence.stress.standing import Standing, stand
from evidence.stress.tipping import nearest_point, nearest_root
from evidence.weighing import Weighing

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["COLUMNS", "PriorStress", "stress_priors"]

CLOSE_TO_ONE = 0.2  # how near to the log of the factor a twice as wide prior must cost, relative
COLUMNS = {
    "candidate": "name of the candidate whose declaration is moved",
    "hyperparameter": "what is moved; an array moves as a whole",
    "unit": "of its value, as declared in units=",
    "kind": "scale and constant move by factors, location by prior sd",
    "value": "as declared [unit]; empty for an array",
    "derivative": "of the candidate's log evidence, per log unit of a scale or constant and per "
    "prior sd of a location [nats]",
    "derivative_per_unit": "the same per unit of the value [nats/unit]; empty for an array",
    "bayes_factor_derivative": "of the log Bayes factor of the candidate against the leader; for "
    "the leader's own numbers, of every other candidate's against it [nats per step as above]",
    "halved": "change of the log evidence, recomputed, at half the value; of a location, one prior "
    "sd lower [nats]",
    "doubled": "the same at twice the value; of a location, one prior sd higher [nats]",
    "lead": "log posterior odds of the leader against the candidate; of the leader's own numbers, "
    "against the runner-up [nats]",
    "tipping": "smallest change at which the lead changes hands: a factor of a scale or constant, "
    "prior sd of a location; empty where there is none within a factor of 100, or 4.6 prior sd",
    "tipping_value": "the value there [unit]",
    "overtaken_by": "who leads beyond it",
    "note": "in words",
}


@dataclasses.dataclass(frozen=True, kw_only=True, eq=False, repr=False)
class PriorStress:
    """What the priors do to a verdict.

    Attributes
    ----------
    leader, runner_up : str, str or None
        Names; no runner-up where the leader is alone.
    effects : tuple of LeverEffect
        One per number, in the order of the declarations.
    single : JointChange or None
        The smallest change of one number that overturns the verdict.
    joint : JointChange or None
        The smallest change of several, of leader and runner-up, that makes the runner-up lead.
    left_out : tuple of str
        Sentences on what was not moved, and why.
    """

    leader: str
    runner_up: str | None
    effects: tuple[LeverEffect, ...]
    single: JointChange | None
    joint: JointChange | None
    left_out: tuple[str, ...]
    standing: Standing = dataclasses.field(repr=False)

    def table(self) -> Any:
        """One row per number as a pandas table; see ``table().attrs["columns"]``."""
        return frame([effect.row() for effect in self.effects], COLUMNS)

    @property
    def summary(self) -> str:
        """One sentence or two: what would overturn the verdict."""
        return wording.prior_summary(self)

    @property
    def lindley(self) -> tuple[LeverEffect, ...]:
        """Effects of widths that cost their log in evidence and in the Bayes factor."""
        return tuple(effect for effect in self.effects if "Jeffreys-Lindley" in effect.note)

    def curve(self, candidate: str, hyperparameter: str, factors: Iterable[float]) -> Any:
        """Recomputed evidences along one number, as a pandas table.

        Parameters
        ----------
        candidate : str
        hyperparameter : str
            Short ("rate.sd", "g") or in full ("sd of the prior on rate").
        factors : iterable of float
            Multiples of the declared value; of a location, prior sd added to it.

        Raises
        ------
        DeclarationError
            An unknown name, or a factor that is not positive.
        """
        lever = self._lever(candidate, hyperparameter)
        moved = [float(x) for x in factors]
        if lever.kind != "location" and min(moved, default=1.0) <= 0:
            raise DeclarationError(sentence("factors must be positive numbers", str(moved)[:80]))
        steps = moved if lever.kind == "location" else [float(np.log(x)) for x in moved]
        recomputed = self.standing.recomputed[candidate]
        other = self.runner_up if candidate == self.leader else self.leader
        reference = np.nan if other is None else self.standing.log_evidence(other)
        rows = []
        for factor, step in zip(moved, steps, strict=True):
            found = recomputed.log_evidence([lever], [step], fresh=True)
            rows.append(
                {
                    "factor": factor,
                    "value": lever.value_at(step),
                    "log_evidence": found,
                    "log_bayes_factor": found - reference,
                }
            )
        return frame(rows, {
            "factor": "multiple of the declared value; of a location, prior sd added to it",
            "value": f"of the {lever.label} [{lever.unit or '1'}]",
            "log_evidence": f"of {candidate}, with the held gap of the audit [nats]",
            "log_bayes_factor": f"of {candidate} against {other} [nats]",
        })  # fmt: skip

    def _lever(self, candidate: str, hyperparameter: str) -> Lever:
        levers = [e.lever for e in self.effects if e.lever.candidate == candidate]
        known = {lever.name: lever for lever in levers} | {x.label: x for x in levers}
        if hyperparameter not in known:
            listed = ", ".join(x.name for x in levers) or "none that can be moved"
            raise DeclarationError(
                f"{hyperparameter!r} is no hyperparameter of {candidate!r}. There are: {listed}."
                f"{near_name(hyperparameter, known)}"
            )
        return known[hyperparameter]

    def plot(self) -> Figure:
        """Draw the leader's lead at half and twice each scale.

        Raises
        ------
        ImportError
            matplotlib is not installed.
        """
        from evidence.stress.pictures import draw_priors

        return draw_priors(self.to_dict())

    def to_dict(self) -> dict[str, Any]:
        """Everything as plain numbers and texts."""
        return {
            "format": "evidence prior stress",
            "version": 1,
            "leader": self.leader,
            "runner_up": self.runner_up,
            "summary": self.summary,
            "columns": dict(COLUMNS),
            "rows": [effect.row() for effect in self.effects],
            "single": None if self.single is None else self.single.to_dict(),
            "joint": None if self.joint is None else self.joint.to_dict(),
            "left_out": list(self.left_out),
        }

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
        return wording.prior_text(self)


def stress_priors(
    weighing: Weighing, *, audit: bool = True, progress: Callable[[str], None] | None = None
) -> PriorStress:
    """Find out how far the verdict hangs on each number of the priors, and what overturns it.

    Parameters
    ----------
    weighing : Weighing
        As computed; a result read back from a file holds no candidates to compute with.
    audit : bool
        Whether the evidences at the smallest changes are audited afresh.
    progress : callable, optional
        Told in a few words what goes on.

    Raises
    ------
    DeclarationError
        A saved result, no candidate with a log evidence, or nothing that could be moved.

    Notes
    -----
    Evidences are recomputed by Laplace's method with its second-order term; the gap to the
    audit's accepted value is held (Sinharay & Stern 2002, Am. Stat. 56:196, on why this is
    asked). Each candidate's numbers are moved by themselves, also where another candidate
    declares the same prior. Priors that are functions are reached through ``constants``.
    """
    standing = stand(weighing, "stress_priors")
    levers: dict[str, tuple[Lever, ...]] = {}
    left_out = list(standing.left_out)
    for name in standing.recomputed:
        levers[name], refused = find_levers(weighing[name].problem.model)
        left_out += refused
    if not any(levers.values()):
        raise DeclarationError(
            sentence("no prior of these candidates has a number to move", "; ".join(left_out))
        )
    effects: list[LeverEffect] = []
    for name, own in levers.items():
        for lever in own:
            if progress is not None:
                progress(f"{name}: {lever.label}")
            effects.append(_effect(standing, lever))
    single = joint = None
    if standing.runner_up is not None:
        single = _single(standing, effects, audit)
        if progress is not None:
            progress("the smallest joint change")
        pair = [*levers.get(standing.leader, ()), *levers.get(standing.runner_up, ())]
        joint = _joint(standing, pair, effects, audit)
    return PriorStress(
        leader=standing.leader,
        runner_up=standing.runner_up,
        effects=tuple(effects),
        single=single,
        joint=joint,
        left_out=tuple(left_out),
        standing=standing,
    )


def _effect(standing: Standing, lever: Lever) -> LeverEffect:
    recomputed = standing.recomputed[lever.candidate]
    leads = lever.candidate == standing.leader
    rival = standing.runner_up if leads else standing.leader
    size = 1.0 if lever.kind == "location" else float(np.log(2.0))
    at_rest = recomputed.value([], [])
    halved, doubled = (
        recomputed.value([lever], [step], fresh=True) - at_rest for step in (-size, size)
    )
    derivative = recomputed.slope([lever], [0.0], 0)
    lead, root, lost = np.nan, np.nan, np.nan
    if rival is not None:
        lead = standing.lead(rival if leads else lever.candidate)
        found = nearest_root(_lead_along(recomputed, lever, lead, leads), {0.0: lead})
        root, lost = found.step, found.lost_at
    over = "" if np.isnan(root) else str(rival if leads else lever.candidate)
    return LeverEffect(
        lever=lever,
        derivative=derivative,
        halved=halved,
        doubled=doubled,
        lead=lead,
        step=root,
        overtaken_by=over,
        leads=leads,
        note=_note(standing, lever, halved if lever.width < 0 else doubled, lost, rival),
    )


def _lead_along(
    recomputed: Recomputed, lever: Lever, lead: float, leads: bool
) -> Callable[[float], float]:
    at_rest, sign = recomputed.value([], []), 1.0 if leads else -1.0

    def along(step: float) -> float:
        return lead + sign * (recomputed.value([lever], [step]) - at_rest)

    return along


def _note(standing: Standing, lever: Lever, widened: float, lost: float, rival: str | None) -> str:
    notes = []
    shared = rival is not None and lever.parameter in standing.parameters(rival)
    cost = widened / float(np.log(2.0)) / lever.entries if lever.width else np.nan
    if rival is not None and not shared and abs(cost + 1.0) <= CLOSE_TO_ONE:
        notes.append(
            f"Jeffreys-Lindley effect: {rival} has no {lever.parameter}, and each widening of its "
            "prior by a factor costs the log of that factor in the Bayes factor"
        )
    if np.isfinite(lost):
        notes.append(f"no evidence beyond {wording.change(lever, lost)}")
    return "; ".join(notes)


def _single(standing: Standing, effects: list[LeverEffect], audit: bool) -> JointChange | None:
    tipping = [effect for effect in effects if np.isfinite(effect.step)]
    if not tipping:
        return None
    best = min(tipping, key=lambda effect: abs(effect.step))
    rival = str(standing.runner_up) if best.leads else best.lever.candidate
    return standing.change(rival, (best.lever,), (best.step,), audit)


def _joint(
    standing: Standing, levers: list[Lever], effects: list[LeverEffect], audit: bool
) -> JointChange | None:
    if not levers:
        return None
    rival = str(standing.runner_up)
    ours: Mapping[str, float] = {
        f"{e.lever.candidate}/{e.lever.label}": e.step for e in effects if np.isfinite(e.step)
    }
    roots = np.array([ours.get(f"{x.candidate}/{x.label}", np.nan) for x in levers])
    firsts = [np.zeros(len(levers))]
    if np.any(np.isfinite(roots)):
        best = int(np.nanargmin(np.abs(roots)))
        firsts.append(np.where(np.arange(len(levers)) == best, roots, 0.0))

    def lead(steps: np.ndarray) -> float:
        return standing.lead_at(rival, levers, steps)

    def slopes(steps: np.ndarray) -> np.ndarray:
        return standing.slopes_at(rival, levers, steps)

    found = [nearest_point(lead, slopes, first) for first in firsts]
    norms = [float(np.linalg.norm(point)) for point in found]
    if not np.any(np.isfinite(norms)):
        return None
    steps = found[int(np.nanargmin(norms))]
    return standing.change(rival, tuple(levers), tuple(steps.tolist()), audit)
