"""Study files: a Python file that says what is asked, which candidates there are, on which data."""

from __future__ import annotations

import hashlib
import inspect
import itertools
import re
import sys
import types
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from evidence.complaints import DataError, DeclarationError, near_name, sentence
from evidence.tables import NamedArrays, named_arrays

__all__ = ["Study", "read_study"]

_numbers = itertools.count(1)


@dataclass(frozen=True)
class Study:
    """A question, its candidates and its data.

    Attributes
    ----------
    title : str
        The first line of the file's docstring.
    text : str
        The paragraph after it, on one line.
    models : tuple
        The candidates, in the order of the file.
    data : NamedArrays
        Column name -> array.
    path : Path
        The file, absolute.
    fingerprint : str
        SHA-256 of the bytes that were run.
    """

    title: str
    text: str
    models: tuple[Any, ...]
    data: NamedArrays
    path: Path
    fingerprint: str

    def __repr__(self) -> str:
        names = [model.name for model in self.models]
        more = f", and {len(names) - 6} more" if len(names) > 6 else ""
        return (
            f"Study {self.title!r} ({self.path.name}): {len(names)} candidates\n"
            f"  candidates: {', '.join(names[:6])}{more}\n"
            f"  data: {self.data!r}"
        )


def read_study(path: str | Path, data_path: str | Path | None = None) -> Study:
    """Run a study file and collect what it declares.

    A study is code and is run: read only those you trust.

    Parameters
    ----------
    path : str or Path
        A Python file with a docstring, ``models()`` returning a list of candidates, and
        ``data(path=None)`` returning data of any kind that ``named_arrays`` takes.
    data_path : str or Path, optional
        Given to ``data`` in place of its own default.

    Returns
    -------
    Study
        What the file declares, with the fingerprint of what was run.

    Raises
    ------
    DeclarationError
        If the file is missing, is not Python, fails while it runs, or lacks a part.
    DataError
        If the data cannot be used; passed on as ``data`` raised it.
    """
    file = _find(Path(path))
    source = _read(file)
    module = _run(file, source)
    try:
        models = _collect_models(module, file)
        data = _collect_data(module, file, data_path)
    except BaseException:
        sys.modules.pop(module.__name__, None)
        raise
    title, text = _split_docstring(module.__doc__, file)
    return Study(title, text, models, data, file, hashlib.sha256(source).hexdigest())


def _find(path: Path) -> Path:
    file = path.expanduser()
    if file.suffix != ".py":
        raise DeclarationError(sentence("a study is a Python file, *.py", repr(str(path))))
    if file.is_dir():
        raise DeclarationError(f"{path} is a folder, and a study is a Python file, *.py.")
    if not file.exists():
        folder = file.parent
        neighbours = [p.name for p in folder.glob("*.py")] if folder.is_dir() else []
        raise DeclarationError(f"{path} does not exist.{near_name(file.name, neighbours)}")
    return file.resolve()


def _read(file: Path) -> bytes:
    try:
        return file.read_bytes()
    except OSError as error:
        raise DeclarationError(f"{file} cannot be read: {error.strerror or error}.") from error


def _run(file: Path, source: bytes) -> types.ModuleType:
    """Execute the bytes that were fingerprinted, as a module of a name of its own."""
    program = _compile(file, source)
    stem = re.sub(r"\W", "_", file.stem)
    module = types.ModuleType(f"_evidence_study_{next(_numbers)}_{stem}")
    module.__file__ = str(file)
    # Dataclasses and pickle look the module up while its own code still runs.
    sys.modules[module.__name__] = module
    try:
        _call(file, f"{file.name} failed", lambda: exec(program, module.__dict__))
    except BaseException:
        sys.modules.pop(module.__name__, None)
        raise
    return module


def _compile(file: Path, source: bytes) -> types.CodeType:
    try:
        return compile(source, str(file), "exec", flags=0, dont_inherit=True)
    except SyntaxError as error:
        line = f", line {error.lineno}" if error.lineno else ""
        text = f": {error.text.strip()}" if error.text and error.text.strip() else ""
        message = f"{file.name}{line} is not valid Python ({error.msg}){text}"
        raise DeclarationError(message) from error
    except (ValueError, UnicodeDecodeError) as error:
        raise DeclarationError(f"{file.name} is not valid Python ({error}).") from error


