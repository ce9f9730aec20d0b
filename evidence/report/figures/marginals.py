"""Posterior marginals, Gaussian against refined."""

from __future__ import annotations

import itertools
import math
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

from evidence.report.figures.canvas import BLUE, VERMILLION, new_figure, note_below, picture
from evidence.report.figures.labels import heading
from evidence.report.wording import visible

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["marginals"]

_COLUMNS = 3
_PANEL = 0.82  # height of a row [inch]
_MOST = 30


@picture
def marginals(found: Sequence[Mapping[str, Any]]) -> Figure:
    """Draw a small panel for each parameter.

    Parameters
    ----------
    found : list of dict
        ``pictures["marginals"]`` of a candidate: at most 30 are drawn.
    """
    shown = [one for one in found if one.get("edges")][:_MOST]
    if not shown:
        figure, (axes,) = new_figure(height=0.8)
        note_below(axes, "no posterior, or no marginals saved")
        return figure
    columns = min(_COLUMNS, len(shown))
    rows = math.ceil(len(shown) / columns)
    figure, panels = new_figure(rows, columns, height=max(rows * _PANEL, 1.1) + 0.4)
    for axes, one in zip(panels, shown, strict=False):
        _draw(axes, one)
    for axes in panels[len(shown) :]:
        axes.axis("off")
    handles, labels = panels[0].get_legend_handles_labels()
    figure.legend(handles, labels, loc="outside upper center", ncols=2)
    return figure


def _draw(axes: Axes, one: Mapping[str, Any]) -> None:
    edges = one["edges"]
    middle = [0.5 * (a + b) for a, b in itertools.pairwise(edges)]
    if one.get("refined"):
        axes.fill_between(
            middle, one["refined"], color=BLUE, alpha=0.3, linewidth=0.7, label="refined"
        )
    axes.plot(middle, one["gaussian"], "--", color=VERMILLION, linewidth=0.9, label="Gaussian")
    axes.spines["left"].set_visible(False)
    axes.set_yticks([])
    axes.set_ylim(bottom=0.0)
    axes.set_xlim(edges[0], edges[-1])
    _two_ticks(axes, edges)
    unit = f" [{visible(one['unit'])[:20]}]" if one.get("unit") else ""
    heading(axes, [f"{visible(one['parameter'])[:80]}{unit}"])


def _two_ticks(axes: Axes, edges: Sequence[float]) -> None:
    """Two round numbers well inside, of few digits: more would touch in a panel of 25 mm."""
    width = edges[-1] - edges[0]
    low, high = (_round_inside(edges[0] + part * width, width) for part in (0.2, 0.8))
    ticks = [low] if low == high else [low, high]
    axes.set_xticks(ticks, [f"{tick:.4g}" for tick in ticks])


def _round_inside(value: float, width: float) -> float:
    step = 10.0 ** math.floor(math.log10(width / 3.0))
    for factor in (2.0, 1.0):
        rounded = round(value / (factor * step)) * factor * step
        if abs(rounded - value) <= 0.15 * width:
            return float(f"{rounded:.12g}")
    return value
