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
from evidence.report.markup import safe, table, warning_items
from evidence.report.wording import short_name

__all__ = ["candidate_fragment", "model_fragment", "notebook_fragment"]

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


def notebook_fragment(record: Mapping[str, Any]) -> str:
    """Return the record of a weighing as an HTML fragment for ``_repr_html_``."""
    page = weighing_page(record)
    rows = [[row[column] for column in COLUMNS] for row in page.rows]
    headings = [HEADINGS[column] for column in COLUMNS]
    return _fragment(
        [
            f"<p><strong>{safe(page.verdict)}</strong></p>",
            *(f"<p>{safe(caution)}</p>" for caution in page.cautions),
            table("Comparison of the candidates", headings, rows),
            *_warnings(page.remarks),
            _explained(page.explanations),
            f"<p><small>{safe(as_sentence(page.title))} {safe(page.facts)}</small></p>",
        ]
    )


def candidate_fragment(candidate: Mapping[str, Any]) -> str:
    """Return one candidate as an HTML fragment: log evidence, warnings, posterior, audit."""
    page = candidate_page(candidate)
    shown = page.posterior[:_POSTERIOR_ROWS]
    more = len(page.posterior) - len(shown)
    return _fragment(
        [
            f"<p><strong>{safe(page.name)}: {safe(page.headline)}</strong></p>",
            f"<p>= {safe(page.parts)}</p>",
            *_warnings([("", page.remarks)] if page.remarks else []),
            table("Posterior", POSTERIOR_HEADINGS, shown) if shown else "",
            f"<p>and {more} more parameters</p>" if more else "",
            table("Audit", AUDIT_HEADINGS, page.audit) if page.audit else "",
            *(f"<p><small>{safe(line)}</small></p>" for line in page.curvature),
        ]
    )


def model_fragment(name: str, rows: Iterable[Sequence[str]]) -> str:
    """Return a declaration as an HTML fragment: each parameter with prior, unit and note."""
    headings = ("parameter", "prior", "unit", "note")
    heading = f"<p><strong>{safe(short_name(name))}</strong></p>"
    return _fragment([heading, table("Parameters", headings, rows)])


def _fragment(blocks: Iterable[str]) -> str:
    body = "\n".join(block for block in blocks if block)
    return f'<div class="evidence-result">\n{_STYLE}\n{body}\n</div>'


def _warnings(remarks: Iterable[tuple[str, Sequence[Remark]]]) -> list[str]:
    listed = warning_items(remarks)
    return [f"<p><strong>Warnings</strong></p>\n<ul>\n{listed}\n</ul>"] if listed else []


def _explained(explanations: Iterable[tuple[str, str]]) -> str:
    items = "\n".join(f"<li>{escape(heading)}: {safe(text)}</li>" for heading, text in explanations)
    if not items:
        return ""
    return f"<details><summary>What the columns mean</summary>\n<ul>\n{items}\n</ul></details>"
