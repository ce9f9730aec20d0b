r"""A weighing as a small LaTeX document that compiles by itself: verdict and booktabs table.

Only ``booktabs`` and ``fontenc`` are needed. Every sign of the user's that means something to TeX
is written as the sign; what the common fonts lack is written by its code point.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from typing import Any

from evidence.report.account import SAFETY, computation, prior_rows, reproduce, unsaid
from evidence.report.content import COLUMNS, HEADINGS, by_log_evidence, weighing_page
from evidence.report.wording import short_name

__all__ = ["escape_tex", "record_to_tex"]

_SIGNS = {
    "\\": r"\textbackslash{}",
    "{": r"\{",
    "}": r"\}",
    "$": r"\$",
    "&": r"\&",
    "#": r"\#",
    "%": r"\%",
    "_": r"\_",
    "^": r"\textasciicircum{}",
    "~": r"\textasciitilde{}",
    "<": r"\textless{}",
    ">": r"\textgreater{}",
    "|": r"\textbar{}",
    '"': r"\textquotedbl{}",
    "'": r"\textquotesingle{}",
    "`": r"\textasciigrave{}",
    "[": r"{[}",
    "]": r"{]}",
    "\u00b0": r"\textdegree{}",
    "\u00b1": r"\textpm{}",
    "\u00b5": r"\textmu{}",
    "\u03bc": r"\textmu{}",
    "\u03bf": "o",
    "\u00d7": r"\texttimes{}",
    "\u00b7": r"\textperiodcentered{}",
    "\u00b2": r"\texttwosuperior{}",
    "\u00b3": r"\textthreesuperior{}",
    "\u00b9": r"\textonesuperior{}",
    "\u2212": r"\textminus{}",
    "\u2026": r"\textellipsis{}",
    "\u2013": r"\textendash{}",
    "\u2014": r"\textemdash{}",
}
_LIGATURES = re.compile(r"-{2,}|,{2,}")
_LETTERS = (range(0xC0, 0xD7), range(0xD8, 0xF7), range(0xF8, 0x100))
_GREEK = (
    "alpha", "beta", "gamma", "delta", "epsilon", "zeta", "eta", "theta", "iota", "kappa",
    "lambda", "", "nu", "xi", "", "pi", "rho", "sigma", "tau", "upsilon", "phi", "chi", "psi",
    "omega",
)  # fmt: skip
_DOCUMENT = r"""\documentclass[10pt,a4paper]{{article}}
\usepackage[T1]{{fontenc}}
\usepackage{{textcomp}}
\usepackage{{booktabs}}
\usepackage[margin=20mm]{{geometry}}
\setlength{{\parindent}}{{0pt}}
\setlength{{\parskip}}{{0.5em}}
\sloppy
\begin{{document}}
{body}
\end{{document}}
"""


def record_to_tex(record: Mapping[str, Any]) -> str:
    """Write the record of a weighing as a LaTeX document."""
    page = weighing_page(record)
    title = page.title or "Weighing of candidates"
    blocks = [
        rf"\section*{{{escape_tex(title)}}}",
        rf"\textbf{{{escape_tex(page.verdict)}}}",
        *map(escape_tex, page.cautions),
        _comparison(page.rows),
        escape_tex(page.facts),
        *_warnings(page.remarks),
        *_list("What the columns mean", [f"{h}: {text}" for h, text in page.explanations]),
        *_list("Priors", _priors(record)),
        *_list("Computation", _computation(record)),
        *_list("What this does not say", [*unsaid(record), SAFETY]),
    ]
    return _DOCUMENT.format(body="\n\n".join(blocks))


def escape_tex(text: str) -> str:
    """Return words so that TeX sets them letter by letter."""
    # an empty group keeps TeX from joining signs into a dash or a quotation mark
    return _LIGATURES.sub(lambda match: "{}".join(match.group()), "".join(map(_sign, text)))


def _sign(sign: str) -> str:
    if sign in _SIGNS:
        return _SIGNS[sign]
    code = ord(sign)
    if 0x20 <= code < 0x7F or any(code in letters for letters in _LETTERS):
        return sign
    if 0x3B1 <= code <= 0x3C9 and (name := _greek(code)):
        return rf"\ensuremath{{\{name}}}"
    return f"{{[}}U+{code:04X}{{]}}"


def _greek(code: int) -> str:
    # two forms of sigma stand beside each other in the code
    place = code - 0x3B1 - (code > 0x3C2)
    return "sigma" if code == 0x3C2 else _GREEK[place]


def _comparison(rows: Iterable[Mapping[str, str]]) -> str:
    kinds = "".join("l" if c in ("candidate", "trust") else "r" for c in COLUMNS)
    kinds = kinds.replace("l", "p{30mm}", 1)
    head = " & ".join(_stacked(HEADINGS[c]) for c in COLUMNS)
    lines = [" & ".join(_cell(c, row[c]) for c in COLUMNS) + r" \\" for row in rows]
    body = "\n".join(lines)
    return (
        "{\\footnotesize\\setlength{\\tabcolsep}{3pt}\n"
        f"\\begin{{tabular}}{{@{{}}{kinds}@{{}}}}\n\\toprule\n{head} \\\\\n\\midrule\n{body}\n"
        "\\bottomrule\n\\end{tabular}}"
    )


def _stacked(heading: str) -> str:
    words = heading.rsplit(" ", 1)
    if len(words) == 1:
        return escape_tex(heading)
    return rf"\shortstack[r]{{{escape_tex(words[0])}\\{escape_tex(words[1])}}}"


def _cell(column: str, text: str) -> str:
    if column == "probability" and " (" in text:
        value, _, ends = text.partition(" (")
        return rf"\shortstack[r]{{{escape_tex(value)}\\{escape_tex('(' + ends)}}}"
    shown = escape_tex(text)
    if column == "candidate":
        return rf"\raggedright {_breakable(shown, text)}"
    # a minus and no hyphen before a number
    return rf"$-${shown[1:]}" if text[:1] == "-" and len(text) > 1 else shown


def _breakable(shown: str, text: str) -> str:
    """Let a long word break anywhere, so that it stays in its column."""
    if max(map(len, text.split()), default=0) <= 16:
        return shown
    return r"\hspace{0pt}".join(map(_sign, text))


def _warnings(remarks: Iterable[tuple[str, Any]]) -> list[str]:
    told = [
        f"{name}: {remark.sentence} {remark.remedy}".rstrip()
        for name, said in remarks
        for remark in said
    ]
    return _list("Warnings", told)


def _priors(record: Mapping[str, Any]) -> list[str]:
    return [
        f"{short_name(c['candidate'])}: "
        + "; ".join(f"{name} {text}{f' ({note})' if note else ''}" for name, text, _, note in rows)
        for c in by_log_evidence(record)
        if (rows := prior_rows(c))
    ]


def _computation(record: Mapping[str, Any]) -> list[str]:
    told = [f"{fact.term}: {fact.text}" for fact in computation(record)]
    command = reproduce(record)
    return [*told, f"to make it again: {command}"] if command else told


def _list(heading: str, sentences: Iterable[str]) -> list[str]:
    items = "\n".join(rf"\item {{}}{escape_tex(sentence)}" for sentence in sentences)
    if not items:
        return []
    listed = f"\\begin{{itemize}}\n{items}\n\\end{{itemize}}"
    return [f"\\subsection*{{{escape_tex(heading)}}}\n{listed}"]
