"""Tables fitted to the width of a terminal: names may wrap, a number is never cut.

Where a table does not fit, the comparison is split in two with trust beside the log evidence;
where not even that fits, each row becomes a short list.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import TYPE_CHECKING

from evidence.report.content import COLUMNS, HEADINGS
from evidence.report.wording import visible

if TYPE_CHECKING:  # rich is loaded when something is shown, never at import
    from rich.console import Console, ConsoleOptions, RenderableType
    from rich.table import Table
    from rich.text import Text

__all__ = ["comparison_tables", "letter_by_letter", "row_table"]

_WHOLE = (COLUMNS,)
_HALVES = (
    ("candidate", "log_evidence", "standard_error", "log_bayes_factor", "probability", "trust"),
    ("candidate", "fit", "occam_factor", "well_determined", "bic"),
)
_WORDS = ("candidate", "trust", "parameter", "unit", "note", "check", "agrees")
_WRAPPED = ("candidate", "parameter", "unit", "note", "check")
_UNWRAPPED_WIDTH = {"candidate": 10, "note": 16}
# decimals differ from row to row, as the standard errors do: the points stand above each other
_BY_THE_POINT = (
    "log evidence",
    "standard error",
    "log Bayes factor",
    "probability",
    "fit",
    "Occam factor",
    "well determined",
    "BIC",
)
_TRUST_STYLES = {
    "sound": "green",
    "corrected": "green",
    "rough": "yellow",
    "doubtful": "bold red",
    "failed": "bold red",
    "unchecked": "yellow",
}


def letter_by_letter(content: str, style: str = "") -> Text:
    """Return text that rich draws as it is: "[bold]" in a name stays so."""
    from rich.text import Text

    return Text(visible(content), style=style, overflow="fold")


def comparison_tables(
    rows: Sequence[Mapping[str, str]], console: Console, options: ConsoleOptions
) -> list[RenderableType]:
    """Return the comparison as one table, as two, or as lists, as the width allows.

    Parameters
    ----------
    rows : list of dict
        Cells by the name of their column.
    console, options
        As rich hands them over.
    """
    for layout in (_WHOLE, _HALVES):
        tables = [_comparison_table(rows, columns) for columns in layout]
        if all(_fits(table, console, options) for table in tables):
            return _apart(tables)
    headings = list(HEADINGS.values())
    return list(_listed(headings, [[row[c] for c in COLUMNS] for row in rows]))


def row_table(
    headings: Sequence[str],
    rows: Sequence[Sequence[str]],
    console: Console,
    options: ConsoleOptions,
) -> list[RenderableType]:
    """Return a table of the columns that say anything, or lists where it does not fit.

    Notes that leave no room for the numbers follow below the table.
    """
    used = [j for j in range(len(headings)) if any(row[j] for row in rows)]
    kept = [headings[j] for j in used]
    cells = [[row[j] for j in used] for row in rows]
    table = _table(kept, cells)
    if _fits(table, console, options):
        return [table]
    if kept[-1] == "note":
        shorter = _table(kept[:-1], [row[:-1] for row in cells])
        if _fits(shorter, console, options):
            notes = [letter_by_letter(f"{row[0]}: {row[-1]}") for row in cells if row[-1]]
            return [shorter, "", *notes]
    return list(_listed(kept, cells))


def _comparison_table(rows: Sequence[Mapping[str, str]], columns: Sequence[str]) -> Table:
    return _table([HEADINGS[c] for c in columns], [[row[c] for c in columns] for row in rows])


def _apart(tables: Iterable[Table]) -> list[RenderableType]:
    parts: list[RenderableType] = []
    for table in tables:
        parts += [table] if not parts else ["", table]
    return parts


def _table(headings: Sequence[str], rows: Sequence[Sequence[str]]) -> Table:
    from rich import box
    from rich.table import Table

    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, padding=(0, 1, 0, 0), show_edge=False)
    columns = [_aligned(h, [row[j] for row in rows]) for j, h in enumerate(headings)]
    for heading, cells in zip(headings, columns, strict=True):
        _add_column(table, heading, cells)
    for row in zip(*columns, strict=True):
        cells = zip(headings, row, strict=True)
        table.add_row(*(_cell(heading, content) for heading, content in cells))
    return table


def _aligned(heading: str, cells: Sequence[str]) -> list[str]:
    """Return the cells of a column of nats with their decimal points at one place."""
    if heading not in _BY_THE_POINT:
        return list(cells)
    before = [len(cell.partition(".")[0]) for cell in cells]
    padded = [" " * (max(before) - n) + cell for n, cell in zip(before, cells, strict=True)]
    width = max(map(len, [*padded, *heading.rsplit(" ", 1)]))
    after = max(map(len, padded))
    return [f"{cell:<{after}}".rjust(width) for cell in padded]


def _cell(heading: str, content: str) -> Text:
    style = _TRUST_STYLES.get(content, "") if heading == "trust" else ""
    return letter_by_letter(content, style)


def _add_column(table: Table, heading: str, cells: Sequence[str]) -> None:
    from rich.cells import cell_len
    from rich.text import Text

    justify = "left" if heading in _WORDS else "right"
    if heading in _WRAPPED:
        most = _UNWRAPPED_WIDTH.get(heading, 12)
        width = min(max(map(cell_len, [heading, *cells])), most)
        table.add_column(Text(heading), justify=justify, overflow="fold", min_width=width)
        return
    lines = [heading] if heading.endswith("%") else heading.rsplit(" ", 1)
    if heading in _BY_THE_POINT:
        # rich drops the blanks behind a cell set to the right, which the alignment needs
        justify = "left"
        lines = [line.rjust(max(map(len, [*lines, *cells]))) for line in lines]
    width = max(map(cell_len, [*lines, *cells]))
    table.add_column(Text("\n".join(lines)), justify=justify, no_wrap=True, min_width=width)


def _fits(table: Table, console: Console, options: ConsoleOptions) -> bool:
    from rich.measure import Measurement

    unbounded = options.update(width=100_000)
    return Measurement.get(console, unbounded, table).minimum <= options.max_width


def _listed(headings: Sequence[str], rows: Iterable[Sequence[str]]) -> Iterable[RenderableType]:
    """Yield one short list per row, for a terminal too narrow for any table."""
    for row in rows:
        yield letter_by_letter(row[0], "bold")
        for heading, content in list(zip(headings, row, strict=True))[1:]:
            if content:
                yield letter_by_letter(f"  {heading}: {content}")
