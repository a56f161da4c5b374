"""Drawing a stratified simple random sample of pixels, without replacement, from a stratum raster."""

from __future__ import annotations

import json
import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyproj
from numpy.typing import NDArray

from change_assess.errors import DesignError, InputError, nearest
from change_assess.files import sha256, write_text
from change_assess.legend import Legend, whole_number
from change_assess.maps.area import parsed
from change_assess.maps.cells import CELL, cell_counts, codes_at, pixels_of_ranks
from change_assess.maps.grid import MapSource, MapStack, Progress, check_same_grid, open_maps
from change_assess.tables import LegendSource, Table, read_legend, read_table
from change_assess.vectors import write_points

UNEQUAL_AREAS = 0.001
"""Pixel areas that differ by more than this share within a stratum are written for every unit."""

NAMES_STREAM = 0
"""Random stream of the unit names; the stream of a stratum is its code, which is never 0."""


@dataclass(frozen=True)
class DrawnSample:
    """A sample, and the record from which it can be drawn again.

    Attributes
    ----------
    sample : DataFrame
        One row a unit, in draw order: `unit, draw_order, stratum, inclusion_probability, x, y, longitude,
        latitude`, then `area_ha` where pixel areas differ, and a column of map labels for each date.
    record : dict
        Generator, seed, population and sample sizes, and SHA-256 of the stratum raster.
    """

    sample: pd.DataFrame
    record: dict[str, Any]

    def save(self, folder: str | os.PathLike[str]) -> list[Path]:
        """Write `design_record.json` first, then `sample.csv` and `sample.gpkg` (points); return the paths."""
        paths = [Path(folder) / name for name in ("design_record.json", "sample.csv", "sample.gpkg")]
        write_text(paths[0], json.dumps(self.record, indent=1, ensure_ascii=False) + "\n")
        write_text(paths[1], self.sample.to_csv(index=False, lineterminator="\n"))
        write_points(paths[2], self.sample, x="x", y="y", crs=self.record["crs"])
        return paths


def draw(
    stratum_raster: str | os.PathLike[str],
    strata: Table,
    sizes: Mapping[str, int],
    *,
    seed: int,
    maps: Sequence[MapSource] | None = None,
    dates: Sequence[object] | None = None,
    legend: LegendSource | None = None,
    map_name: str = "map",
    progress: Progress | None = None,
) -> DrawnSample:
    """Draw a stratified simple random sample of pixels without replacement.

    Any first part of the draw order is a valid stratified sample as well: strata take turns in proportion to
    their sizes, and the order inside a stratum is random.

    Parameters
    ----------
    stratum_raster : path
        Raster of stratum codes.
    strata : path or DataFrame
        `stratum, code, units` of every stratum of the raster.
    sizes : mapping of str to int
        Number of units to draw from each stratum.
    seed : int
        Seed of the random generator, 0 or more.
    maps, dates, legend : optional
        Maps on the grid of the stratum raster, whose labels are written as ``<map_name>_<date>``.
    map_name : str
        First part of the names of the label columns.
    progress : callable, optional
        Called with (pixels done, pixels in all) while the pixels of the strata are counted.

    Returns
    -------
    DrawnSample
        The sample and its record.

    Raises
    ------
    DesignError
        For sizes that the strata do not allow, or a raster that is not the one of the strata table.
    InputError
        For unknown strata, missing columns, or maps on another grid.
    """
    frame, seed = _frame(_strata_table(strata), sizes), _checked_seed(seed)
    named = None if legend is None else read_legend(legend)
    stack = _stratum_stack(stratum_raster)
    label_maps = None if maps is None else _label_maps(maps, dates, stack)
    codes = frame["code"].tolist()
    counts = cell_counts(stack, codes, progress)
    _check_population(frame, counts, stack)
    position, rank = _drawn_ranks(frame, seed)
    rows, columns = pixels_of_ranks(stack, codes, counts, position, rank)
    sample = _sample_table(frame.iloc[position], stack.grid.centres(rows, columns), stack.grid.crs, seed)
    if _areas_differ(stack, counts):
        sample["area_ha"] = stack.areas.of_rows(rows)
    if label_maps is not None:
        for date, labels in _labels(label_maps, codes_at(label_maps, rows, columns), named).items():
            sample[_label_column(f"{map_name}_{date}", sample)] = labels
    return DrawnSample(sample, _record(frame, stack, label_maps, seed))


