"""`evidence stress`: what would overturn the verdict of a study."""

from __future__ import annotations

from typing import Any

import click

from evidence.cli.program import DOUBTED, OK, STATUS, main, reporting
from evidence.cli.shared import (
    debug_option,
    depth_option,
    json_option,
    narrowed,
    only_option,
    printing_to_stderr,
    quiet_option,
    seed_option,
    staying,
    without_repeated_warnings,
)


@main.command(epilog=STATUS)
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
@depth_option
@only_option
@seed_option
@json_option
@quiet_option
@debug_option
@reporting
def stress(
    study_path: str,
    saves: tuple[str, ...],
    part: str,
    as_json: bool,
    quiet: bool,
    **options: Any,
) -> int:
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

    with ProgressLine(wanted=not quiet) as progress, printing_to_stderr():
        progress("reading the study")
        from evidence.study import read_study

        study = narrowed(read_study(study_path, data_path), only)
        from evidence.stress.command import stress_parts
        from evidence.weighing import weigh as weigh_models

        with without_repeated_warnings(), staying():
            weighing = weigh_models(study, depth=depth, seed=seed, progress=progress)
            found = stress_parts(weighing, part, progress)
    return found, any(r.trust in ("doubtful", "failed") for r in weighing.values())
