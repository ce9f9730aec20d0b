"""Pictures of predictions: the prior's bands with the data, the blend's with each candidate."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from evidence.report.figures.canvas import (
    BLUE,
    GREEN,
    INK,
    ORANGE,
    VERMILLION,
    new_figure,
    picture,
)
from evidence.report.figures.labels import name_axis
from evidence.report.wording import short_name, visible

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from evidence.prediction.blending import Blend
    from evidence.prediction.priors import PriorPredictive

__all__ = ["axis_of", "draw_blend", "draw_prior_predictive"]

PANEL, MOST_PANELS = 2.2, 4
MOST_ROWS = 300
DRAWN = 3  # single data sets shown
WIDE = 20.0  # times the observed size, from which the vertical axis is bent
_COLORS = (VERMILLION, GREEN, ORANGE, INK)
_MARKS = ("x", "+", "1")
_DASHES = ("-", "--", "-.", ":")


def axis_of(
    data: Mapping[str, Any], responses: Iterable[str], width: int
) -> tuple[str | None, np.ndarray]:
    """Name and values (width,) of the column along which responses are drawn.

    The first column of numbers of that length that varies and is no response, real numbers before
    whole ones; None and the row's number, from 1 on, where there is none.
    """
    fitting = [
        (np.asarray(values).dtype.kind != "f", name, np.asarray(values, dtype=np.float64))
        for name, values in data.items()
        if name not in responses and np.shape(values) == (width,)
        and np.asarray(values).dtype.kind in "iuf" and np.ptp(values) > 0
    ]  # fmt: skip
    if not fitting:
        return None, np.arange(1.0, width + 1.0)
    _, name, values = min(fitting, key=lambda entry: entry[0])
    return name, values


@picture
def draw_prior_predictive(found: PriorPredictive) -> Figure:
    """Draw bands of half and of 95 % of the drawn data, some of them, and the observed ones."""
    shown = list(found.simulated)[:MOST_PANELS]
    figure, panels = new_figure(len(shown), height=len(shown) * PANEL + 0.4)
    for axes, column in zip(panels, shown, strict=True):
        drawn = found.simulated[column].reshape(len(found.simulated[column]), -1)
        observed = found.observed.get(column)
        if drawn.shape[1] == 1:
            _draw_histogram(axes, drawn[:, 0], observed)
            name_axis(axes, _named(column, found.units), across=True)
            axes.set_ylabel("data sets")
            continue
        _draw_prior(axes, found, column, drawn, observed)
    _legend(figure, panels, columns=2)
    return figure


def _draw_prior(
    axes: Axes, found: PriorPredictive, column: str, drawn: np.ndarray, observed: Any
) -> None:
    along, at = axis_of(found.data, found.simulated, drawn.shape[1])
    order = _some(at)
    at = at[order]
    low, lower, upper, high = np.quantile(drawn[:, order], [0.025, 0.25, 0.75, 0.975], axis=0)
    _band(axes, at, low, high, alpha=0.16, label="95 % of drawn data")
    _band(axes, at, lower, upper, alpha=0.34, label="half of drawn data")
    for k in range(min(DRAWN, len(drawn))):
        label = "single data sets drawn" if k == 0 else None
        axes.plot(at, drawn[k, order], _MARKS[k], color=BLUE, markersize=2.0, alpha=0.8,
                  markeredgewidth=0.4, label=label)  # fmt: skip
    if observed is not None:
        axes.plot(at, np.ravel(observed)[order], "o", color=INK, markersize=2.4,
                  markerfacecolor="none", markeredgewidth=0.6, label="data", zorder=4)  # fmt: skip
    shown = drawn[:DRAWN, order]
    _bend(axes, np.concatenate([low, high]), shown, observed)
    name_axis(axes, _named(along or "row of the data", found.units), across=True)
    name_axis(axes, _named(column, found.units), across=False)
    axes.margins(x=0.03)


def _bend(axes: Axes, band: np.ndarray, shown: np.ndarray, observed: Any) -> None:
    """Fit the vertical axis to the band; bend it where the data would be a point on it."""
    low, high = float(band.min()), float(band.max())
    scale = float(np.median(np.abs(band)) if observed is None else np.max(np.abs(observed)))
    if observed is not None:
        low, high = min(low, float(np.min(observed))), max(high, float(np.max(observed)))
    margin = 0.05 * (high - low) or 1.0
    if scale > 0 and max(abs(low), abs(high)) > WIDE * scale:
        axes.set_yscale("symlog", linthresh=scale)
        axes.yaxis.set_major_formatter(lambda y, _: f"{y:.3g}".replace("-", "\u2212"))
        low, high = min(low * 1.5, 0.0), max(high * 1.5, 0.0)
        margin = 0.0
    elif float(shown.min()) < low or float(shown.max()) > high:
        margin *= 2.0
    axes.set_ylim(low - margin, high + margin)


def _draw_histogram(axes: Axes, drawn: np.ndarray, observed: Any) -> None:
    low, high = np.quantile(drawn, [0.005, 0.995])
    bins = 40
    if drawn.dtype.kind in "iu" and high - low < 60:
        bins = np.arange(np.floor(low) - 0.5, np.ceil(high) + 1.5)
    axes.hist(drawn, bins=bins, range=(low, high), color=BLUE, alpha=0.4, label="drawn data")
    if observed is not None:
        axes.axvline(float(np.ravel(observed)[0]), color=INK, label="data")


@picture
def draw_blend(found: Blend) -> Figure:
    """Draw the blend's mean with its bands, and the mean of each candidate as a thin line."""
    shown = list(found.columns)[:MOST_PANELS]
    leading = sorted(found.probabilities, key=lambda name: -found.probabilities[name])
    figure, panels = new_figure(len(shown), height=len(shown) * PANEL + 0.6)
    for axes, column in zip(panels, shown, strict=True):
        values = found.columns[column]
        along, at = axis_of(found.data, found.columns, len(values["mean"]))
        order = _some(at)
        percent = f"{100 * found.level:.3g} %"
        if np.isfinite(values["new_low"]).all():
            _band(axes, at[order], values["new_low"][order], values["new_high"][order],
                  alpha=0.16, label=f"{percent} of new data")  # fmt: skip
        if np.isfinite(values["low"]).all():
            _band(axes, at[order], values["low"][order], values["high"][order], alpha=0.4,
                  label=f"{percent} of the expected value")  # fmt: skip
        axes.plot(at[order], values["mean"][order], "-", color=BLUE, label="blend", zorder=5)
        for name, color, dash in zip(leading, _COLORS, _DASHES, strict=False):
            label = f"{short_name(name, 30)}, {found.probabilities[name]:.2g}"
            axes.plot(at[order], values["means"][name][order], dash, color=color, linewidth=0.8,
                      label=label, zorder=4)  # fmt: skip
        if column in found.data:
            axes.plot(at[order], np.ravel(found.data[column])[order], "o", color=INK,
                      markerfacecolor="none", markeredgewidth=0.5, markersize=2.4, label="data",
                      zorder=3)  # fmt: skip
        name_axis(axes, _named(along or "row of the new data", found.units), across=True)
        name_axis(axes, _named(column, found.units), across=False)
        axes.margins(x=0.03)
    _legend(figure, panels, columns=2)
    return figure


