"""The page, parsed: order, escaping, what it carries and what it says."""

import itertools
import re
from html.parser import HTMLParser

import pytest

from evidence.report import account
from evidence.report import page as page_form
from evidence.report.figures.words import CAPTIONS, described
from evidence.report.markup import safe
from evidence.report.page import record_to_page
from evidence.report.wording import short_name
from tests.records import HOSTILE_NAMES, NAN, illustrated, illustrated_hostile, make_record

VOID = {"meta", "br", "hr", "img", "link", "input"}
HTML = {
    "html", "head", "title", "style", "body", "header", "main", "nav", "section", "h1", "h2", "h3",
    "p", "strong", "em", "bdi", "ul", "li", "dl", "dt", "dd", "code", "a", "div", "table",
    "caption", "thead", "tbody", "tr", "th", "td", "figure", "figcaption", "meta",
}  # fmt: skip
SVG = {"svg", "desc", "g", "defs", "path", "use", "text", "clippath", "rect", "pattern", "title"}


class Parsed(HTMLParser):
    """Tags, attributes and words of a page, its nesting checked."""

    def __init__(self, page):
        super().__init__()
        self.open, self.tags, self.words, self.headings = [], [], [], []
        self.feed(page)
        self.close()
        assert self.open == []

    def handle_starttag(self, tag, attributes):
        self.tags.append((tag, dict(attributes)))
        if tag not in VOID:
            self.open.append(tag)
        if tag in ("h1", "h2", "h3"):
            self.headings.append([int(tag[1]), ""])

    def handle_startendtag(self, tag, attributes):
        self.tags.append((tag, dict(attributes)))

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, text):
        if "style" not in self.open:
            self.words.append(text)
        if {"h1", "h2", "h3"} & set(self.open):
            self.headings[-1][1] += text


@pytest.fixture(scope="module")
def text():
    return record_to_page(illustrated(make_record()))


@pytest.fixture(scope="module")
def page(text):
    return Parsed(text)


def test_it_carries_all_it_needs(text, page):
    assert {tag for tag, _ in page.tags} <= HTML | SVG
    pointing = {"src", "href", "xlink:href", "action", "data", "srcset", "poster", "background"}
    for _, attributes in page.tags:
        assert not any(key.startswith("on") for key in attributes)
        assert all(attributes[key].startswith("#") for key in pointing & set(attributes))
    assert set(re.findall(r"https?://[^\s\"'<>]+", text)) <= {
        "http://www.w3.org/2000/svg",
        "http://www.w3.org/1999/xlink",
    }
    assert set(re.findall(r"url\(([^)]*)\)", text)) <= {
        f"#{attributes['id']}" for _, attributes in page.tags if "id" in attributes
    }


def test_identifiers_are_used_once_and_every_pointer_has_its_aim(page):
    names = [attributes["id"] for _, attributes in page.tags if "id" in attributes]
    assert len(names) == len(set(names))
    for _, attributes in page.tags:
        for key in ("href", "xlink:href"):
            assert attributes.get(key, "#")[1:] in [*names, ""]
        for name in (attributes.get("aria-labelledby") or "").split():
            assert name in names


def test_headings_are_in_order(page):
    levels = [level for level, _ in page.headings]
    assert levels[0] == 1
    assert levels.count(1) == 1
    assert all(b <= a + 1 for a, b in itertools.pairwise(levels))
    second = [words for level, words in page.headings if level == 2]
    assert second == [
        "Comparison", "one pool", "two pools", "power law", "no loss", "What the numbers rest on",
        "What this does not say", "Cautions",
    ]  # fmt: skip


def test_the_verdict_comes_first(page):
    record = make_record()
    said = [words for words in page.words if words.strip()]
    assert said.index(record["verdict"]) == 2  # after the two titles


def test_every_table_heading_has_a_scope_and_every_table_a_caption(page):
    scopes = [attributes.get("scope") for tag, attributes in page.tags if tag == "th"]
    assert set(scopes) == {"col", "row"}
    tags = [tag for tag, _ in page.tags]
    assert tags.count("table") == tags.count("caption") >= 8


