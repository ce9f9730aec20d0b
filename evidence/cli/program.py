"""The program: its exit statuses, and how a command reports what goes wrong."""

from __future__ import annotations

import functools
import os
import sys
from collections.abc import Callable
from typing import Any

import click

__all__ = ["DEPTHS", "DOUBTED", "NOT_SETTLED", "OK", "STATUS", "main", "reporting"]

OK, NOT_COMPUTED, WRONG_USAGE, DOUBTED, NOT_SETTLED, INTERRUPTED = 0, 1, 2, 3, 4, 130
DEPTHS = ("none", "quick", "standard", "thorough")

STATUS = """\b
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


@click.group(cls=Program, epilog=STATUS, context_settings={"help_option_names": ["-h", "--help"]})
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
