"""What stands behind the numbers, in words: data, priors, computation, checks, what is not said.

The long forms say it (the page, Markdown, LaTeX); :mod:`evidence.report.content` has what every
form says.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from evidence.report.content import as_sentence, by_log_evidence
from evidence.report.wording import in_words, nats, number, quantity, short_name, visible

__all__ = [
    "CHECK_HEADINGS",
    "COLUMN_HEADINGS",
    "PRIOR_HEADINGS",
    "SAFETY",
    "check_rows",
    "check_sentence",
    "column_rows",
    "computation",
    "guideline",
    "prior_rows",
    "reproduce",
    "unsaid",
]

Record = Mapping[str, Any]

PRIOR_HEADINGS = ("parameter", "prior", "unit", "reason")
COLUMN_HEADINGS = ("column", "unit", "shape", "note")
CHECK_HEADINGS = ("check", "observed", "simulated 2.5 %", "simulated 97.5 %", "p-value", "verdict")
SAFETY = (
    "Where a result bears on safety or health, it is one piece of evidence among others: local "
    "codes and licensed practice decide."
)
_NOTE_LIMIT = 600


@dataclass(frozen=True)
class Fact:
    """A term and what there is to say about it."""

    term: str
    text: str


def prior_rows(candidate: Record) -> tuple[tuple[str, ...], ...]:
    """Each parameter with its prior, unit and the reason given for it."""
    notes, units = candidate.get("notes") or {}, candidate.get("units") or {}
    return tuple(
        (
            short_name(name),
            short_name(text, 200),
            short_name(units.get(name) or ""),
            _note(notes.get(name)),
        )
        for name, text in (candidate.get("priors") or {}).items()
    )


def column_rows(record: Record) -> tuple[tuple[str, ...], ...]:
    """Each column of the data with unit, shape and note."""
    units: dict[str, str] = {}
    notes: dict[str, str] = {}
    for candidate in reversed(record["candidates"]):
        units |= candidate.get("units") or {}
        notes |= candidate.get("notes") or {}
    columns = (record.get("data") or {}).get("columns") or {}
    return tuple(
        (
            short_name(name),
            short_name(units.get(name) or ""),
            " x ".join(map(str, told.get("shape") or [])) or "one number",
            _note(notes.get(name)),
        )
        for name, told in columns.items()
    )


def _note(text: Any) -> str:
    return short_name(" ".join(str(text or "").split()), _NOTE_LIMIT)


def computation(record: Record) -> tuple[Fact, ...]:
    """How the numbers were made: software, depth, seed, starts, run time, fingerprints."""
    data, study = record.get("data") or {}, record.get("study") or {}
    starts = sorted({int(c["starts"]) for c in record["candidates"] if c.get("starts")})
    versions = record.get("versions") or {}
    seconds = number(record.get("run_seconds"))
    found = [
        ("study", short_name(study.get("path") or "", 400)),
        ("fingerprint of the study", short_name(study.get("fingerprint") or "")),
        ("data", short_name(data.get("source") or "given in memory", 400)),
        ("fingerprint of the data", short_name(data.get("fingerprint") or "")),
        ("observations", "" if data.get("terms") is None else str(data["terms"])),
        ("depth of the checks", visible(record.get("depth") or "")),
        ("seed", visible(record.get("seed"))),
        ("starts of each search for modes", " or ".join(map(str, starts))),
        ("run time", f"{seconds:.1f} s" if math.isfinite(seconds) else ""),
        ("made", visible(record.get("created") or "")),
        ("versions", ", ".join(f"{visible(k)} {visible(v)}" for k, v in versions.items())),
    ]
    return tuple(Fact(term, text) for term, text in found if text)


def reproduce(record: Record) -> str:
    """The command that makes the same numbers again, or an empty text for a weighing in Python."""
    import shlex

    path = (record.get("study") or {}).get("path")
    if not path:
        return ""
    command = f"evidence weigh {shlex.quote(str(path))} --depth {record.get('depth')}"
    return visible(f"{command} --seed {record.get('seed')}")


def check_rows(candidate: Record) -> tuple[tuple[str, ...], ...]:
    """The posterior predictive checks of a candidate, one row each."""
    checks = _pictures(candidate).get("checks") or []
    several = len({check["column"] for check in checks}) > 1
    return tuple(
        (
            f"{short_name(check['column'])}: {check['check']}" if several else check["check"],
            *(quantity(check.get(key)) for key in ("observed", "low", "high")),
            _p_value(check.get("p_value")),
            "fails" if check.get("failed") else "passes",
        )
        for check in checks
    )


def _p_value(value: Any) -> str:
    p = number(value)
    if math.isnan(p):
        return "-"
    return "<0.001" if p < 0.001 else ">0.999" if p > 0.999 else f"{p:.3f}"


def check_sentence(candidate: Record) -> str:
    """Whether a candidate could have made such data, in a sentence."""
    name, pictures = short_name(candidate["candidate"]), _pictures(candidate)
    checks = pictures.get("checks") or []
    if checks:
        failed = [check["check"] for check in checks if check.get("failed")]
        if failed:
            return (
                f"{name} fails {len(failed)} of {len(checks)} posterior predictive checks: data "
                f"simulated from it differ from the observed ones in {_listed(failed)}."
            )
        return f"{name} passes the {len(checks)} posterior predictive checks made here."
    if trouble := pictures.get("trouble"):
        return f"{name} was not checked against its own predictions: {in_words(trouble)}"
    if pictures.get("predictions"):
        return (
            f"{name} was drawn against the data but not checked: that needs simulate= and a "
            "response that is a column of the data."
        )
    if not pictures:
        return f"{name} was not checked against its own predictions: none were saved."
    return f"{name} was not checked against its own predictions: it declares no simulate=."


def unsaid(record: Record) -> tuple[str, ...]:
    """What the comparison does not say, the leader's failed checks first."""
    leader = next((c for c in record["candidates"] if c["candidate"] == record["leader"]), None)
    found = []
    if leader is not None:
        failed = [c for c in _pictures(leader).get("checks") or [] if c.get("failed")]
        sentence = check_sentence(leader)
        found.append(
            f"The leader may fit badly: {sentence} It is the most probable of the candidates "
            "given, and none of them may be adequate."
            if failed
            else f"The evidence compares candidates and approves of none. {sentence}"
        )
    found += [
        "Probabilities are among the candidates given and no others, and rest on their priors; "
        "other priors give other log evidences.",
        "A candidate that leads predicts these data best on average over its priors. That is no "
        "proof of a cause, nor of how well it predicts beyond the range of the data.",
        "Mass of the posterior that no start and no draw on the prior's scale can reach stays "
        "unseen.",
    ]
    return tuple(found)


