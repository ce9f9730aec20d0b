"""Pictures of a stress: the lead as each prior moves, and as each observation is left out."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

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
from evidence.report.wording import number, visible

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["draw_observations", "draw_priors"]

MOST_ROWS = 14
LABELLED = 3


@picture
def draw_priors(record: Mapping[str, Any]) -> Figure:
    """Draw the lead at half and twice each scale, the strongest effects on top.

    Parameters
    ----------
    record : dict
        What ``PriorStress.to_dict()`` gives.
    """
    rows = _strongest(record)
    if not rows:
        figure, (axes,) = new_figure(height=0.8)
        note_below(axes, "no rival, or nothing that could be moved")
        return figure
    figure, (axes,) = new_figure(height=row_height(len(rows), extra=1.0))
    plain_axes(axes)
    for y, row in enumerate(rows):
        lead = row["lead"]
        for key, color, offset in (("halved", BLUE, -0.12), ("doubled", VERMILLION, 0.12)):
            change = row[key] * (1.0 if row["candidate"] == record["leader"] else -1.0)
            if math.isfinite(change):
                label = _LEGEND[key] if y == 0 else None
                axes.barh(y + offset, change, left=lead, height=0.22, color=color, label=label)
        axes.vlines(lead, y - 0.27, y + 0.27, color=INK, linewidth=0.8)
        axes.vlines(0.0, y - 0.27, y + 0.27, color=FAINT, linewidth=1.6)
    low, high = axes.get_xlim()
    axes.set_xlim(min(low, -0.05 * high), high)
    axes.set_xlabel(f"lead of {visible(record['leader'])[:40]} [nats]; at 0 it is lost")
    names = [f"{row['hyperparameter']} of {row['candidate']}" for row in rows]
    row_labels(axes, names, [_tips(row) for row in rows])
    figure.legend(loc="outside upper left", ncols=2)
    return figure


_LEGEND = {"halved": "halved, or 1 prior sd lower", "doubled": "doubled, or 1 higher"}


def _strongest(record: Mapping[str, Any]) -> list[Mapping[str, Any]]:
    """The rows with the largest effect, of those within reach of the lead first."""
    rows = [row for row in record["rows"] if math.isfinite(number(row["lead"]))]
    near = {record["leader"], record["runner_up"]}

    def size(row: Mapping[str, Any]) -> tuple[bool, float]:
        effect = max(abs(number(row[key])) for key in ("halved", "doubled"))
        return row["candidate"] not in near, -(effect if math.isfinite(effect) else 0.0)

    return [row for row in sorted(rows, key=size) if row["candidate"] in near][:MOST_ROWS]


def _tips(row: Mapping[str, Any]) -> str:
    tipping = number(row["tipping"])
    if math.isnan(tipping):
        return "holds"
    return f"tips at {tipping:+.2g} sd" if row["kind"] == "location" else f"tips at ×{tipping:.2g}"


@picture
def draw_observations(
    leader: str, pair: Any, places: Sequence[float] | None, along: str | None
) -> Figure:
    """Draw what leaving out each observation does to the lead over one rival.

    Parameters
    ----------
    leader : str
    pair : PairStress
    places : (n,), optional
        Where each observation stands; in the order of the data where left out.
    along : str, optional
        What the places are.
    """
    figure, (axes,) = new_figure(height=2.2)
    at = np.arange(len(pair.left_out)) if places is None else np.asarray(places, dtype=float)
    against = pair.left_out > 0
    colors = np.where(against, VERMILLION, BLUE)
    axes.axhline(0.0, color=INK, linewidth=0.6)
    axes.vlines(at, 0.0, pair.left_out, color=colors, linewidth=0.9)
    for chosen, color, mark, text in (
        (~against, BLUE, "v", f"speaks for {visible(leader)[:30]}"),
        (against, VERMILLION, "^", f"speaks for {visible(pair.candidate)[:30]}"),
    ):
        axes.plot(at[chosen], pair.left_out[chosen], mark, color=color, markersize=3, label=text)
    low = np.nanmin(pair.left_out, initial=0.0)
    if low < -0.5 * pair.lead:  # the line would flatten everything else
        axes.axhline(-pair.lead, color=FAINT, linewidth=1.2)
        axes.annotate("the lead is lost", (0.0, -pair.lead), xycoords=axes.get_yaxis_transform(),
                      xytext=(2, 2), textcoords="offset points", fontsize=6)  # fmt: skip
    _name(axes, at, pair)
    axes.margins(y=0.16)
    axes.set_xlabel("observation" if along is None else visible(along)[:60])
    axes.set_ylabel("change of the lead\nwhen left out [nats]")
    figure.legend(loc="outside upper left", ncols=2)
    return figure


def _name(axes: Axes, at: np.ndarray, pair: Any) -> None:
    """Write the numbers of the strongest observations beside their marks, clear of each other."""
    named = [int(i) for i in pair.order[:LABELLED]]
    reach = 0.05 * float(np.ptp(at)) if len(at) > 1 else 0.0
    for rank, index in enumerate(named):
        x, y = float(at[index]), float(pair.left_out[index])
        gaps = [at[other] - x for other in named if other != index]
        close = [gap for gap in gaps if abs(gap) < reach]
        side = "center"
        if close:  # of two at the same place, one goes to either side
            is_left = close[0] > 0 or (close[0] == 0 and rank % 2 == 0)
            side = "right" if is_left else "left"
        axes.annotate(
            str(index), (x, y), xytext=(0, -4 if y < 0 else 4), textcoords="offset points",
            ha=side, va="top" if y < 0 else "bottom", fontsize=6,
        )  # fmt: skip
