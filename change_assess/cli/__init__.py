"""The command line: thin skins over the public functions, and the one place where errors become a line and exit 1."""

from __future__ import annotations

import os
import sys
from typing import Annotated

import typer

from change_assess import __version__
from change_assess.cli.estimate import estimate
from change_assess.cli.labels import reconcile
from change_assess.cli.maps import draw, stratify, tally
from change_assess.cli.setup import demo, start
from change_assess.errors import ChangeAssessError

app = typer.Typer(
    add_completion=False,
    no_args_is_help=True,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
    help="Area of land change with confidence intervals, and map accuracy, from a probability sample.",
)
for command in (demo, start, tally, stratify, draw, reconcile, estimate):
    app.command()(command)


def _show_version(wanted: bool) -> None:
    if wanted:
        print(f"change-assess {__version__}")
        raise typer.Exit


@app.callback()
def _options(
    version: Annotated[
        bool, typer.Option("--version", help="Show the version and stop.", callback=_show_version, is_eager=True)
    ] = False,
) -> None:
    pass


def main() -> None:
    """Run the command line: exit code 0 done, 1 the input is at fault (one line says what), 2 wrong usage."""
    try:
        app()
    except ChangeAssessError as error:
        print(f"change-assess: {error}", file=sys.stderr)
        sys.exit(1)
    except BrokenPipeError:  # the reader of our output has gone, as `head` does
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        sys.exit(1)
