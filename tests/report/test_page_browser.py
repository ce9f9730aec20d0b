"""The page in a real browser: quiet console, no request, no sideways scrolling, accessible."""

import pytest

from evidence.report.page import record_to_page
from evidence.report.vector import inline_svg
from tests.records import HOSTILE_NAMES, illustrated, illustrated_hostile, make_record
from tests.report import browser

PICTURES_SEEN = """return [...document.querySelectorAll('figure svg')].map(svg => {
  const box = svg.getBoundingClientRect();
  return box.width > 200 && box.height > 50 && svg.querySelector('title') !== null;
});"""
WIDTHS = "return [document.documentElement.scrollWidth, window.innerWidth];"


@pytest.fixture(scope="module")
def driver(tmp_path_factory):
    browser.skip_without_browser()
    with browser.chromium(tmp_path_factory.mktemp("profile")) as driver:
        yield driver


@pytest.fixture(scope="module")
def page(tmp_path_factory):
    path = tmp_path_factory.mktemp("page") / "litter.html"
    path.write_text(record_to_page(illustrated(make_record())), encoding="utf-8")
    return path


def hostile_page(folder):
    """A page of candidates with a hostile name each, in every place of theirs."""
    names = (HOSTILE_NAMES[0], HOSTILE_NAMES[1], HOSTILE_NAMES[5], "x" * 10**4)
    record = illustrated_hostile(names[0])
    record["candidates"] = [illustrated_hostile(name)["candidates"][0] for name in names]
    path = folder / "hostile.html"
    path.write_text(record_to_page(record), encoding="utf-8", errors="backslashreplace")
    return path


def assert_quiet(driver, path, **options):
    console, asked = browser.open_page(driver, path, **options)
    assert console == []
    assert asked == [path.as_uri()]


@pytest.mark.parametrize("width", [390, 1000])
def test_quiet_and_no_wider_than_the_window(driver, page, width):
    assert_quiet(driver, page, width=width)
    content, window = driver.execute_script(WIDTHS)
    assert content <= window == width


def test_every_picture_is_there(driver, page):
    browser.open_page(driver, page)
    seen = driver.execute_script(PICTURES_SEEN)
    assert all(seen)
    # one of the comparison; three to five of each candidate that has a number
    assert len(seen) >= 1 + 3 * 4


@pytest.mark.parametrize(("width", "dark"), [(390, False), (1000, True)])
def test_axe_finds_nothing(driver, page, width, dark):
    browser.skip_without_axe()
    browser.open_page(driver, page, width=width, dark=dark)
    assert browser.violations(driver) == []


def test_dark_paper_is_dark(driver, page):
    shades = []
    for dark in (False, True):
        browser.open_page(driver, page, dark=dark)
        script = "return getComputedStyle(document.body).backgroundColor;"
        shades.append(driver.execute_script(script))
    assert shades == ["rgb(255, 255, 255)", "rgb(22, 24, 26)"]


def test_hostile_names_do_nothing(driver, tmp_path):
    path = hostile_page(tmp_path)
    assert_quiet(driver, path, width=390)
    content, window = driver.execute_script(WIDTHS)
    assert content <= window
    assert driver.execute_script("return document.querySelectorAll('script').length;") == 0
    if browser.AXE.exists():
        assert browser.violations(driver) == []


def test_the_checks_can_fail(driver, tmp_path):
    browser.skip_without_axe()
    path = tmp_path / "bad.html"
    path.write_text("<html><body><img src='missing.png'><script>console.error('x')</script>")
    console, asked = browser.open_page(driver, path, width=390)
    assert len(console) >= 1
    assert len(asked) == 2
    assert len(browser.violations(driver)) >= 2


def test_words_in_a_picture_are_text(driver, tmp_path):
    svg = "<svg xmlns='http://www.w3.org/2000/svg' viewBox='0 0 9 9'><text id='a'>b</text></svg>"
    path = tmp_path / "picture.html"
    path.write_text(f"<html><body>{inline_svg(svg, 'p', '<b>', '</desc><script>')}", "utf-8")
    assert_quiet(driver, path)
    assert driver.execute_script("return document.querySelector('desc').textContent;") == (
        "</desc><script>"
    )
