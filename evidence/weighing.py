"""Several candidates on the same data: probabilities with their errors, and a verdict."""

from __future__ import annotations

import datetime
import functools
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from evidence.approximation import announce, audit, check_options, fit
from evidence.candidates import candidates_of, chances_of, check_same_terms
from evidence.comparison import OUT_OF_REACH, TRUSTED, Comparison, Entry, compare
from evidence.complaints import near_name
from evidence.estimate import Approximation
from evidence.model import Model
from evidence.problem import Problem
from evidence.record import candidate_record, versions
from evidence.recorded import recorded_candidate
from evidence.report.html import notebook_fragment
from evidence.report.json_form import FORMAT, VERSION, numbers_only, read_record
from evidence.report.text import short_text
from evidence.report.writing import ILLUSTRATED, check_suffix, save
from evidence.study import Study
from evidence.tables import fingerprint, named_arrays

__all__ = ["COLUMNS", "Weighing", "weigh"]

COLUMNS = {
    "candidate": "name of the candidate",
    "log_evidence": "log of the probability density of the data under the candidate, averaged over "
    "its priors; the accepted estimate [nats]",
    "standard_error": "error of the log evidence: three of them must cover the truth; empty where "
    "unchecked [nats]",
    "log_bayes_factor": "log evidence minus that of the leader; 0 for the leader [nats]",
    "probability": "posterior probability of the candidate among those compared, from the log "
    "evidences and the prior probabilities [0 to 1]",
    "fit": "log-likelihood at the mode [nats]",
    "occam_factor": "log evidence minus fit: what the candidate pays for its freedom; the mode is "
    "the peak in the unconstrained coordinates, so the split depends on them [nats]",
    "well_determined": "number of parameters that the data determine, of MacKay (1992); empty for "
    "a bare log posterior",
    "bic": "k log n - 2 log L at the maximum of the likelihood, of Schwarz (1978); empty where "
    "there is none or the log-likelihood is a scalar [2 nats]",
    "trust": "sound, corrected, rough, doubtful, failed or unchecked: how far the log evidence was "
    "confirmed by independent methods",
}


