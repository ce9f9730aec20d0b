"""The arithmetic of a comparison against hand arithmetic, and the rules of the verdict."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from evidence.comparison import Entry, compare, decisive_prior_probability, grade


def entry(name, log_evidence, error=0.01, prior=0.5, trust="sound"):
    return Entry(
        name=name,
        log_evidence=log_evidence,
        standard_error=error,
        prior_probability=prior,
        trust=trust,
    )


def pair(gap, error=0.01, trusts=("sound", "sound"), errors=None):
    errors = errors or (error, error)
    return [
        entry("A", -10.0, errors[0], trust=trusts[0]),
        entry("B", -10.0 - gap, errors[1], trust=trusts[1]),
    ]


def test_probabilities_by_hand():
    """Evidences 1 : 2 : 4 with priors 1/2, 1/4, 1/4 give 2 : 2 : 4."""
    entries = [
        entry("A", -500.0, prior=0.5),
        entry("B", -500.0 + np.log(2.0), prior=0.25),
        entry("C", -500.0 + np.log(4.0), prior=0.25),
    ]
    found = compare(entries, seed=0)
    assert found.probabilities == pytest.approx([0.25, 0.25, 0.5], abs=1e-12)
    assert (found.leader, found.runner_up) == ("C", "A")
    assert found.lead == pytest.approx(np.log(2.0), abs=1e-12)


def test_nothing_overflows():
    found = compare([entry("A", -1e6), entry("B", -2e6)], seed=0)
    assert found.probabilities == (1.0, 0.0)
    assert found.decisive_prior_probability == 0.0
    close = compare([entry("A", 1e8), entry("B", 1e8)], seed=0)
    assert close.probabilities == pytest.approx([0.5, 0.5])


def test_the_prior_may_decide_the_leader():
    entries = [entry("A", -10.0, prior=0.02), entry("B", -12.0, prior=0.98)]
    found = compare(entries, seed=0)
    assert found.leader == "B"
    assert "log Bayes factor against A is -2.00 nats, so that it leads by the prior" in (
        found.verdict
    )
    assert "positive" not in found.verdict


def test_intervals_widen_with_the_errors():
    widths = []
    for error in (0.0, 0.01, 0.1, 0.5):
        found = compare(pair(1.0, error), seed=0)
        (low, high), chance = found.intervals[0], found.probabilities[0]
        assert low - 1e-12 <= chance <= high + 1e-12
        widths.append(high - low)
    assert widths[0] == pytest.approx(0.0, abs=1e-12)
    assert widths == sorted(widths)
    assert len(set(widths)) == 4


def test_an_interval_by_hand():
    """Two candidates: the log odds are Gaussian with the joint error."""
    found = compare(pair(1.0, errors=(0.3, 0.4)), seed=0)
    ends = 1 / (1 + np.exp(-(1.0 + 0.5 * np.array([-1.96, 1.96]))))
    assert found.intervals[0] == pytest.approx(ends, abs=0.015)
    assert found.intervals[1] == pytest.approx(1 - ends[::-1], abs=0.015)


def test_intervals_follow_the_seed_and_the_place():
    first, again = compare(pair(1.0, 0.2), seed=3), compare(pair(1.0, 0.2), seed=3)
    assert first == again
    assert compare(pair(1.0, 0.2), seed=4).intervals != first.intervals
    # candidates draw by themselves: equal errors do not cancel
    assert first.intervals[0][1] - first.intervals[0][0] > 0.1


def test_no_interval_without_errors():
    found = compare(pair(5.0, np.nan, ("unchecked", "unchecked")), seed=0)
    assert np.isnan(found.intervals).all()
    assert found.probabilities[0] > 0.99
    assert " to " not in found.verdict


@pytest.mark.parametrize(
    ("entries", "settled"),
    [
        (pair(1.5), True),
        (pair(1.0), True),  # at least 1 nat
        (pair(0.999), False),
        (pair(3.0, errors=(0.6, 0.8)), False),  # three joint errors are 3 nats: not more
        (pair(3.1, errors=(0.6, 0.8)), True),
        (pair(2.9, errors=(0.6, 0.8)), False),
        (pair(5.0, trusts=("corrected", "rough")), True),
        (pair(5.0, trusts=("doubtful", "sound")), False),
        (pair(5.0, trusts=("unchecked", "sound")), False),
        (pair(5.0, trusts=("sound", "doubtful")), False),
        (pair(11.0, trusts=("sound", "doubtful")), True),  # it could not overtake
        (pair(11.0, errors=(0.01, 1.0), trusts=("sound", "doubtful")), False),
        (pair(500.0, trusts=("sound", "unchecked")), False),
        (pair(500.0, trusts=("sound", "failed")), False),
        (pair(np.nan, trusts=("sound", "failed")), False),
        (pair(5.0, errors=(np.nan, 0.01)), False),  # an unknown error is none of zero
        (pair(5.0, errors=(0.01, np.nan)), False),
        ([entry("A", -3.0)], True),
        ([entry("A", -3.0, trust="doubtful")], False),
        ([entry("A", np.nan, trust="failed")], False),
        ([*pair(1.5), entry("C", -10.2)], False),
    ],
)
def test_what_is_settled(entries, settled):
    assert compare(entries, seed=0).settled is settled


def test_the_prior_counts_in_what_is_settled():
    near = [entry("A", -10.0, prior=0.3), entry("B", -11.5, prior=0.7)]
    assert not compare(near, seed=0).settled  # 1.5 nats less log(7 / 3)
    assert compare([dataclasses.replace(e, prior_probability=0.5) for e in near], seed=0).settled


@pytest.mark.parametrize("others", [[-12.0], [-10.5, -13.0, -11.0], [-10.0, -40.0]])
def test_the_decisive_prior_probability_put_back_gives_95_percent(others):
    priors = np.arange(1.0, len(others) + 1)
    priors = 0.4 * priors / priors.sum()
    leader = entry("A", -10.0, prior=0.6)
    rest = [entry(f"B{k}", z, prior=p) for k, (z, p) in enumerate(zip(others, priors, strict=True))]
    threshold = compare([leader, *rest], seed=0).decisive_prior_probability
    assert 0 < threshold < 1
    scale = (1 - threshold) / 0.4
    put_back = [
        dataclasses.replace(leader, prior_probability=threshold),
        *(dataclasses.replace(e, prior_probability=e.prior_probability * scale) for e in rest),
    ]
    assert compare(put_back, seed=0).probabilities[0] == pytest.approx(0.95, abs=1e-12)


def test_a_decisive_prior_probability_needs_somebody_else():
    assert np.isnan(decisive_prior_probability([entry("A", 0.0)], entry("A", 0.0)))
    assert np.isnan(decisive_prior_probability([], None))


def test_a_failed_candidate_is_left_out_and_the_others_are_conditional():
    entries = [entry("A", -10.0, prior=0.2), entry("F", np.nan, np.nan, 0.6, "failed")]
    entries.append(entry("B", -10.0 - np.log(3.0), prior=0.2))
    found = compare(entries, seed=0)
    assert found.probabilities[0] == pytest.approx(0.75, abs=1e-12)
    assert np.isnan(found.probabilities[1])
    assert found.probabilities[2] == pytest.approx(0.25, abs=1e-12)
    assert np.isnan(found.intervals[1]).all()
    assert np.isfinite(found.intervals[0]).all()
    assert not found.settled
    assert "leaving out F, which failed" in found.verdict


def test_a_failed_candidate_with_a_number_is_left_out_too():
    found = compare([entry("A", -10.0), entry("F", 5.0, trust="failed")], seed=0)
    assert found.leader == "A"
    assert np.isnan(found.probabilities[1])


# grades at 2 log B of 2, 6 and 10: Kass & Raftery (1995), from memory
@pytest.mark.parametrize(
    ("lead", "words"),
    [
        (0.0, "not worth more than a bare mention"),
        (0.99, "not worth more than a bare mention"),
        (1.0, "positive"),
        (2.99, "positive"),
        (3.0, "strong"),
        (4.99, "strong"),
        (5.0, "very strong"),
        (300.0, "very strong"),
    ],
)
def test_grades(lead, words):
    assert grade(lead) == words


@pytest.mark.parametrize(
    ("entries", "start", "end"),
    [
        (
            pair(4.0, 0.0),
            "A leads with probability 0.982 (0.982 to 0.982); its log Bayes factor against B is "
            "4.00 nats, strong on the scale of Kass & Raftery (1995).",
            "",
        ),
        (pair(12.0), "A leads with probability >0.999", "(1995)."),
        (pair(0.5), "Not settled: A leads with probability 0.622", " B is within reach."),
        (
            pair(5.0, trusts=("sound", "doubtful")),
            "Not settled: A leads",
            " B is doubtful and could overtake.",
        ),
        (
            pair(5.0, trusts=("doubtful", "sound")),
            "Not settled: A leads",
            " The number of A is doubtful.",
        ),
        (
            pair(5.0, np.nan, trusts=("unchecked", "unchecked")),
            "Not settled: A leads with probability 0.993; its",
            " The log evidences are unchecked.",
        ),
        ([entry("A", -3.0)], "A is the only candidate; its log evidence is -3.00 nats.", ""),
        (
            pair(np.nan, trusts=("sound", "failed")),
            "Not settled: A is the only candidate with a log evidence, leaving out B",
            "which failed.",
        ),
        (
            [entry("A", np.nan, trust="failed"), entry("B", np.nan, trust="failed")],
            "No verdict: no candidate has a log evidence, leaving out A, B, which failed.",
            "",
        ),
    ],
)
def test_verdict_sentences(entries, start, end):
    verdict = compare(entries, seed=0).verdict
    assert verdict.startswith(start)
    assert verdict.endswith(end)
    if not end:
        assert verdict == start
