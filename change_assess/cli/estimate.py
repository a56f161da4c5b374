"""`change-assess estimate`."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Any

import typer

from change_assess.cli import options as o
from change_assess.cli import run


def estimate(
    sample: o.Sample = None,
    strata: o.Strata = None,
    clusters: Annotated[
        Path | None,
        typer.Option("--clusters", help="Selected clusters: stratum, cluster, units.", rich_help_panel=o.TABLES),
    ] = None,
    crossing: Annotated[
        Path | None,
        typer.Option(
            "--crossing", help="Exact map areas: [stratum,] map columns, units, area_ha.", rich_help_panel=o.TABLES
        ),
    ] = None,
    matrix: Annotated[
        Path | None,
        typer.Option("--matrix", help="Matrix of sample counts instead of a sample table.", rich_help_panel=o.TABLES),
    ] = None,
    matrix_rows: Annotated[
        str | None,
        typer.Option(
            "--matrix-rows", help="What the rows of the matrix are: strata or post-strata.", rich_help_panel=o.TABLES
        ),
    ] = None,
    raster: Annotated[
        list[str] | None,
        typer.Option(
            "--raster",
            help="Map raster, one a date: gives strata and mapped areas instead of tables.",
            rich_help_panel=o.TABLES,
        ),
    ] = None,
    column: o.Column = None,
    map_: Annotated[
        list[str] | None,
        typer.Option(
            "--map",
            help="Map label column, one a date: [NAME=]COL[,COL…]; repeat for several maps.",
            rich_help_panel=o.LABELS,
        ),
    ] = None,
    reference: o.Reference = None,
    dates: o.Dates = None,
    legend: o.Legend = None,
    change_class: o.ChangeClass = None,
    design: Annotated[
        str | None,
        typer.Option(
            "--design",
            help="simple, stratified, cluster or two-stage (default: by the tables).",
            rich_help_panel=o.DESIGN,
        ),
    ] = None,
    estimator: Annotated[
        str | None,
        typer.Option("--estimator", help="combined (default), separate or expansion.", rich_help_panel=o.DESIGN),
    ] = None,
    post_stratify: Annotated[
        str | None,
        typer.Option(
            "--post-stratify", help="cells or margins: weights to the crossing table.", rich_help_panel=o.DESIGN
        ),
    ] = None,
    unsampled: Annotated[
        list[str] | None,
        typer.Option(
            "--unsampled", help="Strata without labelled units: exclude, or STRATUM=INTO.", rich_help_panel=o.DESIGN
        ),
    ] = None,
    collapse: Annotated[
        list[str] | None,
        typer.Option("--collapse", help="STRATUM=INTO: pool strata for the variance only.", rich_help_panel=o.DESIGN),
    ] = None,
    fpc: Annotated[
        bool | None,
        typer.Option(
            "--fpc/--no-fpc",
            help="Finite population correction (default: with).",
            rich_help_panel=o.DESIGN,
            show_default=False,
        ),
    ] = None,
    level: Annotated[
        float | None, typer.Option("--level", help="Confidence level (default: 0.95).", rich_help_panel=o.DESIGN)
    ] = None,
    interval: Annotated[
        str | None,
        typer.Option(
            "--interval",
            help="default (exact where one stratum's proportion is asked, else normal), normal or t.",
            rich_help_panel=o.DESIGN,
        ),
    ] = None,
    kappa: Annotated[
        bool | None,
        typer.Option("--kappa/--no-kappa", help="Also give kappa.", rich_help_panel=o.DESIGN, show_default=False),
    ] = None,
    influence: Annotated[
        list[str] | None,
        typer.Option(
            "--influence",
            help='MEASURE:CLASS, as in "area_ha:forest loss": which units and strata carry it; repeat.',
            rich_help_panel=o.OUTPUT,
        ),
    ] = None,
    seed: o.Seed = None,
    study: o.Study = None,
    out: o.Out = None,
    quiet: o.Quiet = False,
    json: o.Json = False,
) -> None:
    """Areas and accuracies from a labelled sample, with standard errors and intervals.

    Example: change-assess estimate --sample sample.csv --strata strata.csv --map map --reference ref --out results/
    """
    given = {k: v for k, v in locals().items() if k not in ("study", "quiet", "json", "map_")} | {"map": map_}
    options = run.settled("estimate", study, given)
    from change_assess.reporting import terminal

    where = run.console(quiet=quiet or json)
    result, inputs = _estimated(options, quiet=quiet or json)
    if study is not None:
        inputs["study"] = study
    carried = [found for text in options.get("influence") or () for found in _influences(result, text)]
    written = []
    if options.get("out"):  # before anything is printed, so that a fault leaves one line
        written = result.save(options["out"], inputs)
        for name, found in carried:
            _save_influence(Path(options["out"]), name, found)
    if json:
        run.print_json(result.to_json(inputs))
    else:
        terminal.show_result(where, result, dict(carried))
    run.say_written(where, written)


def _estimated(options: dict[str, Any], *, quiet: bool) -> tuple[Any, dict[str, Any]]:
    """Read the tables, estimate; the result and the input files by role."""
    from change_assess.results.estimate import estimate as run_estimate

    sample, inputs = _sample(options, quiet=quiet)
    names = (
        "change_class",
        "fpc",
        "level",
        "interval",
        "estimator",
        "post_stratify",
        "unsampled",
        "collapse",
        "kappa",
        "seed",
    )
    given = {("change_classes" if n == "change_class" else n): options[n] for n in names if n in options}
    if "unsampled" in given and given["unsampled"] == ["exclude"]:
        given["unsampled"] = "exclude"
    if isinstance(options.get("legend"), (str, Path)):
        inputs["legend"] = options["legend"]
    if options.get("matrix"):
        maps: Any = "map"
        reference: Any = "reference"
    else:
        run.require(options, reference="--reference COLUMN")
        maps, reference = _maps(options.get("map")), run.parts(options["reference"])
    result = run_estimate(
        sample,
        map=maps,
        reference=reference,
        dates=run.parts(options.get("dates")),
        legend=options.get("legend"),
        **given,
    )
    return result, inputs


def _influences(result: Any, text: str) -> list[tuple[str, Any]]:
    """Influence on a measure of a class ("MEASURE:CLASS", or an overall measure) in every table that holds it."""
    from change_assess.errors import InputError

    measure, _, name = (p.strip() for p in text.partition(":"))
    keys = [k for k, c in result.contrasts.items() if not name or name in c.classes]
    if not keys:
        raise InputError(f"no table holds the class '{name}'", value=text, mend="Write --influence MEASURE:CLASS.")
    found = [(k, result.influence(measure, name, map=k.map, depth=k.depth, period=k.period)) for k in keys]
    return [(" ".join(p for p in (measure, name, k.map, k.depth, k.period) if p), i) for k, i in found]


def _save_influence(folder: Path, name: str, found: Any) -> None:
    from change_assess.files import slug, write_text
    from change_assess.reporting.figures import influence_bars

    for kind, table in (("units", found.units), ("strata", found.strata)):
        path = folder / f"influence-{kind}-{slug(name)}.csv"
        write_text(path, table.to_csv(index=False, lineterminator="\n"))
    unit = "hectares" if found.measure.endswith("_ha") else "share"
    influence_bars(found.units, found.strata, folder / f"influence-{slug(name)}", unit=unit)


def _sample(options: dict[str, Any], *, quiet: bool) -> tuple[Any, dict[str, Any]]:
    from change_assess.samples import read_matrix, read_sample

    columns = run.pairs(options.get("column") or [], "--column")
    if options.get("matrix"):
        run.require(options, strata="--strata TABLE")
        sample = read_matrix(options["matrix"], options["strata"], rows=options.get("matrix_rows", ""), columns=columns)
        return sample, {k: options[k] for k in ("matrix", "strata")}
    run.require(options, sample="--sample TABLE")
    tables = {k: options[k] for k in ("clusters", "crossing") if options.get(k)}
    inputs = {k: options[k] for k in ("sample", "strata", "clusters", "crossing") if options.get(k)}
    strata: Any = options.get("strata")
    if options.get("raster"):
        crossing, made = _from_rasters(options, columns, quiet=quiet)
        tables.setdefault("crossing", crossing)
        strata = made if strata is None else strata
        inputs |= {f"raster_{i}": r.rpartition(":")[0] or r for i, r in enumerate(options["raster"], start=1)}
    return read_sample(options["sample"], strata, columns=columns, design=options.get("design"), **tables), inputs


def _from_rasters(options: dict[str, Any], columns: dict[str, str], *, quiet: bool) -> tuple[Any, Any]:
    """Crossing table and strata table, counted from the map rasters."""
    from change_assess.errors import InputError
    from change_assess.maps.strata import strata_of_tally
    from change_assess.maps.tally import tally
    from change_assess.tables import read_table

    run.require(options, map="--map COLUMN,COLUMN")
    labels = next(iter(_maps(options["map"]).values()))
    if len(labels) != len(options["raster"]):
        raise InputError(
            f"{len(options['raster'])} rasters were given for {len(labels)} map columns",
            mend="Give one --raster a date, in the order of the columns of --map.",
        )
    units = read_table(options["sample"], "sample", columns=columns)
    with run.progress("Counting map areas", quiet=quiet) as progress:
        counted = tally(options["raster"], dates=labels, legend=options.get("legend"), progress=progress)
    if "stratum" not in units.frame.columns or options.get("strata"):
        return counted.crossing(), None
    names = units.words("stratum")[1]
    return counted.crossing(), strata_of_tally(counted, names, options.get("change_class") or ())


def _maps(texts: list[str] | None) -> Any:
    """Read "[NAME=]COL[,COL…]" texts to a mapping of name to columns."""
    from change_assess.errors import InputError

    if not texts:
        return None
    maps = {}
    for text in texts:
        name, equals, columns = text.partition("=")
        found = run.parts(columns if equals else text) or []
        title = name.strip() if equals else (found[0] if len(found) == 1 else "map")
        if title in maps:
            raise InputError(f"two maps are called '{title}'", value=text, mend="Write --map NAME=COLUMN for each.")
        maps[title] = found
    return maps
