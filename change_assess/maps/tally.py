"""From-to tallies of classified maps: exact pixel counts and areas of every combination of classes."""

from __future__ import annotations

import json
import os
from collections import deque
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from concurrent.futures import Executor, Future, ThreadPoolExecutor
from contextlib import contextmanager
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path
from typing import Any, TypeVar

import numpy as np
import pandas as pd
from rasterio.windows import Window

from change_assess import __version__
from change_assess.errors import InputError, Notice
from change_assess.files import write_together
from change_assess.legend import Legend
from change_assess.maps.area import NOTED_DISTORTION
from change_assess.maps.count import CombinationCounts, whole_weights
from change_assess.maps.grid import Coder, MapSource, MapStack, Progress, Reader, block_cache, open_maps
from change_assess.tables import LegendSource, read_legend

Combination = tuple[int, ...]
"""Class codes of one pixel, one a date."""

Item = TypeVar("Item")
Result = TypeVar("Result")

JOB_PIXELS = 1 << 24
LIKELY_NODATA = (0, 255)

EVERY_DATE, SOME_DATES = "no data at every date", "no data at some dates"


@dataclass(frozen=True)
class Tally:
    """What the maps hold, counted pixel by pixel.

    Attributes
    ----------
    trajectories : DataFrame
        One column a date (class name, or code if there is no legend), `units` (pixels), `area_ha`.
    transitions : DataFrame
        `period, from, to, units, area_ha` for each pair of consecutive dates and, with more than two dates, for
        the whole span. Every period covers the same pixels: those with data at all dates.
    unmapped : DataFrame
        `situation, dates, units, area_ha`: pixels without data, and at which dates (joined by ", ").
    dates : tuple of str
        Date labels, in order.
    legend : Legend or None
        The legend that names the codes.
    warnings : tuple of Notice
        Stable codes with the values that belong to them.
    files : list of (str, int)
        Path and band of each map.
    """

    trajectories: pd.DataFrame
    transitions: pd.DataFrame
    unmapped: pd.DataFrame
    dates: tuple[str, ...]
    legend: Legend | None
    warnings: tuple[Notice, ...]
    files: list[tuple[str, int]]

    def crossing(self) -> pd.DataFrame:
        """Crossing table: one column a date, `units`, `area_ha`."""
        return self.trajectories.copy()

    def to_json(self) -> str:
        """Tables, dates, files and warnings as JSON."""
        tables = {n: getattr(self, n).to_dict("records") for n in ("trajectories", "transitions", "unmapped")}
        content = {
            "format": 1,
            "program": "change-assess",
            "version": __version__,
            "dates": list(self.dates),
            "files": [{"file": Path(path).name, "band": band} for path, band in self.files],
            "warnings": [{"code": w.code, **w.facts} for w in self.warnings],
            **tables,
        }
        return json.dumps(content, indent=1, ensure_ascii=False, allow_nan=False) + "\n"

    def save(self, folder: str | os.PathLike[str]) -> list[Path]:
        """Write `trajectories.csv`, `transitions.csv`, `unmapped.csv` and `tally.json`; all or nothing."""
        names = ("trajectories", "transitions", "unmapped")
        texts = {Path(folder) / f"{n}.csv": getattr(self, n).to_csv(index=False, lineterminator="\n") for n in names}
        texts[Path(folder) / "tally.json"] = self.to_json()
        write_together(texts)
        return list(texts)


def tally(
    maps: Sequence[MapSource],
    *,
    dates: Sequence[object] | None = None,
    legend: LegendSource | None = None,
    workers: int | Executor | None = None,
    progress: Progress | None = None,
) -> Tally:
    """Count the combinations of classes of two or more maps, and their areas.

    Parameters
    ----------
    maps : sequence of paths, ``"file.tif:BAND"`` texts or (path, band) pairs
        One map a date, in order of time, all on one grid.
    dates : sequence, optional
        Date labels; by default the years in band descriptions or file names.
    legend : Legend, path, DataFrame or class names, optional
        Names for the codes. A code that it does not hold is an error.
    workers : int or Executor, optional
        Number of threads, at most four by default. The result does not depend on it.
    progress : callable, optional
        Called with (pixels done, pixels in all).

    Returns
    -------
    Tally
        Exact counts, and areas in hectares.

    Raises
    ------
    InputError
        For maps that do not lie on one grid, or codes that the legend does not know.
    FileError
        For files that cannot be read.
    """
    stack = open_maps(maps, dates)
    if len(stack.bands) < 2:
        raise InputError("one map is given and a tally takes two or more", mend="Give one map for each date.")
    counts = count_stack(stack, workers=workers, progress=progress)
    return assembled(stack, counts, None if legend is None else read_legend(legend))


