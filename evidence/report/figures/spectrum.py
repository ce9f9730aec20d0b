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
_RAISED = str.maketrans(
    "0123456789-", "\u2070\u00b9\u00b2\u00b3\u2074\u2075\u2076\u2077\u2078\u2079\u207b"
)
_EDGE = 0.15  # of an axis on either side, where a number would stick out


@picture
def spectrum(directions: Sequence[Mapping[str, Any]]) -> Figure:
    """Draw for each principal direction its curvature, split into data and prior.

    Parameters
    ----------
    directions : list of dict
        ``combination``, ``sd``, ``share_from_data``; the loosest first.
    """
    rows = [row for row in directions if 0.0 < number(row.get("sd")) < math.inf][:_MOST]
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
    right.set_xlim(min(curvature) / 5.0, max(curvature) * 5.0)
    right.set_xticks(_decades(*right.get_xlim()))
    right.xaxis.set_major_formatter(lambda x, _: _power(x))
    right.minorticks_off()
    right.set_xlabel("curvature [nats]")
    axes.set_xlim(0.0, 1.0)
    axes.set_xlabel("share of the curvature" if known else "shares unknown")
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


def _decades(low: float, high: float) -> list[float]:
    """One to three powers of ten well inside the range: others would touch what is beside it."""
    lowest, width = math.log10(low), math.log10(high) - math.log10(low)
    first, last = math.ceil(lowest + _EDGE * width), math.floor(lowest + (1.0 - _EDGE) * width)
    step = max(1, math.ceil((last - first + 1) / 3))
    return [10.0**k for k in range(first, last + 1, step)]


def _power(x: float) -> str:
    if 1e-3 < x < 1e4:
        return f"{x:g}"
    return "10" + str(round(math.log10(x))).translate(_RAISED)


def _value(row: Mapping[str, Any]) -> str:
    share = number(row.get("share_from_data"))
    outside = "" if math.isnan(share) or 0.0 <= share <= 1.0 else f", share {share:.2f}"
    return f"sd {number(row['sd']):.3g}{outside}"