def _call(file: Path, doing: str, function: Callable[[], Any]) -> Any:
    """Call code of the study; what it raises is retold with the line of the study file."""
    try:
        return function()
    except (Exception, SystemExit) as error:
        line = _line_in(file, error)
        where = f" in line {line}" if line else ""
        said = f"{type(error).__name__}: {error}".rstrip(": ")
        remedy = None
        if isinstance(error, ModuleNotFoundError) and _is_neighbour(file, error.name):
            remedy = "A study cannot import a file beside it: copy what is needed"
        raise DeclarationError(sentence(f"{doing}{where}: {said}", remedy=remedy)) from error


def _line_in(file: Path, error: BaseException) -> int | None:
    line, frame = None, error.__traceback__
    while frame is not None:
        if frame.tb_frame.f_code.co_filename == str(file):
            line = frame.tb_lineno
        frame = frame.tb_next
    return line


def _is_neighbour(file: Path, name: str | None) -> bool:
    return bool(name) and file.with_name(f"{name.split('.')[0]}.py").exists()


def _function(module: types.ModuleType, file: Path, name: str, line: str) -> Callable[..., Any]:
    function = getattr(module, name, None)
    if function is None:
        own = [key for key, value in vars(module).items() if callable(value) and key[:1].isalpha()]
        raise DeclarationError(
            f"{file.name} has no function {name}(). Write: {line}.{near_name(name, own)}"
        )
    if not callable(function):
        kind = type(function).__name__
        message = f"{name} in {file.name} must be a function"
        raise DeclarationError(sentence(message, f"a {kind}", f"Write: {line}"))
    return function


def _accepts(function: Callable[..., Any], *arguments: object) -> bool:
    try:
        inspect.signature(function).bind(*arguments)
    except TypeError:
        return False
    return True


def _collect_models(module: types.ModuleType, file: Path) -> tuple[Any, ...]:
    function = _function(module, file, "models", "def models(): return [candidate, ...]")
    _function(module, file, "data", "def data(path=None): return read_data(path or ...)")
    if not _accepts(function):
        raise DeclarationError(f"models() in {file.name} must work without arguments.")
    models = _call(file, f"models() of {file.name} failed", function)
    expected = f"models() in {file.name} must return a list of candidates"
    if not isinstance(models, list | tuple):
        raise DeclarationError(sentence(expected, f"a {type(models).__name__}"))
    if not models:
        raise DeclarationError(sentence(expected, "an empty list"))
    for number, model in enumerate(models):
        if not isinstance(getattr(model, "name", None), str):
            got = f"a {type(model).__name__} at place {number}"
            raise DeclarationError(sentence(expected, got, "Each is an evidence.Model"))
    names = [model.name for model in models]
    for name in names:
        if names.count(name) > 1:
            raise DeclarationError(f"two candidates of {file.name} are named {name!r}.")
    return tuple(models)


def _collect_data(
    module: types.ModuleType, file: Path, data_path: str | Path | None
) -> NamedArrays:
    line = "def data(path=None): return read_data(path or ...)"
    function = _function(module, file, "data", line)
    arguments = () if data_path is None else (data_path,)
    if not _accepts(function, *arguments):
        message = f"data() in {file.name} must work with and without a path"
        raise DeclarationError(sentence(message, remedy=f"Write: {line}"))
    result = _call_data(file, function, arguments)
    if result is None:
        raise DeclarationError(f"data() in {file.name} returned None. Let it return the data.")
    return named_arrays(result)


def _call_data(file: Path, function: Callable[..., Any], arguments: tuple[object, ...]) -> object:
    caught: list[DataError] = []

    def attempt() -> object:
        try:
            return function(*arguments)
        except DataError as error:
            caught.append(error)
            return None

    result = _call(file, f"data() of {file.name} failed", attempt)
    if caught:
        raise caught[0]
    return result


def _split_docstring(docstring: str | None, file: Path) -> tuple[str, str]:
    first, _, rest = inspect.cleandoc(docstring or "").partition("\n")
    title = first.strip().removesuffix(".")
    text = " ".join(re.split(r"\n\s*\n", rest.strip())[0].split())
    return title or file.stem, text
