"""The record of a weighing as JSON text, and back: the form that keeps everything.

``weighing.schema.json`` beside this file describes it. The ``pictures`` of a candidate are
optional: a record without them is whole, and a page made of it has fewer pictures.
"""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from evidence.complaints import DataError, sentence
from evidence.report.wording import short_name

__all__ = ["FORMAT", "VERSION", "numbers_only", "read_record", "record_from_json", "record_to_json"]

FORMAT = "evidence weighing"
VERSION = 1

_OPEN_NUMBER = (int, float, type(None))
_RECORD_KEYS: dict[str, tuple[type, ...]] = {
    "title": (str,),
    "depth": (str,),
    "seed": (int,),
    "run_seconds": _OPEN_NUMBER,
    "data": (dict,),
    "verdict": (str,),
    "leader": (str, type(None)),
    "settled": (bool,),
    "decisive_prior_probability": _OPEN_NUMBER,
    "caution": (list,),
    "columns": (dict,),
    "candidates": (list,),
}
_CANDIDATE_KEYS: dict[str, tuple[type, ...]] = {
    "candidate": (str,),
    "log_evidence": _OPEN_NUMBER,
    "standard_error": _OPEN_NUMBER,
    "log_bayes_factor": _OPEN_NUMBER,
    "probability": _OPEN_NUMBER,
    "probability_interval": (list,),
    "fit": _OPEN_NUMBER,
    "occam_factor": _OPEN_NUMBER,
    "well_determined": _OPEN_NUMBER,
    "bic": _OPEN_NUMBER,
    "trust": (str,),
    "status_sentence": (str,),
    "warnings": (list,),
    "posterior": (list,),
    "curvature": (dict, type(None)),
    "audit": (list,),
}
# list of a candidate -> the text each of its entries must have
_ENTRIES = {"warnings": "sentence", "posterior": "parameter", "audit": "rung"}
# list in the pictures of a candidate -> what each of its entries must have
_PICTURES = {
    "profiles": ("mode", "kind", "direction", "steps", "log_density", "gaussian"),
    "marginals": ("parameter", "edges", "gaussian"),
    "predictions": ("column", "rows", "at"),
    "checks": ("column", "check"),
}


def record_to_json(record: Mapping[str, Any]) -> str:
    """Write a record as JSON text; nan and the infinities become null.

    Parameters
    ----------
    record : dict
        What ``Weighing.to_dict()`` gives; NumPy numbers and arrays are allowed in it.

    Returns
    -------
    str
        Plain ASCII with a newline at the end; names are kept exactly.
    """
    return json.dumps(_plain(record), indent=1, allow_nan=False) + "\n"


def numbers_only(record: Mapping[str, Any]) -> dict[str, Any]:
    """Return a record without what only its pictures need."""
    kept = [{k: v for k, v in c.items() if k != "pictures"} for c in record["candidates"]]
    return {**record, "candidates": kept}


def _plain(value: Any) -> Any:
    if isinstance(value, Mapping):
        return {str(key): _plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(item) for item in value]
    if isinstance(value, float):
        return float(value) if math.isfinite(value) else None
    if hasattr(value, "tolist"):  # NumPy, without importing it
        return _plain(value.tolist())
    return value


def read_record(path: str | Path) -> dict[str, Any]:
    """Read the record of a weighing from a result file.

    Raises
    ------
    DataError
        The file cannot be read, is not JSON, is another kind of file, was written by a newer
        version, or has parts missing.
    """
    try:
        text = Path(path).read_text(encoding="utf-8")
    except UnicodeDecodeError as error:
        raise DataError(_not_json(str(path), f"not UTF-8 text at byte {error.start}")) from None
    except OSError as error:
        raise DataError(f"{short_name(path, 400)} cannot be read: {error.strerror}.") from None
    return record_from_json(text, source=str(path))


