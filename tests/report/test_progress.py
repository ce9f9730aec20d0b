"""The progress line: only on a terminal, only after a while, gone at the end."""

import io
import re
import time

import pytest

from evidence.report.progress import ProgressLine


class Terminal(io.StringIO):
    """A stream that says it is a terminal."""

    def isatty(self):
        return True


class GoneTerminal(Terminal):
    """A terminal that has been closed."""

    def write(self, text):
        raise OSError(f"gone before {text!r}")


def _wait_for(condition):
    deadline = time.monotonic() + 10.0
    while not condition() and time.monotonic() < deadline:
        time.sleep(0.005)
    return condition()


def test_it_says_what_is_being_done_and_goes_away():
    terminal = Terminal()
    with ProgressLine(terminal, patience=0.0, beat=0.01) as progress:
        progress("one pool: \x1b[31mmodes\nand more " + "x" * 500)
        assert _wait_for(lambda: "one pool" in terminal.getvalue())
    drawn = terminal.getvalue()
    assert drawn.endswith("\r\x1b[2K")
    lines = drawn.split("\r\x1b[2K")
    assert "one pool: \\x1b[31mmodes and more" in "".join(lines)
    assert all(len(line) < 200 and "\n" not in line for line in lines)
    assert re.search(r" \(\d+ s\)", drawn)


@pytest.mark.parametrize(
    ("stream", "options"),
    [
        (io.StringIO(), {"patience": 0.0}),
        (Terminal(), {"patience": 0.0, "wanted": False}),
        (Terminal(), {}),
    ],
)
def test_it_is_silent_elsewhere_and_at_first(stream, options):
    with ProgressLine(stream, **options) as progress:
        progress("one pool")
        time.sleep(0.05)
    assert stream.getvalue() == ""


def test_a_terminal_that_goes_away_does_not_stop_the_calculation():
    with ProgressLine(GoneTerminal(), patience=0.0, beat=0.01) as progress:
        progress("one pool")
        assert _wait_for(lambda: not progress._thread.is_alive())