def guideline(record: Record) -> tuple[tuple[str, str], ...]:
    """The points of Kruschke (2021, Nature Human Behaviour 5:1282) and where each is answered."""
    candidates = by_log_evidence(record)
    reasons = sum(1 for c in candidates for row in prior_rows(c) if row[3])
    priors = sum(len(prior_rows(c)) for c in candidates)
    threshold = number(record.get("decisive_prior_probability"))
    decision = "No candidate leads, or only one was given."
    if math.isfinite(threshold):
        decision = (
            f"0.95 is taken as decisive. {short_name(record['leader'])} reaches it from a prior "
            f"probability of {threshold:.2g} on."
        )
    held = [short_name(c["candidate"]) for c in candidates if _held_by_prior(c)]
    starts = [str(c["starts"]) for c in candidates if c.get("starts")]
    again = reproduce(record) or "the declaration of the candidates in Python, and the seed"
    return (
        ("Why this comparison", _question(record)),
        ("Model", "The likelihood is the function in the study; its parameters are listed with "
         "the priors, the data with their columns."),
        ("Prior and its justification", f"Listed below; {reasons} of {priors} come with a reason."),
        ("Computation and its checks", "Modes by Newton's method from "
         f"{' or '.join(dict.fromkeys(starts)) or 'no'} starts; Laplace's method; each number "
         "checked as told under its candidate."),
        ("Posterior", "Mode, mean, sd and 95 % interval of every parameter, and pictures."),
        ("Posterior predictive check", " ".join(check_sentence(c) for c in candidates[:1])),
        ("Decision and its limits", as_sentence(decision)),
        ("Sensitivity", f"Directions held by the prior alone: {_listed(held) or 'in no candidate'}."
         " The log evidence moves with the priors; weigh again under others to see how far."),
        ("How to reproduce", f"{again}; versions and fingerprints are listed below."),
    )  # fmt: skip


def _question(record: Record) -> str:
    text = (record.get("study") or {}).get("text") or record.get("title") or "Not told."
    return short_name(" ".join(str(text).split()), 1200)


def _held_by_prior(candidate: Record) -> bool:
    directions = (candidate.get("curvature") or {}).get("directions") or []
    return any(abs(number(x.get("share_from_data"))) < 0.02 for x in directions)


def _pictures(candidate: Record) -> Record:
    return candidate.get("pictures") or {}


def _listed(words: Sequence[str]) -> str:
    return ", ".join(words)


def overtaken(candidate: Record) -> str:
    """Log evidence by plain Laplace beside the accepted one, where the two differ."""
    laplace, accepted = number(candidate.get("laplace")), number(candidate.get("log_evidence"))
    if math.isnan(laplace) or math.isnan(accepted) or abs(laplace - accepted) < 0.1:
        return ""
    return (
        f"Plain Laplace's method gives {nats(laplace)} nats, {nats(abs(accepted - laplace))} "
        f"{'below' if laplace < accepted else 'above'} the accepted value."
    )
