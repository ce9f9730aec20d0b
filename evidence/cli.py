"""The command line. Everything beyond click is imported inside the command that needs it."""

from __future__ import annotations

import contextlib
import functools
import os
import sys
from collections.abc import Callable, Iterable, Iterator, Mapping
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from evidence.study import Study

__all__ = ["main"]

OK, NOT_COMPUTED, WRONG_USAGE, DOUBTED, NOT_SETTLED, INTERRUPTED = 0, 1, 2, 3, 4, 130
DEPTHS = ("none", "quick", "standard", "thorough")

_STATUS = """\b
Exit status:
    0  computed; no number is doubtful or failed
    1  could not be computed: the study, the data or a file is at fault
    2  wrong usage: an option or an argument is at fault
    3  computed, but some number is doubtful or failed
    4  computed, but not settled (only with --require-settled);
       where 3 holds as well, the status is 3
  130  interrupted
"""


class Program(click.Group):
    """The program; ends with the status of its commands and never with a traceback."""

    def main(self, *args: Any, standalone_mode: bool = True, **extra: Any) -> Any:
        """Run a command and leave with its status."""
        if not standalone_mode:
            return super().main(*args, standalone_mode=False, **extra)
        sys.exit(self._status(*args, **extra))

    def _status(self, *args: Any, **extra: Any) -> int:
        try:
            status = super().main(*args, standalone_mode=False, **extra)
            sys.stdout.flush()
        except click.ClickException as error:
            error.show()
            return error.exit_code
        except (click.Abort, KeyboardInterrupt):
            click.echo("evidence: interrupted.", err=True)
            return INTERRUPTED
        except BrokenPipeError:
            # the reader has left; what is still in the buffer must not complain on the way out
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
            return NOT_COMPUTED
        return status or OK


@click.group(cls=Program, epilog=_STATUS, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="laplace-model-evidence", message="%(version)s")
def main() -> None:
    """Decide between statistical models by their log evidence.

    A STUDY is a Python file with models() and data(). It is code and is run: give only files
    that you trust. `evidence new PATH` writes one to begin with.
    """


def reporting(command: Callable[..., int]) -> Callable[..., int]:
    """Turn what goes wrong in a command into one message and a status."""

    @functools.wraps(command)
    def run(*, debug: bool, **options: Any) -> int:
        for stream in (sys.stdout, sys.stderr):
            # a terminal without a sign of a name shows its code instead of stopping
            if hasattr(stream, "reconfigure"):
                stream.reconfigure(errors="backslashreplace")
        try:
            return command(**options)
        except (click.ClickException, click.exceptions.Exit, click.Abort, BrokenPipeError):
            raise
        except Exception as error:
            _complain(error, debug)
            return NOT_COMPUTED

    return run


def _complain(error: BaseException, debug: bool) -> None:
    from evidence.complaints import DataError, DeclarationError
    from evidence.report.wording import in_words

    if debug:
        import traceback

        click.echo("".join(traceback.format_exception(error)), err=True, nl=False)
    said = str(error)
    if not isinstance(error, DeclarationError | DataError | ImportError):
        said = f"could not be computed ({type(error).__name__}: {said or 'no message'})"
        said += "." if debug else ". Add --debug for the traceback."
    click.echo(f"evidence: {in_words(said)}", err=True)


_debug = click.option("--debug", is_flag=True, help="Show the traceback of an error.")
_saves = click.option(
    "--save",
    "saves",
    metavar="PATH",
    multiple=True,
    help="Write the result to PATH, in the form of its suffix: .html (a page with pictures), "
    ".json, .csv, .tex, .md, .png or .svg. May be given more than once.",
)
_as_json = click.option(
    "--json",
    "as_json",
    is_flag=True,
    help="Write the numbers as JSON, and nothing else, to stdout; --save x.json keeps what the "
    "pictures need as well.",
)


_seed = click.option(
    "--seed",
    type=click.IntRange(0, 2**32 - 1),
    default=0,
    show_default=True,
    help="Seed of the random draws.",
)