def interleaved(sizes: Sequence[int]) -> NDArray[np.intp]:
    """Order in which strata take turns, so that any first part holds each within one unit of its share.

    Parameters
    ----------
    sizes : sequence of int
        Units of each stratum, none of them 0.

    Returns
    -------
    ndarray of int, shape (sum of sizes,)
        Position of the stratum whose turn it is.

    References
    ----------
    Tijdeman, R. (1980). The chairman assignment problem. Discrete Mathematics 32, 323-330: of the strata whose
    deficit is at least 1/(2H - 2), the one that would first be a whole unit behind.

    Examples
    --------
    >>> interleaved([4, 2]).tolist()
    [0, 1, 0, 0, 1, 0]
    """
    size, total = np.array(sizes, dtype=np.int64), int(sum(sizes))
    spread = max(1, 2 * len(size) - 2)
    taken, turns = np.zeros_like(size), np.zeros(total, dtype=np.intp)
    for step in range(total):
        deficit = ((step + 1) * size - total * taken) * spread
        room = (total * (spread - 1) - deficit) / size
        turns[step] = np.argmin(np.where(deficit >= total, room, np.inf))
        taken[turns[step]] += 1
    return turns


def _strata_table(strata: Table) -> pd.DataFrame:
    if isinstance(strata, pd.DataFrame):
        return strata
    table = read_table(strata, "strata table", required=["stratum", "code", "units"])
    numbers = {name: table.numbers(name, whole=True) for name in ("code", "units")}
    return table.frame.assign(**numbers)


def _frame(strata: pd.DataFrame, sizes: Mapping[str, int]) -> pd.DataFrame:
    """Strata that hold pixels, in order of their codes: stratum, code, units, size."""
    for column in ("stratum", "code", "units"):
        if column not in strata.columns:
            raise InputError("the strata table lacks a column", column=column, mend="It needs stratum, code and units.")
    frame = strata[["stratum", "code", "units"]].astype({"stratum": str, "code": np.int64, "units": np.int64})
    for column in ("stratum", "code"):
        twice = frame[column][frame[column].duplicated()]
        if len(twice):
            raise InputError(
                f"'{twice.iloc[0]}' stands twice in the strata table",
                column=column,
                mend="Keep one row for each stratum.",
            )
    if (frame["code"] < 1).any():
        raise InputError("a stratum has a code below 1", column="code", mend="Use codes from 1; 0 stands for no data.")
    wanted = _checked_sizes(sizes, frame["stratum"].tolist())
    frame["size"] = [wanted.get(name, 0) for name in frame["stratum"]]
    for name, units, size in frame[["stratum", "units", "size"]].itertuples(index=False):
        _check_size(name, units, size)
    return frame[frame["units"] > 0].sort_values("code", ignore_index=True)


def _checked_sizes(sizes: Mapping[str, int], known: Sequence[str]) -> dict[str, int]:
    wanted: dict[str, int] = {}
    for name, size in sizes.items():
        if str(name) not in known:
            raise InputError(
                f"a sample size is given for '{name}', which is not in the strata table",
                value=name,
                mend=f"Use the names of the table.{nearest(name, known)}",
            )
        number = whole_number(str(size))
        if number is None or number < 0:
            raise InputError(
                f"the sample size {size} of stratum '{name}' is not a whole number", value=size, mend="Give 2 or more."
            )
        wanted[str(name)] = number
    return wanted


def _check_size(name: str, units: int, size: int) -> None:
    if size > units:
        raise DesignError(
            f"Stratum '{name}' has {units} pixels, and {size} were asked for. Ask for {units} at most, a census of it."
        )
    if size < min(2, units):
        raise DesignError(
            f"Stratum '{name}' would get {size} of its {units} pixels; a variance needs at least 2. Give it a size of "
            "2 or more, or merge it with another stratum before drawing."
        )


def _checked_seed(seed: int) -> int:
    if isinstance(seed, bool) or not isinstance(seed, int | np.integer) or seed < 0:
        raise InputError(
            f"the seed {seed!r} is not a whole number of 0 or more", value=seed, mend="Give one, such as 20260801."
        )
    return int(seed)


def _stratum_stack(path: str | os.PathLike[str]) -> MapStack:
    stack = open_maps(path, ["strata"])
    if stack.bands[0].dtype not in ("uint8", "uint16"):
        raise InputError(
            f"its pixels are of type {stack.bands[0].dtype}, and stratum codes are bytes or 16-bit numbers from 0",
            file=stack.bands[0].path,
            mend="Write it with gdal_translate -ot UInt16.",
        )
    return stack


def _label_maps(maps: Sequence[MapSource], dates: Sequence[object] | None, stack: MapStack) -> MapStack:
    labels = open_maps(maps, dates)
    check_same_grid(stack.bands[0].path, stack.grid, labels.bands[0].path, labels.grid)
    return labels


def _check_population(frame: pd.DataFrame, counts: NDArray[np.int64], stack: MapStack) -> None:
    held = counts.sum(axis=(0, 1))
    for name, units, found in zip(frame["stratum"], frame["units"], held.tolist(), strict=True):
        if units != found:
            raise DesignError(
                f"Stratum '{name}' has {units} pixels in the strata table and {found} in {stack.bands[0].path}. "
                "Use the raster and the table that were made together."
            )


