"""Probabilities with their error bars, and each log evidence split into fit and Occam factor."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

from evidence.report.content import by_log_evidence
from evidence.report.figures.canvas import (
    BLUE,
    FAINT,
    GREEN,
    INK,
    VERMILLION,
    new_figure,
    note_below,
    picture,
    plain_axes,
)
from evidence.report.figures.labels import row_height, row_labels
from evidence.report.wording import interval, nats, nats_decimals, number

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["overview", "probabilities", "split"]

_DOUBTED = ("doubtful", "failed", "unchecked")
_MOST = 20
_ERRORS = 3.0


@picture
def overview(record: Mapping[str, Any]) -> Figure:
    """Draw both pictures of the comparison, one above the other."""
    rows = _rows(record)
    height = row_height(len(rows), extra=0.75)
    figure, (above, below) = new_figure(2, height=2 * height)
    _draw_probabilities(above, rows)
    _draw_split(below, rows)
    return figure


@picture
def probabilities(record: Mapping[str, Any]) -> Figure:
    """Draw the posterior probability of each candidate with its 95 % interval."""
    rows = _rows(record)
    figure, (axes,) = new_figure(height=row_height(len(rows), extra=0.75))
    _draw_probabilities(axes, rows)
    return figure


@picture
def split(record: Mapping[str, Any]) -> Figure:
    """Draw each log evidence as the fit less what the candidate pays for its freedom."""
    rows = _rows(record)
    figure, (axes,) = new_figure(height=row_height(len(rows), extra=0.75))
    _draw_split(axes, rows)
    return figure


def _rows(record: Mapping[str, Any]) -> Sequence[Mapping[str, Any]]:
    return by_log_evidence(record)[:_MOST]


def _draw_probabilities(axes: Axes, rows: Sequence[Mapping[str, Any]]) -> None:
    plain_axes(axes).set_title("probability of each candidate, with 95 % interval", loc="left")
    values = []
    for y, row in enumerate(rows):
        p, doubted = number(row.get("probability")), row.get("trust") in _DOUBTED
        text = interval(row.get("probability"), row.get("probability_interval"))
        trust = str(row.get("trust") or "unchecked")
        values.append(f"{text}, {trust}" if trust in _DOUBTED else text)
        if math.isnan(p):
            values[-1] = "no number, failed"
            continue
        axes.barh(y, p, height=0.3, color=FAINT)
        colour = VERMILLION if doubted else BLUE
        low, high = _ends(row.get("probability_interval"), p)
        axes.plot([low, high], [y, y], color=colour, linewidth=1.6, solid_capstyle="butt")
        axes.plot(p, y, "D" if doubted else "o", color=colour, clip_on=False, zorder=5)
    axes.set_xlim(0.0, 1.0)
    axes.set_xlabel("posterior probability")
    row_labels(axes, [str(row["candidate"]) for row in rows], values)


def _ends(ends: Any, middle: float) -> tuple[float, float]:
    low, high = [number(x) for x in ends] if ends and len(ends) == 2 else (math.nan, math.nan)
    return (middle, middle) if math.isnan(low) or math.isnan(high) else (low, high)


def _draw_split(axes: Axes, rows: Sequence[Mapping[str, Any]]) -> None:
    plain_axes(axes).set_title("fit (ring), Occam factor (line), log evidence (dot)", loc="left")
    values, drawn = [], False
    for y, row in enumerate(rows):
        z, fit = number(row.get("log_evidence")), number(row.get("fit"))
        error = number(row.get("standard_error"))
        decimals = nats_decimals(error)
        text = nats(z, decimals)
        if not math.isnan(fit) and not math.isnan(z):
            sign = "\u2212" if z < fit else "+"
            text = f"{nats(fit)} {sign} {nats(abs(z - fit))} = {text}"
        values.append("no number, failed" if math.isnan(z) else text)
        if math.isnan(z):
            continue
        drawn = True
        _one_split(axes, y, z, fit, error, doubted=row.get("trust") in _DOUBTED)
    axes.margins(x=0.06)
    axes.set_xlabel(f"nats; bars are {_ERRORS:.0f} standard errors")
    row_labels(axes, [str(row["candidate"]) for row in rows], values)
    if not drawn:
        note_below(axes, "no candidate has a log evidence")


def _one_split(axes: Axes, y: int, z: float, fit: float, error: float, *, doubted: bool) -> None:
    if not math.isnan(fit):
        axes.plot([fit, z], [y, y], color=FAINT, linewidth=3.0, solid_capstyle="butt", zorder=1)
        axes.plot(fit, y, "o", markerfacecolor="none", markeredgecolor=GREEN, zorder=3)
    colour = VERMILLION if doubted else BLUE
    if not math.isnan(error):
        axes.errorbar(z, y, xerr=_ERRORS * error, color=INK, elinewidth=0.7, capsize=2.0, zorder=2)
    axes.plot(z, y, "D" if doubted else "o", color=colour, zorder=4)
