"""A weighing and a single candidate in the terminal."""

from __future__ import annotations

import io
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import IO, TYPE_CHECKING, Any

from evidence.report.columns import comparison_tables, letter_by_letter, row_table
from evidence.report.content import (
    AUDIT_HEADINGS,
    POSTERIOR_HEADINGS,
    CandidatePage,
    Remark,
    as_sentence,
    candidate_page,
    weighing_page,
)
from evidence.report.wording import NOTHING

if TYPE_CHECKING:  # rich is loaded when something is shown, never at import
    from rich.console import Console, ConsoleOptions, RenderableType

__all__ = ["CandidateView", "WeighingView", "plain_text", "short_text", "show"]

_WIDEST_NAME = 24
_POSTERIOR_ROWS = 60


@dataclass(frozen=True)
class WeighingView:
    """What rich draws for the record of a weighing, fitted to the width it is given."""

    record: Mapping[str, Any]

    def __rich_console__(
        self, console: Console, options: ConsoleOptions
    ) -> Iterable[RenderableType]:
        """Yield the verdict, the comparison table, the warnings and the circumstances."""
        page = weighing_page(self.record)
        yield letter_by_letter(page.verdict, "bold")
        for caution in page.cautions:
            yield letter_by_letter(caution)
        yield ""
        yield from comparison_tables(page.rows, console, options)
        for name, remarks in page.remarks:
            yield ""
            yield letter_by_letter(name, "bold")
            yield from _remarks(remarks)
        yield ""
        yield letter_by_letter(f"{as_sentence(page.title)} {page.facts}".strip(), "dim")


@dataclass(frozen=True)
class CandidateView:
    """What rich draws for one candidate: log evidence, warnings, posterior, audit."""

    candidate: Mapping[str, Any]

    def __rich_console__(
        self, console: Console, options: ConsoleOptions
    ) -> Iterable[RenderableType]:
        """Yield the log evidence and its parts, the warnings, the posterior and the audit."""
        page = candidate_page(self.candidate)
        yield letter_by_letter(f"{page.name}: {page.headline}", "bold")
        yield letter_by_letter(f"= {page.parts}")
        yield from _remarks(page.remarks)
        yield from _posterior_and_audit(page, console, options)
        if page.curvature:
            yield ""
        for line in page.curvature:
            yield letter_by_letter(line, "dim")


def show(view: Any, file: IO[str] | None = None, width: int | None = None) -> None:
    """Print a view to the terminal, or to a file as plain text.

    Parameters
    ----------
    view : WeighingView or CandidateView
        What to print.
    file : file, optional
        Where to; standard output when left out.
    width : int, optional
        Columns; those of the terminal when left out.
    """
    from rich.console import Console

    console = Console(file=file, width=width, highlight=False, markup=False, emoji=False)
    if console.is_terminal or console.is_jupyter:
        console.print(view)
        return
    text = plain_text(view, console.width)
    if not console.encoding.lower().startswith("utf"):
        text = text.replace("\u2500", "-")
    console.file.write(f"{text}\n")


def plain_text(view: Any, width: int = 80) -> str:
    """Return what :func:`show` prints, without colours and without blanks at the line ends."""
    from rich.console import Console

    text = io.StringIO()
    console = Console(
        file=text,
        width=width,
        color_system=None,
        force_terminal=False,
        force_jupyter=False,
        highlight=False,
        markup=False,
        emoji=False,
        legacy_windows=False,
    )
    console.print(view)
    return "\n".join(line.rstrip() for line in text.getvalue().splitlines()).rstrip("\n")


def short_text(record: Mapping[str, Any], lines: int = 12) -> str:
    """Return a weighing in few lines of plain text, for a ``repr``.

    Parameters
    ----------
    record : dict
        What ``Weighing.to_dict()`` gives.
    lines : int
        The most lines to return; what is left out is counted in the last of them.
    """
    page = weighing_page(record)
    verdict = _clipped(
        plain_text(letter_by_letter(page.verdict)).splitlines(), max(3, lines - len(page.rows))
    )
    rest = [_in_one_line(row) for row in page.rows]
    space = lines - len(verdict)
    if len(rest) > space:
        left_out = len(rest) - space + 1
        rest = [*rest[: space - 1], f"and {left_out} more: see .table()"]
    return "\n".join([*verdict, *rest])


def _clipped(lines: Sequence[str], most: int) -> list[str]:
    return list(lines) if len(lines) <= most else [*lines[: most - 1], "..."]


def _in_one_line(row: Mapping[str, str]) -> str:
    name, error = row["candidate"], row["standard_error"]
    name = name if len(name) <= _WIDEST_NAME else f"{name[: _WIDEST_NAME - 3]}..."
    margin = "" if error == NOTHING else f" +- {error}"
    return (
        f"{name}: {row['log_evidence']}{margin} nats, probability {row['probability']}, "
        f"{row['trust']}"
    )


def _remarks(remarks: Iterable[Remark]) -> Iterable[RenderableType]:
    from rich.padding import Padding

    for remark in remarks:
        yield Padding(letter_by_letter(remark.sentence), (0, 0, 0, 2), expand=False)
        if remark.remedy:
            yield Padding(letter_by_letter(remark.remedy, "italic"), (0, 0, 0, 4), expand=False)


def _posterior_and_audit(
    page: CandidatePage, console: Console, options: ConsoleOptions
) -> Iterable[RenderableType]:
    shown = page.posterior[:_POSTERIOR_ROWS]
    for headings, rows in ((POSTERIOR_HEADINGS, shown), (AUDIT_HEADINGS, page.audit)):
        if rows:
            yield ""
            yield from row_table(headings, rows, console, options)
    if len(page.posterior) > len(shown):
        yield letter_by_letter(f"and {len(page.posterior) - len(shown)} more parameters", "dim")