@main.command(epilog=_STATUS)
@click.argument("study_path", metavar="STUDY")
@click.option(
    "--data", "data_path", metavar="FILE", help="Weigh on this file in place of the study's own."
)
@_saves
@click.option(
    "--depth",
    type=click.Choice(DEPTHS),
    default="standard",
    show_default=True,
    help="How far each log evidence is checked.",
)
@click.option(
    "--only",
    metavar="NAME",
    multiple=True,
    help="Weigh only this candidate. May be given more than once.",
)
@_seed
@_as_json
@click.option("--quiet", is_flag=True, help="Show neither the result nor the progress.")
@_debug
@click.option(
    "--require-settled", is_flag=True, help="End with status 4 unless the comparison is settled."
)
@reporting
def weigh(
    study_path: str,
    data_path: str | None,
    saves: tuple[str, ...],
    depth: str,
    only: tuple[str, ...],
    seed: int,
    as_json: bool,
    quiet: bool,
    require_settled: bool,
) -> int:
    """Weigh the candidates of a STUDY on its data."""
    _check_saves(saves)
    from evidence.report.writing import show_pictures

    options = {"depth": depth, "seed": seed, "quiet": quiet, "pictures": show_pictures(saves)}
    record = _weigh_study(study_path, data_path, only, **options)
    _deliver(record, saves, as_json=as_json, quiet=quiet)
    if any(c["trust"] in ("doubtful", "failed") for c in record["candidates"]):
        return DOUBTED
    return NOT_SETTLED if require_settled and not record["settled"] else OK


@main.command("weigh-many", epilog=_STATUS)
@click.argument("study_path", metavar="STUDY")
@click.option(
    "--data",
    "data_path",
    metavar="FOLDER",
    required=True,
    help="Folder or pattern of CSV or Parquet files, one per data set; or, with --by, one Parquet "
    "table.",
)
@click.option("--store", metavar="OUT", required=True, help="Folder for the results, as Parquet.")
@click.option("--by", metavar="COLUMN", help="Column that tells the data sets of a table apart.")
@click.option("--workers", type=click.IntRange(1), metavar="N", help="Use N worker processes.")
@click.option("--cluster", metavar="ADDRESS", help="Use the dask cluster at this address.")
@click.option(
    "--depth",
    type=click.Choice(DEPTHS[:3]),
    default="quick",
    show_default=True,
    help="How far each log evidence is checked; standard sends weak rows up the ladder.",
)
@_seed
@click.option("--quiet", is_flag=True, help="Show neither the result nor the progress.")
@_debug
@reporting
def weigh_many(study_path: str, data_path: str, store: str, quiet: bool, **options: Any) -> int:
    """Weigh the candidates of a STUDY on each of many data sets.

    Killed or interrupted, the same command goes on where it was.
    """
    from evidence.report.progress import ProgressLine

    if options["workers"] and options["cluster"]:
        raise click.UsageError("give --workers or --cluster, not both.")
    with ProgressLine(wanted=not quiet) as progress, _printing_to_stderr():
        progress("reading the study")
        from evidence.batches.command import run

        with _without_repeated_warnings(), _staying():
            batch = run(study_path, data_path, store, progress=progress, **options)
    if not quiet:
        _show_batch(batch)
    trust = batch.counts["trust"]
    return DOUBTED if trust.get("doubtful") or trust.get("failed") else OK


@main.command(epilog=_STATUS)
@click.argument("study_path", metavar="STUDY")
@click.option("--data", "data_path", metavar="FILE", help="Use this file for the study's own.")
@click.option(
    "--part",
    type=click.Choice(("both", "priors", "observations")),
    default="both",
    show_default=True,
    help="What is moved.",
)
@click.option(
    "--save",
    "saves",
    metavar="PATH",
    multiple=True,
    help="Write the result to PATH, .json or, of one part, .csv. May be given more than once.",
)
@click.option("--depth", type=click.Choice(DEPTHS), default="standard", show_default=True,
              help="How far each log evidence is checked.")  # fmt: skip
