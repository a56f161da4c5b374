"""An invented region with known truth, for the demo, the examples and the tests.

The province of Velmora and its districts do not exist; its grid lies in the open ocean so that nobody takes it for a
real place. What it is good for: the true area of every change is known, so estimates can be held against it. The
maps are wrong in the ways real maps are: class edges lie a pixel off (mostly the same way at every date), small
clearings are overlooked or seen a date late, false change comes in clumps, and look-alike classes are confused.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from math import ceil, log2
from pathlib import Path

import numpy as np
import pandas as pd
from numpy.random import Generator
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter, maximum_filter

from change_assess.errors import InputError
from change_assess.legend import ChangeClass, ChangeClasses, Legend, LegendClass

Raster = NDArray[np.uint8]
Field = NDArray[np.float32]
Mask = NDArray[np.bool_]

PROVINCE = "Velmora"
"""The invented province."""

DISTRICTS = ("Harrowen", "Teskell", "Lower Brial", "Ondrith", "Marn Saddle")
"""The invented districts, in the order of their codes 1, 2, … in ``districts.tif``."""

DATES = ("2016", "2019", "2022")
"""Dates of the maps."""

FOREST, PLANTATION, GRASSLAND, CROPLAND, SETTLEMENT, WATER = range(1, 7)

LEGEND = Legend(
    (
        LegendClass(FOREST, "forest", "#009E73", "tree cover"),
        LegendClass(PLANTATION, "plantation", "#56B4E9", "tree cover"),
        LegendClass(GRASSLAND, "grassland", "#F0E442", "open land"),
        LegendClass(CROPLAND, "cropland", "#E69F00", "open land"),
        LegendClass(SETTLEMENT, "settlement", "#CC79A7", "built-up"),
        LegendClass(WATER, "water", "#0072B2", "water"),
    )
)
"""Classes of the maps; colours from the palette of Okabe and Ito (2008)."""

CHANGES = ChangeClasses(
    (ChangeClass("forest loss", ("forest",), ("*",)), ChangeClass("forest gain", ("*",), ("forest",)))
)
"""Change classes that the scenario is about."""

PIXEL_M = 20.0
"""Side of a pixel in metres; the grid is equal-area (EPSG:6933), a pixel holds 0.04 ha everywhere."""

_CRS = "EPSG:6933"
_LEFT_M, _TOP_M = -2_000_000.0, -3_600_000.0
_CELL = 16  # pixels; side of the coarse cells in which places for change are drawn
_SMALLEST = 4  # pixels; smallest true clearing


@dataclass(frozen=True)
class ScenarioMaps:
    """Where the invented rasters lie: one true and one classified raster per date, and the districts."""

    folder: Path
    truth: dict[str, Path]
    maps: dict[str, Path]
    districts: Path
    legend: Legend = LEGEND

    @property
    def dates(self) -> list[str]:
        """Dates in order."""
        return list(self.truth)


@dataclass(frozen=True)
class _Change:
    """One kind of true change; `shares` are of the province's area, one a period."""

    before: int
    after: tuple[int, ...]
    odds: tuple[float, ...]
    shares: tuple[float, ...]
    frontier: bool = False


_TRUE_CHANGES = (
    _Change(FOREST, (CROPLAND, GRASSLAND, SETTLEMENT, PLANTATION), (0.5, 0.32, 0.06, 0.12), (0.0076, 0.0060), True),
    _Change(GRASSLAND, (FOREST,), (1.0,), (0.0016, 0.0022), True),
    _Change(GRASSLAND, (CROPLAND, PLANTATION), (0.8, 0.2), (0.0040, 0.0030)),
    _Change(CROPLAND, (GRASSLAND, SETTLEMENT), (0.7, 0.3), (0.0035, 0.0045)),
)
_FALSE_CHANGES = (
    _Change(FOREST, (CROPLAND, GRASSLAND), (0.4, 0.6), (0.00070, 0.00045)),
    _Change(GRASSLAND, (FOREST,), (1.0,), (0.00030, 0.00030)),
    _Change(CROPLAND, (GRASSLAND,), (1.0,), (0.0010, 0.0010)),
)
_CONFUSED_WITH = np.array([0, PLANTATION, FOREST, CROPLAND, GRASSLAND, CROPLAND, WATER], dtype=np.uint8)


@dataclass(frozen=True)
class _Patch:
    """A clump of pixels of one class before and one class after."""

    window: tuple[slice, slice]
    mask: Mask
    before: int
    after: int

    def paint(self, raster: Raster, code: int) -> None:
        raster[self.window][self.mask] = code


