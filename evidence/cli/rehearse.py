"""`evidence rehearse`: could the design of a study have told its candidates apart."""

from __future__ import annotations

from typing import Any

import click

from evidence.cli.program import DEPTHS, DOUBTED, OK, STATUS, main, reporting
from evidence.cli.shared import (
    debug_option,
    json_option,
    narrowed,
    only_option,
    printing_to_stderr,
    quiet_option,
    seed_option,
    staying,
    without_repeated_warnings,
)


class Sizes(click.ParamType):
    """Whole numbers from 1 on with commas between them."""

    name = "sizes"

    def convert(
        self, value: Any, param: click.Parameter | None, ctx: click.Context | None
    ) -> tuple[int, ...]:
        """Turn "20,40" into (20, 40)."""
        if isinstance(value, tuple):
            return value
        try:
            sizes = tuple(int(part) for part in value.split(","))
        except ValueError:
            sizes = (0,)
        if min(sizes) < 1:
            self.fail(
                f"sizes are whole numbers from 1 on, as in 20,40,80; got {value!r}.", param, ctx
            )
        return sizes


@main.command(epilog=STATUS)
@click.argument("study_path", metavar="STUDY")
@click.option(
    "--repeats",
    type=click.IntRange(1),
    metavar="N",
    required=True,
    help="Data sets to simulate from each candidate, at each size.",
)
@click.option(
    "--sizes",
    type=Sizes(),
    metavar="N,N,...",
    help="Numbers of observations, e.g. 20,40,80: the rows of the study's data are thinned evenly "
    "or repeated. As many as there are, where not given.",
)
@click.option("--data", "data_path", metavar="FILE", help="The design, for the study's own.")
@click.option(
    "--save",
    "saves",
    metavar="PATH",
    multiple=True,
    help="Write the result to PATH: .json, .csv or .md. May be given more than once.",
)
@click.option("--store", metavar="OUT", help="Folder that keeps finished parts, as Parquet.")
@click.option(
    "--depth",
    type=click.Choice(DEPTHS),
    default="quick",
    show_default=True,
    help="How far each log evidence is checked.",
)
@only_option
@seed_option
@json_option
@quiet_option
@debug_option
@reporting
def rehearse(
    study_path: str,
    data_path: str | None,
    saves: tuple[str, ...],
    only: tuple[str, ...],
    as_json: bool,
    quiet: bool,
    **options: Any,
) -> int:
    """Simulate from the candidates of a STUDY, weigh each time, and count who leads.

    The responses in its data are replaced by simulated ones. With --store, the same command goes
    on where it was stopped.
    """
    _check_paths(saves)
    from evidence.report.progress import ProgressLine

    with ProgressLine(wanted=not quiet) as progress, printing_to_stderr():
        progress("reading the study")
        from evidence.study import read_study

        study = narrowed(read_study(study_path, data_path), only)
        from evidence.rehearsal import rehearse as rehearse_study

        with without_repeated_warnings(), staying():
            found = rehearse_study(study, progress=progress, **options)
    for path in saves:
        found.save(path)
    _show(found, as_json=as_json, quiet=quiet)
    return DOUBTED if any(run.doubted.any() for run in found.runs) else OK


def _check_paths(saves: tuple[str, ...]) -> None:
    """Find out before the calculation whether its result can be kept."""
    if not saves:
        return
    from evidence.complaints import DeclarationError
    from evidence.rehearsal.saving import check_suffix
    from evidence.report.writing import check_writable

    for path in saves:
        try:
            check_suffix(path)
        except DeclarationError as error:
            raise click.BadParameter(str(error), param_hint="--save") from None
        check_writable(path)


def _show(found: Any, *, as_json: bool, quiet: bool) -> None:
    if as_json:
        from evidence.report.json_form import record_to_json

        click.echo(record_to_json(found.to_dict()), nl=False)
    elif not quiet:
        from evidence.report.wording import visible

        click.echo("\n".join(map(visible, repr(found).split("\n"))))
