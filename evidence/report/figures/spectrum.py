"""The Hessian's directions: how tightly each is held, and by what."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

from evidence.report.figures.canvas import (
    BLUE,
    INK,
    ORANGE,
    new_figure,
    note_below,
    picture,
    plain_axes,
)
from evidence.report.figures.labels import row_height, row_labels
from evidence.report.wording import number

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["spectrum"]

_MOST = 12


@picture
def spectrum(directions: Sequence[Mapping[str, Any]]) -> Figure:
    """Draw for each principal direction its curvature, split into data and prior.

    Parameters
    ----------
    directions : list of dict
        ``combination``, ``sd``, ``share_from_data``; the loosest first.
    """
    rows = [row for row in directions if number(row.get("sd")) > 0.0][:_MOST]
    if not rows:
        figure, (axes,) = new_figure(height=0.8)
        note_below(axes, "no positive definite Hessian")
        return figure
    figure, (axes, right) = new_figure(
        1, 2, height=row_height(len(rows), extra=0.95), widths=(5.0, 3.0)
    )
    for one in (axes, right):
        plain_axes(one)
    known = any([_draw_share(axes, y, row) for y, row in enumerate(rows)])
    curvature = [number(row["sd"]) ** -2.0 for row in rows]
    right.semilogx(curvature, range(len(rows)), "o", color=INK)
    right.set_xlim(min(curvature) / 3.0, max(curvature) * 3.0)
    right.xaxis.set_major_locator(_decades(curvature))
    right.xaxis.set_major_formatter(lambda x, _: f"{x:.0e}" if not 1e-2 < x < 1e4 else f"{x:g}")
    right.minorticks_off()
    right.set_xlabel("curvature [nats]")
    axes.set_xlim(0.0, 1.0)
    axes.set_xlabel("share of it" if known else "shares unknown")
    axes.set_title("directions of the Hessian, the loosest first", loc="left")
    if known:
        handles, labels = axes.get_legend_handles_labels()
        first = dict(zip(labels, handles, strict=True))
        figure.legend(first.values(), first.keys(), loc="outside lower left", ncols=2)
    names = [str(row["combination"]) for row in rows]
    row_labels(axes, names, [_value(row) for row in rows], last=right)
    return figure


def _draw_share(axes: Axes, y: int, row: Mapping[str, Any]) -> bool:
    """Draw one bar; return whether the shares are known."""
    share = number(row.get("share_from_data"))
    if math.isnan(share):
        axes.barh(y, 1.0, height=0.34, facecolor="none", edgecolor=INK, linewidth=0.6)
        return False
    data = min(max(share, 0.0), 1.0)
    axes.barh(y, data, height=0.34, color=BLUE, label="from the data")
    axes.barh(y, 1.0 - data, left=data, height=0.34, color=ORANGE, hatch="////",
              edgecolor="white", linewidth=0.0, label="from the prior")  # fmt: skip
    return True


def _decades(values: Sequence[float]) -> Any:
    """At most three powers of ten over the range: more would touch."""
    from matplotlib.ticker import FixedLocator

    low, high = math.floor(math.log10(min(values) / 3)), math.ceil(math.log10(max(values) * 3))
    step = max(1, math.ceil((high - low) / 3))
    return FixedLocator([10.0**k for k in range(low, high + 1, step)])


def _value(row: Mapping[str, Any]) -> str:
    share = number(row.get("share_from_data"))
    outside = "" if math.isnan(share) or 0.0 <= share <= 1.0 else f", share {share:.2f}"
    return f"sd {number(row['sd']):.3g}{outside}"
