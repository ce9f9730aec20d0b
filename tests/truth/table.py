"""The forty integrals at each depth: truth, estimate, stated error, trust, and the counts.

Run ``python tests/truth/table.py [--depth none|quick|standard|thorough] [names]``.
"""

from __future__ import annotations

import argparse
import time
import warnings
from dataclasses import dataclass

import numpy as np
from integrals import every_case

import evidence as ev

DEPTHS = ("none", "quick", "standard", "thorough")
CLOSE = 0.05  # nats
SPEAKS = ("doubtful", "failed", "unchecked")


@dataclass(frozen=True)
class Row:
    """One integral at one depth [nats, seconds]."""

    name: str
    truth: float
    estimate: float
    standard_error: float
    trust: str
    seconds: float

    @property
    def error(self) -> float:
        return self.estimate - self.truth

    @property
    def close(self) -> bool:
        return bool(abs(self.error) < CLOSE)

    @property
    def covered(self) -> bool:
        """Truth within three stated standard errors; 1e-6 for the digits of the truth itself."""
        return bool(abs(self.error) <= 3.0 * self.standard_error + 1e-6)

    @property
    def silent(self) -> bool:
        """Wrong by more than 0.05 and more than the stated error, without a word of doubt."""
        return not self.close and not self.covered and self.trust not in SPEAKS


def measure(name: str, depth: str) -> Row:
    """Approximate one integral."""
    case = every_case()[name]()
    began = time.perf_counter()
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ev.EvidenceWarning)
        found = ev.approximate(case.model(), depth=depth)
    seconds = time.perf_counter() - began
    return Row(name, case.truth, found.log_evidence, found.standard_error, found.trust, seconds)


def counts(rows: list[Row]) -> dict[str, int]:
    """How many are close, covered, silent, and under each word of trust."""
    table = {kind: sum(getattr(row, kind) for row in rows) for kind in ("close", "covered")}
    table["silent"] = sum(row.silent for row in rows)
    words = sorted({row.trust for row in rows})
    return table | {word: sum(row.trust == word for row in rows) for word in words}


def show(rows: list[Row]) -> str:
    """The table as text."""
    head = f"{'integral':24s} {'truth':>12s} {'estimate':>12s} {'error':>9s} {'3 se':>8s}"
    lines = [f"{head}  trust      seconds"]
    for r in rows:
        mark = (
            " SILENT"
            if r.silent
            else ""
            if r.covered or np.isnan(r.standard_error)
            else " not covered"
        )
        numbers = f"{r.truth:12.5f} {r.estimate:12.5f} {r.error:+9.4f} {3 * r.standard_error:8.4f}"
        lines.append(f"{r.name:24s} {numbers}  {r.trust:10s} {r.seconds:6.1f}{mark}")
    told = ", ".join(f"{kind} {number}" for kind, number in counts(rows).items())
    return "\n".join([*lines, f"of {len(rows)}: {told}"])


def main() -> None:
    """Measure and print."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--depth", choices=DEPTHS, action="append")
    parser.add_argument("names", nargs="*")
    asked = parser.parse_args()
    names = asked.names or list(every_case())
    for depth in asked.depth or DEPTHS:
        print(f"\ndepth {depth}")
        print(show([measure(name, depth) for name in names]), flush=True)


if __name__ == "__main__":
    main()
