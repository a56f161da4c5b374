"""A commented study.toml from the maps or tables at hand."""

from __future__ import annotations

import json
import os
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path

from change_assess import files
from change_assess.errors import InputError
from change_assess.legend import Legend, LegendClass
from change_assess.tables import LegendSource, TextTable, legend_of_labels, read_legend, read_table

NOT_LABELS = {
    "unit",
    "stratum",
    "cluster",
    "area_ha",
    "inclusion_probability",
    "label_status",
    "draw_order",
    "x",
    "y",
    "longitude",
    "latitude",
}
MOST_CLASSES = 60
"""A column with more distinct texts is not taken for a label column."""

_HEAD = """\
# Study file of change-assess: one statement of the whole study. Run a step with --study {name}, for example
#     change-assess {example} --study {name}
# A key is the name of a flag with underscores; a flag on the command line beats this file. Paths are relative to
# this file. Lines that begin with # are comments: delete the # to use them.
format = 1

[study]
title = "Name your study"
{shared}
# Named change classes: NAME=FROM,…>TO,…  First match wins; * is every class that the other side does not name.
# change_class = ["forest loss=forest>*", "forest gain=*>forest"]
"""

_LEGEND = """\
# Classes that were found. Give each its name; colour and group are optional. A group can be used in recipes.
legend = [
{classes}
]"""

_MAPS = """
[tally]
maps = {maps}{own}
out = "tally"

[stratify]
maps = {maps}{own}
out = "strata"

# [draw]
# strata_raster = "strata/strata.tif"
# strata = "strata/strata.csv"
# size = ["no change=500", "forest loss=150"]
# raster = {maps}
# seed = 1
# out = "sample"
"""

_TABLES = """
[estimate]
sample = {sample}
{strata}
# Label columns: one a date, in order of time. The columns of the sample are: {columns}
{map}
{reference}
# What to do with strata that have no labelled unit: ["exclude"] or ["STRATUM=INTO"].
# unsampled = ["exclude"]
level = 0.95
fpc = true
# column = ["unit=their_name_of_it"]{own}
out = "results"
"""


_APART = "# The labels of the sample are not those of the maps: better give both one legend, under [study]."


def start(
    path: str | Path,
    *,
    maps: Sequence[str] | None = None,
    sample: str | Path | None = None,
    strata: str | Path | None = None,
    dates: Sequence[str] | None = None,
    legend: LegendSource | None = None,
    replace: bool = False,
) -> Path:
    """Write a commented study file.

    Parameters
    ----------
    path : path
        The study file to write; paths in it are written relative to its folder.
    maps : sequence of str, optional
        Rasters, one a date.
    sample, strata : path, optional
        Tables.
    dates : sequence of str, optional
    legend : Legend, path, DataFrame or class names, optional
        Taken instead of the classes that the maps or tables hold.
    replace : bool
        Replace an existing file.

    Returns
    -------
    Path

    Raises
    ------
    InputError
        If neither maps nor a sample is given, or the file exists and is not to be replaced.
    """
    path = Path(path)
    if path.exists() and not replace:
        raise InputError(
            f"{path} exists already and was left as it is", value=str(path), mend="Name another file, or use --force."
        )
    if not maps and sample is None:
        raise InputError("there is nothing to start from", mend="Name map rasters, or a sample with --sample.")
    given = None if legend is None else read_legend(legend)
    of_maps = _of_maps(maps, dates, given) if maps else None
    of_sample = _of_sample(sample, given) if sample is not None else None
    one = of_maps is None or of_sample is None or of_sample.fits(of_maps)
    shared = of_maps or of_sample
    assert shared is not None
    own = (
        "" if one else "\n{}\n# The labels of the sample are not those of the maps: give both one legend under [study]."
    )
    head = _HEAD.format(
        name=path.name,
        example="estimate" if sample is not None else "tally",
        shared=shared.lines() if one else "# Each command below has its own legend and dates.",
    )
    sections = ""
    if of_maps:
        paths = _listed([_relative(m, path) for m in maps or ()])
        sections += _MAPS.format(maps=paths, own=own.format(of_maps.lines()))
    if of_sample and sample is not None:
        sections += _tables_section(path, sample, strata, of_sample, own.format(of_sample.lines()))
    return files.write_text(path, head + sections)


