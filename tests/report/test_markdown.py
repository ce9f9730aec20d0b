"""The Markdown form, read back by a CommonMark parser."""

import itertools
import re

import pytest
from markdown_it import MarkdownIt

from evidence.report.content import COLUMNS, HEADINGS
from evidence.report.markdown import escape_markdown, record_to_markdown
from evidence.report.wording import short_name
from tests.records import HOSTILE_NAMES, hostile_record, make_record


def _parse(text):
    return MarkdownIt("commonmark").enable(["table", "strikethrough"]).parse(text)


def _inline_kinds(tokens):
    return {child.type for token in tokens for child in token.children or []}


def _cells(tokens):
    rows, row = [], []
    for before, token in itertools.pairwise(tokens):
        if token.type == "inline" and before.type in ("th_open", "td_open"):
            row.append("".join(child.content for child in token.children))
        if token.type == "tr_close":
            rows.append(row)
            row = []
    return rows


@pytest.mark.parametrize("name", HOSTILE_NAMES)
def test_hostile_names_are_text(name):
    text = record_to_markdown(hostile_record(name))
    tokens = _parse(text)
    assert _inline_kinds(tokens) <= {"text", "text_special", "strong_open", "strong_close"}
    kinds = {token.type.removesuffix("_open").removesuffix("_close") for token in tokens}
    expected = {"heading", "paragraph", "inline", "bullet_list", "list_item", "table", "thead"}
    assert kinds == expected | {"tbody", "tr", "th", "td"}
    rows = _cells(tokens)
    assert [len(row) for row in rows] == [len(COLUMNS)] * 3
    assert rows[1][0] == short_name(name).strip()
    assert not re.search(r"[\x00-\x09\x0b-\x1f\u200f\u202e\ud800]", text)


def test_addresses_do_not_become_links_on_their_own():
    escaped = escape_markdown("https://x.org www.x.org a@b.org")
    assert escaped == "https\\://x.org www\\.x.org a\\@b.org"


def test_table_verdict_explanations_and_warnings():
    tokens = _parse(record_to_markdown(make_record()))
    rows = _cells(tokens)
    assert rows[0] == list(HEADINGS.values())
    assert [row[0] for row in rows[1:]] == ["one pool", "two pools", "power law", "no loss"]
    assert rows[1][4] == "0.957 (0.953 to 0.961)"
    assert rows[3][2:5:2] == ["-", "<0.001"]
    assert rows[3][-1] == "unchecked"
    said = [token.content for token in tokens if token.type == "inline"]
    assert said[0] == "Litter decay at the Lowmere station"
    assert said[1].startswith("**One pool leads two pools")
    assert "two pools: The direction" in " ".join(said)
    assert any(line.startswith("Occam factor: log evidence minus fit") for line in said)


def test_without_warnings_there_is_no_heading_for_them():
    record = make_record(make_record()["candidates"][0])
    assert "## Warnings" not in record_to_markdown(record)
    assert "## Warnings" in record_to_markdown(make_record())