def _some(at: np.ndarray) -> np.ndarray:
    """Order along the axis, at most so many of the rows."""
    order = np.argsort(at, kind="stable")
    if len(order) > MOST_ROWS:
        order = order[np.linspace(0, len(order) - 1, MOST_ROWS).astype(int)]
    return order


def _band(
    axes: Axes, at: np.ndarray, low: np.ndarray, high: np.ndarray, *, alpha: float, label: str
) -> None:
    if len(set(at)) < len(at):  # rows at the same place: their mean, or the band would zigzag
        places, inverse = np.unique(at, return_inverse=True)
        count = np.bincount(inverse)
        low, high = (np.bincount(inverse, weights=x) / count for x in (low, high))
        at = places
    axes.fill_between(at, low, high, color=BLUE, alpha=alpha, linewidth=0.0, label=label)


def _legend(figure: Figure, panels: list[Axes], *, columns: int) -> None:
    handles: dict[str, Any] = {}
    for axes in panels:
        handles |= dict(zip(*reversed(axes.get_legend_handles_labels()), strict=True))
    figure.legend(handles.values(), handles.keys(), loc="outside upper center", ncols=columns)


def _named(column: str, units: Mapping[str, str]) -> str:
    unit = units.get(column, "")
    return visible(column)[:80] + (f" [{visible(unit)[:20]}]" if unit else "")
