"""Records of weighings made by hand, as ``Weighing.to_dict()`` gives them (invented numbers)."""

from __future__ import annotations

import copy
import math

NAN = math.nan

# names that must come out as text in every form
HOSTILE_NAMES = (
    "<script>alert(1)</script>",
    "\"quoted\" & 'quoted' &copy;",
    "a | b | c",
    "two\nlines\r\nand\ta tab",
    "[bold]loud[/bold] [link=x]y[/link] :smile:",
    "right \u202e to left \u200f mark",
    "\x1b[31mred\x1b[0m bell \x07 nul \x00",
    "*star* _under_ `code` ~~gone~~ $x$ # head ![img](https://x.org/a.png) www.x.org a@b.org",
    "- item",
    "1. first",
    "> quote",
    "   <!-- x -->",
    '=HYPERLINK("x")',
    "\u05e9\u05dc\u05d5\u05dd",
    "\ud800 lone surrogate",
    "a\\|b\\",
    "long " * 2000,
)

_COLUMNS = {
    "candidate": "the name of the candidate",
    "log_evidence": "log of the probability of the data under the candidate [nats]",
    "standard_error": "three of these cover the error of the log evidence [nats]",
    "log_bayes_factor": "log evidence minus that of the leader [nats]",
    "probability": "posterior probability of the candidate, with its 95 % interval",
    "fit": "log-likelihood at the mode [nats]",
    "occam_factor": "log evidence minus fit; depends on the coordinate [nats]",
    "well_determined": "how many parameters the data determine",
    "bic": "k log n - 2 log L at the maximum of the likelihood",
    "trust": "one word on how far the log evidence can be relied on",
}


def make_candidate(name="one pool", **changes):
    """Return one candidate of a record: one pool of litter that decays."""
    candidate = {
        "candidate": name,
        "prior_probability": 0.25,
        "log_evidence": -41.2134,
        "standard_error": 0.0041,
        "laplace": -41.25,
        "second_order_term": 0.03,
        "log_bayes_factor": 0.0,
        "probability": 0.957,
        "probability_interval": [0.953, 0.961],
        "fit": -33.118,
        "occam_factor": -8.0954,
        "well_determined": 2.93,
        "bic": 75.31,
        "trust": "sound",
        "status": "OK",
        "status_sentence": "a peak was found",
        "warnings": [],
        "dimension": 3,
        "log_posterior_at_mode": -46.1,
        "modes": [
            {
                "log_density": -46.1,
                "laplace": -41.25,
                "second_order_term": 0.03,
                "starts": 8,
                "mode": {"mass": 9.87, "rate": 0.0061, "noise": 0.31},
            }
        ],
        "curvature": {
            "scaled_condition": 3.21,
            "directions": [
                {
                    "combination": "0.71 log rate - 0.70 log mass",
                    "sd": 0.21,
                    "share_from_data": 0.98,
                }
            ],
        },
        "posterior": [
            {
                "parameter": "mass",
                "unit": "g",
                "mode": 9.8712,
                "mean": 9.8803,
                "sd": 0.1123,
                "low": 9.661,
                "high": 10.102,
                "note": "",
            },
            {
                "parameter": "rate",
                "unit": "1/day",
                "mode": 0.006132,
                "mean": 0.006141,
                "sd": 0.000214,
                "low": 0.005733,
                "high": 0.006572,
                "note": "",
            },
        ],
        "audit": [
            {
                "rung": "second-order term",
                "estimate": -41.22,
                "standard_error": NAN,
                "agreed": True,
                "note": "",
            },
            {
                "rung": "importance draws",
                "estimate": -41.2134,
                "standard_error": 0.0041,
                "agreed": True,
                "note": "Pareto k 0.12",
            },
        ],
        "priors": {"mass": "LogNormal(2.3, 0.3)"},
        "notes": {},
        "units": {"mass": "g", "rate": "1/day"},
    }
    return candidate | changes


def make_record(*candidates, **changes):
    """Return a record of the given candidates, by default four of the litter study."""
    if not candidates:
        candidates = litter_candidates()
    record = {
        "format": "evidence weighing",
        "version": 1,
        "title": "Litter decay at the Lowmere station",
        "created": "2025-03-01T09:30:00+00:00",
        "versions": {"evidence": "0.1.0", "jax": "0.10.2", "numpy": "2.4.6", "python": "3.11.7"},
        "depth": "standard",
        "seed": 0,
        "run_seconds": 3.217,
        "data": {
            "source": "models/litter.csv",
            "fingerprint": "ab12",
            "terms": 24,
            "columns": {"days": {"shape": [24], "dtype": "float64"}},
        },
        "verdict": "One pool leads two pools by 3.10 nats: positive evidence (2 log B = 6.2).",
        "leader": candidates[0]["candidate"],
        "settled": True,
        "decisive_prior_probability": 0.4412,
        "caution": [],
        "columns": dict(_COLUMNS),
        "candidates": list(candidates),
    }
    return copy.deepcopy(record | changes)


