"""`change-assess tally`, `stratify` and `draw`."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Any

import typer

from change_assess.cli import options as o
from change_assess.cli import run


def tally(
    maps: o.Maps = None,
    dates: o.Dates = None,
    legend: o.Legend = None,
    workers: o.Workers = None,
    study: o.Study = None,
    out: o.Out = None,
    quiet: o.Quiet = False,
    json: o.Json = False,
) -> None:
    """Count from-to transitions and areas of two or more maps on one grid.

    Example: change-assess tally map_2016.tif map_2019.tif --out tally/
    """
    given = {"maps": maps, "dates": dates, "legend": legend, "workers": workers, "out": out}
    options = run.settled("tally", study, given)
    run.require(options, maps="FIRST.tif SECOND.tif")
    from change_assess.maps.tally import tally as run_tally
    from change_assess.reporting import terminal

    where = run.console(quiet=quiet or json)
    with run.progress("Tallying", quiet=quiet or json) as progress:
        result = run_tally(options["maps"], **_map_options(options), workers=options.get("workers"), progress=progress)
    written = result.save(options["out"]) if options.get("out") else []
    if json:
        run.print_json(result.to_json())
    else:
        terminal.show_tally(where, result)
    run.say_written(where, written)


def stratify(
    maps: o.Maps = None,
    change_class: o.ChangeClass = None,
    dates: o.Dates = None,
    legend: o.Legend = None,
    workers: o.Workers = None,
    study: o.Study = None,
    out: o.Out = None,
    quiet: o.Quiet = False,
) -> None:
    """Write a stratum raster (strata.tif) and its table (strata.csv) from change classes.

    Example: change-assess stratify map_2016.tif map_2019.tif --legend legend.csv --change-class "forest loss=forest>*"
    --out strata/
    """
    given = {
        "maps": maps,
        "change_class": change_class,
        "dates": dates,
        "legend": legend,
        "workers": workers,
        "out": out,
    }
    options = run.settled("stratify", study, given)
    run.require(options, maps="FIRST.tif SECOND.tif", legend="--legend TABLE", out="--out FOLDER")
    from change_assess.files import write_text
    from change_assess.maps.strata import stratify as run_stratify

    where, folder = run.console(quiet=quiet), Path(options["out"])
    named = _map_options(options)
    with run.progress("Stratifying", quiet=quiet) as progress:
        table = run_stratify(
            options["maps"],
            options.get("change_class") or (),
            named["legend"],
            dates=named["dates"],
            out=folder / "strata.tif",
            workers=options.get("workers"),
            progress=progress,
        )
    path = write_text(folder / "strata.csv", table.to_csv(index=False, lineterminator="\n"))
    where.print(table.to_string(index=False, formatters={"area_ha": "{:,.2f}".format, "units": "{:,}".format}))
    run.say_written(where, [folder / "strata.tif", path])


def draw(
    strata_raster: Annotated[Path | None, typer.Argument(help="Stratum raster.", show_default=False)] = None,
    strata: o.Strata = None,
    size: Annotated[
        list[str] | None, typer.Option("--size", help="STRATUM=UNITS: how many units to draw; repeat.")
    ] = None,
    raster: Annotated[
        list[str] | None, typer.Option("--raster", help="Map whose labels to add, one a date; repeat.")
    ] = None,
    dates: o.Dates = None,
    legend: o.Legend = None,
    seed: o.Seed = None,
    study: o.Study = None,
    out: o.Out = None,
    quiet: o.Quiet = False,
) -> None:
    """Draw a stratified random sample of pixels; write sample.csv, sample.gpkg and the design record.

    Example: change-assess draw strata/strata.tif --strata strata/strata.csv --size "forest loss=150" --size
    "no change=500" --seed 7 --out sample/
    """
    given: dict[str, Any] = {
        "strata_raster": strata_raster,
        "strata": strata,
        "size": size,
        "raster": raster,
        "dates": dates,
        "legend": legend,
        "seed": seed,
        "out": out,
    }
    options = run.settled("draw", study, given)
    run.require(
        options, strata_raster="STRATA.tif", strata="--strata TABLE", size="--size STRATUM=UNITS", out="--out FOLDER"
    )
    if "seed" not in options:
        run.require(options, seed="--seed NUMBER")
    from change_assess.sample.draw import draw as run_draw

    where = run.console(quiet=quiet)
    sizes = _sizes(options["size"])
    with run.progress("Drawing", quiet=quiet) as progress:
        drawn = run_draw(
            options["strata_raster"],
            options["strata"],
            sizes,
            seed=options["seed"],
            maps=options.get("raster"),
            **_map_options(options),
            progress=progress,
        )
    where.print(
        f"Drawn {len(drawn.sample):,} units from {drawn.sample['stratum'].nunique()} strata, seed {options['seed']}."
    )
    run.say_written(where, drawn.save(options["out"]))


def _map_options(options: dict[str, Any]) -> dict[str, Any]:
    return {"dates": run.parts(options.get("dates")), "legend": options.get("legend")}


def _sizes(rules: list[str]) -> dict[str, int]:
    from change_assess.errors import InputError
    from change_assess.legend import whole_number

    sizes = {}
    for name, text in run.pairs(rules, "--size").items():
        number = whole_number(text)
        if number is None:
            raise InputError(f"'{text}' units of '{name}' is not a whole number", value=text, mend="Give a count.")
        sizes[name] = number
    return sizes
