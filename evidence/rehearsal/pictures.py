"""Pictures of a rehearsal: confusion, calibration, growth, log Bayes factors."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from evidence.complaints import DeclarationError, near_name, sentence
from evidence.rehearsal.counting import LEADER, SETTLING
from evidence.report.figures.canvas import (
    BLUE,
    FAINT,
    GREEN,
    INK,
    ORANGE,
    VERMILLION,
    new_figure,
    picture,
    plain_axes,
)
from evidence.report.figures.labels import row_height, row_labels
from evidence.report.wording import short_name

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from evidence.rehearsal.result import Rehearsal

__all__ = ["PICTURES", "draw_rehearsal"]

PICTURES = ("overview", "confusion", "calibration", "growth", "log_bayes_factors")
MOST_ROWS = 24
FEWEST = 5  # data sets from which a bin is drawn
MOST_NAMES = 12  # candidates of which cells are numbered
_COLORS = (BLUE, VERMILLION, GREEN, ORANGE, INK)
_TICKS = (-1000, -100, -30, -10, -3, -1, 0, 1, 3, 10, 30, 100, 1000, 10000)
_MARKS = ("o", "s", "^", "D", "v", "P", "X")


def draw_rehearsal(found: Rehearsal, which: str) -> Figure:
    """Draw one picture, or three above one another.

    Raises
    ------
    DeclarationError
        An unknown word.
    """
    if which not in PICTURES:
        raise DeclarationError(
            sentence(f"picture must be one of {', '.join(PICTURES)}", repr(which))
            + near_name(str(which), PICTURES)
        )
    return {"overview": _overview, "log_bayes_factors": _bayes_factors}.get(which, _single)(
        found, which
    )


@picture
def _overview(found: Rehearsal, _: str) -> Figure:
    panels = (*(("growth",) if len(found.runs) > 1 else ()), "calibration", "confusion")
    figure, axes = new_figure(len(panels), height=2.45 * len(panels) + 0.3)
    for one, name in zip(axes, panels, strict=True):
        _DRAW[name](one, found)
    return figure


@picture
def _single(found: Rehearsal, which: str) -> Figure:
    figure, (axes,) = new_figure(height=2.7)
    _DRAW[which](axes, found)
    return figure


def _draw_confusion(axes: Axes, found: Rehearsal) -> None:
    run = found.runs[-1]
    counts = run.confusion()[:, :-1]
    shares = counts / np.maximum(run.usable.sum(axis=1, keepdims=True), 1)
    axes.imshow(shares, cmap=_paper_to_blue(), vmin=0.0, vmax=1.0, aspect="auto")
    if len(shares) <= MOST_NAMES:
        for (row, column), share in np.ndenumerate(shares):
            text = f"{share:.2f}" if 0 < share < 0.995 else f"{share:.0f}"
            axes.text(column, row, text, ha="center", va="center",
                      color="white" if share > 0.55 else INK)  # fmt: skip
    ticks = range(len(shares))
    names = [short_name(name, 28) for name in found.candidates]
    turned = sum(map(len, names)) > 44
    axes.set_xticks(ticks, names, rotation=30 if turned else 0, ha="right" if turned else "center",
                    rotation_mode="anchor" if turned else "default")  # fmt: skip
    axes.set_yticks(ticks, names)
    axes.tick_params(length=0)
    for side in ("left", "bottom"):
        axes.spines[side].set_visible(False)
    axes.set_xlabel("candidate that led")
    axes.set_ylabel("candidate that generated")
    axes.set_title(f"share of data sets, {run.size} observations", loc="left")


def _paper_to_blue() -> Any:
    from matplotlib.colors import LinearSegmentedColormap

    return LinearSegmentedColormap.from_list("paper to blue", ["#ffffff", BLUE])


def _draw_calibration(axes: Axes, found: Rehearsal) -> None:
    axes.plot([0.0, 1.0], [0.0, 1.0], color=FAINT, linewidth=0.8, zorder=1)
    total = sum(b.count for b in found.bins[LEADER])
    bins = [b for b in found.bins[LEADER] if b.count >= FEWEST] or found.bins[LEADER]
    label = "95 % band if they hold"
    for b in bins:
        low, high = b.band[0] / b.count, b.band[1] / b.count
        axes.plot([b.mean, b.mean], [low, high], color=BLUE, alpha=0.35, linewidth=4.0,
                  solid_capstyle="butt", label=label, zorder=2)  # fmt: skip
        label = None
    for fine, mark, color, text in (
        (True, "o", BLUE, "share right"),
        (False, "D", VERMILLION, "outside its band"),
    ):
        here = [b for b in bins if b.inside is fine]
        if here:
            axes.plot([b.mean for b in here], [b.right / b.count for b in here], mark, color=color,
                      label=text, zorder=3)  # fmt: skip
    least = min([0.5, *(b.mean for b in bins), *(b.right / b.count for b in bins)])
    axes.set_xlim(least - 0.04, 1.03)
    axes.set_ylim(least - 0.08, 1.05)
    axes.set_xlabel("posterior probability of the leader, mean of the bin")
    axes.set_ylabel("share of data sets\nthat it generated")
    several = " of all sizes" if len(found.runs) > 1 else ""
    axes.set_title(f"{total} data sets{several}", loc="left")
    axes.legend(loc="lower right")


def _draw_growth(axes: Axes, found: Rehearsal) -> None:
    rows = found.rows["growth"]
    for share in SETTLING:
        axes.axhline(share, color=FAINT, linewidth=0.8, zorder=1)
    shown = found.candidates[: len(_MARKS)]
    for k, name in enumerate(shown):
        own = [row for row in rows if row["generator"] == name]
        color, sizes = _COLORS[k % len(_COLORS)], [row["size"] for row in own]
        at = np.array([row["settled_right"] for row in own])
        # beside each other, where several stand at one size
        shift = 1.0 + 0.02 * (k - 0.5 * (len(shown) - 1))
        off = [at - [row["low"] for row in own], [row["high"] for row in own] - at]
        label = f"made by {short_name(name, 26)}"
        axes.errorbar(np.array(sizes) * shift, at, yerr=np.maximum(off, 0.0), color=color,
                      marker=_MARKS[k], elinewidth=0.7, label=label)  # fmt: skip
    axes.set_ylim(-0.03, 1.03)
    axes.set_xscale("log")
    axes.set_xticks(found.sizes, [str(size) for size in found.sizes])
    axes.minorticks_off()
    axes.set_xlabel("observations")
    axes.set_ylabel("share settled for\nthe generator")
    axes.legend(loc="lower left", bbox_to_anchor=(0.0, 1.0), ncols=2, borderaxespad=0.2)


@picture
def _bayes_factors(found: Rehearsal, _: str) -> Figure:
    rows = [
        (f"{name}, {run.size} observations", run.factors(k))
        for k, name in enumerate(found.candidates)
        for run in found.runs
    ][:MOST_ROWS]
    figure, (axes,) = new_figure(height=row_height(len(rows), extra=0.8))
    plain_axes(axes)
    axes.axvline(0.0, color=FAINT, linewidth=1.2, zorder=1)
    tips = []
    for y, (_, values) in enumerate(rows):
        known = values[np.isfinite(values)]
        if not len(known):
            tips.append("no number")
            continue
        low, lower, middle, upper, high = np.quantile(known, [0.05, 0.25, 0.5, 0.75, 0.95])
        axes.plot([low, high], [y, y], color=BLUE, linewidth=0.9, zorder=2)
        axes.plot([lower, upper], [y, y], color=BLUE, linewidth=3.2, solid_capstyle="butt",
                  zorder=2)  # fmt: skip
        axes.plot(middle, y, "o", color="white", markeredgecolor=BLUE, zorder=3)
        tips.append(f"{middle:+.3g}")
    axes.set_xscale("symlog", linthresh=3.0)
    low, high = axes.get_xlim()
    ticks = [t for t in _TICKS if low <= t <= high]
    axes.set_xticks(ticks, [f"{t:g}".replace("-", "\u2212") for t in ticks])
    axes.minorticks_off()
    axes.set_xlabel("log Bayes factor against the strongest rival [nats]")
    row_labels(axes, [name for name, _ in rows], tips)
    return figure


_DRAW = {"confusion": _draw_confusion, "calibration": _draw_calibration, "growth": _draw_growth}
