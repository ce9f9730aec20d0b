"""The log density through each mode against its Gaussian: whether Laplace's method holds."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

from evidence.report.figures.canvas import (
    BLUE,
    VERMILLION,
    new_figure,
    note_below,
    picture,
)
from evidence.report.figures.labels import heading
from evidence.report.wording import number, visible

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["profiles"]

_FLOOR = -8.0  # nats below the peak, where a Gaussian is four sd away
_LETTERS, _LINES = 24, 4  # of the direction's words above a panel
_PANEL, _LINE = 1.2, 0.105  # height of a panel and of a line above it [inch]
_KEY = 0.6


@picture
def profiles(found: Sequence[Mapping[str, Any]]) -> Figure:
    """Draw a panel for each mode and direction.

    Parameters
    ----------
    found : list of dict
        ``pictures["profiles"]`` of a candidate.
    """
    if not found:
        figure, (axes,) = new_figure(height=0.8)
        note_below(axes, "no peak, or no densities saved")
        return figure
    columns = 2 if len(found) > 1 else 1
    rows = math.ceil(len(found) / columns)
    several = len({profile["mode"] for profile in found}) > 1
    lines = max(len(_lines(profile, several=several)) for profile in found)
    figure, panels = new_figure(rows, columns, height=rows * (_PANEL + _LINE * lines) + _KEY)
    for axes, profile in zip(panels, found, strict=False):
        _draw(axes, profile, several=several)
    for axes in panels[len(found) :]:
        axes.axis("off")
    for axes in panels[::columns]:
        axes.set_ylabel("log density less\nthat of the peak [nats]")
    figure.supxlabel("posterior sd from the mode", fontsize=7.0)
    handles, labels = panels[0].get_legend_handles_labels()
    figure.legend(handles, labels, loc="outside upper center", ncols=2)
    return figure


def _draw(axes: Axes, profile: Mapping[str, Any], *, several: bool) -> None:
    steps = [number(x) for x in profile["steps"]]
    axes.plot(steps, _shown(profile["gaussian"]), "--", color=VERMILLION, label="its Gaussian")
    axes.plot(steps, _shown(profile["log_density"]), color=BLUE, label="log density")
    top = max([0.0, *(x for x in _shown(profile["log_density"]) if x > 0.0)])
    axes.set_ylim(_FLOOR, top + 0.6)
    axes.set_xlim(steps[0], steps[-1])
    heading(axes, _lines(profile, several=several), fontsize=6.5)


def _lines(profile: Mapping[str, Any], *, several: bool) -> list[str]:
    """What stands above a panel: which mode, which direction and what that is made of."""
    first = [f"mode {profile['mode']}"] if several else []
    words = textwrap.wrap(visible(profile["direction"]), width=_LETTERS) or [""]
    if len(words) > _LINES:
        words = [*words[: _LINES - 1], f"{words[_LINES - 1]} \u2026"]
    return [*first, str(profile["kind"]), *words]


def _shown(values: Sequence[Any]) -> list[float]:
    """Zero density as a line that falls out of the picture."""
    found = [number(x) for x in values]
    return [4.0 * _FLOOR if math.isnan(x) else max(x, 4.0 * _FLOOR) for x in found]
