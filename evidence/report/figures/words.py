"""What each picture shows, in words: for those who cannot see it."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from evidence.report.content import by_log_evidence, candidate_page
from evidence.report.wording import interval, nats, number, short_name

__all__ = ["CAPTIONS", "described"]

Record = Mapping[str, Any]
_MOST = 12

CAPTIONS = {
    "overview": "Posterior probabilities with 95 % intervals; each log evidence as fit and Occam "
    "factor. Diamonds are doubtful or unchecked.",
    "predictions": "Data against the prediction, with 95 % bands of the expected value and of new "
    "data.",
    "profiles": "Log density through the modes against the Gaussian of Laplace's method: where "
    "the lines part, plain Laplace is off.",
    "marginals": "Posterior marginals: Gaussian, and refined by the audit's weighted draws where "
    "it accepted any.",
    "curvature": "Directions of the Hessian: curvature, and how much of it comes from the data "
    "and how much from the prior.",
    "audit": "Estimates of the log evidence in the order in which they were made; filled where "
    "compared with an independent one, a diamond where it disagreed.",
}


def described(picture: str, record: Record) -> str:
    """Return the content of a picture in words; of a weighing or of a candidate."""
    if picture == "overview":
        return _overview(record)
    name = short_name(record["candidate"])
    return f"{name}: {_WORDS[picture](record)}"


def _overview(record: Record) -> str:
    told = [
        f"{short_name(c['candidate'])}: probability "
        f"{interval(c.get('probability'), c.get('probability_interval'))}, fit "
        f"{nats(c.get('fit'))}, Occam factor {nats(c.get('occam_factor'))}, log evidence "
        f"{nats(c.get('log_evidence'))} nats"
        for c in by_log_evidence(record)[:_MOST]
    ]
    return "; ".join(told)


def _predictions(candidate: Record) -> str:
    told = []
    for one in (candidate.get("pictures") or {}).get("predictions") or []:
        middle = [number(x) for x in one.get("expected_mean") or one.get("new_mean")]
        text = (
            f"{short_name(one['column'])} along {short_name(one.get('along') or 'the rows')}; the "
            f"prediction goes from {middle[0]:.3g} to {middle[-1]:.3g}"
        )
        if one.get("observed") and one.get("new_low"):
            pairs = zip(one["new_low"], one["observed"], one["new_high"], strict=True)
            inside = sum(number(a) <= number(y) <= number(b) for a, y, b in pairs)
            text += f"; {inside} of {len(one['observed'])} observations lie inside the band"
        told.append(text)
    return "; ".join(told) or "nothing to draw"


def _profiles(candidate: Record) -> str:
    told = []
    for one in (candidate.get("pictures") or {}).get("profiles") or []:
        pairs = zip(one["steps"], one["log_density"], one["gaussian"], strict=True)
        near = [abs(number(a) - number(g)) for s, a, g in pairs if abs(number(s)) <= 2.0]
        gap = "the density is zero within two sd" if any(map(math.isnan, near)) else (
            f"within two sd the lines differ by at most {max(near):.2f} nats"
        )  # fmt: skip
        told.append(f"mode {one['mode']}, {one['kind']} ({short_name(one['direction'])}): {gap}")
    return "; ".join(told) or "nothing to draw"


def _marginals(candidate: Record) -> str:
    rows = candidate_page(candidate).posterior[:_MOST]
    told = [f"{row[0]} mean {row[3]}, sd {row[4]}, 95 % from {row[5]} to {row[6]}" for row in rows]
    return "; ".join(told) or "nothing to draw"


def _curvature(candidate: Record) -> str:
    return "; ".join(candidate_page(candidate).curvature[:_MOST]) or "nothing to draw"


def _audit(candidate: Record) -> str:
    told = [f"{row[0]} {row[1]}" for row in candidate_page(candidate).audit if row[1] != "-"]
    return "; ".join(told) or "nothing to draw"


_WORDS = {
    "predictions": _predictions,
    "profiles": _profiles,
    "marginals": _marginals,
    "curvature": _curvature,
    "audit": _audit,
}
