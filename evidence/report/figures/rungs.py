"""The audit's estimates in the order in which they were made, with their errors."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from evidence.report.figures.canvas import (
    BLUE,
    FAINT,
    INK,
    VERMILLION,
    new_figure,
    note_below,
    picture,
    plain_axes,
)
from evidence.report.figures.labels import row_height, row_labels
from evidence.report.wording import error_nats, nats, nats_decimals, number

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["rungs"]

_ERRORS = 3.0
_LEAST_REACH = 0.05  # nats on either side, so that equal numbers do not look far apart
_MOST_REACH = 30.0  # nats beyond which an estimate is an arrow at the edge


@picture
def rungs(candidate: Mapping[str, Any]) -> Figure:
    """Draw each estimate with three standard errors beside the accepted one.

    Parameters
    ----------
    candidate : dict
        With ``audit``, ``log_evidence`` and ``standard_error``.
    """
    steps = [step for step in candidate["audit"] if not math.isnan(number(step.get("estimate")))]
    if not steps:
        figure, (axes,) = new_figure(height=0.8)
        note_below(axes, "no estimate was made")
        return figure
    figure, (axes,) = new_figure(height=row_height(len(steps), extra=0.75))
    plain_axes(axes)
    accepted = number(candidate.get("log_evidence"))
    error = number(candidate.get("standard_error"))
    centre = number(steps[-1]["estimate"]) if math.isnan(accepted) else accepted
    reach = _reach(steps, centre, error)
    for y, step in enumerate(steps):
        if not math.isnan(accepted):  # row by row, so that no line runs through the words
            width = 0.0 if math.isnan(error) else _ERRORS * error
            box = {"left": accepted - width, "height": 0.44, "color": FAINT, "alpha": 0.6}
            axes.barh(y, 2.0 * width, linewidth=0.0, **box)
            axes.vlines(accepted, y - 0.22, y + 0.22, color=INK, linewidth=0.6)
        _draw(axes, y, step, centre, reach)
    axes.set_xlim(centre - 1.08 * reach, centre + 1.08 * reach)
    axes.ticklabel_format(axis="x", useOffset=False, style="plain")
    axes.xaxis.get_major_locator().set_params(nbins=5)
    axes.set_xlabel(f"log evidence [nats]; bars are {_ERRORS:.0f} standard errors")
    title = "estimates in order; shaded: accepted"
    axes.set_title(title if not math.isnan(accepted) else "estimates; none accepted", loc="left")
    row_labels(axes, [str(step["rung"]) for step in steps], [_value(step) for step in steps])
    return figure


def _reach(steps: list[Mapping[str, Any]], centre: float, error: float) -> float:
    own = 0.0 if math.isnan(error) else _ERRORS * error
    away = [own, _LEAST_REACH]
    for step in steps:
        spread = number(step.get("standard_error"))
        spread = 0.0 if math.isnan(spread) or math.isinf(spread) else _ERRORS * spread
        away.append(abs(number(step["estimate"]) - centre) + spread)
    return min(max(x for x in away if math.isfinite(x)), max(_MOST_REACH, 2.0 * own))


def _draw(axes: Axes, y: int, step: Mapping[str, Any], centre: float, reach: float) -> None:
    x, error = number(step["estimate"]), number(step.get("standard_error"))
    disagreed = step.get("agreed") is False
    colour = VERMILLION if disagreed else BLUE
    if abs(x - centre) > 1.001 * reach:
        edge = centre + math.copysign(reach, x - centre)
        axes.plot(edge, y, ">" if x > centre else "<", color=colour)
        return
    if math.isfinite(error):
        axes.errorbar(x, y, xerr=_ERRORS * error, color=INK, elinewidth=0.7, capsize=2.0)
    face = "none" if step.get("agreed") is None else colour
    axes.plot(x, y, "D" if disagreed else "o", color=colour, markerfacecolor=face, zorder=5)


def _value(step: Mapping[str, Any]) -> str:
    error = number(step.get("standard_error"))
    text = nats(step["estimate"], nats_decimals(error))
    if error > 0.0:
        text += f" \u00b1 {error_nats(error)}"
    return text + {True: ", agrees", False: ", disagrees"}.get(step.get("agreed"), "")