def count_stack(
    stack: MapStack, *, workers: int | Executor | None = None, progress: Progress | None = None
) -> dict[Combination, tuple[int, float]]:
    """Pixels and hectares of every combination of codes, no-data codes included."""
    areas = stack.areas
    weights, unit = whole_weights(areas.hectares)
    jobs = _jobs(stack.windows())
    totals: dict[Combination, tuple[int, int]] = {}
    done, whole = 0, stack.grid.height * stack.grid.width
    with block_cache(stack), executor_of(workers) as executor:
        arguments = ((stack, job, weights if areas.by_row else None) for job in jobs)
        for job, part in zip(jobs, in_order(executor, _count_job, arguments), strict=True):
            for key, (units, weight) in part.items():
                before = totals.get(key, (0, 0))
                totals[key] = (before[0] + units, before[1] + weight)
            done += sum(w.height * w.width for w in job)
            if progress:
                progress(done, whole)
    if areas.by_row:
        return {key: (units, weight * unit) for key, (units, weight) in totals.items()}
    return {key: (units, units * float(areas.hectares[0])) for key, (units, _) in totals.items()}


def _jobs(windows: Sequence[Window]) -> list[list[Window]]:
    """Batches of consecutive windows of about 16 million pixels; the same for any number of workers."""
    jobs: list[list[Window]] = [[]]
    for window in windows:
        if sum(w.height * w.width for w in jobs[-1]) >= JOB_PIXELS:
            jobs.append([])
        jobs[-1].append(window)
    return jobs


def _count_job(job: tuple[MapStack, list[Window], Any]) -> dict[Combination, tuple[int, int]]:
    stack, windows, weights = job
    coder, counts = Coder(stack), CombinationCounts(len(stack.bands), weights)
    with block_cache(stack), Reader(stack) as reader:
        for window in windows:
            counts.add([coder.encode(block) for block in reader.read_all(window)], window.row_off)
    return {tuple(coder.codes[b] for b in key): total for key, total in counts.finish().items()}


@contextmanager
def executor_of(workers: int | Executor | None) -> Iterator[Executor]:
    """Give an executor: the given one, or threads that end with the block."""
    if isinstance(workers, Executor):
        yield workers
        return
    number = min(4, os.cpu_count() or 1) if workers is None else workers
    if number < 1:
        raise InputError(f"{number} workers cannot do anything", value=number, mend="Give 1 or more.")
    with ThreadPoolExecutor(number) as executor:
        yield executor


def in_order(executor: Executor, function: Callable[[Item], Result], items: Iterable[Item]) -> Iterator[Result]:
    """Results of `function` in the order of `items`, with few items in hand at a time."""
    ahead = 2 * (getattr(executor, "_max_workers", None) or 16)
    waiting: deque[Future[Result]] = deque()
    try:
        for item in items:
            waiting.append(executor.submit(function, item))
            if len(waiting) >= ahead:
                yield waiting.popleft().result()
        while waiting:
            yield waiting.popleft().result()
    finally:
        for future in waiting:
            future.cancel()


def assembled(stack: MapStack, counts: Mapping[Combination, tuple[int, float]], legend: Legend | None) -> Tally:
    """Tables of a tally from the counts of `count_stack`; codes that the legend does not know are an error."""
    nodata = [band.nodata for band in stack.bands]
    gaps = {key: tuple(code == none for code, none in zip(key, nodata, strict=True)) for key in counts}
    mapped = {key: total for key, total in counts.items() if not any(gaps[key])}
    if legend is not None:
        _check_known(stack, mapped, legend)
    trajectories = _trajectories(mapped, stack.dates, legend)
    unmapped = _unmapped({key: total for key, total in counts.items() if any(gaps[key])}, gaps, stack.dates)
    return Tally(
        trajectories=trajectories,
        transitions=_transitions(trajectories, stack.dates, legend),
        unmapped=unmapped,
        dates=stack.dates,
        legend=legend,
        warnings=_warnings(stack, {} if legend else mapped, unmapped),
        files=[(band.path, band.band) for band in stack.bands],
    )


