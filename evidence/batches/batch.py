"""The result for many data sets: a table, counts, what stands against which row."""

from __future__ import annotations

import collections
import functools
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from evidence.batches.findings import TRUST, TRUST_CODE, status_text, status_word
from evidence.batches.groups import GroupSummary, summarise_groups
from evidence.batches.results import COLUMNS, PartResult, settled_rows
from evidence.batches.store import Store
from evidence.complaints import DeclarationError, near_name

__all__ = ["Batch"]


class Batch:
    """Candidates weighed on many data sets.

    Attributes
    ----------
    manifest : dict
        What was asked: candidates, depth, seed, versions.
    path : Path or None
        The store; None where all is in memory.
    set_aside : tuple of str
        Files of the store that could not be read and were done again.
    """

    def __init__(
        self,
        manifest: Mapping[str, Any],
        parts: Sequence[PartResult] | Store,
        set_aside: tuple[str, ...] = (),
    ) -> None:
        self.manifest = dict(manifest)
        self._source = parts
        self.path = parts.path if isinstance(parts, Store) else None
        self.set_aside = set_aside

    @classmethod
    def open(cls, path: str | Path) -> Batch:
        """Look at a store, whether or not a run is writing into it.

        Raises
        ------
        DataError
            There is no store.
        """
        store = Store.read(path)
        return cls(store.manifest, store)

    @property
    def candidates(self) -> tuple[str, ...]:
        """Names of the candidates."""
        return tuple(self.manifest["candidates"])

    def parts(self) -> Iterator[PartResult]:
        """Results part by part, one in memory at a time where there is a store."""
        return self._source.parts() if isinstance(self._source, Store) else iter(self._source)

    def __len__(self) -> int:
        return self.counts["data_sets"]

    def table(self) -> Any:
        """One row per data set and candidate as a pandas table, in the order given."""
        import pandas as pd

        frames = [pd.DataFrame(part.columns(self.candidates)) for part in self.parts()]
        frame = pd.concat(frames, ignore_index=True) if frames else pd.DataFrame(columns=[*COLUMNS])
        frame.attrs["columns"] = dict(COLUMNS)
        return frame

    def log_evidences(self) -> np.ndarray:
        """Log evidence of each data set and candidate (N, K) [nats]; nan where failed."""
        pieces = [part.log_evidence for part in self.parts()]
        return np.concatenate(pieces) if pieces else np.zeros((0, len(self.candidates)))

    def log_bayes_factors(self, candidate: str, against: str) -> np.ndarray:
        """Log evidence of one candidate minus that of another, for each data set (N,) [nats].

        Raises
        ------
        DeclarationError
            An unknown name.
        """
        values = self.log_evidences()
        return values[:, self._place(candidate)] - values[:, self._place(against)]

    def weak_rows(self) -> Any:
        """Rows that the audit did not pass, with what stands against them, as a pandas table."""
        import pandas as pd

        rows = []
        for part in self.parts():
            weak = np.isin(part.trust, [TRUST_CODE["doubtful"], TRUST_CODE["failed"]])
            for place, k in zip(*np.nonzero(weak), strict=True):
                code = int(part.status[place, k])
                note = part.notes.get(int(place)) or status_text(code)
                rows.append((part.names[place], self.candidates[k], TRUST[part.trust[place, k]],
                             status_word(code), note))  # fmt: skip
        return pd.DataFrame(rows, columns=["data_set", "candidate", "trust", "status", "note"])

    def groups(self) -> GroupSummary:
        """What holds for the data sets as a group: see :mod:`evidence.batches.groups`."""
        return summarise_groups(self.log_evidences(), self.candidates)

    @functools.cached_property
    def counts(self) -> dict[str, Any]:
        """How many data sets are settled, unsettled, bad; rows by trust and by status."""
        chances = list(self.manifest["prior_probabilities"].values())
        total = settled = bad = 0
        trust: collections.Counter[str] = collections.Counter()
        status: collections.Counter[str] = collections.Counter()
        leads: collections.Counter[str] = collections.Counter()
        for part in self.parts():
            sure = settled_rows(part, chances)
            total, settled, bad = (
                total + len(part),
                settled + int(sure.sum()),
                bad + len(part.notes),
            )
            trust.update(_tally(part.trust, lambda code: TRUST[code]))
            status.update(_tally(part.status, status_word))
            lead = np.argmax(np.nan_to_num(part.probability[sure], nan=-1.0), axis=1)
            leads.update(_tally(lead, lambda k: self.candidates[k]))
        return {
            "data_sets": total,
            "settled": settled,
            "unsettled": total - settled - bad,
            "bad": bad,
            "trust": {word: trust[word] for word in TRUST if trust[word]},
            "status": dict(status.most_common()),
            "settled_for": {name: leads[name] for name in self.candidates},
        }

    @property
    def summary(self) -> str:
        """One sentence."""
        counts = self.counts
        text = (
            f"{counts['data_sets']} data sets, {len(self.candidates)} candidates: "
            f"{counts['settled']} settled, {counts['unsettled']} not settled, "
            f"{counts['bad']} could not be used"
        )
        weak = counts["trust"].get("doubtful", 0) + counts["trust"].get("failed", 0)
        return f"{text}; {weak} rows are doubtful or failed" if weak else text

    def to_dict(self) -> dict[str, Any]:
        """What a report shows, as plain numbers and texts."""
        from evidence.batches.overview import overview

        return overview(self)

    def __repr__(self) -> str:
        lines = [f"Batch: {self.summary}"]
        for name, count in self.counts["settled_for"].items():
            lines.append(f"  settled for {name}: {count}")
        shown = {word: n for word, n in self.counts["status"].items() if word != "OK"}
        for word, count in list(shown.items())[:4]:
            lines.append(f"  {count} rows {word}")
        return "\n".join(lines[:12])

    def _place(self, name: str) -> int:
        if name not in self.candidates:
            known = ", ".join(self.candidates)
            raise DeclarationError(
                f"no candidate is named {name!r}. There are: {known}."
                f"{near_name(name, self.candidates)}"
            )
        return self.candidates.index(name)


def _tally(codes: np.ndarray, word: Any) -> dict[str, int]:
    values, counts = np.unique(codes, return_counts=True)
    return {word(int(v)): int(n) for v, n in zip(values, counts, strict=True)}
