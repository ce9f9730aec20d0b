"""What every form of a weighing says, as plain text: one place, so that all say the same."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from evidence.report.wording import (
    NOTHING,
    error_nats,
    in_words,
    interval,
    nats,
    nats_decimals,
    number,
    quantity,
    short_name,
    visible,
)

__all__ = [
    "COLUMNS",
    "HEADINGS",
    "CandidatePage",
    "Remark",
    "WeighingPage",
    "as_sentence",
    "by_log_evidence",
    "candidate_page",
    "weighing_page",
]

# column of the comparison table -> its heading, in the order of every form
HEADINGS = {
    "candidate": "candidate",
    "log_evidence": "log evidence",
    "standard_error": "standard error",
    "log_bayes_factor": "log Bayes factor",
    "probability": "probability",
    "fit": "fit",
    "occam_factor": "Occam factor",
    "well_determined": "well determined",
    "bic": "BIC",
    "trust": "trust",
}
COLUMNS = tuple(HEADINGS)
POSTERIOR_HEADINGS = ("parameter", "unit", "mode", "mean", "sd", "2.5 %", "97.5 %", "note")
AUDIT_HEADINGS = ("check", "log evidence", "standard error", "agrees", "note")

Record = Mapping[str, Any]


@dataclass(frozen=True)
class Remark:
    """One warning: what is the matter and what to do about it."""

    sentence: str
    remedy: str


@dataclass(frozen=True)
class WeighingPage:
    """A weighing in words: the verdict, the comparison table and what qualifies them."""

    verdict: str
    cautions: tuple[str, ...]
    rows: tuple[dict[str, str], ...]
    remarks: tuple[tuple[str, tuple[Remark, ...]], ...]
    explanations: tuple[tuple[str, str], ...]
    facts: str
    title: str


@dataclass(frozen=True)
class CandidatePage:
    """One candidate in words: its log evidence, posterior, curvature and audit."""

    name: str
    headline: str
    parts: str
    remarks: tuple[Remark, ...]
    posterior: tuple[tuple[str, ...], ...]
    curvature: tuple[str, ...]
    audit: tuple[tuple[str, ...], ...]


def by_log_evidence(record: Record) -> list[Record]:
    """Return the candidates of a record, highest log evidence first, open ones last."""

    def key(candidate: Record) -> tuple[bool, float]:
        value = number(candidate.get("log_evidence"))
        return math.isnan(value), -value

    return sorted(record["candidates"], key=key)


def weighing_page(record: Record) -> WeighingPage:
    """Put the record of a weighing into words.

    Parameters
    ----------
    record : dict
        What ``Weighing.to_dict()`` gives or what was read from a saved result.
    """
    candidates = by_log_evidence(record)
    names = [str(c["candidate"]) for c in candidates]
    reference = [c.get("standard_error") for c in candidates if c["candidate"] == record["leader"]]
    remarks = [(short_name(c["candidate"]), _remarks(c, names)) for c in candidates]
    return WeighingPage(
        verdict=in_words(record["verdict"], names),
        cautions=tuple(in_words(c, names) for c in _cautions(record)),
        rows=tuple(_cells(c, reference[0] if reference else None) for c in candidates),
        remarks=tuple((name, said) for name, said in remarks if said),
        explanations=_explanations(record.get("columns") or {}, names),
        facts=_facts(record),
        title=in_words(record.get("title") or "", names),
    )


def _cells(candidate: Record, leader_error: Any) -> dict[str, str]:
    error = number(candidate.get("standard_error"))
    own = nats_decimals(error)
    # an open error of either side leaves the difference without one: two decimals
    joint = nats_decimals(math.hypot(error, number(leader_error)))
    return {
        "candidate": short_name(candidate["candidate"]),
        "log_evidence": nats(candidate.get("log_evidence"), own),
        "standard_error": error_nats(error),
        "log_bayes_factor": nats(candidate.get("log_bayes_factor"), joint),
        "probability": interval(
            candidate.get("probability"), candidate.get("probability_interval")
        ),
        "fit": nats(candidate.get("fit")),
        "occam_factor": nats(candidate.get("occam_factor"), own),
        "well_determined": nats(candidate.get("well_determined")),
        "bic": nats(candidate.get("bic")),
        "trust": visible(candidate.get("trust") or "unchecked"),
    }


def _cautions(record: Record) -> list[str]:
    cautions = list(record.get("caution") or [])
    threshold = number(record.get("decisive_prior_probability"))
    if record["leader"] is not None and math.isfinite(threshold):
        cautions.append(
            f"The probability of {record['leader']} reaches 0.95 when its prior probability is "
            f"{threshold:.2g} or more."
        )
    return cautions


def _remarks(candidate: Record, names: Sequence[str]) -> tuple[Remark, ...]:
    """Return the warnings of a candidate; a failed one leads with what became of it."""
    said = [
        Remark(*(as_sentence(in_words(w.get(key) or "", names)) for key in ("sentence", "remedy")))
        for w in candidate.get("warnings") or []
    ]
    status = as_sentence(in_words(candidate.get("status_sentence") or "", names))
    if candidate.get("trust") == "failed" and status and status not in [r.sentence for r in said]:
        said.insert(0, Remark(status, ""))
    return tuple(said)


def as_sentence(text: str) -> str:
    """Return the text with a full stop where it has no end of its own."""
    return f"{text}." if text and text[-1] not in ".?!:" else text


def _explanations(columns: Mapping[str, str], names: Sequence[str]) -> tuple[tuple[str, str], ...]:
    return tuple((HEADINGS[c], in_words(columns[c], names)) for c in COLUMNS if c in columns)


def _facts(record: Record) -> str:
    data = record.get("data") or {}
    terms, source = data.get("terms"), data.get("source")
    seconds = number(record.get("run_seconds"))
    facts = [f"depth {record.get('depth')}", f"seed {record.get('seed')}"]
    if terms is not None:
        facts.insert(0, "1 observation" if terms == 1 else f"{terms} observations")
    if source:
        facts.insert(0, f"data from {short_name(source, 200)}")
    if math.isfinite(seconds):
        facts.append(f"{seconds:.1f} s")
    facts.append(_prior_probabilities(record["candidates"]))
    text = visible(", ".join(fact for fact in facts if fact))
    return f"{text[:1].upper()}{text[1:]}."


def _prior_probabilities(candidates: Sequence[Record]) -> str:
    values = [number(c.get("prior_probability")) for c in candidates]
    if any(map(math.isnan, values)):
        return ""
    if max(values) - min(values) < 1e-12:
        return f"prior probability {values[0]:.3g} each"
    pairs = zip(candidates, values, strict=True)
    return "prior probabilities " + "; ".join(
        f"{short_name(c['candidate'])} {value:.3g}" for c, value in pairs
    )


def candidate_page(candidate: Record) -> CandidatePage:
    """Put one candidate of a record, or the record of an approximation, into words."""
    name = str(candidate["candidate"])
    parameters = [str(row["parameter"]) for row in candidate.get("posterior") or []]
    cells = _cells(candidate, None)
    error = "" if cells["standard_error"] == NOTHING else f" +- {cells['standard_error']}"
    return CandidatePage(
        name=short_name(name),
        headline=f"log evidence {cells['log_evidence']}{error} nats ({cells['trust']})",
        parts=f"fit {cells['fit']} + Occam factor {cells['occam_factor']}",
        remarks=_remarks(candidate, [name]),
        posterior=tuple(_posterior_row(row) for row in candidate.get("posterior") or []),
        curvature=_curvature(candidate.get("curvature") or {}, parameters),
        audit=tuple(_audit_row(step) for step in candidate.get("audit") or []),
    )


def _posterior_row(row: Record) -> tuple[str, ...]:
    sd = row.get("sd")
    return (
        short_name(row["parameter"]),
        short_name(row.get("unit") or ""),
        *(quantity(row.get(key), sd) for key in ("mode", "mean")),
        quantity(sd),
        *(quantity(row.get(key), sd) for key in ("low", "high")),
        in_words(row.get("note") or "", [str(row["parameter"])]),
    )


def _audit_row(step: Record) -> tuple[str, ...]:
    error = step.get("standard_error")
    agreed = {True: "yes", False: "no"}.get(step.get("agreed"), NOTHING)
    estimate = nats(step.get("estimate"), nats_decimals(error))
    return (
        short_name(step["rung"]),
        estimate,
        error_nats(error),
        agreed,
        in_words(step.get("note") or "", [str(step["rung"])]),
    )


def _curvature(curvature: Record, names: Sequence[str]) -> tuple[str, ...]:
    condition = number(curvature.get("scaled_condition"))
    if math.isnan(condition):
        return ()
    lines = [f"scaled condition number {condition:.3g}"]
    for direction in curvature.get("directions") or []:
        share = number(direction.get("share_from_data"))
        held = "" if math.isnan(share) else f", {share:.2f} of it from the data"
        lines.append(
            f"{in_words(direction['combination'], names)}: sd {quantity(direction.get('sd'))}{held}"
        )
    return tuple(lines)
