"""`evidence weigh-many`: the candidates of a study on each of many data sets."""

from __future__ import annotations

from typing import Any

import click

from evidence.cli.program import DEPTHS, DOUBTED, OK, STATUS, main, reporting
from evidence.cli.shared import (
    debug_option,
    printing_to_stderr,
    quiet_option,
    seed_option,
    show_batch,
    staying,
    without_repeated_warnings,
)


@main.command("weigh-many", epilog=STATUS)
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
@seed_option
@quiet_option
@debug_option
@reporting
def weigh_many(study_path: str, data_path: str, store: str, quiet: bool, **options: Any) -> int:
    """Weigh the candidates of a STUDY on each of many data sets.

    Killed or interrupted, the same command goes on where it was.
    """
    from evidence.report.progress import ProgressLine

    if options["workers"] and options["cluster"]:
        raise click.UsageError("give --workers or --cluster, not both.")
    with ProgressLine(wanted=not quiet) as progress, printing_to_stderr():
        progress("reading the study")
        from evidence.batches.command import run

        with without_repeated_warnings(), staying():
            batch = run(study_path, data_path, store, progress=progress, **options)
    if not quiet:
        show_batch(batch)
    trust = batch.counts["trust"]
    return DOUBTED if trust.get("doubtful") or trust.get("failed") else OK
