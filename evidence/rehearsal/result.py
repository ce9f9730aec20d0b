"""The result of a rehearsal: tables, one sentence, pictures, files."""

from __future__ import annotations

import dataclasses
import functools
from pathlib import Path
from typing import Any

import numpy as np

from evidence.complaints import DeclarationError, sentence
from evidence.rehearsal.columns import CONFUSION, MISLEADING, QUANTILES, TABLES
from evidence.rehearsal.counting import (
    LEADER,
    SETTLING,
    Bin,
    SizeRun,
    calibrate,
    size_for,
    wilson,
)

__all__ = ["TABLES", "FailedDraw", "Rehearsal"]

RARE = 0.05  # chance, all bins together, below which probabilities are called off


@dataclasses.dataclass(frozen=True)
class FailedDraw:
    """A simulation that could not be used: whose, at which size, which repeat, why, where."""

    generator: str
    size: int
    repeat: int
    reason: str
    parameters: str


@dataclasses.dataclass(frozen=True, kw_only=True, eq=False, repr=False)
class Rehearsal:
    """Data simulated from every candidate, and all candidates weighed on each.

    Attributes
    ----------
    candidates : tuple of str
    runs : tuple of SizeRun
        One per size, in rising order: the raw arrays.
    failures : tuple of FailedDraw
        Simulations with nan or inf; they are left out and the rest went on.
    repeats, seed, depth : int, int, str
        As asked for.
    from_posterior : bool
        Whether parameters were drawn from posteriors, not priors.
    """

    candidates: tuple[str, ...]
    runs: tuple[SizeRun, ...] = dataclasses.field(repr=False)
    failures: tuple[FailedDraw, ...]
    repeats: int
    seed: int
    depth: str
    from_posterior: bool

    @property
    def sizes(self) -> tuple[int, ...]:
        """Numbers of observations."""
        return tuple(run.size for run in self.runs)

    def run(self, size: int | None = None) -> SizeRun:
        """The arrays of one size; of the largest where none is given.

        Raises
        ------
        DeclarationError
            A size that was not rehearsed.
        """
        if size is None:
            return self.runs[-1]
        for run in self.runs:
            if run.size == size:
                return run
        raise DeclarationError(
            sentence(f"the sizes rehearsed are {', '.join(map(str, self.sizes))}", repr(size))
        )

    @functools.cached_property
    def rows(self) -> dict[str, list[dict[str, Any]]]:
        """Every table as plain rows; the keys of TABLES and of their columns."""
        return {
            "growth": [row for run in self.runs for row in self._growth(run)],
            "confusion": [row for run in self.runs for row in self._confusion(run)],
            "calibration": self._calibration(),
            "log_bayes_factors": [row for run in self.runs for row in self._factors(run)],
        }

    def table(self) -> Any:
        """One row per size and generator as a pandas table: who led, what was settled."""
        return self._frame("growth")

    def confusion(self, size: int | None = None) -> Any:
        """Who generated and who led, data sets counted, as a pandas table: one row a pair.

        Parameters
        ----------
        size : int, optional
            The largest where not given.
        """
        frame = self._frame("confusion")
        kept = frame[frame["size"] == self.run(size).size].reset_index(drop=True)
        kept.attrs["columns"] = dict(CONFUSION)
        return kept

    def calibration(self) -> Any:
        """Among data sets given a probability, how many were right, as a pandas table.

        All sizes together; first for the probability of whoever led, then for each candidate's.
        """
        return self._frame("calibration")

    def log_bayes_factors(self) -> Any:
        """Quantiles of the log Bayes factors of each generator, as a pandas table."""
        return self._frame("log_bayes_factors")

    def sample_size(self, share: float = 0.8, *, lead: float = 0.0) -> Any:
        """Observations with which the question is settled for the truth in a share of cases.

        Parameters
        ----------
        share : float
            Of data sets.
        lead : float
            Nats that the generator must be ahead, beyond what "settled" asks for.

        Returns
        -------
        pandas.DataFrame
            One row per generator and one for all together: ``size``, interpolated between the
            sizes rehearsed and empty where none reaches it, and ``bound``: "at most" where the
            smallest reaches it already, "more than" where the largest does not.

        Raises
        ------
        DeclarationError
            A share that does not lie between 0 and 1.
        """
        import pandas as pd

        return pd.DataFrame(self.sizes_needed(share, lead=lead))

    def sizes_needed(self, share: float, *, lead: float = 0.0) -> list[dict[str, Any]]:
        """The rows of :meth:`sample_size`."""
        if not isinstance(share, int | float) or not 0.0 < share < 1.0:
            raise DeclarationError(sentence("share must lie between 0 and 1", repr(share)))
        by_run = [(run.settled_for(lead=lead), run.usable) for run in self.runs]
        rows = []
        for k, name in enumerate([*self.candidates, "all"]):
            place = slice(None) if name == "all" and k == len(self.candidates) else k
            shares = [_share(s[place][u[place]]) for s, u in by_run]
            found = size_for(share, self.sizes, shares)
            rows.append({"generator": name, "share": share, **found})
        return rows

    @functools.cached_property
    def bins(self) -> dict[str, list[Bin]]:
        """Calibration of the leader's probability, and of each candidate's: name -> bins."""
        leader_p, leader_right, by_name = [], [], {name: ([], []) for name in self.candidates}
        for run in self.runs:
            top = np.nanmax(np.where(np.isnan(run.probability), -1.0, run.probability), axis=2)
            leader_p.append(np.where(top < 0, np.nan, top).ravel())
            leader_right.append(run.right.ravel())
            truth = np.broadcast_to(np.arange(len(run.usable))[:, None], run.usable.shape)
            for k, name in enumerate(self.candidates):
                by_name[name][0].append(run.probability[:, :, k].ravel())
                by_name[name][1].append((truth == k).ravel())
        found = {LEADER: calibrate(np.concatenate(leader_p), np.concatenate(leader_right))}
        for name, (p, right) in by_name.items():
            found[name] = calibrate(np.concatenate(p), np.concatenate(right))
        return found

    @property
    def calibrated(self) -> bool | None:
        """Whether no bin is farther off than chance allows; None where it is no check.

        Judged by the smallest chance of all bins against 5 % divided by their number (Bonferroni).
        """
        if self.from_posterior:
            return None
        chances = [b.chance for bins in self.bins.values() for b in bins]
        return bool(min(chances, default=1.0) >= RARE / max(len(chances), 1))

    @property
    def summary(self) -> str:
        """A few sentences: who is told apart, with how many observations, and the calibration."""
        run = self.runs[-1]
        right, settled = _share(run.right[run.usable]), _share(run.settled_for()[run.usable])
        text = (
            f"With {run.size} observations the candidate that made the data led in {right:.0%} of "
            f"{int(run.usable.sum())} simulated data sets and was settled on in {settled:.0%}"
        )
        if len(self.runs) > 1:
            needs = [
                f"{share:.0%} of cases with {_needed(self.sizes_needed(share)[-1])}"
                for share in SETTLING
            ]
            text += f"; the question is settled for it in {', in '.join(needs)}"
        text += f". {self._calibration_words()}"
        if self.failures:
            first = self.failures[0]
            text += (
                f" {len(self.failures)} simulations gave nan or inf and are left out (the first: "
                f"{first.generator}, {first.reason})."
            )
        return text

    def _calibration_words(self) -> str:
        bins = self.bins[LEADER]
        inside = sum(b.inside for b in bins)
        where = f"{inside} of {len(bins)} bins of the leader's probability lie inside their bands"
        if self.calibrated is None:
            return "Parameters came from posteriors, so the calibration is no check."
        if self.calibrated:
            return f"The probabilities are calibrated as far as this shows: {where}."
        return f"The probabilities are off by more than chance: {where}; see .calibration()."

    def plot(self, picture: str = "overview") -> Any:
        """A picture as a matplotlib figure.

        Parameters
        ----------
        picture : {"overview", "confusion", "calibration", "growth", "log_bayes_factors"}

        Raises
        ------
        DeclarationError
            Another word.
        ImportError
            matplotlib is not installed.
        """
        from evidence.rehearsal.pictures import draw_rehearsal

        return draw_rehearsal(self, picture)

    def to_dict(self) -> dict[str, Any]:
        """Every table with its explanations, as plain numbers and texts."""
        return {
            "format": "evidence rehearsal",
            "version": 1,
            "summary": self.summary,
            "candidates": list(self.candidates),
            "sizes": list(self.sizes),
            "repeats": self.repeats,
            "seed": self.seed,
            "depth": self.depth,
            "from_posterior": self.from_posterior,
            "calibrated": self.calibrated,
            "sample_sizes": [row for share in SETTLING for row in self.sizes_needed(share)],
            "columns": {name: dict(columns) for name, columns in TABLES.items()},
            **self.rows,
            "failures": [dataclasses.asdict(failure) for failure in self.failures],
        }

    def save(self, path: str | Path) -> None:
        """Write .json (everything), .csv (the main table) or .md (all tables).

        Raises
        ------
        DeclarationError
            Another suffix.
        DataError
            A path that cannot be written.
        """
        from evidence.rehearsal.saving import save

        save(self.to_dict(), path)

    def __repr__(self) -> str:
        lines = [f"Rehearsal: {self.summary}"]
        for row in self._growth(self.runs[-1])[:8]:
            lines.append(
                f"  {row['generator'][:60]}: led in {row['led']:.0%}, settled on in "
                f"{row['settled_right']:.0%}, settled wrongly in {row['settled_wrong']:.0%}"
            )
        more = len(self.candidates) - 8
        return "\n".join([*lines, *([f"  and {more} more: .table()"] if more > 0 else [])])

    def _frame(self, name: str) -> Any:
        import pandas as pd

        frame = pd.DataFrame(self.rows[name], columns=list(TABLES[name]))
        frame.attrs["columns"] = dict(TABLES[name])
        return frame

    def _growth(self, run: SizeRun) -> list[dict[str, Any]]:
        rows, mine = [], run.settled_for()
        for k, name in enumerate(self.candidates):
            usable = run.usable[k]
            count, hits = int(usable.sum()), int(mine[k][usable].sum())
            low, high = wilson(hits, count)
            wrong = run.settled[k] & ~run.right[k]
            rows.append({
                "size": run.size, "generator": name, "data_sets": count,
                "led": _share(run.right[k][usable]), "settled_right": _share(mine[k][usable]),
                "low": low, "high": high, "settled_wrong": _share(wrong[usable]),
                "not_settled": _share(~run.settled[k][usable]),
                "mean_probability": _mean(run.probability[k, :, k]),
                "median_log_bayes_factor": _quantile(run.factors(k), 0.5),
                "simulations_failed": int((~usable).sum()),
                "doubted": _share(run.doubted[k][usable]),
            })  # fmt: skip
        return rows

    def _confusion(self, run: SizeRun) -> list[dict[str, Any]]:
        rows = []
        for generator, counts in zip(self.candidates, run.confusion(), strict=True):
            total = max(int(counts.sum()), 1)
            for leader, count in zip([*self.candidates, ""], counts, strict=True):
                if leader or count:
                    rows.append({"size": run.size, "generator": generator, "leader": leader,
                                 "data_sets": int(count), "share": count / total})  # fmt: skip
        return rows

    def _calibration(self) -> list[dict[str, Any]]:
        return [
            {
                "candidate": name, "low": b.low, "high": b.high, "data_sets": b.count,
                "mean_probability": b.mean, "right": b.right / b.count,
                "band_low": b.band[0] / b.count, "band_high": b.band[1] / b.count,
                "inside": b.inside, "chance": b.chance,
            }
            for name, bins in self.bins.items()
            for b in bins
        ]  # fmt: skip

    def _factors(self, run: SizeRun) -> list[dict[str, Any]]:
        rows = []
        for k, name in enumerate(self.candidates):
            for j, rival in enumerate(self.candidates):
                if j == k:
                    continue
                values = run.factors(k, j)
                values = values[np.isfinite(values)]
                rows.append({
                    "size": run.size, "generator": name, "rival": rival, "mean": _mean(values),
                    **{key: _quantile(values, q) for key, q in QUANTILES.items()},
                    "for_rival": _share(values < 0), "misleading": _share(values <= -MISLEADING),
                })  # fmt: skip
        return rows


def _needed(row: dict[str, Any]) -> str:
    if row["bound"] == "more than":
        return f"more than {row['beyond']}"
    return f"{row['bound']} {row['size']:.0f}".strip()


def _share(values: np.ndarray) -> float:
    return float(np.mean(values)) if values.size else float("nan")


def _mean(values: np.ndarray) -> float:
    known = values[np.isfinite(values)]
    return float(known.mean()) if known.size else float("nan")


def _quantile(values: np.ndarray, q: float) -> float:
    known = values[np.isfinite(values)]
    return float(np.quantile(known, q)) if known.size else float("nan")
