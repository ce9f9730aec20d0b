"""Pieces of HTML that the notebook's fragment and the page share: escaped words and tables."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from html import escape

from evidence.report.content import Remark

__all__ = ["safe", "table", "warning_items"]

_WORDS = (
    "candidate", "trust", "parameter", "unit", "check", "agrees", "prior", "column", "verdict",
    "what is asked",
)  # fmt: skip
_SENTENCES = ("note", "reason", "where it is answered")


def safe(text: str) -> str:
    """Return words escaped, and isolated so that right-to-left ones do not turn what follows."""
    return f"<bdi>{escape(text, quote=True)}</bdi>" if text else ""


def table(caption: str, headings: Sequence[str], rows: Iterable[Sequence[str]]) -> str:
    """Return a table with a caption and a scope for every heading."""
    kinds = [_kind(heading) for heading in headings]
    head = "".join(
        f'<th scope="col" class="{"heading" if kind == "number" else kind}">{safe(heading)}</th>'
        for kind, heading in zip(kinds, headings, strict=True)
    )
    body = "\n".join(f"<tr>{_row(kinds, row)}</tr>" for row in rows)
    return (
        f"<table>\n<caption>{safe(caption)}</caption>\n<thead><tr>{head}</tr></thead>\n"
        f"<tbody>\n{body}\n</tbody>\n</table>"
    )


def _kind(heading: str) -> str:
    if heading in _SENTENCES:
        return "words sentence"
    return "words" if heading in _WORDS else "number"


def _row(kinds: Sequence[str], row: Sequence[str]) -> str:
    first = f'<th scope="row" class="words">{safe(row[0])}</th>'
    rest = zip(kinds[1:], row[1:], strict=True)
    return first + "".join(f'<td class="{kind}">{safe(cell)}</td>' for kind, cell in rest)


def warning_items(remarks: Iterable[tuple[str, Sequence[Remark]]]) -> str:
    """Return list items, one for each warning; an empty text where there is none."""
    return "\n".join(
        f"<li>{safe(name)}{': ' if name else ''}{safe(remark.sentence)}"
        f"{f' <em>{safe(remark.remedy)}</em>' if remark.remedy else ''}</li>"
        for name, said in remarks
        for remark in said
    )
