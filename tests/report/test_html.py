"""The notebook fragment, parsed."""

import re
from html.parser import HTMLParser

import pytest

from evidence.report.content import COLUMNS, HEADINGS
from evidence.report.html import candidate_fragment, notebook_fragment
from evidence.report.text import WeighingView, plain_text
from evidence.report.wording import short_name
from tests.records import HOSTILE_NAMES, hostile_record, make_record

LAYOUT = {"div", "style", "p", "strong", "small", "em", "bdi", "ul", "li", "details", "summary"}
TABLES = {"table", "caption", "thead", "tbody", "tr", "th", "td"}


class Parsed(HTMLParser):
    """Tags, attributes and visible text of a fragment, its nesting checked."""

    def __init__(self, fragment):
        super().__init__()
        self.open, self.tags, self.texts, self.styles = [], [], [], []
        self.feed(fragment)
        self.close()
        assert self.open == []

    def handle_starttag(self, tag, attributes):
        self.open.append(tag)
        self.tags.append((tag, dict(attributes)))

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, text):
        (self.styles if "style" in self.open else self.texts).append(text)


@pytest.mark.parametrize("name", HOSTILE_NAMES)
@pytest.mark.parametrize("form", ["weighing", "candidate"])
def test_hostile_names_are_text(name, form):
    record = hostile_record(name)
    whole = form == "weighing"
    fragment = notebook_fragment(record) if whole else candidate_fragment(record["candidates"][0])
    page = Parsed(fragment)
    assert {tag for tag, _ in page.tags} <= LAYOUT | TABLES
    assert {key for _, attributes in page.tags for key in attributes} <= {"class", "scope"}
    assert short_name(name) in page.texts
    assert not re.search(r"[\x00-\x09\x0b-\x1f\u200f\u202e\ud800]", fragment)
    assert len(fragment) < 12_000


def test_every_heading_has_a_scope_and_the_columns_keep_their_order():
    page = Parsed(notebook_fragment(make_record()))
    scopes = [attributes.get("scope") for tag, attributes in page.tags if tag == "th"]
    assert scopes == ["col"] * len(COLUMNS) + ["row"] * 4
    joined = "|".join(text for text in page.texts if text.strip())
    assert "|".join(HEADINGS.values()) in joined


def test_it_sets_no_colour_and_loads_nothing():
    fragment = notebook_fragment(make_record())
    page = Parsed(fragment)
    colours = re.findall(r"(?:color|background)[^;:]*:\s*([^;]+);", "".join(page.styles))
    assert set(colours) == {"inherit", "none"}
    assert "http" not in fragment
    assert "url(" not in fragment


def test_it_says_what_the_terminal_says():
    record = make_record(caution=["A caution."])
    said = " ".join(" ".join(Parsed(notebook_fragment(record)).texts).split())
    terminal = plain_text(WeighingView(record), width=400)
    words = [word for word in terminal.split() if not set(word) <= set("─")]
    assert len(words) > 80
    assert [word for word in words if word not in said] == []


def test_a_candidate_has_its_posterior_and_audit():
    page = Parsed(candidate_fragment(make_record()["candidates"][0]))
    assert {"Posterior", "Audit", "rate", "0.006132", "Pareto k 0.12"} <= set(page.texts)