@click.option("--only", metavar="NAME", multiple=True,
              help="Weigh only this candidate. May be given more than once.")  # fmt: skip
@click.option("--seed", type=click.IntRange(0, 2**32 - 1), default=0, show_default=True,
              help="Seed of the random draws.")  # fmt: skip
@_as_json
@click.option("--quiet", is_flag=True, help="Show neither the result nor the progress.")
@_debug
@reporting
def stress(study_path: str, saves: tuple[str, ...], part: str, as_json: bool, quiet: bool,
           **options: Any) -> int:  # fmt: skip
    """Find what would overturn the verdict of a STUDY: other priors, fewer observations."""
    _check_stress_saves(saves, part)
    found, doubted = _stress_study(study_path, part, quiet=quiet, **options)
    from evidence.stress.command import save_stress

    save_stress(found, saves)
    if as_json:
        click.echo(found.to_json(), nl=False)
    elif not quiet:
        from evidence.report.wording import visible

        click.echo("\n".join(map(visible, repr(found).split("\n"))))
    return DOUBTED if doubted else OK


@main.command()
@click.argument("result_path", metavar="RESULT")
@_saves
@click.option(
    "--only",
    metavar="NAME",
    multiple=True,
    help="Show this candidate in full: posterior and audit. May be given more than once.",
)
@_as_json
@_debug
@reporting
def show(result_path: str, saves: tuple[str, ...], only: tuple[str, ...], as_json: bool) -> int:
    """Show a saved RESULT: the file of `weigh --save`, or the folder of `weigh-many`."""
    if os.path.isdir(result_path):
        return _show_store(result_path, saves, only, as_json=as_json)
    from evidence.report.json_form import read_record

    _check_saves(saves)
    record = read_record(result_path)
    chosen = _choose(only, [c["candidate"] for c in record["candidates"]])
    _deliver(record, saves, as_json=as_json, quiet=bool(only))
    if only and not as_json:
        _show_candidates(record, chosen)
    return OK


@main.command()
@click.argument("path", metavar="PATH")
@_debug
@reporting
def new(path: str) -> int:
    """Write a commented study to PATH that runs as it is."""
    import shlex
    from pathlib import Path

    from evidence.report.writing import create_text

    if Path(path).suffix != ".py":
        raise click.BadParameter(
            f"a study is a Python file, *.py; got {path!r}.", param_hint="PATH"
        )
    starter = Path(__file__).with_name("starter_study.txt").read_text(encoding="utf-8")
    create_text(path, starter.replace("THIS_FILE", Path(path).name))
    click.echo(f"Wrote {path}. Run it: evidence weigh {shlex.quote(path)}")
    return OK


def _show_store(path: str, saves: Iterable[str], only: Iterable[str], *, as_json: bool) -> int:
    if saves or only:
        raise click.UsageError("--save and --only are for the result of one weighing, a file.")
    from evidence.batches.batch import Batch

    _show_batch(Batch.open(path), as_json=as_json)
    return OK


def _show_batch(batch: Any, *, as_json: bool = False) -> None:
    if as_json:
        from evidence.report.json_form import record_to_json

        click.echo(record_to_json(batch.to_dict()), nl=False)
        return
    from evidence.report.batch_text import batch_text

    click.echo(batch_text(batch.to_dict()))


def _check_saves(saves: Iterable[str]) -> None:
    """Find out before the calculation whether its result can be kept."""
    if not saves:
        return
    from evidence.complaints import DeclarationError
    from evidence.report.writing import check_suffix, check_writable

    for path in saves:
        try:
            check_suffix(path)
        except DeclarationError as error:
            raise click.BadParameter(str(error), param_hint="--save") from None
    for path in saves:
        check_writable(path)