def build_maps(folder: str | Path, *, size: int = 4000, seed: int = 2016) -> ScenarioMaps:
    """Write the true and the classified rasters of the invented province.

    Parameters
    ----------
    folder : path
        Receives ``truth_DATE.tif``, ``map_DATE.tif`` (codes of `LEGEND`, 0 = outside) and ``districts.tif``.
    size : int
        Pixels along each side of the square grid, 200 or more. 4000 pixels of 20 m are 80 km. In regions of less
        than about 1,000 pixels a few large clearings decide the accuracy of the map.
    seed : int
        The same seed and size give the same rasters.

    Returns
    -------
    ScenarioMaps

    Raises
    ------
    InputError
        If `size` is less than 200.
    FileError
        If a raster cannot be written.
    """
    if size < 200:
        raise InputError(
            f"a region of {size} × {size} pixels is too small to hold rare change",
            value=size, mend="Use a size of 200 or more.",
        )  # fmt: skip
    rng = np.random.default_rng(seed)
    inside, districts = _province(rng, size)
    truths, losses = _truth(rng, inside)
    home = Path(folder)
    truth_paths = {date: home / f"truth_{date}.tif" for date in DATES}
    map_paths = {date: home / f"map_{date}.tif" for date in DATES}
    _write(home / "districts.tif", districts, colours=None)
    for path, cover in zip(truth_paths.values(), truths, strict=True):
        _write(path, np.where(inside, cover, np.uint8(0)), colours=LEGEND)
    for path, cover in zip(map_paths.values(), _classified(rng, truths, losses, inside), strict=True):
        _write(path, np.where(inside, cover, np.uint8(0)), colours=LEGEND)
    return ScenarioMaps(home, truth_paths, map_paths, home / "districts.tif")


def true_areas(maps: ScenarioMaps) -> pd.DataFrame:
    """Count the true area of every transition from the truth rasters.

    Returns
    -------
    DataFrame
        ``period, from, to, units`` (pixels) and ``area_ha``, the columns of the tally's transitions.
    """
    from change_assess.maps.tally import tally

    counted = tally([str(p) for p in maps.truth.values()], dates=maps.dates, legend=maps.legend)
    return pd.DataFrame(counted.transitions)


# --- landscape -------------------------------------------------------------------------------------------------------


def _noise(rng: Generator, size: int, cells: int, *, finest: int = 4, roughness: float = 0.5) -> Field:
    """Fractal noise on a `size` × `size` grid: octaves from size/`cells` pixels down to `finest` pixels."""
    doublings = max(1, ceil(log2(size / cells)))
    grid = rng.standard_normal((cells + 1, cells + 1), dtype=np.float32)
    amplitude = 1.0
    for left in range(doublings - 1, -1, -1):
        grid = _doubled(grid)
        amplitude *= roughness
        if 2**left >= finest:
            grid += np.float32(amplitude) * rng.standard_normal(grid.shape, dtype=np.float32)
            grid = gaussian_filter(grid, 0.8)
    return grid[:size, :size]


def _doubled(grid: Field) -> Field:
    """Linear interpolation from n to 2n − 1 points along both axes."""
    n = grid.shape[0]
    out = np.empty((2 * n - 1, 2 * n - 1), dtype=np.float32)
    out[::2, ::2] = grid
    out[::2, 1::2] = (grid[:, 1:] + grid[:, :-1]) * np.float32(0.5)
    out[1::2] = (out[2::2] + out[:-2:2]) * np.float32(0.5)
    return out


def _top(field: Field, share: float, inside: Mask) -> Mask:
    """True where the field is among the highest `share` of the province (cut-off from every fifth pixel each way)."""
    return np.asarray(field > np.quantile(field[::5, ::5][inside[::5, ::5]], 1 - share), dtype=np.bool_)


def _province(rng: Generator, size: int) -> tuple[Mask, Raster]:
    """Pixels inside the boundary, and the district of each (0 outside)."""
    axis = np.linspace(-1, 1, size, dtype=np.float32)
    radius = axis[:, None] ** 2 + axis[None, :] ** 2 + np.float32(0.3) * _noise(rng, size, 5, finest=16)
    inside = radius < min(0.66, float(radius[[0, -1]].min()), float(radius[:, [0, -1]].min()))
    wobble = [np.float32(0.12) * _noise(rng, size, 6, finest=16) for _ in range(2)]
    angles = np.linspace(0.4, 0.4 + 2 * np.pi, len(DISTRICTS) - 1, endpoint=False)
    seats = [(0.0, 0.0), *((0.62 * np.sin(a), 0.62 * np.cos(a)) for a in angles)]
    nearest = np.full((size, size), np.inf, dtype=np.float32)
    districts = np.zeros((size, size), dtype=np.uint8)
    for code, (y, x) in enumerate(seats, start=1):
        distance = (axis[:, None] - np.float32(y) + wobble[0]) ** 2 + (axis[None, :] - np.float32(x) + wobble[1]) ** 2
        closer = distance < nearest
        districts[closer] = code
        np.minimum(nearest, distance, out=nearest)
    districts[~inside] = 0
    return inside, districts


