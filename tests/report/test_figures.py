"""Every picture: a column wide, no words upon words, hostile names as words, nothing lasting."""

import copy
import itertools
import math
import subprocess
import sys

import matplotlib as mpl
import pytest
from matplotlib.text import Text

from evidence.complaints import DeclarationError
from evidence.report.figures.canvas import own_style, to_png, to_svg
from evidence.report.figures.gallery import CANDIDATE, WEIGHING, draw_candidate, draw_weighing
from evidence.report.figures.words import CAPTIONS, described
from tests.records import (
    HOSTILE_NAMES,
    NAN,
    illustrated,
    illustrated_hostile,
    make_candidate,
    make_pictures,
    make_record,
)

PICTURES = [*WEIGHING, *CANDIDATE]
LONG = "a very long name of something that was measured in the reeds, number "


def draw(picture, record):
    if picture in WEIGHING:
        return draw_weighing(record, picture)
    return draw_candidate(record["candidates"][0], picture)


def many(number):
    """A record of so many candidates; the first has so many of everything."""
    trust = itertools.cycle(("sound", "doubtful", "rough", "unchecked"))
    candidates = [
        make_candidate(f"{LONG}{k}", trust=next(trust), log_evidence=-41.0 - 3.7 * k)
        for k in range(number)
    ]
    first, pictures = candidates[0], make_pictures()
    marginal, direction = pictures["marginals"][0], first["curvature"]["directions"][0]
    pictures["marginals"] = [{**marginal, "parameter": f"{LONG}{k}"} for k in range(number)]
    first["curvature"]["directions"] = [
        {**direction, "combination": f"0.71 {LONG}{k}", "sd": 10.0 ** (-k / 4)}
        for k in range(number)
    ]
    first["audit"] = [
        {**first["audit"][0], "rung": f"{LONG}{k}", "estimate": -41.0 + 0.1 * k, "agreed": a}
        for k, a in zip(range(min(number, 12)), itertools.cycle((True, False, None)), strict=False)
    ]
    if number == 1:
        pictures["profiles"] = pictures["profiles"][:1]
    first["pictures"] = pictures
    return make_record(*candidates)


def words_upon_words(figure):
    """Pairs of texts whose boxes cover each other, and texts that leave the picture."""
    with own_style():
        figure.draw_without_rendering()
        hidden = beyond_the_axes(figure)
        boxes = [
            (text.get_text(), text.get_window_extent())
            for text in figure.findobj(Text)
            if text.get_visible() and text.get_text().strip() and text not in hidden
        ]
    width, height = figure.get_size_inches() * figure.dpi
    outside = [
        words
        for words, box in boxes
        if box.x0 < -2 or box.y0 < -2 or box.x1 > width + 2 or box.y1 > height + 2
    ]
    # a box has room above small letters: two of its 10 dots may be shared
    upon = [
        (a, b)
        for (a, one), (b, other) in itertools.combinations(boxes, 2)
        if min(one.x1, other.x1) - max(one.x0, other.x0) > 1.0
        and min(one.y1, other.y1) - max(one.y0, other.y0) > 2.0
    ]
    return [*outside, *upon]


def beyond_the_axes(figure):
    """Numbers of ticks that lie beyond the ends of their axis: they are there and not drawn."""
    found = []
    for axis in (axis for axes in figure.axes for axis in (axes.xaxis, axes.yaxis)):
        low, high = sorted(axis.get_view_interval())
        slack = 1e-9 * (high - low)
        for tick in axis.get_major_ticks():
            if not low - slack <= tick.get_loc() <= high + slack or not axis.axes.axison:
                found.append(tick.label1)
    return found


def seen(axes_figure):
    """Texts of a figure that are drawn on axes that are in use."""
    return [t.get_text() for t in axes_figure.findobj(Text)]


@pytest.mark.parametrize("picture", PICTURES)
@pytest.mark.parametrize("number", [1, 12, 30])
def test_no_words_upon_words_at_column_width(picture, number):
    figure = draw(picture, many(number))
    assert figure.get_size_inches()[0] * 25.4 == pytest.approx(85.0)
    assert figure.get_size_inches()[1] * 25.4 <= 235.1
    assert words_upon_words(figure) == []


@pytest.mark.parametrize("picture", PICTURES)
def test_letters_are_of_a_size_to_read(picture):
    sizes = {
        text.get_fontsize()
        for text in draw(picture, illustrated(make_record())).findobj(Text)
        if text.get_text()
    }
    assert min(sizes) >= 6.5


def test_the_check_finds_words_upon_words():
    figure = draw("probabilities", many(2))
    figure.axes[0].text(0.0, -0.5, "in the way")
    assert words_upon_words(figure) != []


@pytest.mark.parametrize("picture", PICTURES)
@pytest.mark.parametrize("name", [HOSTILE_NAMES[k] for k in (0, 1, 5, 6, 7, 13, 14, 16)])
def test_hostile_names_are_words(picture, name):
    svg = to_svg(draw(picture, illustrated_hostile(name)))
    assert "<script" not in svg
    assert "\u202e" not in svg
    assert svg.count("<svg") == 1


