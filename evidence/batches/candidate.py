"""One candidate on the data sets of a part: grouped by shape, solved, and climbed where asked."""

from __future__ import annotations

import dataclasses
import threading
from collections.abc import Mapping
from typing import Any

import jax
import numpy as np

from evidence.approximation import fit
from evidence.batches.answers import Answers, Settings
from evidence.batches.density import Given, RowDensity
from evidence.batches.findings import TRUST_CODE, Finding
from evidence.batches.parts import Group, Part, group_by_shape
from evidence.batches.programs import Programs, signature
from evidence.batches.ragged import check_terms, is_row_wise
from evidence.batches.work import RETRIES, Bench, Work, filled
from evidence.compiling import on_device
from evidence.complaints import DataError, DeclarationError, sentence
from evidence.distributions.base import Distribution
from evidence.mode import starting_points
from evidence.model import Model
from evidence.outcome import Outcome
from evidence.problem import Problem

__all__ = ["Candidate"]

PILOTS = 16  # data sets whose modes are looked for from many starts
ROUNDED = 6  # decimals of a start, in prior sd
MOST_LENGTHS = 12  # lengths for which a candidate that is not row by row is compiled


class Candidate:
    """A model with its programs for the data sets of a batch; may be used by several threads."""

    def __init__(self, model: Model, settings: Settings) -> None:
        self.model, self.settings = model, settings
        self.problem = Problem(model, {**settings.shared, **settings.template})
        self.terms = self.problem.terms
        self._lock = threading.Lock()
        self._hyper = model.hyperparameters()
        self._lengths: set[int] = set()
        self._exact = False
        self._prior_reads_data = any(
            not isinstance(prior, Distribution) for prior in model.priors.values()
        )
        centre, spread = self.problem.centre, self.problem.spread
        self._bench = Bench(
            density=RowDensity(model, self.problem.layout),
            programs=Programs(model),
            settings=settings,
            starts=settings.starts.get(model.name, np.zeros((1, self.problem.dim))),
            offsets=(starting_points(self.problem, RETRIES, settings.seed) - centre) / spread,
            terms=self.terms,
            spread_known=self.problem.spread_known,
        )

    def learn_starts(self, part: Part) -> np.ndarray:
        """Search some data sets of a part from many starts; return, and use, (M, d) starts.

        Where a pilot has several modes each is followed in every data set; otherwise the median
        of the pilots' modes is the start.
        """
        groups, _ = self._groups(part)
        problem = self.problem
        starts = np.array([problem.centre if problem.start is None else problem.start])
        if groups and problem.dim:
            group = max(groups, key=lambda g: len(g.places))
            own = np.unique(np.linspace(0, len(group.places) - 1, PILOTS).astype(int))
            work = self._work(part, group, own)
            modes = [m for m in work.explore() if len(m)]
            most = max(map(len, modes), default=0)
            if most == 1:
                starts = np.median(modes, axis=0)
            elif most > 1:
                starts = next(m for m in modes if len(m) == most)
            # fewer digits: what rounding does must not depend on the machine at hand
            starts = np.round(starts / problem.spread, ROUNDED) * problem.spread
        self._bench = dataclasses.replace(self._bench, starts=starts)
        return starts

    def solve(self, part: Part) -> tuple[Answers, dict[int, tuple[int, str]]]:
        """Log evidence of each data set of a part; also which did not fit, and why."""
        answers = Answers.empty(len(part))
        groups, bad = self._groups(part)
        for group in groups:
            self._solve_group(part, group, answers)
        for place, (code, _) in {**part.bad, **bad}.items():
            answers.put(place, status=code)
        if self.settings.depth not in ("none", "quick"):
            self._climb(part, answers)
        return answers, bad

    def _groups(self, part: Part) -> tuple[list[Group], dict[int, tuple[int, str]]]:
        while True:
            schema = self.settings.schema
            groups, bad = group_by_shape(part, schema, exact=self._exact)
            ragged = [g for g in groups if g.kept is not None]
            if ragged or len(groups) > 1:
                check_terms(self.model.name, self.terms)
            if all([self._may_fill(part, g) for g in ragged]):
                if self._exact:
                    self._count_lengths(part, groups)
                return groups, bad
            self._exact = True

    def _may_fill(self, part: Part, group: Group) -> bool:
        """Whether data sets may be filled up to this length, found out once per length."""
        schema = self.settings.schema
        size = len(group.columns[next(iter(schema.rows))][0])
        with self._lock:
            return self.model.programs.get(
                (
                    "row by row",
                    size,
                    self._bench.programs.key,
                    signature(group.columns),
                    schema.rows,
                ),
                lambda: self._is_row_wise(part, group, size),
            )

    def _is_row_wise(self, part: Part, group: Group, size: int) -> bool:
        schema = self.settings.schema
        data = part.data_set(group.places[int(np.argmin(group.kept))])
        data = {k: np.asarray(data[k], group.columns[k].dtype) for k in schema.shapes}
        points = self.problem.centre + np.array([[0.1], [-0.3]]) * self.problem.spread
        given = self._given({}, None)
        return is_row_wise(self._bench.density, given, data, size, schema, points)

    def _count_lengths(self, part: Part, groups: list[Group]) -> None:
        schema = self.settings.schema
        some = next(iter(schema.rows), None)
        if some is None:
            return
        self._lengths |= {len(part.data_set(g.places[0])[some]) for g in groups}
        if len(self._lengths) > MOST_LENGTHS:
            raise DeclarationError(
                sentence(
                    f"the log-likelihood of {self.model.name!r} is not row by row (filling a data "
                    "set up with repeated rows changes its other terms), and the data sets have "
                    f"more than {MOST_LENGTHS} lengths",
                    f"lengths {', '.join(map(str, sorted(self._lengths)[:6]))}, ...",
                    "Let each term depend on its own row alone, or weigh data sets of few lengths "
                    "at a time",
                )
            )

    def _given(self, columns: Any, kept: Any) -> Given:
        return Given(self._hyper, self.settings.shared, columns, kept)

    def _solve_group(self, part: Part, group: Group, answers: Answers) -> None:
        block = self.settings.block
        for first in range(0, len(group.places), block):
            own = np.arange(first, min(first + block, len(group.places)))
            places = group.places[own]
            self._work(part, group, own).answer(answers, places, part.first + places)

    def _work(self, part: Part, group: Group, own: np.ndarray) -> Work:
        """Some data sets of a group, on the device."""
        block = self.settings.block
        whole = len(own) == len(group.places)
        columns, kept = (group.columns, group.kept) if whole else jax.tree_util.tree_map(
            lambda x: x[own], (group.columns, group.kept)
        )  # fmt: skip
        columns, kept = jax.tree_util.tree_map(lambda x: filled(x, block), (columns, kept))
        given = on_device(self._given(columns, kept))
        return Work(self._bench, given, *self._prior_scale(part, group.places[own]))

    def _prior_scale(self, part: Part, places: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Prior centre and spread (k, d) of each data set."""
        if not self._prior_reads_data:
            shape = (len(places), self.problem.dim)
            return (np.broadcast_to(self.problem.centre, shape),
                    np.broadcast_to(self.problem.spread, shape))  # fmt: skip
        found = [
            self.problem.layout.prior_scale(
                self._hyper, {**self.settings.shared, **part.data_set(place)}
            )[:2]
            for place in places
        ]
        return np.stack([c for c, _ in found]), np.stack([s for _, s in found])

    def _climb(self, part: Part, answers: Answers) -> None:
        """Send the rows that the quick audit did not pass up the ladder, one by one."""
        weak = (TRUST_CODE["doubtful"], TRUST_CODE["failed"])
        rows = np.isin(answers.trust, weak) & (answers.status != Finding.BAD_DATA)
        for place in np.flatnonzero(rows & (answers.status != Finding.WRONG_COLUMNS)):
            self._climb_one(part, int(place), answers)

    def _climb_one(self, part: Part, place: int, answers: Answers) -> None:
        settings = self.settings
        data: Mapping[str, Any] = {**settings.shared, **part.data_set(place)}
        try:
            with self._lock:
                result = fit(self.model, data, depth=settings.depth, seed=settings.seed,
                             progress=lambda _: None)  # fmt: skip
        except DataError:
            answers.put(place, status=Finding.BAD_DATA)
            return
        failed = result.trust == "failed"
        answers.put(
            place,
            log_evidence=np.nan if failed else result.log_evidence,
            standard_error=np.nan if failed else result.standard_error,
            laplace=result.laplace,
            trust=TRUST_CODE[result.trust],
            status=int(result.status) or (int(Outcome.NO_PROGRESS) if failed else 0),
        )
