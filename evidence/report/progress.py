"""One line on the terminal that says what a long calculation is doing."""

from __future__ import annotations

import shutil
import sys
import threading
import time
from types import TracebackType
from typing import IO, Self

from evidence.report.wording import in_words

__all__ = ["ProgressLine"]

PATIENCE = 2.0
BEAT = 0.5
_ERASE = "\r\x1b[2K"


class ProgressLine:
    """A line on standard error, drawn only on a terminal and only after two seconds.

    Called with a text, it says that text from then on; leaving the context removes the line.

    Parameters
    ----------
    stream : file, optional
        Where to draw; standard error when left out.
    wanted : bool
        False draws nothing at all.
    patience, beat : float
        Seconds before the line appears, and between two drawings.
    """

    def __init__(
        self,
        stream: IO[str] | None = None,
        *,
        wanted: bool = True,
        patience: float = PATIENCE,
        beat: float = BEAT,
    ) -> None:
        self._stream = sys.stderr if stream is None else stream
        self._wanted = wanted and self._stream.isatty()
        self._patience, self._beat = patience, beat
        self._doing = "working"
        self._begun = 0.0
        self._over = threading.Event()
        self._thread: threading.Thread | None = None

    def __call__(self, doing: str) -> None:
        """Say from now on what is being done."""
        self._doing = in_words(doing)

    def __enter__(self) -> Self:
        """Start the clock."""
        self._begun = time.monotonic()
        if self._wanted:
            # a daemon: an interrupted program does not wait for it
            self._thread = threading.Thread(target=self._draw, daemon=True)
            self._thread.start()
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        """Remove the line."""
        self._over.set()
        if self._thread is not None:
            self._thread.join()

    def _draw(self) -> None:
        if self._over.wait(self._patience):
            return
        try:
            while True:
                self._stream.write(_ERASE + self._line())
                self._stream.flush()
                if self._over.wait(self._beat):
                    break
            self._stream.write(_ERASE)
            self._stream.flush()
        except (OSError, ValueError):  # the terminal has gone; the calculation goes on
            return

    def _line(self) -> str:
        seconds = time.monotonic() - self._begun
        width = shutil.get_terminal_size().columns
        tail = f" ({seconds:.0f} s)"
        return self._doing[: max(0, width - 1 - len(tail))] + tail