def litter_candidates():
    """Return four candidates: one sound, one doubtful, one failed, one unchecked."""
    return (
        make_candidate("one pool"),
        make_candidate(
            "power law",
            log_evidence=-61.40,
            standard_error=NAN,
            log_bayes_factor=-20.19,
            probability=2e-9,
            probability_interval=[NAN, NAN],
            trust="unchecked",
        ),
        make_candidate(
            "two pools",
            log_evidence=-44.31,
            standard_error=0.21,
            log_bayes_factor=-3.0966,
            probability=0.043,
            probability_interval=[0.039, 0.047],
            trust="doubtful",
            warnings=[
                {
                    "sentence": "The direction 0.71 log rate_1 - 0.70 log rate_2 is held by the "
                    "prior alone.",
                    "remedy": "Give rate_2 a narrower prior or leave it out.",
                }
            ],
        ),
        make_candidate(
            "no loss",
            log_evidence=NAN,
            standard_error=NAN,
            log_bayes_factor=NAN,
            probability=NAN,
            probability_interval=[NAN, NAN],
            fit=NAN,
            occam_factor=NAN,
            well_determined=NAN,
            bic=NAN,
            trust="failed",
            status="NOT_A_PEAK",
            status_sentence="No peak was found from any start.",
            posterior=[],
            audit=[],
            curvature={"scaled_condition": NAN, "directions": []},
        ),
    )


def hostile_record(name):
    """Return a record in which every text of the user's is the given one."""
    candidate = make_candidate(
        name,
        warnings=[{"sentence": f"{name} is loose.", "remedy": f"Change {name}."}],
        audit=[
            {
                "rung": name,
                "estimate": -1.0,
                "standard_error": 0.1,
                "agreed": False,
                "note": name,
            }
        ],
        curvature={
            "scaled_condition": 2.0,
            "directions": [{"combination": f"0.7 {name}", "sd": 1.0, "share_from_data": 0.5}],
        },
    )
    candidate["posterior"][0] |= {"parameter": name, "unit": name, "note": name}
    return make_record(
        candidate,
        make_candidate("no loss", log_evidence=-44.0),
        title=name,
        verdict=f"{name} leads.",
        caution=[f"Beware of {name}."],
        columns={"candidate": f"a {name}"},
        data={"source": name, "fingerprint": "", "terms": 2, "columns": {}},
    )


def make_pictures(name="rate", column="grams", **changes):
    """Return the pictures' part of a candidate, as ``Weighing.to_dict(pictures=True)`` gives it."""
    steps = [-4.0 + 0.2 * k for k in range(41)]
    edges = [0.1 * k for k in range(13)]
    bell = [math.exp(-0.5 * (k - 5.5) ** 2 / 4.0) for k in range(12)]
    at = [float(k // 2) for k in range(20)]
    middle = [10.0 * math.exp(-0.1 * x) for x in at]
    profiles = [
        {
            "mode": mode,
            "kind": kind,
            "direction": f"0.71 log {name} - 0.70 log mass",
            "steps": steps,
            "log_density": [None if t < -3.8 else -0.5 * t**2 + 0.02 * t**3 for t in steps],
            "gaussian": [-0.5 * t**2 for t in steps],
        }
        for mode in (1, 2)
        for kind in ("loosest", "most skewed")
    ]
    return {
        "profiles": profiles,
        "marginals": [
            {"parameter": name, "unit": "g", "edges": edges, "gaussian": bell, "refined": bell},
            {"parameter": "mass", "unit": "", "edges": edges, "gaussian": bell, "refined": None},
        ],
        "source": "refined",
        "predictions": [
            {
                "column": column,
                "along": "days",
                "rows": 20,
                "at": at,
                "observed": [y + 0.3 * (-1) ** k for k, y in enumerate(middle)],
                "expected_mean": middle,
                "expected_low": [y - 0.2 for y in middle],
                "expected_high": [y + 0.2 for y in middle],
                "new_mean": middle,
                "new_low": [y - 0.8 for y in middle],
                "new_high": [y + 0.8 for y in middle],
            }
        ],
        "checks": [
            {
                "column": column,
                "check": check,
                "observed": 6.1,
                "low": 5.9,
                "high": 6.4,
                "p_value": p,
                "failed": p > 0.99,
            }
            for check, p in (("mean", 0.4), ("largest value", 0.999))
        ],
        "trouble": "",
    } | changes


def illustrated(record, **changes):
    """Return a record whose candidates have pictures."""
    candidates = [{**c, "pictures": make_pictures(**changes)} for c in record["candidates"]]
    return {**record, "candidates": candidates}


def illustrated_hostile(name):
    """Return a record with pictures in which every text of the user's is the given one."""
    record = illustrated(hostile_record(name), name=name, column=name)
    texts = {"priors": {name: name}, "notes": {name: name}, "units": {name: name}}
    candidates = [{**c, **texts} for c in record["candidates"]]
    for candidate in candidates:
        candidate["pictures"]["predictions"][0]["along"] = name
        candidate["pictures"]["trouble"] = name
    study = {"text": name, "path": name, "fingerprint": "ab12"}
    columns = {name: {"shape": [2], "dtype": "float64"}}
    data = {**record["data"], "columns": columns}
    return {**record, "candidates": candidates, "study": study, "data": data}