class Weighing(Mapping[str, Approximation]):
    """Candidates compared on the same data: a mapping of name to Approximation.

    Attributes
    ----------
    comparison : Comparison
        Probabilities, leader, verdict.
    prior_probabilities : dict
        Name to prior probability; they add up to 1.
    """

    def __init__(
        self,
        results: Mapping[str, Approximation],
        prior_probabilities: Mapping[str, float],
        circumstances: Mapping[str, Any],
    ) -> None:
        self._results = dict(results)
        self.prior_probabilities = dict(prior_probabilities)
        self._circumstances = dict(circumstances)
        entries = [
            Entry(
                name=name,
                log_evidence=result.log_evidence,
                standard_error=result.standard_error,
                prior_probability=self.prior_probabilities[name],
                trust=result.trust,
            )
            for name, result in self._results.items()
        ]
        self.comparison: Comparison = compare(entries, seed=int(circumstances["seed"]))

    def __getitem__(self, name: str) -> Approximation:
        if name not in self._results:
            raise KeyError(
                f"no candidate is named {name!r}. There are: {', '.join(self._results)}."
                f"{near_name(name, self._results)}"
            )
        return self._results[name]

    def __iter__(self) -> Iterator[str]:
        return iter(self._results)

    def __len__(self) -> int:
        return len(self._results)

    @property
    def probabilities(self) -> dict[str, float]:
        """Posterior probability by name; nan for a failed candidate."""
        return dict(zip(self, self.comparison.probabilities, strict=True))

    @property
    def probability_intervals(self) -> dict[str, tuple[float, float]]:
        """95 % interval of each probability, from the errors of the log evidences."""
        return dict(zip(self, self.comparison.intervals, strict=True))

    @property
    def leader(self) -> str | None:
        """Name of the candidate with the highest posterior probability."""
        return self.comparison.leader

    @property
    def settled(self) -> bool:
        """Whether the leader is ahead beyond error, and no untrusted number could overtake it."""
        return self.comparison.settled

    @property
    def verdict(self) -> str:
        """One sentence."""
        return self.comparison.verdict

    @property
    def summary(self) -> str:
        """One sentence: the verdict."""
        return self.verdict

    def log_bayes_factors(self, against: str | None = None) -> dict[str, float]:
        """Log evidence of each candidate minus that of another, the leader by default [nats]."""
        name = self.leader if against is None else against
        reference = np.nan if name is None else self[name].log_evidence
        return {key: result.log_evidence - reference for key, result in self.items()}

    def table(self) -> Any:
        """Comparison as a pandas table, by log evidence; see ``table().attrs["columns"]``."""
        import pandas as pd

        rows = sorted(self._record["candidates"], key=lambda row: -_finite(row["log_evidence"]))
        # a saved result has None where there is no number
        frame = pd.DataFrame(
            [{key: np.nan if row[key] is None else row[key] for key in COLUMNS} for row in rows]
        )
        frame.attrs["columns"] = dict(COLUMNS)
        return frame

    def to_dict(self, *, pictures: bool = False) -> dict[str, Any]:
        """Everything as plain numbers and texts, as saved in JSON.

        Parameters
        ----------
        pictures : bool
            Also what the pictures and the predictive checks of each candidate need; computed
            when first asked for.
        """
        if not pictures:
            return dict(self._record)
        rows = zip(self._record["candidates"], (r.portrait for r in self.values()), strict=True)
        # a result read back may have been saved without them
        candidates = [{**row, "pictures": dict(p)} if p else row for row, p in rows]
        return {**self._record, "candidates": candidates}

    @functools.cached_property
    def _record(self) -> dict[str, Any]:
        factors, intervals = self.log_bayes_factors(), self.probability_intervals
        candidates = [
            {
                **candidate_record(result),
                "prior_probability": self.prior_probabilities[name],
                "log_bayes_factor": float(factors[name]),
                "probability": float(self.probabilities[name]),
                "probability_interval": [float(x) for x in intervals[name]],
            }
            for name, result in self.items()
        ]
        return {
            "format": FORMAT,
            "version": VERSION,
            **self._circumstances,
            "verdict": self.verdict,
            "leader": self.leader,
            "settled": self.settled,
            "decisive_prior_probability": self.comparison.decisive_prior_probability,
            "columns": dict(COLUMNS),
            "candidates": candidates,
        }

    def report(self, path: str | Path) -> None:
        """Write the result in the form of the path's suffix; the file is complete or absent.

        Raises
        ------
        DeclarationError
            An unknown suffix.
        DataError
            A path that cannot be written.
        ImportError
            The form shows pictures and matplotlib is not installed.
        """
        pictures = check_suffix(path) in ILLUSTRATED
        save(self.to_dict(pictures=pictures), path)

    def plot(self, picture: str = "overview") -> Any:
        """A picture of the comparison as a matplotlib figure.

        Parameters
        ----------
        picture : {"overview", "probabilities", "split"}
            Both of the following; probabilities with 95 % intervals; each log evidence split into
            fit and Occam factor.

        Raises
        ------
        DeclarationError
            Another word.
        ImportError
            matplotlib is not installed.
        """
        from evidence.report.figures.gallery import draw_weighing

        return draw_weighing(self._record, picture)

    @classmethod
    def from_json(cls, path: str | Path) -> Weighing:
        """Read back what ``report("x.json")`` wrote: all numbers and tables, no draws.

        Raises
        ------
        DataError
            A file that is missing or no such result.
        """
        record = read_record(path)
        depth, seed = record["depth"], record["seed"]
        results = {
            row["candidate"]: recorded_candidate(row, depth=depth, seed=seed)
            for row in record["candidates"]
        }
        chances = {row["candidate"]: row["prior_probability"] for row in record["candidates"]}
        known = ("title", "study", "created", "versions", "depth", "seed", "run_seconds", "data",
                 "caution")  # fmt: skip
        weighing = cls(results, chances, {key: record.get(key) for key in known})
        weighing.__dict__["_record"] = numbers_only(record)
        return weighing

    def __repr__(self) -> str:
        return short_text(self._record)

    def _repr_html_(self) -> str:
        return notebook_fragment(self._record)


