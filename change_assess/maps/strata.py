"""A stratum raster and its table, from named change classes of two or more maps."""

from __future__ import annotations

import os
from collections.abc import Iterable, Sequence
from concurrent.futures import Executor
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from rasterio.windows import Window

from change_assess.errors import InputError, nearest
from change_assess.legend import ARROW, CHANGE, NO_CHANGE, ChangeClass, ChangeClasses, Legend
from change_assess.maps.grid import Coder, MapSource, MapStack, Progress, Reader, block_cache, new_raster, open_maps
from change_assess.maps.tally import Combination, Tally, assembled, count_stack, executor_of, in_order
from change_assess.tables import LegendSource, read_legend

TILE = 512


def stratify(
    maps: Sequence[MapSource],
    change_classes: ChangeClasses | Iterable[str | ChangeClass],
    legend: LegendSource,
    *,
    dates: Sequence[object] | None = None,
    out: str | os.PathLike[str],
    workers: int | Executor | None = None,
    progress: Progress | None = None,
) -> pd.DataFrame:
    """Write a stratum raster and return its strata table.

    With two dates the stratum of a pixel is the change class of its transition. With more, it is the change class
    of the first period in which the class changes, named ``"<change class> <from date>-<to date>"``; pixels that
    never change take the change class of their persistence.

    Parameters
    ----------
    maps : sequence of paths, ``"file.tif:BAND"`` texts or (path, band) pairs
        One map a date, in order of time, all on one grid.
    change_classes : ChangeClasses, or iterable of str or ChangeClass
        Recipes over (from, to) pairs; persistence may be named too (``"stable forest=forest>forest"``).
    legend : Legend, path, DataFrame or class names
        Names of the codes.
    dates : sequence, optional
        Date labels; by default the years in band descriptions or file names.
    out : path
        The raster to write: 0 = no data at some date, other codes as in the table.
    workers, progress
        As for `tally`; progress covers both passes over the maps.

    Returns
    -------
    DataFrame
        `stratum, code, units, area_ha`: strata that hold pixels, in order of their recipes.

    Raises
    ------
    InputError
        For maps that do not lie on one grid, codes that the legend does not know, or no pixel with data.
    FileError
        For files that cannot be read or written.
    """
    recipes, legend = ChangeClasses.of(change_classes), read_legend(legend)
    stack = open_maps(maps, dates)
    if len(stack.bands) < 2:
        raise InputError("one map is given and strata of change take two or more", mend="Give one map for each date.")
    _check_output(stack, out)
    counts = count_stack(stack, workers=workers, progress=_half(progress, 0))
    trajectories = assembled(stack, counts, legend).trajectories
    if trajectories.empty:
        raise InputError(
            "no pixel has data at every date, so there is nothing to stratify", mend="Check the no-data codes."
        )
    rule = Rule.of(recipes, legend, stack.dates)
    table, codes = _strata_table(rule, trajectories, legend, stack.dates)
    _write(stack, _byte_tables(rule, codes, counts, legend, stack), out, workers, _half(progress, 1))
    return table


def _check_output(stack: MapStack, out: str | os.PathLike[str]) -> None:
    for band in stack.bands:
        if Path(band.path).resolve() == Path(out).resolve():
            raise InputError("the stratum raster would replace this map", file=band.path, mend="Write it elsewhere.")


def strata_of_tally(
    tally: Tally, strata: Iterable[str], change_classes: ChangeClasses | Iterable[str | ChangeClass] = ()
) -> pd.DataFrame:
    """Strata table of a sample that was drawn within classes of maps, from the tally of these maps.

    Parameters
    ----------
    tally : Tally
    strata : iterable of str
        Names of the strata of the sample: trajectories (``forest>cropland``), change classes as `stratify` names
        them, or change and no change. The first of these schemes that holds all the names is taken.
    change_classes : ChangeClasses, or iterable of str or ChangeClass

    Returns
    -------
    DataFrame
        `stratum, units, area_ha`.

    Raises
    ------
    InputError
        If no scheme holds all the names.
    """
    labels = tally.trajectories[list(tally.dates)].astype(str)
    legend = tally.legend or Legend.of_names(sorted(set(labels.to_numpy().ravel()), key=lambda w: (len(w), w)))
    rule = Rule.of(ChangeClasses.of(change_classes), legend, tally.dates)
    place = {name: i for i, name in enumerate(legend.names)}
    positions = rule.strata([labels[d].map(place).to_numpy().astype(np.intp) for d in tally.dates])
    same = (labels.to_numpy() == labels.to_numpy()[:, :1]).all(axis=1)
    schemes = (
        [ARROW.join(row) for row in labels.itertuples(index=False)],
        [rule.names[p] for p in positions],
        np.where(same, NO_CHANGE, CHANGE).tolist(),
    )
    wanted = set(strata)
    for names in schemes:
        if wanted <= set(names):
            sums = tally.trajectories[["units", "area_ha"]].groupby(np.array(names), sort=False).sum()
            return sums.rename_axis("stratum").reset_index()
    lost = sorted(wanted - set(schemes[0]) - set(schemes[1]))
    raise InputError(
        f"the maps hold no stratum '{lost[0] if lost else sorted(wanted)[0]}' of the sample",
        column="stratum",
        value=lost,
        mend="Name strata as FROM>TO or by change class (give the recipes), or give a strata table."
        f"{nearest(lost[0], [*schemes[0], *schemes[1]]) if lost else ''}",
    )


