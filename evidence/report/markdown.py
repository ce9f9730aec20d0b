"""A weighing as Markdown: verdict, comparison table, what its columns mean, warnings."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from typing import Any

from evidence.report.account import SAFETY, computation, prior_rows, unsaid
from evidence.report.content import COLUMNS, HEADINGS, Remark, by_log_evidence, weighing_page
from evidence.report.wording import short_name

__all__ = ["escape_markdown", "record_to_markdown"]

# Whatever could start emphasis, code, a link, an image, a table cell, a formula or a tag. The
# colon and the point keep "https://" and "www." from turning into links on their own.
_SIGNS = re.compile(r"[\\`*_\[\]|~$!#@]|:(?=//)|(?<=www)\.", re.IGNORECASE)
_TAGS = {"&": "&amp;", "<": "&lt;", ">": "&gt;"}
_LINE_START = re.compile(r"^(\s*)([-+=]|\d{1,9}[.)])")


def record_to_markdown(record: Mapping[str, Any]) -> str:
    """Write the record of a weighing as Markdown."""
    page = weighing_page(record)
    blocks = [
        f"# {escape_markdown(page.title)}" if page.title else "# Weighing",
        f"**{escape_markdown(page.verdict)}**",
        *(escape_markdown(caution) for caution in page.cautions),
        _table(page.rows),
        *_warnings(page.remarks),
        *_explanations(page.explanations),
        *_priors(record),
        *_listed("Computation", [f"{x.term}: {x.text}" for x in computation(record)]),
        *_listed("What this does not say", [*unsaid(record), SAFETY]),
        escape_markdown(page.facts),
    ]
    return "\n\n".join(blocks) + "\n"


def escape_markdown(text: str) -> str:
    """Return a line of text so that Markdown shows it letter by letter, at a line's start too."""
    return _LINE_START.sub(_escape_line_start, _escape_inline(text.strip()))


def _escape_inline(text: str) -> str:
    tagless = "".join(_TAGS.get(sign, sign) for sign in text)
    return _SIGNS.sub(lambda match: f"\\{match.group()}", tagless)


def _escape_line_start(match: re.Match[str]) -> str:
    marker = match.group(2)
    return f"{match.group(1)}{marker[:-1]}\\{marker[-1]}"


def _table(rows: Iterable[Mapping[str, str]]) -> str:
    alignment = [":--" if c in ("candidate", "trust") else "--:" for c in COLUMNS]
    lines = [[HEADINGS[c] for c in COLUMNS], alignment]
    lines += [[_escape_inline(row[c]) for c in COLUMNS] for row in rows]
    return "\n".join(f"| {' | '.join(line)} |" for line in lines)


def _warnings(remarks: Iterable[tuple[str, tuple[Remark, ...]]]) -> list[str]:
    items = [
        f"- {escape_markdown(name)}: {escape_markdown(remark.sentence)} "
        f"{escape_markdown(remark.remedy)}".rstrip()
        for name, said in remarks
        for remark in said
    ]
    return ["## Warnings", "\n".join(items)] if items else []


def _explanations(explanations: Iterable[tuple[str, str]]) -> list[str]:
    items = [f"- {heading}: {escape_markdown(text)}" for heading, text in explanations]
    return ["## What the columns mean", "\n".join(items)] if items else []


def _priors(record: Mapping[str, Any]) -> list[str]:
    told = [
        f"{short_name(candidate['candidate'])}, {name}: {prior}{f' ({reason})' if reason else ''}"
        for candidate in by_log_evidence(record)
        for name, prior, _, reason in prior_rows(candidate)
    ]
    return _listed("Priors", told)


def _listed(heading: str, sentences: Iterable[str]) -> list[str]:
    items = [f"- {escape_markdown(sentence)}" for sentence in sentences]
    return [f"## {heading}", "\n".join(items)] if items else []