def record_from_json(text: str, source: str = "the text") -> dict[str, Any]:
    """Read the record of a weighing from JSON text.

    Parameters
    ----------
    text : str
        What :func:`record_to_json` wrote.
    source : str
        How an error should call it, such as the file's path.

    Raises
    ------
    DataError
        The text is not JSON, is of another format or a newer version, or has parts missing.
    """
    try:
        # NaN and Infinity are no JSON; a file edited elsewhere may hold them all the same
        record = json.loads(text, parse_constant=lambda _: None)
    except (ValueError, RecursionError) as error:
        raise DataError(_not_json(source, str(error))) from None
    _check_format(record, source)
    _check_keys(record, _RECORD_KEYS, "the result", source)
    if not record["candidates"]:
        raise DataError(_damaged(source, "the list of candidates is empty"))
    for position, candidate in enumerate(record["candidates"], start=1):
        _check_candidate(candidate, f"candidate {position}", source)
    return record


def _not_json(source: str, reason: str) -> str:
    return sentence(
        f"{short_name(source, 400)} is not JSON ({reason})",
        remedy="Give a file that `evidence weigh STUDY --save RESULT.json` wrote",
    )


def _damaged(source: str, what: str) -> str:
    return sentence(
        f"{short_name(source, 400)} is not a whole result: {what}",
        remedy="Weigh the study again and save it with --save RESULT.json",
    )


def _check_format(record: Any, source: str) -> None:
    found = record.get("format") if isinstance(record, dict) else None
    if found != FORMAT:
        got = "no format" if found is None else f"format {short_name(repr(found))}"
        raise DataError(
            sentence(
                f"{short_name(source, 400)} is JSON but not the result of a weighing "
                f"(expected format {FORMAT!r})",
                got,
                "Give a file that `evidence weigh STUDY --save RESULT.json` wrote",
            )
        )
    version = record.get("version")
    if not _is_a(version, (int,)) or version < 1:
        raise DataError(_damaged(source, f"its version is {short_name(repr(version))}"))
    if version > VERSION:
        raise DataError(
            sentence(
                f"{short_name(source, 400)} was written by a newer version of this package "
                f"(this one reads format version {VERSION} and older)",
                f"version {version}",
                "Type: pip install --upgrade laplace-model-evidence",
            )
        )


def _check_candidate(candidate: Any, where: str, source: str) -> None:
    if not isinstance(candidate, dict):
        raise DataError(_damaged(source, f"{where} is not an object"))
    _check_keys(candidate, _CANDIDATE_KEYS, where, source)
    _check_pictures(candidate.get("pictures"), where, source)
    for key, text_key in _ENTRIES.items():
        if not all(_has_text(entry, text_key) for entry in candidate[key]):
            raise DataError(_damaged(source, f"{where} has an entry in {key!r} that is not one"))
    directions = (candidate["curvature"] or {}).get("directions") or []
    if not isinstance(directions, list) or not all(
        _has_text(direction, "combination") for direction in directions
    ):
        raise DataError(_damaged(source, f"{where} has a direction of curvature that is not one"))


def _check_pictures(pictures: Any, where: str, source: str) -> None:
    if pictures is None:
        return
    lists = [pictures.get(part) or [] for part in _PICTURES] if isinstance(pictures, dict) else [0]
    for part, entries in zip(_PICTURES, lists, strict=False):
        if not isinstance(entries, list) or not all(
            isinstance(entry, dict) and set(_PICTURES[part]) <= set(entry) for entry in entries
        ):
            raise DataError(_damaged(source, f"{where} has {part} in its pictures that are none"))


def _has_text(entry: Any, key: str) -> bool:
    return isinstance(entry, dict) and isinstance(entry.get(key), str)


def _check_keys(
    found: Mapping[str, Any], expected: Mapping[str, tuple[type, ...]], where: str, source: str
) -> None:
    missing = [key for key in expected if key not in found]
    if missing:
        raise DataError(_damaged(source, f"{where} lacks {', '.join(map(repr, missing))}"))
    for key, types in expected.items():
        if not _is_a(found[key], types):
            got = short_name(repr(found[key]))
            raise DataError(_damaged(source, f"{key!r} of {where} cannot be {got}"))


def _is_a(value: Any, types: tuple[type, ...]) -> bool:
    if isinstance(value, bool):  # an int to Python, never a number in a result
        return bool in types
    return isinstance(value, types)
