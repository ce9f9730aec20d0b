"""A weighing as one HTML page that carries all it needs: no network, no script.

What is said is decided in :mod:`evidence.report.content` and :mod:`evidence.report.account`; here
it is laid out, escaped throughout, with pictures as SVG that are described in words.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

from evidence.report import account
from evidence.report.content import (
    AUDIT_HEADINGS,
    COLUMNS,
    HEADINGS,
    POSTERIOR_HEADINGS,
    as_sentence,
    by_log_evidence,
    candidate_page,
    weighing_page,
)
from evidence.report.figures.canvas import to_svg
from evidence.report.figures.gallery import draw_candidate, draw_weighing
from evidence.report.figures.words import CAPTIONS, described
from evidence.report.markup import safe, table, warning_items
from evidence.report.page_style import STYLE
from evidence.report.vector import inline_svg
from evidence.report.wording import short_name

__all__ = ["record_to_page"]

Record = Mapping[str, Any]
_POSTERIOR_ROWS = 200
# nothing is fetched and nothing runs, whatever a name may hold
_POLICY = "default-src 'none'; style-src 'unsafe-inline'; base-uri 'none'; form-action 'none'"


def record_to_page(record: Record) -> str:
    """Write the record of a weighing as a page; pictures need its ``pictures`` parts.

    Raises
    ------
    ImportError
        matplotlib is not installed.
    """
    said = weighing_page(record)
    title = said.title or "Weighing of candidates"
    candidates = by_log_evidence(record)
    blocks = [
        f"<header>\n<h1>{safe(title)}</h1>\n{_summary(record)}\n</header>",
        _contents([short_name(c["candidate"]) for c in candidates]),
        "<main>",
        _comparison(record),
        *(_candidate(c, place) for place, c in enumerate(candidates, start=1)),
        _foundations(record),
        _limits(record),
        _cautions(record),
        "</main>",
    ]
    head = (
        '<meta charset="utf-8">\n<meta name="viewport" content="width=device-width, '
        f'initial-scale=1">\n<meta http-equiv="Content-Security-Policy" content="{_POLICY}">\n'
        f"<title>{_plain(title)}</title>\n<style>{STYLE}</style>"
    )
    body = "\n".join(block for block in blocks if block)
    return (
        f'<!DOCTYPE html>\n<html lang="en">\n<head>\n{head}\n</head>\n<body>\n{body}\n</body>\n'
        "</html>\n"
    )


def _plain(text: str) -> str:
    """Escaped words where no element may stand."""
    return safe(text).removeprefix("<bdi>").removesuffix("</bdi>")


def _summary(record: Record) -> str:
    page = weighing_page(record)
    study = " ".join(str((record.get("study") or {}).get("text") or "").split())
    told = [f'<p class="verdict">{safe(page.verdict)}</p>']
    told += [f"<p>{safe(caution)}</p>" for caution in page.cautions]
    if study:
        told.append(f"<p>{safe(short_name(study, 2000))}</p>")
    return "\n".join([*told, f'<p class="soft">{safe(page.facts)}</p>'])


def _contents(names: Sequence[str]) -> str:
    places = [("comparison", "Comparison")]
    places += [(f"candidate-{k}", name) for k, name in enumerate(names, start=1)]
    places += [
        ("foundations", "What the numbers rest on"),
        ("limits", "What this does not say"),
        ("cautions", "Cautions"),
    ]
    items = "\n".join(f'<li><a href="#{place}">{safe(name)}</a></li>' for place, name in places)
    return f'<nav aria-label="Contents">\n<ul>\n{items}\n</ul>\n</nav>'


def _comparison(record: Record) -> str:
    page = weighing_page(record)
    rows = [[row[column] for column in COLUMNS] for row in page.rows]
    headings = [HEADINGS[column] for column in COLUMNS]
    meant = "\n".join(f"<dt>{safe(h)}</dt><dd>{safe(text)}</dd>" for h, text in page.explanations)
    return _section(
        "comparison",
        "Comparison",
        [
            _wide("Comparison of the candidates", headings, rows),
            _figure("overview", "overview", record),
            f'<h3>What the columns mean</h3>\n<dl class="facts">\n{meant}\n</dl>' if meant else "",
        ],
    )


def _candidate(candidate: Record, place: int) -> str:
    page = candidate_page(candidate)
    name = f"candidate-{place}"
    shown = page.posterior[:_POSTERIOR_ROWS]
    more = len(page.posterior) - len(shown)
    items = warning_items([("", page.remarks)])
    has_modes = bool(candidate.get("modes"))
    return _section(
        name,
        page.name,
        [
            f"<p><strong>{safe(page.headline)}</strong> = {safe(page.parts)}</p>",
            f"<p>{safe(account.overtaken(candidate))}</p>" if account.overtaken(candidate) else "",
            f"<h3>Warnings</h3>\n<ul>\n{items}\n</ul>" if items else "",
            "<h3>Data and prediction</h3>",
            *_predicted(candidate, name),
            "<h3>Posterior</h3>" if shown else "",
            _wide(f"Posterior of {page.name}", POSTERIOR_HEADINGS, shown) if shown else "",
            f"<p>and {more} more parameters</p>" if more else "",
            _figure("marginals", name, candidate) if _pictures(candidate, "marginals") else "",
            "<h3>Audit of the log evidence</h3>" if page.audit else "",
            _wide(f"Audit of {page.name}", AUDIT_HEADINGS, page.audit) if page.audit else "",
            _row(
                [
                    _figure("audit", name, candidate) if page.audit else "",
                    _figure("profiles", name, candidate)
                    if _pictures(candidate, "profiles")
                    else "",
                    _figure("curvature", name, candidate) if has_modes and page.curvature else "",
                ]
            ),
        ],
    )


def _predicted(candidate: Record, name: str) -> list[str]:
    rows, told = account.check_rows(candidate), short_name(candidate["candidate"])
    kind = "alert" if any(row[-1] == "fails" for row in rows) else "soft"
    return [
        _figure("predictions", name, candidate) if _pictures(candidate, "predictions") else "",
        f'<p class="{kind}">{safe(account.check_sentence(candidate))}</p>',
        _wide(f"Posterior predictive checks of {told}", account.CHECK_HEADINGS, rows)
        if rows
        else "",
    ]


def _pictures(candidate: Record, part: str) -> Any:
    return (candidate.get("pictures") or {}).get(part)


def _foundations(record: Record) -> str:
    columns, command = account.column_rows(record), account.reproduce(record)
    facts = "\n".join(
        f"<dt>{safe(fact.term)}</dt><dd>{safe(fact.text)}</dd>"
        for fact in account.computation(record)
    )
    priors = [
        _wide(f"Priors of {short_name(c['candidate'])}", account.PRIOR_HEADINGS, rows)
        for c in by_log_evidence(record)
        if (rows := account.prior_rows(c))
    ]
    asked = _wide(
        "Points of the reporting guideline of Kruschke (2021)",
        ("what is asked", "where it is answered"),
        account.guideline(record),
    )
    return _section(
        "foundations",
        "What the numbers rest on",
        [
            "<h3>Data</h3>" if columns else "",
            _wide("Columns of the data", account.COLUMN_HEADINGS, columns) if columns else "",
            "<h3>Priors</h3>" if priors else "",
            *priors,
            f'<h3>Computation</h3>\n<dl class="facts">\n{facts}\n</dl>',
            f"<p>To make it again: <code>{safe(command)}</code></p>" if command else "",
            "<h3>Reporting guideline</h3>",
            asked,
        ],
    )


def _limits(record: Record) -> str:
    items = "\n".join(f"<li>{safe(sentence)}</li>" for sentence in account.unsaid(record))
    checks = (
        '<p class="soft">A check compares a feature of the data with the same feature of data '
        "simulated from the posterior; the p-value is the share of simulated data sets with a "
        "larger value, and a check fails below 0.005 or above 0.995. Such p-values are cautious "
        "(Gelman, Meng &amp; Stern 1996).</p>"
    )
    return _section("limits", "What this does not say", [f"<ul>\n{items}\n</ul>", checks])


def _cautions(record: Record) -> str:
    items = warning_items(weighing_page(record).remarks)
    listed = f"<ul>\n{items}\n</ul>" if items else "<p>No candidate has a warning.</p>"
    return _section("cautions", "Cautions", [listed, f"<p>{safe(as_sentence(account.SAFETY))}</p>"])


def _section(place: str, heading: str, blocks: Iterable[str]) -> str:
    inner = "\n".join(block for block in blocks if block)
    return (
        f'<section aria-labelledby="{place}">\n<h2 id="{place}">{safe(heading)}</h2>\n{inner}\n'
        "</section>"
    )


def _wide(caption: str, headings: Sequence[str], rows: Iterable[Sequence[str]]) -> str:
    # wider than a telephone: it scrolls by itself, by keyboard too, and the page does not
    inner = table(caption, headings, rows)
    label = _plain(caption)
    return f'<div class="wide" role="group" aria-label="{label}" tabindex="0">{inner}</div>'


def _row(figures: Iterable[str]) -> str:
    inner = "\n".join(figure for figure in figures if figure)
    return f'<div class="pictures">\n{inner}\n</div>' if inner else ""


def _figure(picture: str, prefix: str, record: Record) -> str:
    draw = draw_weighing if picture == "overview" else draw_candidate
    caption = CAPTIONS[picture]
    title = caption.split(":")[0].split(";")[0]
    svg = inline_svg(
        to_svg(draw(record, picture)), f"{prefix}-{picture}", title, described(picture, record)
    )
    return f"<figure>\n{svg}\n<figcaption>{safe(caption)}</figcaption>\n</figure>"