def _weigh_study(
    study_path: str,
    data_path: str | None,
    only: tuple[str, ...],
    *,
    depth: str,
    seed: int,
    quiet: bool,
    pictures: bool,
) -> dict[str, Any]:
    from evidence.report.progress import ProgressLine

    with ProgressLine(wanted=not quiet) as progress, _printing_to_stderr():
        progress("reading the study")
        from evidence.study import read_study

        study = _narrowed(read_study(study_path, data_path), only)
        from evidence.weighing import weigh as weigh_models

        with _without_repeated_warnings(), _staying():
            weighing = weigh_models(study, depth=depth, seed=seed, progress=progress)
            if pictures:
                progress("preparing the pictures")
            return weighing.to_dict(pictures=pictures)


def _check_stress_saves(saves: tuple[str, ...], part: str) -> None:
    if not saves:
        return
    from evidence.complaints import DeclarationError
    from evidence.stress.command import check_paths

    try:
        check_paths(saves, part)
    except DeclarationError as error:
        raise click.BadParameter(str(error), param_hint="--save") from None


def _stress_study(
    study_path: str,
    part: str,
    *,
    data_path: str | None,
    only: tuple[str, ...],
    depth: str,
    seed: int,
    quiet: bool,
) -> tuple[Any, bool]:
    """The stress of a study's verdict, and whether a number behind it is doubtful or failed."""
    from evidence.report.progress import ProgressLine

    with ProgressLine(wanted=not quiet) as progress, _printing_to_stderr():
        progress("reading the study")
        from evidence.study import read_study

        study = _narrowed(read_study(study_path, data_path), only)
        from evidence.stress.command import stress_parts
        from evidence.weighing import weigh as weigh_models

        with _without_repeated_warnings(), _staying():
            weighing = weigh_models(study, depth=depth, seed=seed, progress=progress)
            found = stress_parts(weighing, part, progress)
    return found, any(r.trust in ("doubtful", "failed") for r in weighing.values())


def _narrowed(study: Study, only: tuple[str, ...]) -> Study:
    import dataclasses

    chosen = _choose(only, [model.name for model in study.models])
    models = tuple(model for model in study.models if model.name in chosen)
    return dataclasses.replace(study, models=models)


def _choose(only: tuple[str, ...], known: list[str]) -> list[str]:
    """Return the names asked for, all where none was; a miss is wrong usage."""
    from evidence.complaints import near_name
    from evidence.report.wording import short_name

    for name in only:
        if name not in known:
            listed = ", ".join(short_name(k) for k in known)
            raise click.BadParameter(
                f"no candidate is named {short_name(name)!r}. There are: {listed}."
                f"{near_name(name, [short_name(k) for k in known])}",
                param_hint="--only",
            )
    return [name for name in known if not only or name in only]


@contextlib.contextmanager
def _printing_to_stderr() -> Iterator[None]:
    """Keep standard output for the result, whatever the code of a study prints."""
    with contextlib.redirect_stdout(sys.stderr):
        yield


@contextlib.contextmanager
def _staying() -> Iterator[None]:
    """Take it for a mistake when code of a study ends the program."""
    try:
        yield
    except SystemExit as error:
        raise RuntimeError(f"the study ended the program, SystemExit {error}") from error


@contextlib.contextmanager
def _without_repeated_warnings() -> Iterator[None]:
    """Leave out the warnings that the result itself shows beside their candidates."""
    import warnings

    from evidence.complaints import EvidenceWarning

    with warnings.catch_warnings():
        warnings.simplefilter("ignore", EvidenceWarning)
        yield


def _deliver(
    record: Mapping[str, Any], saves: Iterable[str], *, as_json: bool, quiet: bool
) -> None:
    from evidence.report.writing import save

    for path in saves:
        save(record, path)
    if as_json:
        from evidence.report.json_form import numbers_only, record_to_json

        click.echo(record_to_json(numbers_only(record)), nl=False)
    elif not quiet:
        from evidence.report.text import WeighingView
        from evidence.report.text import show as show_view

        show_view(WeighingView(record))


def _show_candidates(record: Mapping[str, Any], names: Iterable[str]) -> None:
    from evidence.report.text import CandidateView
    from evidence.report.text import show as show_view

    candidates = {c["candidate"]: c for c in record["candidates"]}
    for position, name in enumerate(names):
        if position:
            click.echo()
        show_view(CandidateView(candidates[name]))
