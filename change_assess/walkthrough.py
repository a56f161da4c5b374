"""The demo: an invented region with known truth, and every step of the job run on it through the public functions."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from change_assess import files, scenario
from change_assess.interpreters import simulate_labels
from change_assess.labels.reconcile import Reconciled, reconcile
from change_assess.legend import ChangeClasses, Legend
from change_assess.maps.grid import open_maps, whole_map
from change_assess.maps.strata import stratify
from change_assess.maps.tally import Tally, tally
from change_assess.reporting import figures, terminal, texts
from change_assess.results.estimate import estimate
from change_assess.results.result import Result
from change_assess.sample.draw import draw
from change_assess.samples import read_sample

if TYPE_CHECKING:
    from rich.console import Console

RECIPES = (
    "stable forest=forest>forest",
    "forest loss=forest>*",
    "forest gain=*>forest",
)
"""Strata and change classes of the demo; what none matches is *other no change* or *other change*."""

SIZES = {"stable forest": 700, "other no change": 350}
"""Units drawn from the large strata."""

UNITS_PER_CHANGE = 110
"""Units drawn from each stratum of change."""

_STUDY = """\
# Study of the demo: {province} is invented, its maps, sample and labels are made up.
format = 1

[study]
title = "Forest change in {province}, {first} to {last} (invented)"
dates = {dates}
change_class = {recipes}
legend = "legend.csv"

[tally]
maps = {maps}
out = "tally"

[reconcile]
sample = "sample/sample.csv"
labels = {labels}
rule = "majority"
out = "labels"

