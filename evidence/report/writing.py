"""Saving a result: the form by the suffix, and either the whole file or none."""

from __future__ import annotations

import contextlib
import importlib.util
import os
import secrets
import shutil
from collections.abc import Callable, Iterable, Iterator, Mapping
from pathlib import Path
from typing import Any

from evidence.complaints import (
    DataError,
    DeclarationError,
    load_optional,
    near_name,
    sentence,
)
from evidence.report.csv_form import record_to_csv
from evidence.report.json_form import record_to_json
from evidence.report.markdown import record_to_markdown
from evidence.report.wording import short_name

__all__ = [
    "FORMS",
    "ILLUSTRATED",
    "check_suffix",
    "check_writable",
    "create_text",
    "save",
    "show_pictures",
    "write_text",
]


def _page(record: Mapping[str, Any]) -> str:
    from evidence.report.page import record_to_page

    return record_to_page(record)


def _tex(record: Mapping[str, Any]) -> str:
    from evidence.report.tex import record_to_tex

    return record_to_tex(record)


def _png(record: Mapping[str, Any]) -> bytes:
    from evidence.report.figures.canvas import to_png
    from evidence.report.figures.gallery import draw_weighing

    return to_png(draw_weighing(record, "overview"))


def _svg(record: Mapping[str, Any]) -> str:
    from evidence.report.figures.canvas import to_svg
    from evidence.report.figures.gallery import draw_weighing
    from evidence.report.figures.words import CAPTIONS, described
    from evidence.report.vector import titled_svg

    drawn = to_svg(draw_weighing(record, "overview"))
    return titled_svg(drawn, CAPTIONS["overview"], described("overview", record))


# suffix -> the function that turns a record into the content of that form
FORMS: dict[str, Callable[[Mapping[str, Any]], str | bytes]] = {
    ".html": _page,
    ".json": record_to_json,
    ".csv": record_to_csv,
    ".tex": _tex,
    ".md": record_to_markdown,
    ".png": _png,
    ".svg": _svg,
}
# forms that show the pictures' parts of a record, or say what the predictive checks found
ILLUSTRATED = (".html", ".json", ".tex", ".md")
_DRAWN = (".html", ".png", ".svg")  # forms that need matplotlib
_PATH_LIMIT = 400


def save(record: Mapping[str, Any], path: str | Path) -> None:
    """Write a record to a file in the form that its suffix names.

    Parameters
    ----------
    record : dict
        What ``Weighing.to_dict()`` gives.
    path : str or Path
        Where to; a file that is there already is replaced.

    Raises
    ------
    DeclarationError
        No form has this suffix.
    DataError
        The file cannot be written. Nothing is left behind, an earlier file is untouched.
    """
    form = FORMS[check_suffix(path)]
    write_text(path, form(record))


def check_suffix(path: str | Path) -> str:
    """Return the suffix of a path in small letters.

    Raises
    ------
    DeclarationError
        No form has this suffix.
    ImportError
        The form shows pictures and matplotlib is not installed.
    """
    suffix = Path(path).suffix.lower()
    if suffix in _DRAWN and importlib.util.find_spec("matplotlib") is None:
        load_optional("matplotlib", "report")  # before the calculation and not after it
    if suffix in FORMS:
        return suffix
    raise DeclarationError(
        sentence(
            f"a result is saved by its suffix, one of {', '.join(FORMS)}",
            short_name(repr(str(path)), _PATH_LIMIT),
            f"Choose one of the known suffixes.{near_name(suffix, FORMS)}".rstrip("?"),
        )
    )


def show_pictures(paths: Iterable[str | Path]) -> bool:
    """Whether one of the forms shows what has to be computed for pictures and checks."""
    return any(check_suffix(path) in ILLUSTRATED for path in paths)


def check_writable(path: str | Path) -> None:
    """Try out, before a long calculation, whether a file could be written at the path.

    Raises
    ------
    DataError
        It could not; nothing has been written.
    """
    target = Path(path)
    with _complaining(target):
        _refuse_by_sight(target)
        with _temporary(target) as (descriptor, _):
            os.close(descriptor)


def _refuse_by_sight(target: Path) -> None:
    if not target.parent.is_dir():
        raise _unwritable(target, f"there is no folder {short_name(target.parent, _PATH_LIMIT)}")
    if target.is_dir():
        raise _unwritable(target, "it is a folder")
    if target.exists() and not target.is_file():
        raise _unwritable(target, "it is not an ordinary file")
    if target.exists() and not os.access(target, os.W_OK):
        raise _unwritable(target, "it is write-protected")


def write_text(path: str | Path, text: str | bytes) -> None:
    """Write a file of text, or of bytes, in one stroke: whole, or not at all.

    Raises
    ------
    DataError
        The file cannot be written.
    """
    check_writable(path)
    with _complaining(Path(path)), _filled(path, text) as (temporary, target):
        os.replace(temporary, target)
        _sync_folder(target.parent)


def create_text(path: str | Path, text: str) -> None:
    """Write a text file that is not there yet, in one stroke.

    Raises
    ------
    DataError
        There is something at the path already, or the file cannot be written.
    """
    target = Path(path)
    if os.path.lexists(target):
        raise _unwritable(target, "it is there already and is not overwritten")
    check_writable(target)
    with _complaining(target), _filled(path, text) as (temporary, _):
        # taken empty first: fails where something came in between, on every file system
        os.close(os.open(target, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o666))
        try:
            os.replace(temporary, target)
        except BaseException:
            target.unlink(missing_ok=True)
            raise


def _unwritable(path: Path, reason: str) -> DataError:
    return DataError(
        sentence(
            f"{short_name(path, _PATH_LIMIT)} cannot be written: {reason}",
            remedy="Give another path",
        )
    )


@contextlib.contextmanager
def _complaining(path: Path) -> Iterator[None]:
    try:
        yield
    except DataError:
        raise
    except (OSError, ValueError) as error:  # ValueError: a path with a null character
        reason = getattr(error, "strerror", None) or str(error)
        raise _unwritable(path, reason[:1].lower() + reason[1:]) from None


@contextlib.contextmanager
def _temporary(path: str | Path) -> Iterator[tuple[int, Path]]:
    """Open a new file beside the target, of the target's later permissions; remove it after."""
    folder = Path(os.path.realpath(path)).parent
    temporary = folder / f".evidence-{secrets.token_hex(8)}.tmp"
    descriptor = os.open(temporary, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o666)
    try:
        yield descriptor, temporary
    finally:
        with contextlib.suppress(OSError):
            temporary.unlink(missing_ok=True)


@contextlib.contextmanager
def _filled(path: str | Path, text: str | bytes) -> Iterator[tuple[Path, Path]]:
    # a link is followed: the file it points to is the one to replace
    target = Path(os.path.realpath(path))
    with _temporary(path) as (descriptor, temporary):
        content = text
        if isinstance(text, str):
            content = text.encode("utf-8", errors="backslashreplace")
        with open(descriptor, "wb") as file:
            file.write(content)
            file.flush()
            os.fsync(file.fileno())
        if target.exists():
            shutil.copymode(target, temporary)
        yield temporary, target


def _sync_folder(folder: Path) -> None:
    """Make the new name itself last; some file systems cannot, and the file is there anyway."""
    with contextlib.suppress(OSError):
        descriptor = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(descriptor)
        finally:
            os.close(descriptor)
