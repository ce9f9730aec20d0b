"""What can be said of one row of a batch: integers in the arithmetic, words in the tables."""

from __future__ import annotations

import enum

from evidence.outcome import Outcome

__all__ = ["TRUST", "TRUST_CODE", "Finding", "status_code", "status_text", "status_word"]

TRUST = ("sound", "corrected", "rough", "doubtful", "failed", "unchecked")
TRUST_CODE = {word: code for code, word in enumerate(TRUST)}


class Finding(enum.IntEnum):
    """What the quick audit, or the reading of a data set, found; above the codes of Outcome."""

    BAD_DATA = 20
    WRONG_COLUMNS = 21
    UNBOUNDED = 30
    WALL = 31
    HIGHER_NEARBY = 32
    WIDER_THAN_PRIOR = 33
    LARGE_TERM = 34
    CANCELLING_TERM = 35
    MORE_MODES = 36
    DRAWS_DISAGREE = 37
    DRAWS_SCATTER = 38
    NO_SPREAD = 39


_TEXTS = {
    Finding.BAD_DATA: "the data set could not be used",
    Finding.WRONG_COLUMNS: "the data set lacks a column or has one of another shape",
    Finding.UNBOUNDED: "the log density does not fall off far away: its integral may be infinite",
    Finding.WALL: "the density drops to zero within three sd of the mode",
    Finding.HIGHER_NEARBY: "the density is higher near the mode than at it",
    Finding.WIDER_THAN_PRIOR: "along some direction the posterior is flatter than three prior sd",
    Finding.LARGE_TERM: "the second-order term is too large to be believed",
    Finding.CANCELLING_TERM: "cubic and quartic parts of the second-order term cancel",
    Finding.MORE_MODES: "more modes were found than could be followed",
    Finding.DRAWS_DISAGREE: "independent draws disagree with the expansion at the mode",
    Finding.DRAWS_SCATTER: "the weights of the draws degenerate",
    Finding.NO_SPREAD: "no spread was given: distant mass was not looked for",
}


def status_word(code: int) -> str:
    """Name of a code, as shown in the table."""
    return Outcome(code).name if code < Finding.BAD_DATA else Finding(code).name


def status_code(word: str) -> int:
    """Code of a name."""
    return int(Outcome[word] if word in Outcome.__members__ else Finding[word])


def status_text(code: int) -> str:
    """What a code means, as one sentence."""
    return Outcome(code).sentence if code < Finding.BAD_DATA else _TEXTS[Finding(code)]
