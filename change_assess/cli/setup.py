"""`change-assess start` and `demo`."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from change_assess.cli import options as o
from change_assess.cli import run


def start(
    maps: o.Maps = None,
    sample: o.Sample = None,
    strata: o.Strata = None,
    dates: o.Dates = None,
    legend: o.Legend = None,
    out: Annotated[Path, typer.Option("--out", help="Study file to write.")] = Path("study.toml"),
    force: Annotated[bool, typer.Option("--force", help="Replace an existing study file.")] = False,
    quiet: o.Quiet = False,
) -> None:
    """Write a commented study.toml from the maps or tables at hand, with the legend they hold.

    Example: change-assess start map_2016.tif map_2019.tif
    or: change-assess start --sample sample.csv --strata strata.csv
    """
    from change_assess.first_study import start as run_start

    path = run_start(
        out, maps=maps or None, sample=sample, strata=strata, dates=run.parts(dates), legend=legend, replace=force
    )
    step = "tally" if sample is None else "estimate"
    run.console(quiet=quiet).print(f"Written {path}. Read its comments, then: change-assess {step} --study {path}")


def demo(
    folder: Annotated[Path, typer.Argument(metavar="DIR", help="Folder to build the demo in.")],
    size: Annotated[int, typer.Option("--size", help="Pixels along each side of the invented maps.")] = 4000,
    seed: Annotated[int, typer.Option("--seed", help="Seed of everything random.")] = 2016,
    quiet: o.Quiet = False,
) -> None:
    """Build an invented region with known truth and run every step on it.

    Example: change-assess demo demo/
    """
    from change_assess.walkthrough import demo as run_demo

    run_demo(folder, size=size, seed=seed, console=run.console(quiet=quiet))
