"""One block of data sets of one shape: searches, retries, checks, verdicts."""

from __future__ import annotations

import dataclasses
from typing import Any

import jax
import numpy as np

from evidence.arithmetic import log_sum_exp
from evidence.batches import checks, verdicts
from evidence.batches.answers import Answers, Settings
from evidence.batches.density import Given, RowDensity
from evidence.batches.findings import TRUST_CODE, Finding
from evidence.batches.modes import RowModes, find_row_modes, merge
from evidence.batches.programs import Programs
from evidence.batches.queue import Ends, build_queue, unpack_ends
from evidence.mode import MATTERS
from evidence.outcome import Outcome

__all__ = ["RETRIES", "Bench", "Work", "filled"]

FEW_DRAWS, FULL_DRAWS = 96, 1024
RETRIES = 16  # starts in a data set that the template's starts did not serve


@dataclasses.dataclass(frozen=True, kw_only=True)
class Bench:
    """What all blocks of one candidate have in common.

    Attributes
    ----------
    density, programs, settings : RowDensity, Programs, Settings
    starts : (M, d)
        From the template's modes [unconstrained].
    offsets : (RETRIES, d)
        Further starts, in prior sd from the prior's centre.
    terms : int or None
        Log-likelihood terms of the template.
    spread_known : bool
        Whether anybody said how far to look.
    """

    density: RowDensity
    programs: Programs
    settings: Settings
    starts: np.ndarray
    offsets: np.ndarray
    terms: int | None
    spread_known: bool