def test_every_picture_is_described(text, page):
    pictures = [attributes for tag, attributes in page.tags if tag == "svg"]
    assert len(pictures) >= 13
    assert all(attributes["role"] == "img" for attributes in pictures)
    descriptions = re.findall(r"<desc [^>]*>([^<]*)</desc>", text)
    assert len(descriptions) == len(pictures)
    assert len(set(descriptions)) == len(pictures)
    assert any("one pool: probability 0.957 (0.953 to 0.961)" in words for words in descriptions)
    assert any("20 of 20 observations lie inside the band" in words for words in descriptions)
    assert min(map(len, descriptions)) > 20


@pytest.fixture
def undrawn(monkeypatch):
    """Pictures are tried elsewhere: here each is its description in words."""
    monkeypatch.setattr(
        page_form, "_figure", lambda picture, _, record: safe(described(picture, record))
    )


@pytest.mark.usefixtures("undrawn")
@pytest.mark.parametrize("name", HOSTILE_NAMES)
def test_hostile_names_are_text(name):
    text = record_to_page(illustrated_hostile(name))
    page = Parsed(text)
    assert {tag for tag, _ in page.tags} <= HTML | SVG
    assert short_name(name) in page.words
    assert not re.search(r"[\x00-\x09\x0b-\x1f\u200f\u202e\ud800]", text)
    assert len(text) < 100_000


def said(page):
    return " ".join(" ".join(page.words).split())


@pytest.mark.parametrize(
    "words",
    [
        "The leader may fit badly: one pool fails 1 of 2 posterior predictive checks",
        "differ from the observed ones in largest value",
        "fingerprint of the data ab12",
        "depth of the checks standard",
        "evidence 0.1.0, jax 0.10.2, numpy 2.4.6, python 3.11.7",
        "run time 3.2 s",
        "LogNormal(2.3, 0.3)",
        "local codes and licensed practice decide",
        "Give rate_2 a narrower prior or leave it out.",
        "No peak was found from any start.",
        "reaches it from a prior probability of 0.44 on",
    ],
)
def test_it_says(page, words):
    assert words in said(page)


def test_each_point_of_the_guideline_is_answered(page):
    rows = account.guideline(illustrated(make_record()))
    assert len(rows) == 9
    assert all(asked in page.words and answer for asked, answer in rows)


@pytest.mark.usefixtures("undrawn")
def test_a_leader_that_passes_is_not_scolded():
    record = illustrated(make_record())
    for candidate in record["candidates"]:
        for check in candidate["pictures"]["checks"]:
            check["failed"] = False
    words = said(Parsed(record_to_page(record)))
    assert "may fit badly" not in words
    assert "one pool passes the 2 posterior predictive checks made here" in words


def test_a_record_without_pictures_says_so():
    page = Parsed(record_to_page(make_record()))
    assert "was not checked against its own predictions: none were saved" in said(page)
    assert [tag for tag, _ in page.tags].count("svg") >= 1


@pytest.mark.usefixtures("undrawn")
@pytest.mark.parametrize(
    ("pictures", "words"),
    [
        ({"trouble": "predict broke.", "checks": []}, "was not checked against its own pred"),
        ({"checks": []}, "was drawn against the data but not checked"),
        ({"checks": [], "predictions": []}, "it declares no simulate="),
    ],
)
def test_what_was_not_checked_is_told(pictures, words):
    assert words in said(Parsed(record_to_page(illustrated(make_record(), **pictures))))


@pytest.mark.usefixtures("undrawn")
def test_no_leader_and_nothing_known():
    failed = make_record()["candidates"][3]
    record = make_record(failed, leader=None, verdict="No verdict.", decisive_prior_probability=NAN)
    words = said(Parsed(record_to_page(record)))
    assert "No verdict." in words
    assert "The evidence compares" not in words


def test_every_caption_belongs_to_a_picture(page):
    assert {c for c in CAPTIONS.values() if c in page.words} == set(CAPTIONS.values())
