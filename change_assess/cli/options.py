"""Options that several commands share, each defined once."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

TABLES, LABELS, DESIGN, OUTPUT = "Tables", "Labels", "Design and estimator", "Output"

Study = Annotated[Path | None, typer.Option("--study", help="Study file that states options; flags beat it.")]
Out = Annotated[Path | None, typer.Option("--out", help="Folder for the results.", rich_help_panel=OUTPUT)]
Quiet = Annotated[bool, typer.Option("--quiet", help="Print nothing but errors.", rich_help_panel=OUTPUT)]
Json = Annotated[bool, typer.Option("--json", help="Print JSON for machines.", rich_help_panel=OUTPUT)]
Seed = Annotated[int | None, typer.Option("--seed", help="Seed of everything random.")]

Maps = Annotated[
    list[str] | None,
    typer.Argument(help="Rasters, one a date in order of time; FILE.tif:BAND names a band.", show_default=False),
]
Dates = Annotated[
    str | None, typer.Option("--dates", help="Names of the dates, as in 2016,2019.", rich_help_panel=LABELS)
]
Legend = Annotated[
    Path | None,
    typer.Option("--legend", help="Table of code, name[, colour, group].", rich_help_panel=LABELS),
]
ChangeClass = Annotated[
    list[str] | None,
    typer.Option(
        "--change-class",
        help='Recipe "NAME=FROM,…>TO,…", first match wins; * is every class the other side does not name.',
        rich_help_panel=LABELS,
    ),
]
Workers = Annotated[int | None, typer.Option("--workers", help="Threads (default: up to four).")]

Sample = Annotated[
    Path | None, typer.Option("--sample", help="Sample table (CSV, GeoPackage, GeoParquet).", rich_help_panel=TABLES)
]
Strata = Annotated[
    Path | None, typer.Option("--strata", help="Strata table: stratum, units, area_ha.", rich_help_panel=TABLES)
]
Column = Annotated[
    list[str] | None,
    typer.Option("--column", help="OURS=THEIRS: their name of a column, as in unit=plot_id.", rich_help_panel=TABLES),
]
Reference = Annotated[
    str | None,
    typer.Option("--reference", help="Reference label column, one a date: COL[,COL…].", rich_help_panel=LABELS),
]