class Work:
    """A block of n data sets, on the device, with prior centre and spread (n, d) of each."""

    def __init__(self, bench: Bench, given: Given, centre: np.ndarray, spread: np.ndarray) -> None:
        self.bench, self.given = bench, given
        self.centre, self.spread = centre, spread
        self.n, self.dim = centre.shape
        self.block, self.depth = bench.settings.block, bench.settings.depth

    def answer(self, answers: Answers, places: np.ndarray, position: np.ndarray) -> None:
        """Write what comes out at some places (n,); ``position`` (n,) seeds the draws."""
        if self.dim == 0:
            self._answer_plainly(answers, places)
            return
        modes = self._find_modes()
        found = np.isfinite(modes.laplace[:, 0]) & (modes.outcome == Outcome.OK)
        total = np.full(self.n, np.nan)
        total[found] = log_sum_exp(np.nan_to_num(modes.laplace[found], nan=-np.inf), axis=1)
        answers.put(
            places,
            log_evidence=total,
            laplace=modes.laplace[:, 0],
            trust=np.where(found, TRUST_CODE["unchecked"], TRUST_CODE["failed"]),
            status=np.where(found & modes.left_out, int(Finding.MORE_MODES), modes.outcome),
        )
        if self.depth != "none" and found.any():
            rows = np.flatnonzero(found)
            judged = self._audit(modes, rows, position[rows])
            answers.put(places[rows], **judged._asdict())

    def explore(self) -> list[np.ndarray]:
        """Modes (m, d) that matter in each data set, from many starts."""
        row = np.repeat(np.arange(self.n), RETRIES)
        modes = find_row_modes(self._search(self._scattered(row), row), RETRIES, RETRIES)
        matter = modes.laplace > modes.laplace[:, :1] - MATTERS
        return [z[here] for z, here in zip(modes.z, matter, strict=True)]

    def _scattered(self, row: np.ndarray) -> np.ndarray:
        """Starts (n RETRIES, d) about the prior's centre of each data set, for rows in turn."""
        offsets = np.tile(self.bench.offsets, (len(row) // RETRIES, 1))
        return self.centre[row] + self.spread[row] * offsets

    def _answer_plainly(self, answers: Answers, places: np.ndarray) -> None:
        """A candidate with everything fixed: its evidence is its likelihood, exactly."""
        row = filled(np.arange(self.n), self.block)
        packed = self._run("values", checks.build_values, (row, np.int64(self.n)), points=1)
        value = packed[: self.n, 0]
        finite = np.isfinite(value)
        checked = self.depth != "none"
        exact = np.where(finite, value, np.nan)
        word = TRUST_CODE["sound" if checked else "unchecked"]
        answers.put(
            places,
            log_evidence=exact,
            laplace=exact,
            standard_error=np.where(finite & checked, 0.0, np.nan),
            trust=np.where(finite, word, TRUST_CODE["failed"]),
            status=np.where(finite, 0, int(Outcome.NOT_FINITE)),
        )

    def _find_modes(self) -> RowModes:
        starts = self.bench.starts
        each = len(starts)
        ends = self._search(np.tile(starts, (self.n, 1)), np.repeat(np.arange(self.n), each))
        modes = find_row_modes(ends, each, each)
        lost = np.flatnonzero(modes.outcome != Outcome.OK)
        if not len(lost):
            return modes
        row = np.repeat(lost, RETRIES)
        ends = self._search(self._scattered(row), row)
        return merge(modes, lost, find_row_modes(ends, RETRIES, each))

    def _search(self, starts: np.ndarray, row: np.ndarray) -> Ends:
        packed = self._in_blocks(
            "queue", build_queue, (starts, self.centre[row], self.spread[row], row), points=1
        )
        return unpack_ends(packed, self.dim, self.spread[row])

    def _audit(self, modes: RowModes, rows: np.ndarray, position: np.ndarray) -> verdicts.Rows:
        looks = self._look(modes, rows)
        expanded = verdicts.judge_expansion(modes.laplace[rows], looks, self.dim)
        more = modes.left_out[rows] & (expanded.finding == 0)
        finding = np.where(more, int(Finding.MORE_MODES), expanded.finding)
        expanded = expanded._replace(finding=finding)
        drawn = self._draw(modes, looks, rows, position, full=False)
        judged, still_open = verdicts.judge(expanded, drawn, spread_known=self.bench.spread_known)
        again = np.flatnonzero(still_open)
        if len(again):
            some = {name: x[again] for name, x in looks.items()}
            drawn = self._draw(modes, some, rows[again], position[again], full=True)
            part = verdicts.Expanded(*(x[again] for x in expanded))
            second, _ = verdicts.judge(part, drawn, spread_known=self.bench.spread_known)
            for old, new in zip(judged, second, strict=True):
                old[again] = new
        return judged

    def _look(self, modes: RowModes, rows: np.ndarray) -> dict[str, np.ndarray]:
        """What is seen around each mode of some rows: name -> (rows, M, ...)."""
        here = np.isfinite(modes.laplace[rows])
        place, which = np.nonzero(here)
        at = rows[place]
        items = (modes.z[at, which], modes.hessian[at, which], modes.log_density[at, which],
                 self.spread[at], at)  # fmt: skip
        packed = self._in_blocks("looks", checks.build_looks, items, points=2 * self.dim)
        spread = {}
        for name, values in checks.unpack_looks(packed)._asdict().items():
            fill = 1.0 if name in ("below", "above") else 0.0
            spread[name] = np.full((*here.shape, *values.shape[1:]), fill)
            spread[name][here] = values
        return spread

    def _draw(
        self,
        modes: RowModes,
        looks: dict[str, np.ndarray],
        rows: np.ndarray,
        position: np.ndarray,
        *,
        full: bool,
    ) -> verdicts.Drawn:
        count, each = FULL_DRAWS if full else FEW_DRAWS, modes.laplace.shape[1]
        seed = self.bench.settings.seed
        base = checks.base_points(count, each, self.dim, np.random.default_rng([seed, 11, count]))
        around = checks.Around(modes.z[rows], modes.hessian[rows], looks["below"], looks["above"])
        shift = checks.shifts(position, self.dim, 2 * seed + full)
        items = (around, self.centre[rows], self.spread[rows], shift, rows)
        points = count / (60 * self.dim)  # a density in place of a Hessian
        packed = self._in_blocks("draws", checks.build_draws, items, base, points=points)
        return verdicts.judge_draws(packed, full=full)

    def _in_blocks(
        self, kind: str, build: Any, items: Any, *more: Any, points: float
    ) -> np.ndarray:
        """Run a program on items (k, ...), as many at a time as it takes."""
        total = len(jax.tree_util.tree_leaves(items)[0])
        out = []
        for first in range(0, total, self.block):
            own = jax.tree_util.tree_map(lambda x, a=first: x[a : a + self.block], items)
            count = min(self.block, total - first)
            padded = jax.tree_util.tree_map(lambda x: filled(x, self.block), own)
            arguments = (*padded, np.int64(count), *more)
            out.append(self._run(kind, build, arguments, points=points)[:count])
        return np.concatenate(out)

    def _run(self, kind: str, build: Any, arguments: Any, *, points: float) -> np.ndarray:
        """Run a program of which each slot evaluates about so many Hessians at once."""
        leaves = jax.tree_util.tree_leaves(self.given.columns)
        terms = self.bench.terms or max((x[0].size for x in leaves), default=1)
        guess = int(8 * (17 * terms + 8 * self.dim) * max(self.dim, 1) * points)
        return self.bench.programs.run(
            kind,
            lambda slots: build(self.bench.density, slots),
            (*arguments, self.given),
            bytes_per_slot=guess,
            most_slots=self.block,
        )


def filled(array: np.ndarray, size: int) -> np.ndarray:
    """Lengthen an array to a size by repeating its last entry."""
    if len(array) == size:
        return np.ascontiguousarray(array)
    out = np.empty((size, *array.shape[1:]), array.dtype)
    out[: len(array)] = array
    out[len(array) :] = array[-1]
    return out
