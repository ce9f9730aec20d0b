"""The LaTeX form: every sign comes out as a sign, and it compiles where there is a TeX."""

import re
import shutil
import subprocess

import pytest

from evidence.report.tex import escape_tex, record_to_tex
from tests.records import HOSTILE_NAMES, illustrated, illustrated_hostile, make_record

SPECIALS = (
    r"\input{x} \end{document} 100 % #1 a_b^c ~ & {x} $y$ [z] <t> |u| -- --- ,, `` '' ?` !`",
    "\u03b1\u03b2\u03c3\u03c2\u03bf\u03bc \u00b5 \u00e9 \u0141 \u00b1 \u00d7 \u00b0 \u00b2 \u2212",
    "x" * 10_000,
)


@pytest.mark.parametrize(
    ("text", "tex"),
    [
        (r"a\b", r"a\textbackslash{}b"),
        ("{}$&#%_", r"\{\}\$\&\#\%\_"),
        ("^~<>|", r"\textasciicircum{}\textasciitilde{}\textless{}\textgreater{}\textbar{}"),
        ("a--b", "a-{}-b"),
        ("\u03b1\u03c3", r"\ensuremath{\alpha}\ensuremath{\sigma}"),
        ("\u03c2\u03c9", r"\ensuremath{\sigma}\ensuremath{\omega}"),
        ("\u00e9\u00b1", r"é\textpm{}"),
        ("\u05e9", "{[}U+05E9{]}"),
    ],
)
def test_signs(text, tex):
    assert escape_tex(text) == tex


@pytest.mark.parametrize("name", [*HOSTILE_NAMES, *SPECIALS])
def test_hostile_names_run_no_command(name):
    text = record_to_tex(illustrated_hostile(name))
    commands = set(re.findall(r"\\([a-zA-Z]+)", text))
    assert not commands & {"input", "include", "write", "def", "catcode", "openout", "script"}
    environments = re.findall(r"\\(begin|end)\{(\w+)\}", text)
    opened = []
    for word, environment in environments:
        if word == "begin":
            opened.append(environment)
        else:
            assert opened.pop() == environment
    assert opened == []
    assert text.count(r"\end{document}") == 1
    assert text.isprintable() or not re.search(r"[\x00-\x09\x0b-\x1f\u200f\u202e\ud800]", text)


def test_it_says_the_verdict_and_what_is_not_said():
    text = record_to_tex(illustrated(make_record()))
    assert r"\textbf{One pool leads two pools by 3.10 nats" in text
    assert text.count(r"\toprule") == text.count(r"\midrule") == text.count(r"\bottomrule") == 1
    assert "The leader may fit badly" in text
    assert "local codes and licensed practice decide" in text
    rows = re.search(r"\\midrule\n(.*?)\n\\bottomrule", text, re.DOTALL).group(1).splitlines()
    assert len(rows) == 4
    assert all(row.count(" & ") == 9 for row in rows)


@pytest.mark.parametrize("name", ["", *SPECIALS, *HOSTILE_NAMES[:1], *HOSTILE_NAMES[5:8]])
def test_it_compiles(tmp_path, name):
    program = next(filter(None, map(shutil.which, ("pdflatex", "tectonic"))), None)
    if program is None:
        pytest.skip("THE LATEX FORM IS NOT COMPILED: neither pdflatex nor tectonic is installed")
    record = illustrated_hostile(name) if name else illustrated(make_record())
    path = tmp_path / "weighing.tex"
    path.write_text(record_to_tex(record), encoding="utf-8", errors="backslashreplace")
    options = ["-interaction=nonstopmode", "-halt-on-error"] if "pdflatex" in program else []
    done = subprocess.run(
        [program, *options, path.name], cwd=tmp_path, capture_output=True, timeout=60, check=False
    )
    assert done.returncode == 0, done.stdout[-2000:]
    assert path.with_suffix(".pdf").stat().st_size > 5000
