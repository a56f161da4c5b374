"""`change-assess reconcile`."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from change_assess.cli import options as o
from change_assess.cli import run


def reconcile(
    sample: o.Sample = None,
    labels: Annotated[
        list[Path] | None,
        typer.Option("--labels", help="Table of returned labels: unit, interpreter, label columns; repeat."),
    ] = None,
    rule: Annotated[str | None, typer.Option("--rule", help="first (default) or majority.")] = None,
    reference: o.Reference = None,
    column: o.Column = None,
    study: o.Study = None,
    out: o.Out = None,
    quiet: o.Quiet = False,
) -> None:
    """Merge returned labels into the sample; write labelled_sample.csv and disagreements.csv.

    Example: change-assess reconcile --sample sample.csv --labels anna.csv --labels ben.csv --out labels/
    """
    given = {"sample": sample, "labels": labels, "rule": rule, "reference": reference, "column": column, "out": out}
    options = run.settled("reconcile", study, given)
    run.require(options, sample="--sample TABLE", labels="--labels TABLE", out="--out FOLDER")
    from change_assess.labels.reconcile import reconcile as run_reconcile
    from change_assess.reporting import terminal

    where = run.console(quiet=quiet)
    merged = run_reconcile(
        options["sample"],
        options["labels"],
        rule=options.get("rule", "first"),
        reference=run.parts(options.get("reference")),
        columns=run.pairs(options.get("column") or [], "--column") or None,
    )
    where.print(
        f"{merged.counts['labelled']:,} of {merged.counts['units']:,} units labelled; of "
        f"{merged.counts['with_repeats']:,} "
        f"labelled by several, {merged.counts['agreeing']:,} agree at every date."
    )
    terminal.show_notices(where, merged.warnings)
    run.say_written(where, merged.save(options["out"]))