def weigh(
    models: Sequence[Model] | Study,
    data: Any = None,
    *,
    prior_probabilities: Mapping[str, float] | Sequence[float] | None = None,
    depth: str = "standard",
    seed: int = 0,
    progress: Callable[[str], None] | None = None,
) -> Weighing:
    """Compare candidates on the same data.

    Parameters
    ----------
    models : sequence of Model, or Study
    data : mapping of arrays, DataFrame, xarray Dataset or None
        A study brings its own.
    prior_probabilities : mapping or sequence of positive numbers, optional
        One per candidate, made to add up to 1; equal where not given.
    depth : {"none", "quick", "standard", "thorough"}
        How far each number is checked; deeper checks are made only for candidates whose error
        could change the verdict, except at "thorough".
    seed : int
        The same seed gives the same digits.
    progress : callable, optional
        Told in a few words what goes on.

    Raises
    ------
    DeclarationError
        No candidates, two of one name, candidates with different numbers of terms, and all that
        :func:`evidence.approximate` raises.
    DataError
        The data hold nan or text.

    Warns
    -----
    EvidenceWarning
        As :func:`evidence.approximate`, for each candidate.
    """
    began = time.perf_counter()
    check_options(depth, seed)
    candidates, arrays, study = _candidates(models, data)
    chances = chances_of(candidates, prior_probabilities)
    first = "quick" if depth == "standard" else depth
    check_same_terms({model.name: Problem(model, arrays).terms for model in candidates})
    results: dict[str, Approximation] = {}
    for model in candidates:
        told = None if progress is None else _prefixed(progress, model.name)
        results[model.name] = fit(model, arrays, depth=first, seed=seed, progress=told)
    if depth == "standard":
        _climb_where_it_matters(results, chances, depth, progress)
    for result in results.values():
        announce(result)
    return Weighing(
        results,
        chances,
        {
            **study,
            "created": datetime.datetime.now(datetime.UTC).isoformat(timespec="seconds"),
            "versions": versions(),
            "depth": depth,
            "seed": int(seed),
            "run_seconds": time.perf_counter() - began,
            "data": _data_record(arrays, results),
            "caution": [],
        },
    )


def _candidates(models: Any, data: Any) -> tuple[list[Model], Any, dict[str, Any]]:
    """Candidates, data, and the title with what is known of the study."""
    study: dict[str, Any] = {"title": ""}
    if isinstance(models, Study):
        file = {"text": models.text, "path": str(models.path), "fingerprint": models.fingerprint}
        study = {"title": models.title, "study": file}
        data = models.data if data is None else data
    return candidates_of(models), named_arrays(data), study


def _climb_where_it_matters(
    results: dict[str, Approximation],
    chances: Mapping[str, float],
    depth: str,
    progress: Callable[[str], None] | None,
) -> None:
    """Audit further each candidate whose error could change the verdict."""
    weights = {
        name: r.log_evidence + np.log(chances[name])
        for name, r in results.items()
        if np.isfinite(r.log_evidence) and r.trust in TRUSTED
    }
    top = max(weights.values(), default=-np.inf)
    for name, result in results.items():
        if result.trust in ("sound", "corrected") or result.problem is None:
            continue
        error = 3 * result.standard_error if np.isfinite(result.standard_error) else np.inf
        reach = result.log_evidence + np.log(chances[name]) + error + OUT_OF_REACH
        if result.trust not in TRUSTED or not np.isfinite(reach) or reach > top:
            told = None if progress is None else _prefixed(progress, name)
            results[name] = audit(result, depth=depth, progress=told)


def _prefixed(progress: Callable[[str], None], name: str) -> Callable[[str], None]:
    return lambda words: progress(f"{name}: {words}")


def _data_record(arrays: Any, results: Mapping[str, Approximation]) -> dict[str, Any]:
    counts = [r.terms for r in results.values() if r.terms is not None]
    return {
        "source": getattr(arrays, "source", None),
        "fingerprint": fingerprint(arrays),
        "terms": counts[0] if counts else None,
        "columns": {
            name: {"shape": list(np.shape(x)), "dtype": str(np.asarray(x).dtype)}
            for name, x in arrays.items()
        },
    }


def _finite(value: Any) -> float:
    return value if value is not None and np.isfinite(value) else -np.inf