[estimate]
sample = "labels/labelled_sample.csv"
strata = "strata/strata.csv"
crossing = "crossing.csv"
map = ["{map_columns}"]
reference = {references}
level = 0.95
out = "results"
"""


def demo(
    folder: str | Path, *, size: int = 4000, seed: int = 2016, console: Console | None = None
) -> tuple[Result, pd.DataFrame]:
    """Build the invented region in `folder` and go from its maps to estimates, held against the truth.

    Parameters
    ----------
    folder : path
        Receives maps, tables, results and figures.
    size : int
        Pixels along each side of the maps.
    seed : int
        Seed of the maps, the draw and the interpreters.
    console : rich Console, optional
        Where to report; nothing is printed without one.

    Returns
    -------
    result : Result
    comparison : DataFrame
        `period, class, estimate, se, lower, upper, interval, map_area_ha, true_area_ha` of the change classes.
    """
    folder = Path(folder)
    say = _Voice(console)
    say(f"The province of {scenario.PROVINCE} is invented, and so is all its data.")
    say(f"Making true and classified maps of {size:,} x {size:,} pixels at {len(scenario.DATES)} dates …")
    maps = scenario.build_maps(folder / "maps", size=size, seed=seed)
    _write_legend(folder / "legend.csv", maps.legend)
    paths = [str(maps.maps[d]) for d in maps.dates]
    say("Tallying the maps …")
    counted = tally(paths, dates=maps.dates, legend=maps.legend)
    counted.save(folder / "tally")
    say("Drawing a stratified sample and labelling it (three invented interpreters, not perfect) …")
    labelled = _labelled_sample(folder, maps, paths, seed)
    say("Estimating …")
    result = _estimated(folder, maps, counted)
    comparison = _comparison(result, maps)
    files.write_text(folder / "results" / "estimate_map_truth.csv", comparison.to_csv(index=False, lineterminator="\n"))
    drawn = _figures(folder, maps, result, comparison, labelled.sample)
    _write_study(folder, maps)
    say.tables(result, comparison)
    say(f"Everything is in {folder}. Figures: {', '.join(f'{f.png.parent.name}/{f.png.name}' for f in drawn)}.")
    say(f"The same estimates from the study file: change-assess estimate --study {folder / 'study.toml'}")
    return result, comparison


class _Voice:
    """Says what happens, where there is a console."""

    def __init__(self, console: Console | None) -> None:
        self.console = console

    def __call__(self, text: str) -> None:
        if self.console:
            self.console.print(text)

    def tables(self, result: Result, comparison: pd.DataFrame) -> None:
        if not self.console:
            return
        terminal.show_comparison(self.console, comparison, result.level)
        terminal.show_notices(self.console, result.warnings)
        self.console.print(*texts.CAUTIONS, sep="\n", style="dim")


def _write_legend(path: Path, legend: Legend) -> None:
    rows = [{"code": c.code, "name": c.name, "colour": c.colour, "group": c.group} for c in legend.classes]
    files.write_text(path, pd.DataFrame(rows).to_csv(index=False, lineterminator="\n"))


def _labelled_sample(folder: Path, maps: scenario.ScenarioMaps, paths: list[str], seed: int) -> Reconciled:
    raster = folder / "strata" / "strata.tif"
    strata = stratify(paths, RECIPES, maps.legend, dates=maps.dates, out=raster)
    files.write_text(folder / "strata" / "strata.csv", strata.to_csv(index=False, lineterminator="\n"))
    units = dict(zip(strata["stratum"], strata["units"].astype(int), strict=True))
    sizes = {stratum: min(SIZES.get(stratum, UNITS_PER_CHANGE), n) for stratum, n in units.items()}
    drawn = draw(raster, strata, sizes, seed=seed, maps=paths, dates=maps.dates, legend=maps.legend)
    drawn.save(folder / "sample")
    returned = simulate_labels(drawn.sample, maps.truth, maps.legend, seed=seed)
    for labels in returned:
        name = f"labels_{labels['interpreter'].iloc[0]}.csv"
        files.write_text(folder / "labels" / name, labels.to_csv(index=False, lineterminator="\n"))
    merged = reconcile(drawn.sample, returned, rule="majority")
    merged.save(folder / "labels")
    return merged


def _estimated(folder: Path, maps: scenario.ScenarioMaps, counted: Tally) -> Result:
    columns = {d: f"map_{d}" for d in maps.dates}
    inputs = {
        "sample": folder / "labels" / "labelled_sample.csv",
        "strata": folder / "strata" / "strata.csv",
        "crossing": folder / "crossing.csv",
    }
    crossing = counted.crossing().rename(columns=columns)
    files.write_text(inputs["crossing"], crossing.to_csv(index=False, lineterminator="\n"))
    result = estimate(
        read_sample(inputs["sample"], inputs["strata"], crossing=inputs["crossing"]),
        map=list(columns.values()),
        reference=[f"ref_{d}" for d in maps.dates],
        dates=maps.dates,
        legend=maps.legend,
        change_classes=RECIPES,
    )
    result.save(folder / "results", inputs)
    return result


def _comparison(result: Result, maps: scenario.ScenarioMaps) -> pd.DataFrame:
    """Estimate, interval, mapped area and truth of each change class and period."""
    rows = result.table[(result.table["depth"] == "change-class") & (result.table["domain"] == "")]
    area = rows[rows["measure"] == "area_ha"][["period", "class", "estimate", "se", "lower", "upper", "interval"]]
    mapped = rows[rows["measure"] == "map_area_ha"][["period", "class", "estimate"]]
    both = area.merge(mapped.rename(columns={"estimate": "map_area_ha"}), on=["period", "class"])
    return both.merge(_true_change(maps), on=["period", "class"], how="left").fillna({"true_area_ha": 0.0})


def _true_change(maps: scenario.ScenarioMaps) -> pd.DataFrame:
    names, table = ChangeClasses.of(RECIPES).table(maps.legend)
    place = {name: i for i, name in enumerate(maps.legend.names)}
    true = scenario.true_areas(maps)
    which = table[true["from"].map(place).to_numpy(int), true["to"].map(place).to_numpy(int)]
    named = true.assign(**{"class": np.array(names)[which]})
    areas: pd.Series[float] = named.groupby(["period", "class"])["area_ha"].sum()
    return areas.rename("true_area_ha").reset_index()


def _figures(
    folder: Path, maps: scenario.ScenarioMaps, result: Result, comparison: pd.DataFrame, sample: pd.DataFrame
) -> list[figures.Figure]:
    place = folder / "figures"
    shown = comparison[comparison["class"].isin(["forest loss", "forest gain"])]
    period = f"{maps.dates[0]}-{maps.dates[1]}"
    view = result.select(depth="change-class", period=period)
    return [
        _map_figure(place / "maps_and_sample", maps, sample),
        figures.estimates_against_map(shown, place / "estimate_map_truth", level=result.level),
        figures.matrix_heat(view.area_shares(), place / "matrix", title=f"Change {period}"),
    ]


def _map_figure(path: Path, maps: scenario.ScenarioMaps, sample: pd.DataFrame) -> figures.Figure:
    stack = open_maps([maps.maps[d] for d in maps.dates], maps.dates)
    covers = {d: whole_map(stack, i) for i, d in enumerate(maps.dates)}
    names, table = scenario.CHANGES.table(maps.legend)
    place, table = np.full(256, -1, np.int8), table.astype(np.int8)
    place[maps.legend.codes] = np.arange(len(maps.legend.codes))
    changes: dict[str, Any] = {}
    for a, b in zip(maps.dates[:-1], maps.dates[1:], strict=True):
        first, second = place[covers[a]], place[covers[b]]
        changes[f"{a}-{b}"] = np.where((first < 0) | (second < 0), np.int8(-1), table[first, second])
    return figures.map_panel(
        covers,
        maps.legend,
        path,
        extent=stack.grid.extent,
        changes=changes,
        change_names=names,
        points=sample[["x", "y", "stratum"]],
    )


def _write_study(folder: Path, maps: scenario.ScenarioMaps) -> None:
    dates = maps.dates
    people = sorted(p.name for p in (folder / "labels").glob("labels_*.csv"))
    text = _STUDY.format(
        province=scenario.PROVINCE,
        first=dates[0],
        last=dates[-1],
        dates=json.dumps(dates),
        recipes=json.dumps(list(RECIPES)),
        maps=json.dumps([f"maps/{maps.maps[d].name}" for d in dates]),
        labels=json.dumps([f"labels/{name}" for name in people]),
        map_columns=",".join(f"map_{d}" for d in dates),
        references=json.dumps([f"ref_{d}" for d in dates]),
    )
    files.write_text(folder / "study.toml", text)