def _half(progress: Progress | None, half: int) -> Progress | None:
    """Progress over the first (0) or second (1) of two passes of equal length."""
    if progress is None:
        return None
    return lambda done, whole: progress(done + half * whole, 2 * whole)


@dataclass(frozen=True)
class Rule:
    """Which stratum a pixel belongs to, by legend positions of its classes.

    Attributes
    ----------
    names : list of str
        Names of all strata that can occur.
    still : ndarray of int, shape (K,)
        Stratum of a pixel that always holds class i.
    first_change : ndarray of int, shape (periods, K, K)
        Stratum of a pixel whose first change is from class i to class j in period p.
    """

    names: list[str]
    still: NDArray[np.intp]
    first_change: NDArray[np.intp]

    @classmethod
    def of(cls, change_classes: ChangeClasses, legend: Legend, dates: Sequence[str]) -> Rule:
        """Rule for change classes over the periods between `dates`."""
        classes, table = change_classes.table(legend)
        periods = [f"{a}-{b}" for a, b in pairwise(dates)]
        changes = [[f"{c} {p}" if len(periods) > 1 else c for p in periods] for c in classes]
        names = list(dict.fromkeys(n for c, row in zip(classes, changes, strict=True) for n in [*row, c]))
        of_class = np.array([names.index(c) for c in classes])
        of_change = np.array([[names.index(row[p]) for row in changes] for p in range(len(periods))])
        return cls(names, of_class[np.diag(table)], of_change[:, table])

    def strata(self, columns: Sequence[NDArray[np.intp]]) -> NDArray[np.intp]:
        """Stratum (position in `names`) of trajectories given as one array of legend positions a date."""
        found = self.still[columns[0]]
        for period in reversed(range(len(columns) - 1)):
            start, end = columns[period], columns[period + 1]
            moved = np.flatnonzero(start != end)
            found[moved] = self.first_change[period][start[moved], end[moved]]
        return found


def _strata_table(
    rule: Rule, trajectories: pd.DataFrame, legend: Legend, dates: Sequence[str]
) -> tuple[pd.DataFrame, NDArray[np.intp]]:
    """Table of the strata that occur, and the raster code of every stratum of the rule (0 = does not occur)."""
    place = {name: i for i, name in enumerate(legend.names)}
    strata = rule.strata([trajectories[d].map(place).to_numpy().astype(np.intp) for d in dates])
    sums = trajectories[["units", "area_ha"]].groupby(strata).sum()
    codes = np.zeros(len(rule.names), dtype=np.intp)
    codes[sums.index] = np.arange(1, len(sums) + 1)
    sums.insert(0, "stratum", [rule.names[i] for i in sums.index])
    sums.insert(1, "code", codes[sums.index])
    return sums.reset_index(drop=True), codes


@dataclass(frozen=True)
class _ByteTables:
    """The rule by byte codes of the maps, ready for pixels; 0 = not a stratum."""

    codes: list[int]
    still: NDArray[Any]
    first_change: NDArray[Any]

    @property
    def dtype(self) -> np.dtype[Any]:
        return self.still.dtype


def _byte_tables(
    rule: Rule, codes: NDArray[np.intp], counts: dict[Combination, tuple[int, float]], legend: Legend, stack: MapStack
) -> _ByteTables:
    met = sorted({code for key in counts for code in key})
    coder = Coder(stack, met)
    pairs = [(coder.byte(c), i) for i, c in enumerate(legend.codes) if c in set(met)]
    at, position = np.array([b for b, _ in pairs]), np.array([i for _, i in pairs])
    dtype = np.uint8 if codes.max() <= 255 else np.uint16
    still = np.zeros(256, dtype=dtype)
    still[at] = codes[rule.still[position]]
    first_change = np.zeros((len(stack.dates) - 1, 256, 256), dtype=dtype)
    for period, table in enumerate(rule.first_change):
        first_change[period][np.ix_(at, at)] = codes[table[np.ix_(position, position)]]
    return _ByteTables(met, still, first_change.reshape(-1, 1 << 16))


def _write(
    stack: MapStack,
    tables: _ByteTables,
    out: str | os.PathLike[str],
    workers: int | Executor | None,
    progress: Progress | None,
) -> None:
    windows, done = stack.windows(multiple=TILE), 0
    with new_raster(out, stack.grid, str(tables.dtype)) as raster, block_cache(stack), executor_of(workers) as executor:
        jobs = ((stack, tables, window) for window in windows)
        for window, strata in zip(windows, in_order(executor, _strata_of_window, jobs), strict=True):
            raster.write(strata, 1, window=window)
            done += window.height * window.width
            if progress:
                progress(done, stack.grid.height * stack.grid.width)


def _strata_of_window(job: tuple[MapStack, _ByteTables, Window]) -> NDArray[Any]:
    stack, tables, window = job
    coder = Coder(stack, tables.codes)
    with block_cache(stack), Reader(stack) as reader:
        blocks = [coder.encode(block).reshape(-1) for block in reader.read_all(window)]
    strata = np.take(tables.still, blocks[0])
    for period in reversed(range(len(blocks) - 1)):
        moved = np.flatnonzero(blocks[period] != blocks[period + 1])
        pairs = (blocks[period][moved].astype(np.uint16) << 8) | blocks[period + 1][moved]
        strata[moved] = tables.first_change[period][pairs]
    for block, band in zip(blocks, stack.bands, strict=True):
        if band.nodata is not None and band.nodata in tables.codes:
            strata[block == np.uint8(coder.byte(band.nodata))] = 0
    return strata.reshape(window.height, window.width)