def _check_known(stack: MapStack, mapped: Mapping[Combination, tuple[int, float]], legend: Legend) -> None:
    known = set(legend.codes)
    for position, band in enumerate(stack.bands):
        unknown: dict[int, int] = {}
        for key, (units, _) in mapped.items():
            if key[position] not in known:
                unknown[key[position]] = unknown.get(key[position], 0) + units
        if unknown:
            listed = ", ".join(f"{code} ({units} pixels)" for code, units in sorted(unknown.items()))
            raise InputError(
                f"it holds codes that the legend does not: {listed}",
                file=band.label,
                value=min(unknown),
                mend="Add them to the legend, or declare the no-data code: gdal_edit.py -a_nodata CODE FILE.",
            )


def _trajectories(
    mapped: Mapping[Combination, tuple[int, float]], dates: Sequence[str], legend: Legend | None
) -> pd.DataFrame:
    place = {code: i for i, code in enumerate(legend.codes)} if legend else None
    keys = sorted(mapped, key=lambda key: [place[c] for c in key] if place else list(key))
    name = {c.code: c.name for c in legend.classes} if legend else None
    columns: dict[str, Any] = {
        date: pd.Series([name[k[i]] if name else k[i] for k in keys], dtype=str if name else np.int64)
        for i, date in enumerate(dates)
    }
    columns["units"] = pd.Series([mapped[k][0] for k in keys], dtype=np.int64)
    columns["area_ha"] = pd.Series([mapped[k][1] for k in keys], dtype=np.float64)
    return pd.DataFrame(columns)


def _transitions(trajectories: pd.DataFrame, dates: Sequence[str], legend: Legend | None) -> pd.DataFrame:
    periods = list(pairwise(dates))
    if len(dates) > 2:
        periods.append((dates[0], dates[-1]))
    return pd.concat([_period(trajectories, *period, legend) for period in periods], ignore_index=True)


def _period(trajectories: pd.DataFrame, start: str, end: str, legend: Legend | None) -> pd.DataFrame:
    pairs = trajectories[[start, end, "units", "area_ha"]].set_axis(["from", "to", "units", "area_ha"], axis=1)
    table = pairs.groupby(["from", "to"], sort=False, as_index=False)[["units", "area_ha"]].sum()
    if legend:
        place = {name: i for i, name in enumerate(legend.names)}
        table = table.sort_values(["from", "to"], key=lambda column: column.map(place), ignore_index=True)
    else:
        table = table.sort_values(["from", "to"], ignore_index=True)
    table.insert(0, "period", f"{start}-{end}")
    return table


def _unmapped(
    counts: Mapping[Combination, tuple[int, float]], gaps: Mapping[Combination, tuple[bool, ...]], dates: Sequence[str]
) -> pd.DataFrame:
    found: dict[tuple[bool, ...], tuple[int, float]] = {}
    for key, (units, area) in sorted(counts.items()):
        before = found.get(gaps[key], (0, 0.0))
        found[gaps[key]] = (before[0] + units, before[1] + area)
    rows = [
        (
            EVERY_DATE if all(gap) else SOME_DATES,
            ", ".join(d for d, missing in zip(dates, gap, strict=True) if missing),
            units,
            area,
        )
        for gap, (units, area) in sorted(found.items(), reverse=True)
    ]
    table = pd.DataFrame(rows, columns=["situation", "dates", "units", "area_ha"])
    return table.astype({"units": np.int64, "area_ha": np.float64})


def _warnings(
    stack: MapStack, mapped: Mapping[Combination, tuple[int, float]], unmapped: pd.DataFrame
) -> tuple[Notice, ...]:
    found: list[Notice] = []
    stretch = stack.areas.stretch
    if stretch and max(stretch[1] - 1, 1 - stretch[0]) > NOTED_DISTORTION:
        found.append(Notice("area-distortion", {"lowest": stretch[0], "highest": stretch[1]}))
    for position, band in enumerate(stack.bands):
        for code in LIKELY_NODATA:
            units = sum(n for key, (n, _) in mapped.items() if key[position] == code)
            if band.nodata is None and units:
                found.append(Notice("nodata-not-declared", {"file": band.label, "code": code, "units": units}))
    partly = unmapped[unmapped["situation"] == SOME_DATES]
    if len(partly):
        facts = {"units": int(partly["units"].sum()), "area_ha": float(partly["area_ha"].sum())}
        found.append(Notice("no-data-at-some-dates", facts))
    return tuple(found)
