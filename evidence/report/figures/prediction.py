"""Data against a candidate's prediction, with its 95 % band."""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

from evidence.report.figures.canvas import BLUE, INK, new_figure, note_below, picture
from evidence.report.figures.labels import name_axis
from evidence.report.wording import number, visible

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["predictions"]

_PANEL = 2.1
_MOST = 4
_ROUGH = 2.5  # times its own range that a line may go up and down before it is no line
_LEAST_PER_TURN = 8
_DRAWN = ("expected_", "new_")


@picture
def predictions(found: Sequence[Mapping[str, Any]], units: Mapping[str, str]) -> Figure:
    """Draw a panel for each response column.

    Parameters
    ----------
    found : list of dict
        ``pictures["predictions"]`` of a candidate; at most four are drawn.
    units : mapping
        Column -> unit.
    """
    shown = list(found)[:_MOST]
    if not shown:
        figure, (axes,) = new_figure(height=0.8)
        note_below(axes, "neither predict nor simulate was declared, or nothing was saved")
        return figure
    figure, panels = new_figure(len(shown), height=len(shown) * _PANEL + 0.3)
    for axes, one in zip(panels, shown, strict=True):
        _draw(axes, one, units)
    handles: dict[str, Any] = {}
    for axes in panels:
        handles |= dict(zip(*reversed(axes.get_legend_handles_labels()), strict=True))
    figure.legend(handles.values(), handles.keys(), loc="outside upper center", ncols=2)
    return figure


def _draw(axes: Axes, one: Mapping[str, Any], units: Mapping[str, str]) -> None:
    points, data = [number(x) for x in one["at"]], one.get("observed")
    middle = [number(x) for x in one.get("expected_mean") or one.get("new_mean")]
    whole = _is_line(points, middle)
    at = points
    if whole:  # rows at the same place differ by the noise of the draws alone
        one = {key: _joined(points, x) if key.startswith(_DRAWN) else x for key, x in one.items()}
        at, middle = _joined(points, points), _joined(points, middle)
    if one.get("new_low"):
        _band(axes, at, one["new_low"], one["new_high"], whole=whole, alpha=0.18, width=0.7,
              label="95 % band of new data")  # fmt: skip
    if one.get("expected_low"):
        _band(axes, at, one["expected_low"], one["expected_high"], whole=whole, alpha=0.45,
              width=2.2, label="95 % band of the expected value")  # fmt: skip
    style = {"color": BLUE, "label": "posterior mean", "zorder": 3}
    axes.plot(at, middle, "-" if whole else "_", **style)
    if data:
        size = 2.6 if len(points) <= 100 else 1.6
        axes.plot(points, data, "o", color=INK, markersize=size, markerfacecolor="none",
                  markeredgewidth=0.6, label="data", zorder=4)  # fmt: skip
    name_axis(axes, _named(one.get("along") or "row of the data", units), across=True)
    name_axis(axes, _named(one["column"], units), across=False)
    axes.margins(x=0.03)
    if one["rows"] > len(points):
        axes.set_title(f"{len(points)} of {one['rows']} rows", loc="left")


def _joined(at: Sequence[float], values: Sequence[Any]) -> list[float]:
    """Means over rows at the same place of the axis, in its order."""
    groups: dict[float, list[float]] = {}
    for place, value in zip(at, values, strict=True):
        groups.setdefault(place, []).append(number(value))
    return [sum(group) / len(group) for group in groups.values()]


def _band(
    axes: Axes,
    at: Sequence[float],
    low: Sequence[float],
    high: Sequence[float],
    *,
    whole: bool,
    alpha: float,
    width: float,
    label: str,
) -> None:
    if whole:
        axes.fill_between(at, low, high, color=BLUE, alpha=alpha, linewidth=0.0, label=label)
    else:
        axes.vlines(at, low, high, color=BLUE, alpha=alpha + 0.2, linewidth=width, label=label)


def _is_line(at: Sequence[float], middle: Sequence[float]) -> bool:
    """Whether the prediction is a function of the axis, smooth enough to be joined by a line."""
    reach = max(middle) - min(middle)
    if not reach > 0.0:
        return True
    steps = [abs(b - a) for a, b in itertools.pairwise(middle)]
    ties = [s for s, (a, b) in zip(steps, itertools.pairwise(at), strict=True) if a == b]
    if ties and max(ties) > 0.01 * reach:
        return False
    return sum(steps) / reach <= max(_ROUGH, len(set(at)) / _LEAST_PER_TURN)


def _named(column: str, units: Mapping[str, str]) -> str:
    unit = units.get(column, "")
    return visible(column)[:80] + (f" [{visible(unit)[:20]}]" if unit else "")
