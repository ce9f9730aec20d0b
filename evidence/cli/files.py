"""`evidence show` and `evidence new`: a saved result, and a study to begin with."""

from __future__ import annotations

import os
from collections.abc import Iterable, Mapping
from typing import Any

import click

from evidence.cli.program import OK, main, reporting
from evidence.cli.shared import (
    check_saves,
    choose,
    debug_option,
    deliver,
    json_option,
    save_option,
    show_batch,
)


@main.command()
@click.argument("result_path", metavar="RESULT")
@save_option
@click.option(
    "--only",
    metavar="NAME",
    multiple=True,
    help="Show this candidate in full: posterior and audit. May be given more than once.",
)
@json_option
@debug_option
@reporting
def show(result_path: str, saves: tuple[str, ...], only: tuple[str, ...], as_json: bool) -> int:
    """Show a saved RESULT: the file of `weigh --save`, or the folder of `weigh-many`."""
    if os.path.isdir(result_path):
        return _show_store(result_path, saves, only, as_json=as_json)
    from evidence.report.json_form import read_record

    check_saves(saves)
    record = read_record(result_path)
    chosen = choose(only, [c["candidate"] for c in record["candidates"]])
    deliver(record, saves, as_json=as_json, quiet=bool(only))
    if only and not as_json:
        _show_candidates(record, chosen)
    return OK


@main.command()
@click.argument("path", metavar="PATH")
@debug_option
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
    starter = Path(__file__).parents[1].joinpath("starter_study.txt").read_text(encoding="utf-8")
    create_text(path, starter.replace("THIS_FILE", Path(path).name))
    click.echo(f"Wrote {path}. Run it: evidence weigh {shlex.quote(path)}")
    return OK


def _show_store(path: str, saves: Iterable[str], only: Iterable[str], *, as_json: bool) -> int:
    if saves or only:
        raise click.UsageError("--save and --only are for the result of one weighing, a file.")
    from evidence.batches.batch import Batch

    show_batch(Batch.open(path), as_json=as_json)
    return OK


def _show_candidates(record: Mapping[str, Any], names: Iterable[str]) -> None:
    from evidence.report.text import CandidateView
    from evidence.report.text import show as show_view

    candidates = {c["candidate"]: c for c in record["candidates"]}
    for position, name in enumerate(names):
        if position:
            click.echo()
        show_view(CandidateView(candidates[name]))
