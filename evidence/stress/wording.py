"""Stress results in words."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from evidence.stress.levers import Lever

__all__ = [
    "change",
    "joint",
    "observation_summary",
    "observation_text",
    "prior_summary",
    "prior_text",
]

SHOWN = 5


def change(lever: Lever, step: float) -> str:
    """A change in words: "6.3 times larger", "2.1 prior sd higher"."""
    if lever.kind == "location":
        return f"{abs(step):.3g} prior sd {'higher' if step > 0 else 'lower'}"
    return f"{np.exp(abs(step)):.3g} times {'larger' if step > 0 else 'smaller'}"


def at_least(lever: Lever, step: float) -> str:
    """The change with the values it goes from and to."""
    text = f"the {lever.label} of {lever.candidate} is at least {change(lever, step)}"
    if not np.isfinite(lever.value):
        return text
    unit = f" {lever.unit}" if lever.unit else ""
    return f"{text} ({lever.value_at(step):.3g} instead of {lever.value:.3g}{unit})"


def joint(levers: Sequence[Lever], steps: Sequence[float]) -> str:
    """Several changes in words, the largest first, those that hardly count left out."""
    order = np.argsort(-np.abs(np.asarray(steps)), kind="stable")
    largest = abs(steps[order[0]]) if len(order) else 0.0
    kept = [i for i in order if abs(steps[i]) > 0.1 * largest]
    words = [
        f"{levers[i].label} of {levers[i].candidate} {change(levers[i], steps[i])}"
        for i in kept[:SHOWN]
    ]
    more = len(kept) - SHOWN
    return ", ".join(words) + (f", and {more} smaller changes" if more > 0 else "")


def prior_summary(result: Any) -> str:
    """What would overturn the verdict, in a sentence or three."""
    if result.runner_up is None:
        return f"{result.leader} has no rival that could overtake it."
    if result.single is not None and result.single.norm == 0:
        return f"{result.leader} and {result.runner_up} are even: any change decides between them."
    if result.single is None:
        text = (
            f"The verdict for {result.leader} holds under every change of a single number within a "
            "factor of 100, or 4.6 prior sd."
        )
    else:
        (lever,), (step,) = result.single.levers, result.single.steps
        text = f"The verdict for {result.leader} holds unless {at_least(lever, step)}."
    if result.joint is None:
        text += " Nor does a joint change of that size overturn it." if not result.single else ""
    elif result.single is None or result.joint.norm < 0.95 * result.single.norm:
        text += (
            f" Changed together, steps of joint norm {result.joint.norm:.2g} suffice: "
            f"{result.joint.text}."
        )
    near = (result.leader, result.runner_up)
    told = [effect for effect in result.lindley if effect.lever.candidate in near]
    if told:
        effect = told[0]
        text += (
            f" The width of the prior on {effect.lever.parameter} counts by itself "
            "(Jeffreys-Lindley effect)."
        )
    return text + _unconfirmed(result)


def _unconfirmed(result: Any) -> str:
    doubted = [x for x in (result.single, result.joint) if x is not None and x.confirmed is False]
    if not doubted:
        return ""
    worst = max(doubted, key=lambda x: abs(x.audited))
    return (
        f" An audit at that point finds {worst.audited:+.2f} +- {worst.audited_error:.2f} nats in "
        "place of 0: take the point as rough."
    )


def prior_text(result: Any) -> str:
    """At most twelve lines: the summary and the strongest effects."""
    lines = [result.summary]
    tipping = [e for e in result.effects if np.isfinite(e.step)]
    ordered = sorted(tipping, key=lambda e: abs(e.step))[:6]
    if ordered:
        lines.append(f"{len(tipping)} of {len(result.effects)} numbers can tip it alone:")
    for effect in ordered:
        lever = effect.lever
        lines.append(
            f"  {lever.label} of {lever.candidate}: {change(lever, effect.step)} -> "
            f"{effect.overtaken_by} leads"
        )
    if len(tipping) > len(ordered):
        lines.append(f"  and {len(tipping) - len(ordered)} more: .table()")
    lines += [f"  ! {text}" for text in result.left_out[:2]]
    return "\n".join(lines)


def observation_summary(result: Any) -> str:
    """Who carries the verdict, in a sentence or two."""
    if result.warnings:
        first = result.warnings[0]
        more = f" ({len(result.warnings) - 1} more such)" if len(result.warnings) > 1 else ""
        return f"{first[:1].upper()}{first[1:]}{more}."
    pair = result.pairs[0]
    strongest = int(pair.order[0])
    change = pair.left_out[strongest]
    text = (
        f"No one or two observations carry the lead of {result.leader} over {pair.candidate}; the "
        f"strongest, observation {strongest}, changes it by {change:+.2f} nats of {pair.lead:.2f} "
        "when left out"
    )
    return f"{text}."


def observation_text(result: Any) -> str:
    """At most twelve lines: the summary and the strongest observations against the runner-up."""
    pair = result.pairs[0]
    lines = [result.summary]
    lines += [f"! {text}" for text in result.warnings[1:3]]
    lines.append(f"log Bayes factor of {result.leader} against {pair.candidate}, left out (pull):")
    for index in pair.order[:6]:
        how = "recomputed" if pair.recomputed[index] else f"Pareto k {pair.pareto_k[index]:.2f}"
        lines.append(
            f"  observation {index}: {pair.left_out[index]:+.3f} ({pair.pull[index]:+.3f}), {how}"
        )
    if len(pair.order) > 6:
        lines.append(f"  and {len(pair.order) - 6} more: .table()")
    return "\n".join(lines)
