"""A weighing and a single candidate as a fragment of HTML, for a notebook.

The fragment runs nothing, loads nothing and sets no colours, so that it reads on a light page and
on a dark one. Every word of the user's is escaped.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from html import escape
from typing import Any

from evidence.report.content import (
    AUDIT_HEADINGS,
    COLUMNS,
    HEADINGS,
    POSTERIOR_HEADINGS,
    Remark,
    as_sentence,
    candidate_page,
    weighing_page,
)

__all__ = ["candidate_fragment", "notebook_fragment"]

_STYLE = """<style>
.evidence-result { max-width: 100%; overflow-x: auto; overflow-wrap: anywhere; color: inherit; }
.evidence-result table { border-collapse: collapse; background: none; color: inherit; }
.evidence-result caption { text-align: left; font-weight: bold; }
.evidence-result th, .evidence-result td { padding: 0.2em 0.6em; vertical-align: top;
  text-align: right; font-variant-numeric: tabular-nums; background: none; color: inherit;
  overflow-wrap: normal; }
.evidence-result thead th { border-bottom: 1px solid currentColor; vertical-align: bottom; }
.evidence-result .words { text-align: left; max-width: 24em; overflow-wrap: anywhere; }
.evidence-result .number { white-space: nowrap; }
</style>"""
_POSTERIOR_ROWS = 60
_WORDS = ("candidate", "trust", "parameter", "unit", "note", "check", "agrees")


def notebook_fragment(record: Mapping[str, Any]) -> str:
    """Return the record of a weighing as an HTML fragment for ``_repr_html_``."""
    page = weighing_page(record)
    rows = [[row[column] for column in COLUMNS] for row in page.rows]
    headings = [HEADINGS[column] for column in COLUMNS]
    return _fragment(
        [
            f"<p><strong>{_safe(page.verdict)}</strong></p>",
            *(f"<p>{_safe(caution)}</p>" for caution in page.cautions),
            _table("Comparison of the candidates", headings, rows),
            *_warnings(page.remarks),
            _explained(page.explanations),
            f"<p><small>{_safe(as_sentence(page.title))} {_safe(page.facts)}</small></p>",
        ]
    )


def candidate_fragment(candidate: Mapping[str, Any]) -> str:
    """Return one candidate as an HTML fragment: log evidence, warnings, posterior, audit."""
    page = candidate_page(candidate)
    shown = page.posterior[:_POSTERIOR_ROWS]
    more = len(page.posterior) - len(shown)
    return _fragment(
        [
            f"<p><strong>{_safe(page.name)}: {_safe(page.headline)}</strong></p>",
            f"<p>= {_safe(page.parts)}</p>",
            *_warnings([("", page.remarks)] if page.remarks else []),
            _table("Posterior", POSTERIOR_HEADINGS, shown) if shown else "",
            f"<p>and {more} more parameters</p>" if more else "",
            _table("Audit", AUDIT_HEADINGS, page.audit) if page.audit else "",
            *(f"<p><small>{_safe(line)}</small></p>" for line in page.curvature),
        ]
    )


def _fragment(blocks: Iterable[str]) -> str:
    body = "\n".join(block for block in blocks if block)
    return f'<div class="evidence-result">\n{_STYLE}\n{body}\n</div>'


def _safe(text: str) -> str:
    # isolated, so that a name written from right to left does not turn what follows it
    return f"<bdi>{escape(text, quote=True)}</bdi>" if text else ""


def _table(caption: str, headings: Sequence[str], rows: Iterable[Sequence[str]]) -> str:
    kinds = ["words" if heading in _WORDS else "number" for heading in headings]
    head = "".join(
        f'<th scope="col" class="{kind if kind == "words" else "heading"}">{_safe(heading)}</th>'
        for kind, heading in zip(kinds, headings, strict=True)
    )
    body = "\n".join(f"<tr>{_row(kinds, row)}</tr>" for row in rows)
    return (
        f"<table>\n<caption>{escape(caption)}</caption>\n<thead><tr>{head}</tr></thead>\n"
        f"<tbody>\n{body}\n</tbody>\n</table>"
    )


def _row(kinds: Sequence[str], row: Sequence[str]) -> str:
    first = f'<th scope="row" class="words">{_safe(row[0])}</th>'
    rest = zip(kinds[1:], row[1:], strict=True)
    return first + "".join(f'<td class="{kind}">{_safe(cell)}</td>' for kind, cell in rest)


def _warnings(remarks: Iterable[tuple[str, Sequence[Remark]]]) -> list[str]:
    items = [
        f"<li>{_safe(name)}{': ' if name else ''}{_safe(remark.sentence)}"
        f"{f' <em>{_safe(remark.remedy)}</em>' if remark.remedy else ''}</li>"
        for name, said in remarks
        for remark in said
    ]
    listed = "\n".join(items)
    return [f"<p><strong>Warnings</strong></p>\n<ul>\n{listed}\n</ul>"] if items else []


def _explained(explanations: Iterable[tuple[str, str]]) -> str:
    items = "\n".join(
        f"<li>{escape(heading)}: {_safe(text)}</li>" for heading, text in explanations
    )
    if not items:
        return ""
    return f"<details><summary>What the columns mean</summary>\n<ul>\n{items}\n</ul></details>"
