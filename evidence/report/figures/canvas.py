"""Paper, ink and letters: matplotlib figures without pyplot and beside the user's settings.

Everything is drawn inside :func:`own_style`, which sets matplotlib's own defaults and a few of
ours for the time of the drawing and gives the user's back. Text is never read as a formula.
"""

from __future__ import annotations

import contextlib
import functools
import io
import warnings
from collections.abc import Callable, Iterator, Sequence
from typing import TYPE_CHECKING, Any

from evidence.complaints import load_optional

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = [
    "BLUE",
    "FAINT",
    "GREEN",
    "INK",
    "ORANGE",
    "VERMILLION",
    "new_figure",
    "note_below",
    "own_style",
    "picture",
    "plain_axes",
    "to_png",
    "to_svg",
]

WIDTH = 85 / 25.4  # a journal's column [inch]
TALLEST = 235 / 25.4  # a page's text [inch]
# Okabe & Ito (2008), without the two that are too pale on white paper
BLUE, ORANGE, GREEN, VERMILLION = "#0072b2", "#e69f00", "#009e73", "#d55e00"
INK, FAINT = "#1a1a1a", "#bfbfbf"
DPI = 300
_METADATA = ("Date", "Creator", "Format", "Type")  # none of it: a date would differ each time

_STYLE = {
    "font.family": ["sans-serif"],
    "font.sans-serif": ["DejaVu Sans"],
    "font.size": 7.0,
    "axes.titlesize": 7.0,
    "axes.labelsize": 7.0,
    "xtick.labelsize": 6.5,
    "ytick.labelsize": 6.5,
    "legend.fontsize": 6.5,
    "legend.frameon": False,
    "legend.handlelength": 1.4,
    "lines.linewidth": 1.0,
    "lines.markersize": 3.5,
    "axes.linewidth": 0.6,
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "xtick.major.size": 2.5,
    "ytick.major.size": 2.5,
    "axes.facecolor": "none",
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.edgecolor": INK,
    "axes.labelcolor": INK,
    "axes.formatter.limits": (-4, 5),
    "xtick.color": INK,
    "ytick.color": INK,
    "text.color": INK,
    "text.parse_math": False,  # a name with two dollar signs is no formula
    "text.usetex": False,
    "svg.fonttype": "none",
    "svg.hashsalt": "evidence",
    "savefig.dpi": DPI,
}
# what belongs to the user's session and not to the look of a figure
_SESSION = ("backend", "interactive", "toolbar", "timezone", "webagg", "tk.", "figure.max_open")


@contextlib.contextmanager
def own_style() -> Iterator[None]:
    """Draw with our own settings; the user's are there again afterwards.

    Raises
    ------
    ImportError
        matplotlib is not installed; the text says what to type.
    """
    matplotlib = load_optional("matplotlib", "report")
    with warnings.catch_warnings():
        # letters that the font lacks: SVG keeps them as text, PNG shows a box
        warnings.filterwarnings("ignore", message=r".*[Gg]lyph.*missing from.*")
        warnings.filterwarnings("ignore", message=".*backend.*", category=DeprecationWarning)
        defaults = {
            key: value
            for key, value in dict.items(matplotlib.rcParamsDefault)
            if not key.startswith(_SESSION) and not key.startswith("_")
        }
        with matplotlib.rc_context({**defaults, **_STYLE}):
            yield


def picture(draw: Callable[..., Figure]) -> Callable[..., Figure]:
    """Make of a drawing function one that draws in our style and lays the figure out."""

    @functools.wraps(draw)
    def drawn(*arguments: Any, **options: Any) -> Figure:
        with own_style():
            figure = draw(*arguments, **options)
            # once here, so that its ticks are made in this style as well
            figure.get_layout_engine().execute(figure)
            for fit in getattr(figure, "evidence_fits", ()):
                fit()
            figure.set_layout_engine("none")
        return figure

    return drawn


def new_figure(
    rows: int = 1,
    columns: int = 1,
    *,
    height: float,
    widths: Sequence[float] | None = None,
) -> tuple[Figure, list[Axes]]:
    """Return a figure of column width, of a height in inches, and its axes row by row."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(WIDTH, min(height, TALLEST)), layout="constrained", facecolor="none")
    figure.get_layout_engine().set(w_pad=0.03, h_pad=0.03, hspace=0.04, wspace=0.03)
    FigureCanvasAgg(figure)
    axes = figure.subplots(
        rows, columns, squeeze=False, gridspec_kw={"width_ratios": widths} if widths else None
    )
    figure.evidence_fits = []
    return figure, [axis for row in axes for axis in row]


def plain_axes(axes: Axes) -> Axes:
    """Leave of the frame only the line below."""
    axes.spines["left"].set_visible(False)
    axes.set_yticks([])
    return axes


def note_below(axes: Axes, text: str) -> None:
    """Write where a picture has nothing to show."""
    axes.axis("off")
    axes.text(0.5, 0.5, text, ha="center", va="center", wrap=True, transform=axes.transAxes)


def to_png(figure: Figure) -> bytes:
    """Return a figure as PNG, 300 dots per inch, on white paper."""
    out = io.BytesIO()
    with own_style():
        figure.savefig(out, format="png", facecolor="white", metadata={"Software": None})
    return out.getvalue()


def to_svg(figure: Figure) -> str:
    """Return a figure as SVG with its words as text; the same figure gives the same text."""
    from matplotlib.backends.backend_svg import FigureCanvasSVG

    out, before = io.BytesIO(), figure.canvas
    with own_style():
        # savefig would draw twice
        FigureCanvasSVG(figure).print_svg(out, metadata=dict.fromkeys(_METADATA))
    figure.set_canvas(before)
    return out.getvalue().decode()