def _first_cover(rng: Generator, inside: Mask) -> Raster:
    """Land cover at the first date, over the whole square; shares are of the province."""
    size = inside.shape[0]
    height = _noise(rng, size, 7, roughness=0.72)
    quilt = _parcels(rng, size, side=15) + np.float32(0.25) * _noise(rng, size, 8, finest=32)
    cover = np.where(_top(quilt, 0.52, inside), np.uint8(CROPLAND), np.uint8(GRASSLAND))
    del quilt
    cover[_top(height, 0.46, inside)] = FOREST
    belt = _top(height, 0.58, inside) & ~_top(height, 0.24, inside)
    cover[belt & (_parcels(rng, size, side=22) > 0.87)] = PLANTATION
    open_land = ~_top(height, 0.50, inside)
    cover[open_land & _top(_towns(rng, size), 0.035, inside)] = SETTLEMENT
    for _ in range(4):
        cover[_contour(rng, size, tilt=3.0, width=2)] = SETTLEMENT
    hollows = _noise(rng, size, 9, roughness=0.4) - np.float32(0.4) * height
    cover[_top(hollows, 0.018, inside)] = WATER
    cover[_contour(rng, size, tilt=2.0, width=5)] = WATER
    return cover


def _parcels(rng: Generator, size: int, *, side: int) -> Field:
    """A quilt of turned, slightly bent parcels about `side` pixels wide, each with one random value in 0–1."""
    turn = rng.uniform(0.2, 0.7)
    axis = np.arange(size, dtype=np.float32)
    bend = np.float32(side * 0.6) * _noise(rng, size, 12, finest=32)
    along = np.float32(np.cos(turn)) * axis[:, None] + np.float32(np.sin(turn)) * axis[None, :] + bend
    across = np.float32(np.cos(turn)) * axis[None, :] - np.float32(np.sin(turn)) * axis[:, None] - bend
    values = rng.random(1 << 16, dtype=np.float32)
    rows = np.floor(along / np.float32(side)).astype(np.int32)
    columns = np.floor(across / np.float32(side * 1.7)).astype(np.int32)
    picked: Field = values[(rows * np.int32(7919) + columns * np.int32(104729)) & np.int32((1 << 16) - 1)]
    return picked