@dataclass(frozen=True)
class _Found:
    """Classes and dates that the maps, or the sample, hold."""

    legend: Legend
    dates: tuple[str, ...]
    table: TextTable | None = None
    columns: dict[str, list[str]] = field(default_factory=dict)

    def fits(self, maps: _Found) -> bool:
        """Whether the labels of this sample are classes of the maps, at as many dates."""
        known = all(maps.legend.index(name) is not None for name in self.legend.names)
        return known and len(self.columns["ref"]) in (0, len(maps.dates))

    def lines(self) -> str:
        """Dates and legend as they stand in the study file."""
        dates = f"dates = {_listed(self.dates)}" if self.dates else '# dates = ["2016", "2019"]'
        classes = "\n".join(f"    {_class_line(c.code, c.name, c.colour, c.group)}," for c in self.legend.classes)
        return f"{dates}\n{_LEGEND.format(classes=classes)}"


def _of_maps(maps: Sequence[str], dates: Sequence[str] | None, legend: Legend | None) -> _Found:
    from change_assess.maps.tally import tally

    counted = tally(maps, dates=dates, legend=legend)
    codes = {int(c) for c in counted.trajectories[list(counted.dates)].to_numpy().ravel()} if legend is None else set()
    found = legend or Legend(tuple(LegendClass(code, f"class {code}") for code in sorted(codes)))
    return _Found(found, counted.dates)


def _of_sample(sample: str | Path, legend: Legend | None) -> _Found:
    table = read_table(sample, "sample")
    columns = _label_columns(table)
    return _Found(
        legend or legend_of_labels([(table, [*columns["map"], *columns["ref"]])]), (), table=table, columns=columns
    )


def _class_line(code: int, name: str, colour: str, group: str) -> str:
    extra = "".join(f", {k} = {_text(v)}" for k, v in (("colour", colour), ("group", group)) if v)
    return f"{{ code = {code}, name = {_text(name)}{extra} }}"


def _label_columns(table: TextTable) -> dict[str, list[str]]:
    """Columns that look like map and reference labels, by the beginning of their names."""
    few = [c for c in table.frame.columns if c not in NOT_LABELS and len(table.words(c)[1]) <= MOST_CLASSES]
    return {kind: [c for c in few if c.casefold().startswith(kind)] for kind in ("map", "ref")}


def _tables_section(path: Path, sample: str | Path, strata: str | Path | None, found: _Found, own: str) -> str:
    assert found.table is not None
    mapped, reference = found.columns["map"], found.columns["ref"]
    if len(mapped) != len(reference):
        mapped = []
    return _TABLES.format(
        sample=_text(_relative(sample, path)),
        strata=f"strata = {_text(_relative(strata, path))}" if strata else '# strata = "strata.csv"',
        columns=", ".join(map(str, found.table.frame.columns)),
        map=f"map = {_listed([','.join(mapped)])}" if mapped else '# map = ["map_2016,map_2019"]',
        reference=f"reference = {_listed(reference)}" if reference else '# reference = ["ref_2016", "ref_2019"]',
        own=own,
    )


def _relative(target: str | Path, study: Path) -> str:
    return Path(os.path.relpath(target, study.parent)).as_posix()


def _text(text: str) -> str:
    return json.dumps(text, ensure_ascii=False)  # TOML basic strings share JSON's escapes


def _listed(texts: Sequence[str]) -> str:
    return "[" + ", ".join(_text(str(t)) for t in texts) + "]"
