"""A batch in the terminal: counts, probabilities, log Bayes factors, what stands against rows."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from evidence.report.wording import in_words, nats, number, probability, short_name

__all__ = ["batch_text"]

NAME_WIDTH = 28
BAR_WIDTH = 40
ROWS_SHOWN = 8


def batch_text(record: Mapping[str, Any]) -> str:
    """Return a batch as plain text.

    Parameters
    ----------
    record : dict
        What ``Batch.to_dict()`` gives.
    """
    blocks = [
        [in_words(record["summary"]) + "."],
        list(_candidates(record)),
        *(list(_histogram(one)) for one in record["log_bayes_factors"]),
        list(_trouble(record)),
        list(_circumstances(record)),
    ]
    return "\n\n".join("\n".join(block) for block in blocks if block)


def _candidates(record: Mapping[str, Any]) -> Iterator[str]:
    header = ("settled for", "mean probability", "expected frequency", "most frequent")
    yield f"{'':{NAME_WIDTH}} " + "  ".join(f"{h:>18}" for h in header)
    for row in record["candidates"]:
        cells = (
            str(row["settled_for"]),
            probability(row["mean_probability"]),
            probability(row["expected_frequency"]),
            probability(row["protected_exceedance"]),
        )
        name = short_name(row["candidate"], NAME_WIDTH + 30)
        yield f"{name:{NAME_WIDTH}} " + "  ".join(f"{cell:>18}" for cell in cells)
    yield (
        "expected frequency and the probability of being the most frequent one (protected) assume "
        "that each data set was made by one of the candidates, with unknown shares"
    )


def _histogram(one: Mapping[str, Any]) -> Iterator[str]:
    name, against = (short_name(one[key]) for key in ("candidate", "against"))
    yield f"log Bayes factor of {name} against {against} [nats], data sets:"
    most = max(one["counts"], default=0)
    edges = [number(edge) for edge in one["edges"]]
    for low, high, count in zip(edges, edges[1:], one["counts"], strict=False):
        length = round(BAR_WIDTH * count / most) if most else 0
        bar = "#" * max(length, 1 if count else 0)
        yield f"{_range(low, high):>12}  {count:>8}  {bar}".rstrip()


def _range(low: float, high: float) -> str:
    if low == float("-inf"):
        return f"below {nats(high, 0)}"
    if high == float("inf"):
        return f"above {nats(low, 0)}"
    return f"{nats(low, 0)} to {nats(high, 0)}"


def _trouble(record: Mapping[str, Any]) -> Iterator[str]:
    rows = [row for row in record["status"] if row["status"] != "OK"]
    if rows:
        yield "What stands against rows:"
    for row in rows:
        yield f"{row['rows']:>8}  {row['status']}: {in_words(row['meaning'])}"
    bad = record["bad"]
    if bad:
        yield "Data sets that could not be used:"
    for row in bad[:ROWS_SHOWN]:
        yield f"{short_name(row['data_set']):>8}  {in_words(row['note'])}"
    if len(bad) > ROWS_SHOWN:
        yield f"          and {record['counts']['bad'] - ROWS_SHOWN} more"
    for name in record["set_aside"]:
        yield f"The file {in_words(name)} of the store could not be read."


def _circumstances(record: Mapping[str, Any]) -> Iterator[str]:
    made = record["manifest"]
    told = ", ".join(f"{word} {count}" for word, count in record["counts"]["trust"].items())
    yield f"Rows by trust: {told}."
    version = made["versions"]["evidence"]
    yield f"Depth {made['depth']}, seed {made['seed']}, evidence {version}, {made['created']}."
