"""Opening rasters, checking that they share one grid, and reading them window by window.

The only module that opens rasters. A map is one band of one file; maps of several dates make a `MapStack`.
Windows never cut a file's blocks where that can be avoided, since each cut block is decoded twice.
"""

from __future__ import annotations

import math
import os
import re
import warnings
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
import rasterio
from numpy.typing import NDArray
from rasterio.enums import Interleaving, MaskFlags
from rasterio.errors import NotGeoreferencedWarning, RasterioError
from rasterio.windows import Window

from change_assess.errors import ChangeAssessError, FileError, InputError
from change_assess.files import replacing
from change_assess.maps.area import PixelAreas, Transform, parsed, pixel_areas

MapSource = str | os.PathLike[str] | tuple[str | os.PathLike[str], int | str]
"""A file, ``"file.tif:BAND"``, or a (file, band) pair; a band is a number from 1 or a band description."""

SAME_ORIGIN_PIXELS, SAME_CORNER_PIXELS = 1e-6, 1e-3
"""How far two grids may lie apart at their first corner, and at the others (rounding of the pixel size)."""

RESERVED_LABELS = frozenset({"stratum", "units", "area_ha", "period", "from", "to"})

WINDOW_PIXELS, LARGEST_STEP = 2048 * 2048, 4096
SMALL_CACHE_BYTES, LARGE_CACHE_BYTES = 1_000_000, 64_000_000


Progress = Callable[[int, int], object]
"""Called with (pixels done, pixels in all)."""


@dataclass(frozen=True)
class MapBand:
    """One classified map: a band of a file, and what is needed to read it."""

    path: str
    band: int
    description: str
    dtype: str
    nodata: int | None
    blocks: tuple[int, int]
    interleaved: bool

    @property
    def label(self) -> str:
        """Path, with the band where it is not the first."""
        return self.path if self.band == 1 else f"{self.path}:{self.band}"