@pytest.mark.parametrize("picture", PICTURES)
def test_nothing_to_draw_is_said(picture):
    record = make_record(make_record()["candidates"][3], leader=None)
    record["candidates"][0] |= {"pictures": {}, "audit": [], "curvature": {}}
    texts = " ".join(t.get_text() for t in draw(picture, record).findobj(Text))
    assert "no" in texts.lower()
    assert len(to_png(draw(picture, record))) > 1000


def test_numbers_beyond_the_picture():
    record = illustrated(make_record())
    first = record["candidates"][0]
    first["audit"] += [
        {"rung": "far", "estimate": 1e9, "standard_error": NAN, "agreed": False, "note": ""},
        {"rung": "open", "estimate": NAN, "standard_error": NAN, "agreed": None, "note": ""},
        {"rung": "wide", "estimate": -41.0, "standard_error": math.inf, "agreed": None, "note": ""},
    ]
    first["curvature"]["directions"] += [
        {"combination": "a", "sd": math.inf, "share_from_data": 0.0},
        {"combination": "b", "sd": 1e-9, "share_from_data": -0.3},
        {"combination": "c", "sd": 0.5, "share_from_data": NAN},
    ]
    left, right = draw_candidate(first, "audit").axes[0].get_xlim()
    assert right - left < 100.0
    texts = " ".join(seen(draw_candidate(first, "curvature")))
    assert "share \u22120.30" in texts
    assert words_upon_words(draw_candidate(first, "curvature")) == []


def test_the_audit_shows_where_estimates_lie():
    first = make_candidate()
    figure = draw_candidate(first, "audit")
    places = {
        float(line.get_xdata()[0])
        for line in figure.axes[0].get_lines()
        if len(line.get_xdata()) == 1
    }
    assert {step["estimate"] for step in first["audit"]} <= places


def test_the_split_adds_up():
    figure = draw_weighing(make_record(), "split")
    assert "\u221233.118" not in " ".join(seen(figure))
    assert any(
        "\u221233.12 \u2212 8.10 = \u221241.213" in t.replace("8.095", "8.10") for t in seen(figure)
    )


def test_a_prediction_that_is_no_line_is_not_joined():
    one = make_pictures()["predictions"][0]
    rough = copy.deepcopy(one) | {"expected_mean": [float((7 * k) % 20) for k in range(20)]}
    rough["at"] = [float(k) for k in range(20)]
    lines = []
    for part in (one, rough):
        candidate = make_candidate(pictures=make_pictures(predictions=[part]))
        axes = draw_candidate(candidate, "predictions").axes[0]
        lines.append([line for line in axes.get_lines() if line.get_linestyle() == "-"])
    assert [len(found) for found in lines] == [1, 0]


@pytest.mark.parametrize("picture", PICTURES)
def test_the_same_record_gives_the_same_picture(picture):
    record = illustrated(make_record())
    assert to_svg(draw(picture, record)) == to_svg(draw(picture, record))


def test_the_users_style_stays_and_has_no_say():
    record = illustrated(make_record())
    plain = to_svg(draw("predictions", record))
    mine = {"lines.linewidth": 9.0, "font.size": 30.0, "text.usetex": True, "axes.grid": True}
    with mpl.rc_context(mine):
        before = dict(mpl.rcParams)
        assert to_svg(draw("predictions", record)) == plain
        assert dict(mpl.rcParams) == before


def test_pyplot_is_not_loaded():
    code = (
        "import sys; from tests.records import *; "
        "from evidence.report.figures.gallery import draw_weighing; "
        "from evidence.report.figures.canvas import to_png; "
        "to_png(draw_weighing(make_record(), 'overview')); "
        "assert 'matplotlib' in sys.modules; print('matplotlib.pyplot' in sys.modules)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert (done.stdout.strip(), done.returncode) == ("False", 0), done.stderr


@pytest.mark.parametrize(
    ("draw_one", "names"), [(draw_weighing, WEIGHING), (draw_candidate, CANDIDATE)]
)
def test_an_unknown_picture_lists_the_known_ones(draw_one, names):
    with pytest.raises(DeclarationError, match=f"knows the pictures {', '.join(names)}; got"):
        draw_one(make_record(), "histogram")


def test_without_matplotlib_the_line_to_type_is_given(monkeypatch):
    monkeypatch.setitem(sys.modules, "matplotlib", None)
    with pytest.raises(ImportError, match=r"pip install 'laplace-model-evidence\[report\]'"):
        draw_weighing(make_record(), "overview")


@pytest.mark.parametrize("picture", CAPTIONS)
def test_a_picture_without_content_is_described_as_such(picture):
    record = make_record(make_record()["candidates"][3])
    aim = record if picture == "overview" else record["candidates"][0]
    assert described(picture, aim).startswith("no loss: ")
