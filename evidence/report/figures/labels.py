"""Labels that fit: a line above each bar, names shortened in the middle until there is room."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

from evidence.report.wording import visible

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["heading", "name_axis", "row_height", "row_labels"]

ROW = 0.31  # of one bar with its line of text above [inch]
GAP = 0.08  # between two texts of a line [inch]
MINUS = "\u2212"
_FIRST = 240  # letters beyond which a name is cut before it is measured


def row_height(rows: int, *, extra: float = 0.55) -> float:
    """Height in inches of a picture with so many rows, its axis and heading included."""
    return extra + ROW * max(rows, 1)


def row_labels(
    axes: Axes, names: Sequence[str], values: Sequence[str], *, last: Axes | None = None
) -> None:
    """Write above each row its name on the left and its value on the right, without touching.

    Rows lie at y = 0, 1, 2, ... from the top; a row's own mark is drawn at its y. Where a
    second picture stands beside the first, the values are written above that one.
    """
    last = last or axes
    for one in (axes, last):
        one.set_ylim(len(names) - 0.45, -0.85)
    for row, (name, value) in enumerate(zip(names, values, strict=True)):
        y = row - 0.52
        left = axes.annotate(visible(name)[:_FIRST], (0.0, y), **_at(axes, "left"))
        right = last.annotate(value.replace("-", MINUS), (1.0, y), **_at(last, "right"))
        for text in (left, right):
            text.set_in_layout(False)
        axes.figure.evidence_fits.append(lambda left=left, right=right: _shrink(left, right))


def _at(axes: Axes, side: str) -> dict[str, Any]:
    return {"xycoords": axes.get_yaxis_transform(), "va": "center", "ha": side}


def _shrink(left: Any, right: Any) -> None:
    room = right.get_window_extent().x0 - left.get_window_extent().x0
    fit_text(left, room - GAP * left.figure.dpi)


def fit_text(text: Any, room: float, *, upright: bool = False) -> None:
    """Shorten a drawn text in the middle until it takes no more than so many dots."""

    def size() -> float:
        box = text.get_window_extent()
        return box.height if upright else box.width

    whole = text.get_text()
    low, high = 1, len(whole)
    if size() <= room:
        return
    while low < high:
        middle = (low + high + 1) // 2
        text.set_text(_shortened(whole, middle))
        low, high = (middle, high) if size() <= room else (low, middle - 1)
    text.set_text(_shortened(whole, low))


def fit_lines(text: Any, room: float) -> None:
    """Shorten each line of a drawn text to so many dots."""
    kept = []
    for line in text.get_text().split("\n"):
        text.set_text(line)
        fit_text(text, room)
        kept.append(text.get_text())
    text.set_text("\n".join(kept))


def heading(axes: Axes, lines: Sequence[str], **options: Any) -> None:
    """Put lines above a panel and shorten them to its width, which they must not decide."""
    title = axes.set_title("\n".join("X" * bool(line) for line in lines), loc="left", **options)

    def write() -> None:
        title.set_text("\n".join(lines))
        fit_lines(title, axes.get_window_extent().width)

    axes.figure.evidence_fits.append(write)


def name_axis(axes: Axes, name: str, *, across: bool) -> None:
    """Name an axis, shortened to its length, which the name must not decide."""
    label = axes.xaxis.label if across else axes.yaxis.label
    label.set_text("X")

    def write() -> None:
        box = axes.get_window_extent()
        label.set_text(name)
        fit_text(label, box.width if across else box.height, upright=not across)

    axes.figure.evidence_fits.append(write)


def _shortened(text: str, letters: int) -> str:
    if letters >= len(text):
        return text
    tail = letters // 3
    return text[: letters - tail].rstrip() + "\u2026" + (text[-tail:].lstrip() if tail else "")