@dataclass(frozen=True)
class Grid:
    """Rows, columns, place on the Earth and reference system of a raster."""

    height: int
    width: int
    transform: Transform
    crs: str

    @property
    def extent(self) -> tuple[float, float, float, float]:
        """Left, right, bottom and top, in units of the reference system."""
        a, _, c, _, e, f = self.transform
        x, y = sorted((c, c + a * self.width)), sorted((f, f + e * self.height))
        return x[0], x[1], y[0], y[1]

    def centres(self, rows: NDArray[Any], columns: NDArray[Any]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Coordinates x and y of pixel centres, in units of the reference system."""
        a, _, c, _, e, f = self.transform
        return c + a * (columns + 0.5), f + e * (rows + 0.5)


@dataclass(frozen=True)
class MapStack:
    """Maps of one or more dates on one grid."""

    bands: tuple[MapBand, ...]
    dates: tuple[str, ...]
    grid: Grid

    @cached_property
    def areas(self) -> PixelAreas:
        """Pixel areas of the shared grid."""
        grid = self.grid
        return pixel_areas(grid.crs, grid.transform, grid.height, grid.width, self.bands[0].path)

    @property
    def cache_bytes(self) -> int:
        """Block cache that suits one pass: small, unless several bands share their blocks."""
        paths = [b.path for b in self.bands if b.interleaved]
        blocks = sum(math.prod(b.blocks) * np.dtype(b.dtype).itemsize for b in self.bands)
        return max(SMALL_CACHE_BYTES if len(set(paths)) == len(paths) else LARGE_CACHE_BYTES, 2 * blocks)

    def windows(self, *, multiple: int = 1) -> list[Window]:
        """Cover the grid by windows of about 4 million pixels, aligned to the blocks of every file.

        With `multiple`, rows and columns start at multiples of that number, even where this must cut blocks.
        """
        height, width = self.grid.height, self.grid.width
        heights, widths = zip(*(b.blocks for b in self.bands), strict=True)
        row_step = _step([*heights, multiple], multiple)
        if any(w >= width for w in widths) or _step([*widths, multiple], multiple) >= width:
            columns = width
        else:
            columns = _whole_steps(_step([*widths, multiple], multiple), math.isqrt(WINDOW_PIXELS))
        rows = _whole_steps(row_step, WINDOW_PIXELS // min(columns, width))
        return [
            Window(left, top, min(columns, width - left), min(rows, height - top))
            for top in range(0, height, rows)
            for left in range(0, width, columns)
        ]


def _step(sizes: Sequence[int], multiple: int) -> int:
    common = math.lcm(*sizes)
    if common <= LARGEST_STEP:
        return common
    return multiple if multiple > 1 else max(sizes)


def _whole_steps(step: int, target: int) -> int:
    return step * max(1, target // step)


def open_maps(maps: str | os.PathLike[str] | Sequence[MapSource], dates: Sequence[object] | None = None) -> MapStack:
    """Inspect maps and check that they can be laid on each other.

    Parameters
    ----------
    maps : path, or sequence of paths, ``"file.tif:BAND"`` texts or (path, band) pairs
        One map a date, in order of time.
    dates : sequence, optional
        Date labels. By default the year in the band description or file name, else the file name.

    Raises
    ------
    InputError
        For grids that differ, rasters that hold no class codes, rotated grids, or a missing reference system.
    FileError
        For files that are missing or cannot be read.
    """
    sources = [maps] if isinstance(maps, str | os.PathLike) else list(maps)
    if not sources:
        raise InputError("no map is given", mend="Give one raster for each date.")
    opened = [_inspect(source) for source in sources]
    bands, grids = tuple(band for band, _ in opened), [grid for _, grid in opened]
    for band, grid in opened[1:]:
        check_same_grid(bands[0].path, grids[0], band.path, grid)
    return MapStack(bands, _date_labels(bands, dates), grids[0])


def _inspect(source: MapSource) -> tuple[MapBand, Grid]:
    path, band = _split_source(source)
    with _dataset(path) as data:
        number = _band_number(data, path, band)
        _check_codes(data, number, path)
        grid = _grid_of(data, path)
        dtype = str(data.dtypes[number - 1])
        found = MapBand(
            path=path,
            band=number,
            description=data.descriptions[number - 1] or "",
            dtype=dtype,
            nodata=_whole_nodata(data.nodatavals[number - 1], dtype),
            blocks=tuple(data.block_shapes[number - 1]),
            interleaved=data.count > 1 and data.interleaving == Interleaving.pixel,
        )
    return found, grid


def _split_source(source: MapSource) -> tuple[str, int | str | None]:
    if isinstance(source, tuple):
        return os.fspath(source[0]), source[1]
    text = os.fspath(source)
    path, colon, band = text.rpartition(":")
    if not colon or not path or not band or len(path) == 1 or re.search(r"[/\\]", band) or Path(text).exists():
        return text, None
    return path, int(band) if band.isdecimal() else band


@contextmanager
def _dataset(path: str) -> Iterator[Any]:
    if not path.startswith("/vsi") and "://" not in path and not Path(path).exists():
        raise FileError(f"{path} does not exist. Check the path of the map.")
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", NotGeoreferencedWarning)
            data = rasterio.open(path)
    except RasterioError as error:
        raise FileError(f"{path} cannot be opened as a raster: {_reason(error, path)}.") from error
    with data:
        yield data


def _reason(error: Exception, path: str) -> str:
    cause = error.__cause__ or error
    return str(cause).replace(path, "the file").strip("'\" .") or type(error).__name__


def _band_number(data: Any, path: str, band: int | str | None) -> int:
    described = {text: i for i, text in enumerate(data.descriptions, start=1) if text}
    if band is None and data.count == 1:
        return 1
    if isinstance(band, str) and band in described:
        return described[band]
    if isinstance(band, int) and 1 <= band <= data.count:
        return band
    problem = f"it has {data.count} bands and none is named" if band is None else f"it has no band '{band}'"
    known = f"1 to {data.count}" + (f" ({', '.join(_shortened(list(described)))})" if described else "")
    raise InputError(problem, file=path, value=band, mend=f"Name one as FILE:BAND; its bands are {known}.")


def _shortened(words: list[str]) -> list[str]:
    return words if len(words) <= 6 else [*words[:3], "…", words[-1]]


def _check_codes(data: Any, number: int, path: str) -> None:
    dtype = (
        np.dtype(data.dtypes[number - 1]) if not data.dtypes[number - 1].startswith("complex_") else np.dtype(complex)
    )
    if not np.issubdtype(dtype, np.integer):
        raise InputError(
            f"its pixels are {dtype} numbers, not whole class codes",
            file=path,
            mend="Write class codes as bytes, for example: gdal_translate -ot Byte IN OUT.",
        )
    flags = set(data.mask_flag_enums[number - 1])
    if MaskFlags.per_dataset in flags:
        raise InputError(
            "no-data is kept in a separate mask, which is not read",
            file=path,
            mend="Give masked pixels a code of their own, declared by gdal_edit.py -a_nodata CODE FILE.",
        )


def _whole_nodata(value: float | None, dtype: str) -> int | None:
    """No-data code, or None where none is declared or no pixel of this type can hold it."""
    if value is None or not math.isfinite(value) or value != int(value):
        return None
    info = np.iinfo(dtype)
    return int(value) if info.min <= value <= info.max else None


def _grid_of(data: Any, path: str) -> Grid:
    transform = data.transform
    if transform.is_identity:
        raise InputError(
            "it does not say where its pixels lie on the Earth nor how large they are",
            file=path,
            mend="Give it the georeference of the map that it was made from: rio edit-info FILE --like MAP.",
        )
    if data.crs is None or not data.crs.to_wkt():
        raise InputError(
            "it has no coordinate reference system, so the area of its pixels is unknown",
            file=path,
            mend="Assign the right one: gdal_edit.py -a_srs EPSG:NUMBER FILE.",
        )
    if abs(transform.b) > 1e-9 * abs(transform.a) or abs(transform.d) > 1e-9 * abs(transform.e):
        raise InputError(
            "its grid is rotated or sheared",
            file=path,
            mend="Warp it to a north-up grid by nearest neighbour: gdalwarp -r near.",
        )
    return Grid(data.height, data.width, tuple(transform)[:6], data.crs.to_wkt())


def check_same_grid(first: str, grid: Grid, other: str, other_grid: Grid) -> None:
    """Refuse a grid that does not lie exactly on the first, and say what differs."""
    problem = _grid_difference(grid, other_grid)
    if problem:
        raise InputError(
            f"it does not lie on the grid of {first}: {problem}",
            file=other,
            mend=f"Warp it onto that grid by nearest neighbour: rio warp IN OUT --like {first}.",
        )


def _grid_difference(grid: Grid, other: Grid) -> str:
    if grid.crs != other.crs and not parsed(grid.crs).equals(parsed(other.crs), ignore_axis_order=True):
        return f"its reference system is {_crs_name(other.crs)}, not {_crs_name(grid.crs)}"
    a, _, c, _, e, f = grid.transform
    a2, _, c2, _, e2, f2 = other.transform
    if abs(a2 / a - 1) > 1e-6 or abs(e2 / e - 1) > 1e-6:
        return f"its pixels are {abs(a2):.10g} by {abs(e2):.10g}, not {abs(a):.10g} by {abs(e):.10g}"
    right, down = (c2 - c) / a, (f2 - f) / e + 0.0
    drift = max(abs(a2 / a - 1) * grid.width, abs(e2 / e - 1) * grid.height)
    if max(abs(right), abs(down)) > SAME_ORIGIN_PIXELS or drift > SAME_CORNER_PIXELS:
        unit = parsed(grid.crs).axis_info[0].unit_name
        return (
            f"it is shifted by {right:.6g} pixels in x and {down:.6g} pixels in y "
            f"({c2 - c:.6g} and {f2 - f:.6g} {unit})"
            + (f", and drifts by {drift:.2g} pixels more over the map" if drift > SAME_CORNER_PIXELS else "")
        )
    if (grid.height, grid.width) != (other.height, other.width):
        return f"it has {other.height} rows and {other.width} columns, not {grid.height} and {grid.width}"
    return ""


def _crs_name(crs: str) -> str:
    system = parsed(crs)
    code = system.to_authority()
    return f"{system.name} ({':'.join(code)})" if code else str(system.name)


def _date_labels(bands: Sequence[MapBand], dates: Sequence[object] | None) -> tuple[str, ...]:
    if dates is not None:
        labels = [str(d).strip() for d in dates]
        if len(labels) != len(bands):
            raise InputError(f"{len(labels)} dates are given for {len(bands)} maps", mend="Give one date for each map.")
    else:
        years = [_only_year(b.description) or _only_year(Path(b.path).stem) for b in bands]
        stems = [Path(b.path).stem if b.band == 1 else f"{Path(b.path).stem}:{b.band}" for b in bands]
        labels = years if all(years) and len(set(years)) == len(years) else stems
    if len(set(labels)) < len(labels) or not all(labels):
        raise InputError(
            f"the date labels are not all different: {', '.join(labels)}", mend="Give the dates, one for each map."
        )
    for label in labels:
        if label in RESERVED_LABELS:
            raise InputError(f"the date label '{label}' is the name of another column", mend="Give another label.")
    return tuple(labels)


def _only_year(text: str) -> str:
    years = re.findall(r"(?<!\d)(?:19|20)\d\d(?!\d)", text)
    return years[0] if len(years) == 1 else ""


class Coder:
    """Gives each class code one byte, so that maps of any whole-number type are counted as bytes.

    Byte maps keep their codes. For others bytes are handed out in the order in which codes are given or met.
    """

    def __init__(self, stack: MapStack, codes: Sequence[int] = ()) -> None:
        self.identity = all(b.dtype == "uint8" for b in stack.bands)
        self.codes = list(range(256)) if self.identity else []
        self._bytes: dict[int, int] = {}
        if not self.identity:
            for code in codes:
                self.byte(code)

    def byte(self, code: int) -> int:
        """Byte that stands for `code`."""
        if self.identity:
            return code
        if code not in self._bytes:
            if len(self.codes) == 256:
                raise InputError(
                    "the maps hold more than 256 different codes",
                    mend="Check that they are classified maps, not measurements.",
                )
            self._bytes[code] = len(self.codes)
            self.codes.append(code)
        return self._bytes[code]

    def encode(self, block: NDArray[Any]) -> NDArray[np.uint8]:
        """Bytes for a block of codes, same shape."""
        if self.identity:
            return block
        values = np.unique(block)
        coded = np.array([self.byte(int(v)) for v in values], dtype=np.uint8)
        if int(values[-1]) - int(values[0]) > 0xFFFF:
            return coded[np.searchsorted(values, block)]
        table = np.zeros(int(values[-1]) - int(values[0]) + 1, dtype=np.uint8)
        table[values.astype(np.int64) - int(values[0])] = coded
        return table[block.astype(np.int64) - int(values[0])]


def whole_map(stack: MapStack, index: int) -> NDArray[Any]:
    """All codes of one map, shape (rows, columns): for maps that fit into memory."""
    with Reader(stack) as reader:
        return reader.read(index, Window(0, 0, stack.grid.width, stack.grid.height)).copy()


class Reader:
    """Open files of a stack in one thread; use as a context manager, one per thread."""

    def __init__(self, stack: MapStack) -> None:
        self.stack = stack
        self._open: dict[str, Any] = {}
        self._buffers: dict[int, NDArray[Any]] = {}

    def __enter__(self) -> Reader:
        return self

    def __exit__(self, *error: object) -> None:
        for data in self._open.values():
            data.close()

    def read(self, index: int, window: Window) -> NDArray[Any]:
        """Codes of one map in a window, shape (rows, columns); valid until the next reading of that map."""
        band = self.stack.bands[index]
        try:
            if band.path not in self._open:
                self._open[band.path] = rasterio.open(band.path)
            block: NDArray[Any] = self._open[band.path].read(band.band, window=window, out=self._buffer(index, window))
            return block
        except (RasterioError, OSError) as error:
            raise FileError(
                f"{band.label} cannot be read in {_place(window)}: {_reason(error, band.path)}. "
                "The file is damaged or cut short; copy or make it again."
            ) from error

    def read_all(self, window: Window) -> list[NDArray[Any]]:
        """Codes of every map in a window."""
        return [self.read(i, window) for i in range(len(self.stack.bands))]

    def _buffer(self, index: int, window: Window) -> NDArray[Any]:
        size = window.height * window.width
        if index not in self._buffers or self._buffers[index].size < size:
            self._buffers[index] = np.empty(size, dtype=self.stack.bands[index].dtype)
        return self._buffers[index][:size].reshape(window.height, window.width)


def _place(window: Window) -> str:
    bottom, right = window.row_off + window.height - 1, window.col_off + window.width - 1
    return f"rows {window.row_off} to {bottom}, columns {window.col_off} to {right} (counted from 0)"


@contextmanager
def block_cache(stack: MapStack, *, cut_blocks: bool = False) -> Iterator[None]:
    """Set GDAL's block cache for one pass: small, as with a large one each block lands in fresh memory.

    Windows that cut blocks need a larger one, so that the parts are not decoded again and again.
    """
    with rasterio.Env(GDAL_CACHEMAX=max(stack.cache_bytes, LARGE_CACHE_BYTES if cut_blocks else 0)):
        yield


@contextmanager
def new_raster(path: str | os.PathLike[str], grid: Grid, dtype: str) -> Iterator[Any]:
    """Write a tiled, compressed single-band GeoTIFF with no-data 0 beside `path`; rename it when all went well."""
    a, b, c, d, e, f = grid.transform
    profile = {
        "driver": "GTiff",
        "height": grid.height,
        "width": grid.width,
        "count": 1,
        "dtype": dtype,
        "nodata": 0,
        "crs": grid.crs,
        "transform": rasterio.Affine(a, b, c, d, e, f),
        "tiled": True,
        "blockxsize": 512,
        "blockysize": 512,
        "compress": "deflate",
        "BIGTIFF": "IF_SAFER",
    }
    with replacing(Path(path)) as temporary:
        try:
            with rasterio.open(temporary, "w", **profile) as data:
                yield data
        except ChangeAssessError:
            raise
        except RasterioError as error:
            raise FileError(f"{os.fspath(path)} cannot be written: {_reason(error, str(temporary))}.") from error