def _towns(rng: Generator, size: int) -> Field:
    """Attraction of towns of many sizes, ragged at their edges."""
    axis = np.linspace(0, 1, 160, dtype=np.float32)
    pull = np.zeros((160, 160), dtype=np.float32)
    for reach in np.minimum(0.005 * (1 + rng.pareto(1.6, 150)), 0.035):
        y, x = rng.random(2)
        squared = (axis[:, None] - np.float32(y)) ** 2 + (axis[None, :] - np.float32(x)) ** 2
        np.maximum(pull, np.exp(-squared / np.float32(2 * reach**2)), out=pull)
    scale = ceil(log2(size / 159))
    for _ in range(max(scale, 0)):
        pull = _doubled(pull)
    return pull[:size, :size] + np.float32(0.2) * _noise(rng, size, max(4, size // 40), roughness=0.7)


def _contour(rng: Generator, size: int, *, tilt: float, width: int) -> Mask:
    """A winding line across the square, `width` pixels wide or a little more."""
    turn = rng.uniform(0, 2 * np.pi)
    axis = np.linspace(-1, 1, size, dtype=np.float32)
    slope = np.float32(np.sin(turn)) * axis[:, None] + np.float32(np.cos(turn)) * axis[None, :]
    field = np.float32(tilt) * (slope + np.float32(rng.uniform(-0.4, 0.4)))
    side = field + _noise(rng, size, 6, finest=max(8, size // 64)) > 0
    line = np.zeros((size, size), dtype=np.uint8)
    line[1:] |= side[1:] != side[:-1]
    line[:, 1:] |= side[:, 1:] != side[:, :-1]
    return np.asarray(maximum_filter(line, width) if width > 1 else line, dtype=np.uint8) > 0


# --- change ----------------------------------------------------------------------------------------------------------


def _truth(rng: Generator, inside: Mask) -> tuple[list[Raster], list[list[_Patch]]]:
    """True cover at each date, and the true forest clearings of each period."""
    covers = [_first_cover(rng, inside)]
    losses: list[list[_Patch]] = []
    for period in range(len(DATES) - 1):
        cover = covers[-1].copy()
        clearings: list[_Patch] = []
        for change in _TRUE_CHANGES:
            patches = list(_patches(rng, covers[-1], cover, inside, change, change.shares[period]))
            clearings += patches if change.before == FOREST else []
        covers.append(cover)
        losses.append(clearings)
    return covers, losses


def _patches(
    rng: Generator, before: Raster, cover: Raster, inside: Mask, change: _Change, share: float
) -> Iterator[_Patch]:
    """Paint patches of one kind of change on `cover` until they fill `share` of the province; yield each.

    Only pixels that held the class at the start of the period and still do are changed. Sizes follow a Pareto law,
    so most patches are small and a few hold much of the area.
    """
    goal = share * np.count_nonzero(inside)
    largest = max(4.0 * _SMALLEST, min(700.0, goal / 6))
    places = _places(rng, before == change.before, inside, frontier=change.frontier)
    painted, tries = 0, 0
    while painted < goal and tries < 200_000:
        for cell in rng.choice(places.size, size=512, p=places.ravel()):
            tries += 1
            centre = np.array(np.unravel_index(cell, places.shape)) * _CELL + rng.integers(0, _CELL, 2)
            pixels = min(_pareto(rng, largest), 1.1 * (goal - painted) + _SMALLEST)
            window, mask = _blob(rng, centre, pixels, cover.shape[0])
            mask &= (before[window] == change.before) & (cover[window] == change.before) & inside[window]
            found = int(np.count_nonzero(mask))
            if found >= min(_SMALLEST, pixels):
                patch = _Patch(window, mask, change.before, int(rng.choice(change.after, p=change.odds)))
                patch.paint(cover, patch.after)
                painted += found
                yield patch
            if painted >= goal:
                return


def _places(rng: Generator, present: Mask, inside: Mask, *, frontier: bool) -> NDArray[np.float64]:
    """Chance of each coarse cell to hold the next patch: some neighbourhoods are busier, and frontiers busiest."""
    share = _coarse(present & inside)
    chance = share * np.exp(0.8 * _noise(rng, share.shape[0], 8, finest=1))
    if frontier:
        around = gaussian_filter(_coarse(present), 3.0)
        chance *= (around * (1 - around)) ** 2 + 0.002
    return np.asarray(chance / chance.sum(), dtype=np.float64)


def _coarse(mask: Mask) -> NDArray[np.float64]:
    """Share of True in each full coarse cell."""
    cells = mask.shape[0] // _CELL
    blocks = mask[: cells * _CELL, : cells * _CELL].reshape(cells, _CELL, cells, _CELL)
    return np.asarray(blocks.mean(axis=(1, 3)), dtype=np.float64)


def _pareto(rng: Generator, largest: float) -> float:
    """Size in pixels, density proportional to size⁻² between the smallest and the largest."""
    return float(1 / (1 / _SMALLEST - rng.random() * (1 / _SMALLEST - 1 / largest)))


def _blob(rng: Generator, centre: NDArray[np.int64], pixels: float, size: int) -> tuple[tuple[slice, slice], Mask]:
    """A ragged round or a turned rectangular patch of about `pixels` pixels, cut at the edge of the square."""
    reach = ceil(1.5 * np.sqrt(pixels)) + 1
    top, left = (max(0, int(c) - reach) for c in centre)
    bottom, right = (min(size, int(c) + reach + 1) for c in centre)
    y = np.arange(top, bottom)[:, None] - float(centre[0])
    x = np.arange(left, right)[None, :] - float(centre[1])
    turn = rng.uniform(0, np.pi)
    along, across = np.cos(turn) * x + np.sin(turn) * y, np.cos(turn) * y - np.sin(turn) * x
    stretch = np.sqrt(rng.uniform(1.0, 2.2))
    if rng.random() < 0.4:
        half = np.sqrt(pixels) / 2
        return (slice(top, bottom), slice(left, right)), (abs(along) <= half * stretch) & (
            abs(across) <= half / stretch
        )
    angle = np.arctan2(across, along)
    ragged = 1 + 0.22 * np.cos(3 * angle + rng.uniform(0, 6)) + 0.14 * np.cos(5 * angle + rng.uniform(0, 6))
    radius = np.hypot(along / stretch, across * stretch)
    return (slice(top, bottom), slice(left, right)), radius <= ragged * np.sqrt(pixels / np.pi)


# --- map errors ------------------------------------------------------------------------------------------------------


def _classified(rng: Generator, truths: list[Raster], losses: list[list[_Patch]], inside: Mask) -> Iterator[Raster]:
    """The classified map of each date: the truth with the errors of a good but ordinary classifier."""
    size = inside.shape[0]
    overlooked = [[(p, _date_seen(rng, p, period)) for p in patches] for period, patches in enumerate(losses, start=1)]
    blurred = _displaced(truths[0], _directions(rng, size))
    false = _false_patches(rng, blurred, inside)
    del blurred
    directions = _directions(rng, size)
    confused = _top(_noise(rng, size, max(8, size // 60)), 0.028, inside) | (_parcels(rng, size, side=13) > 0.98)
    for date, truth in enumerate(truths):
        cover = truth.copy()
        for patch, seen in (pair for period in overlooked for pair in period):
            if date < seen:
                patch.paint(cover, patch.before)
        cover = _displaced(cover, directions)
        np.copyto(cover, _CONFUSED_WITH[cover], where=confused)
        for patch, first, last in false:
            if first <= date <= last:
                held = cover[patch.window]
                held[patch.mask & (held == patch.before)] = patch.after
        yield _flickering(rng, cover)


def _date_seen(rng: Generator, patch: _Patch, happened: int) -> int:
    """Position of the date at which the map shows a clearing: small ones are often late or never seen."""
    pixels = np.count_nonzero(patch.mask)
    chance = 0.03 + 0.62 / (1 + (pixels / 14) ** 1.6)
    if rng.random() >= chance:
        return happened
    return happened + 1 if rng.random() < 0.3 else len(DATES)


def _false_patches(rng: Generator, cover: Raster, inside: Mask) -> list[tuple[_Patch, int, int]]:
    """Clumps of change that did not happen, each with the positions of the first and last date that show it."""
    found: list[tuple[_Patch, int, int]] = []
    for period in range(1, len(DATES)):
        for change in _FALSE_CHANGES:
            work = cover.copy()
            for patch in _patches(rng, cover, work, inside, change, change.shares[period - 1]):
                last = period if rng.random() < 0.25 else len(DATES) - 1
                found.append((patch, period, last))
    return found


def _directions(rng: Generator, size: int) -> Raster:
    """Clumps where class edges lie one pixel off: 0 = in place, 1–4 = taken from the row or column beside."""
    coarse = rng.integers(0, 22, (size // 3 + 1, size // 3 + 1), dtype=np.uint8)
    coarse[coarse > 4] = 0
    return np.repeat(np.repeat(coarse, 3, axis=0), 3, axis=1)[:size, :size]


def _displaced(cover: Raster, directions: Raster) -> Raster:
    """Take each pixel's class from the neighbour its direction points to."""
    out = cover.copy()
    for direction, (shift, axis) in enumerate(((1, 0), (-1, 0), (1, 1), (-1, 1)), start=1):
        np.copyto(out, np.roll(cover, shift, axis), where=directions == direction)
    return out


def _flickering(rng: Generator, cover: Raster) -> Raster:
    """Edge pixels that fall to the other side at this date only: about 1 in 250 of them."""
    dice = rng.integers(0, 1 << 16, cover.shape, dtype=np.uint16)
    directions = np.where(dice < 4 * 60, dice % 4 + 1, 0).astype(np.uint8)
    return _displaced(cover, directions)


# --- files -----------------------------------------------------------------------------------------------------------


def _write(path: Path, raster: Raster, *, colours: Legend | None) -> None:
    """Write one tiled, compressed GeoTIFF, whole or not at all."""
    from change_assess.maps.grid import Grid, new_raster

    height, width = raster.shape
    grid = Grid(height, width, (PIXEL_M, 0.0, _LEFT_M, 0.0, -PIXEL_M, _TOP_M), _CRS)
    with new_raster(path, grid, "uint8") as target:
        target.write(raster, 1)
        if colours is not None:
            target.write_colormap(1, {c.code: _rgb(c.colour) for c in colours.classes})


def _rgb(colour: str) -> tuple[int, int, int, int]:
    return int(colour[1:3], 16), int(colour[3:5], 16), int(colour[5:7], 16), 255


# --- interpreters ----------------------------------------------------------------------------------------------------