def _generator(seed: int, stream: int) -> np.random.Generator:
    return np.random.Generator(np.random.PCG64(np.random.SeedSequence([seed, stream])))


def _drawn_ranks(frame: pd.DataFrame, seed: int) -> tuple[NDArray[np.intp], NDArray[np.int64]]:
    """Row in the frame, and rank within the stratum, of each drawn pixel, in draw order."""
    position = interleaved(frame["size"].tolist())
    rank = np.zeros(len(position), dtype=np.int64)
    for row, code, units, size in frame[["code", "units", "size"]].itertuples():
        rank[position == row] = _generator(seed, code).choice(units, size, replace=False)
    return position, rank


def _sample_table(
    strata: pd.DataFrame, centres: tuple[NDArray[np.float64], NDArray[np.float64]], crs: str, seed: int
) -> pd.DataFrame:
    """Table of the sample; `strata` and `centres` hold one entry for each unit, in draw order."""
    x, y = centres
    to_degrees = pyproj.Transformer.from_crs(parsed(crs), "EPSG:4326", always_xy=True)
    longitude, latitude = to_degrees.transform(x, y)
    return pd.DataFrame(
        {
            "unit": _unit_names(len(strata), seed),
            "draw_order": np.arange(1, len(strata) + 1),
            "stratum": strata["stratum"].to_numpy(),
            "inclusion_probability": (strata["size"] / strata["units"]).to_numpy(),
            "x": x,
            "y": y,
            "longitude": longitude,
            "latitude": latitude,
        }
    )


def _unit_names(number: int, seed: int) -> list[str]:
    """Names in random order, so that a name tells nothing about the stratum or the place in the draw order."""
    digits = max(5, len(str(number)))
    return [f"u{i + 1:0{digits}d}" for i in _generator(seed, NAMES_STREAM).permutation(number)]


def _areas_differ(stack: MapStack, counts: NDArray[np.int64]) -> bool:
    """Whether pixel areas differ by more than 0.1 % over the rows of cells that hold any one stratum."""
    if not stack.areas.by_row:
        return False
    for position in range(counts.shape[2]):
        held = np.flatnonzero(counts[:, :, position].any(axis=1))
        areas = stack.areas.hectares[held[0] * CELL : (held[-1] + 1) * CELL]
        if areas.max() > areas.min() * (1 + UNEQUAL_AREAS):
            return True
    return False


def _label_column(name: str, sample: pd.DataFrame) -> str:
    if name in sample.columns:
        raise InputError(f"the label column '{name}' would stand twice", column=name, mend="Give another map name.")
    return name


def _labels(maps: MapStack, codes: NDArray[np.int64], legend: Legend | None) -> dict[str, Any]:
    """Labels of the units by date: class names, or codes if there is no legend; empty where a map has no data."""
    return {
        date: _named(column, band.nodata, legend, band.label)
        for date, band, column in zip(maps.dates, maps.bands, codes, strict=True)
    }


def _named(codes: NDArray[np.int64], nodata: int | None, legend: Legend | None, file: str) -> Any:
    if legend is None:
        return pd.array([None if c == nodata else c for c in codes.tolist()], dtype="Int64")
    names = {c.code: c.name for c in legend.classes}
    unknown = sorted(set(codes.tolist()) - set(names) - {nodata})
    if unknown:
        raise InputError(
            f"it holds codes that the legend does not: {', '.join(map(str, unknown))}",
            file=file,
            value=unknown[0],
            mend="Add them to the legend, or declare the no-data code of the file.",
        )
    return ["" if code == nodata else names[code] for code in codes.tolist()]


def _record(frame: pd.DataFrame, stack: MapStack, maps: MapStack | None, seed: int) -> dict[str, Any]:
    band, labelled = stack.bands[0], zip(maps.dates, maps.bands, strict=True) if maps else ()
    return {
        "format": 1,
        "design": "stratified simple random sampling of pixels without replacement",
        "generator": "PCG64",
        "numpy": np.__version__,
        "seed": seed,
        "stratum_raster": {"file": Path(band.path).name, "sha256": sha256(band.path)},
        "rows": stack.grid.height,
        "columns": stack.grid.width,
        "crs": stack.grid.crs,
        "cell_pixels": CELL,
        "strata": [
            {"stratum": name, "code": code, "N_h": units, "n_h": size}
            for name, code, units, size in frame[["stratum", "code", "units", "size"]].itertuples(index=False)
        ],
        "ranks_drawn": int(frame["size"].sum()),
        "maps": [{"date": date, "file": Path(b.path).name, "band": b.band} for date, b in labelled],
    }
