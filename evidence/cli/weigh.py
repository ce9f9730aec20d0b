"""`evidence weigh`: the candidates of a study on its data."""

from __future__ import annotations

from typing import Any

import click

from evidence.cli.program import DOUBTED, NOT_SETTLED, OK, STATUS, main, reporting
from evidence.cli.shared import (
    check_saves,
    debug_option,
    deliver,
    depth_option,
    json_option,
    narrowed,
    only_option,
    printing_to_stderr,
    quiet_option,
    save_option,
    seed_option,
    staying,
    without_repeated_warnings,
)


@main.command(epilog=STATUS)
@click.argument("study_path", metavar="STUDY")
@click.option(
    "--data", "data_path", metavar="FILE", help="Weigh on this file in place of the study's own."
)
@save_option
@depth_option
@only_option
@seed_option
@json_option
@quiet_option
@debug_option
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
    check_saves(saves)
    from evidence.report.writing import show_pictures

    options = {"depth": depth, "seed": seed, "quiet": quiet, "pictures": show_pictures(saves)}
    record = _weigh_study(study_path, data_path, only, **options)
    deliver(record, saves, as_json=as_json, quiet=quiet)
    if any(c["trust"] in ("doubtful", "failed") for c in record["candidates"]):
        return DOUBTED
    return NOT_SETTLED if require_settled and not record["settled"] else OK


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

    with ProgressLine(wanted=not quiet) as progress, printing_to_stderr():
        progress("reading the study")
        from evidence.study import read_study

        study = narrowed(read_study(study_path, data_path), only)
        from evidence.weighing import weigh as weigh_models

        with without_repeated_warnings(), staying():
            weighing = weigh_models(study, depth=depth, seed=seed, progress=progress)
            if pictures:
                progress("preparing the pictures")
            return weighing.to_dict(pictures=pictures)
