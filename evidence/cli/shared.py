"""What the commands share: options, the study they name, and where the result goes."""

from __future__ import annotations

import contextlib
import sys
from collections.abc import Iterable, Iterator, Mapping
from typing import TYPE_CHECKING, Any

import click

from evidence.cli.program import DEPTHS

if TYPE_CHECKING:
    from evidence.study import Study

__all__ = [
    "check_saves",
    "choose",
    "debug_option",
    "deliver",
    "depth_option",
    "json_option",
    "narrowed",
    "only_option",
    "printing_to_stderr",
    "quiet_option",
    "save_option",
    "seed_option",
    "show_batch",
    "staying",
    "without_repeated_warnings",
]

debug_option = click.option("--debug", is_flag=True, help="Show the traceback of an error.")
save_option = click.option(
    "--save",
    "saves",
    metavar="PATH",
    multiple=True,
    help="Write the result to PATH, in the form of its suffix: .html (a page with pictures), "
    ".json, .csv, .tex, .md, .png or .svg. May be given more than once.",
)
json_option = click.option(
    "--json",
    "as_json",
    is_flag=True,
    help="Write the numbers as JSON, and nothing else, to stdout; --save x.json keeps what the "
    "pictures need as well.",
)
seed_option = click.option(
    "--seed",
    type=click.IntRange(0, 2**32 - 1),
    default=0,
    show_default=True,
    help="Seed of the random draws.",
)
depth_option = click.option(
    "--depth",
    type=click.Choice(DEPTHS),
    default="standard",
    show_default=True,
    help="How far each log evidence is checked.",
)
only_option = click.option(
    "--only",
    metavar="NAME",
    multiple=True,
    help="Weigh only this candidate. May be given more than once.",
)
quiet_option = click.option(
    "--quiet", is_flag=True, help="Show neither the result nor the progress."
)


def check_saves(saves: Iterable[str]) -> None:
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


def narrowed(study: Study, only: tuple[str, ...]) -> Study:
    import dataclasses

    chosen = choose(only, [model.name for model in study.models])
    models = tuple(model for model in study.models if model.name in chosen)
    return dataclasses.replace(study, models=models)


def choose(only: tuple[str, ...], known: list[str]) -> list[str]:
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
def printing_to_stderr() -> Iterator[None]:
    """Keep standard output for the result, whatever the code of a study prints."""
    with contextlib.redirect_stdout(sys.stderr):
        yield


@contextlib.contextmanager
def staying() -> Iterator[None]:
    """Take it for a mistake when code of a study ends the program."""
    try:
        yield
    except SystemExit as error:
        raise RuntimeError(f"the study ended the program, SystemExit {error}") from error


@contextlib.contextmanager
def without_repeated_warnings() -> Iterator[None]:
    """Leave out the warnings that the result itself shows beside their candidates."""
    import warnings

    from evidence.complaints import EvidenceWarning

    with warnings.catch_warnings():
        warnings.simplefilter("ignore", EvidenceWarning)
        yield


def deliver(record: Mapping[str, Any], saves: Iterable[str], *, as_json: bool, quiet: bool) -> None:
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


def show_batch(batch: Any, *, as_json: bool = False) -> None:
    if as_json:
        from evidence.report.json_form import record_to_json

        click.echo(record_to_json(batch.to_dict()), nl=False)
        return
    from evidence.report.batch_text import batch_text

    click.echo(batch_text(batch.to_dict()))
