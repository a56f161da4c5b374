"""Area of the pixels of a grid, in hectares.

A projected grid has one pixel area, the planar one, and a check says how far the projection stretches areas
there. A longitude/latitude grid has one pixel area per row, on the ellipsoid of its reference system.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import Any

import numpy as np
import pyproj
from numpy.typing import NDArray

from change_assess.errors import InputError

SQUARE_METRES_PER_HECTARE = 10_000.0

NOTED_DISTORTION = 0.005
"""A projection that stretches areas by more than this share somewhere on the map is reported."""

REFUSED_DISTORTION = 0.05
"""One that stretches them by more than this is refused."""

CHECK_SIDE_METRES = 2_000.0
"""Side of the squares on which the stretch of a projection is measured."""

Transform = tuple[float, float, float, float, float, float]
"""Pixel (column, row) to (x, y): ``x = a*column + b*row + c``, ``y = d*column + e*row + f``, in the order a … f."""


@dataclass(frozen=True)
class PixelAreas:
    """Area of one pixel: the same everywhere, or one for each row.

    Attributes
    ----------
    hectares : ndarray of float, shape (1,) or (rows,)
        Pixel area, in hectares.
    stretch : tuple of float, or None
        Smallest and largest ratio of planar to true area on the map; None for longitude/latitude grids.
    """

    hectares: NDArray[np.float64]
    stretch: tuple[float, float] | None = None

    @property
    def by_row(self) -> bool:
        """Whether the rows have different pixel areas."""
        return self.stretch is None

    def of_rows(self, rows: NDArray[Any]) -> NDArray[np.float64]:
        """Pixel area of each of the `rows` (numbers from 0), in hectares."""
        return self.hectares[rows] if self.by_row else np.full(len(rows), self.hectares[0])


def pixel_areas(crs: str, transform: Transform, height: int, width: int, file: str) -> PixelAreas:
    """Pixel areas of a north-up grid.

    Parameters
    ----------
    crs : str
        Coordinate reference system, as WKT.
    transform : tuple of 6 float
        Pixel to coordinates.
    height, width : int
        Rows and columns.
    file : str
        Name for messages.

    Raises
    ------
    InputError
        For a reference system that does not give areas on the Earth, rows beyond a pole, or a projection that
        stretches areas by more than 5 %.
    """
    system = parsed(crs)
    if system.is_geographic and not system.is_derived:
        return PixelAreas(_geographic_rows(system, transform, height, file))
    if not system.is_projected:
        raise InputError(
            f"the coordinate reference system '{system.name}' is neither projected nor longitude/latitude",
            file=file,
            mend="Reproject the map to an equal-area grid, by nearest neighbour.",
        )
    metres = float(system.axis_info[0].unit_conversion_factor)
    planar = abs(transform[0] * transform[4]) * metres**2 / SQUARE_METRES_PER_HECTARE
    return PixelAreas(np.array([planar]), _checked_stretch(system, transform, height, width, file))


@cache
def parsed(crs: str) -> pyproj.CRS:
    """Reference system from WKT; the horizontal part where heights are included."""
    system = pyproj.CRS.from_wkt(crs)
    return system.sub_crs_list[0] if system.is_compound else system


def ellipsoid(system: pyproj.CRS) -> pyproj.Geod:
    """Ellipsoid of a reference system; WGS 84 where it names none."""
    return system.get_geod() or pyproj.Geod(ellps="WGS84")


def _geographic_rows(system: pyproj.CRS, transform: Transform, height: int, file: str) -> NDArray[np.float64]:
    radians = float(system.axis_info[0].unit_conversion_factor)
    step, top = transform[4] * radians, transform[5] * radians
    middle = top + step * (np.arange(height, dtype=np.float64) + 0.5)
    if np.abs(middle).max() + abs(step) / 2 > np.pi / 2 + 1e-9:
        raise InputError(
            "the grid has rows beyond a pole",
            file=file,
            mend="Check its georeferencing, or crop it to latitudes -90 to 90.",
        )
    geod = ellipsoid(system)
    square_metres = zone_areas(middle, abs(step), abs(transform[0]) * radians, float(geod.a), float(geod.es))
    return square_metres / SQUARE_METRES_PER_HECTARE


def zone_areas(
    middle: NDArray[np.float64], height: float, width: float, semi_major: float, eccentricity_squared: float
) -> NDArray[np.float64]:
    """Exact area of cells bounded by parallels and meridians on an ellipsoid of revolution.

    The area between the equator and latitude p, per radian of longitude, is ``b²/2 [s/(1 - e²s²) + atanh(es)/e]``
    with ``s = sin p``. The difference between two parallels is written without subtracting nearly equal numbers.

    Parameters
    ----------
    middle : ndarray of float, shape (rows,)
        Latitude half-way between the two parallels of each cell, in radians.
    height, width : float
        Extent in latitude and longitude, in radians.
    semi_major : float
        Semi-major axis a, in metres.
    eccentricity_squared : float
        e², 0 for a sphere.

    Returns
    -------
    ndarray of float, shape (rows,)
        Areas in square metres.

    Examples
    --------
    >>> whole_sphere = zone_areas(np.array([0.0]), np.pi, 2 * np.pi, 1.0, 0.0)
    >>> bool(np.isclose(whole_sphere[0], 4 * np.pi))
    True
    """
    e2 = eccentricity_squared
    lower, upper = np.sin(middle - height / 2), np.sin(middle + height / 2)
    difference = 2 * np.cos(middle) * np.sin(height / 2)
    first = difference * (1 + e2 * lower * upper) / ((1 - e2 * lower**2) * (1 - e2 * upper**2))
    second = difference / (1 - e2 * lower * upper)
    if e2 > 0:
        second = np.arctanh(np.sqrt(e2) * second) / np.sqrt(e2)
    areas: NDArray[np.float64] = width * semi_major**2 * (1 - e2) / 2 * (first + second)
    return areas


def _checked_stretch(
    system: pyproj.CRS, transform: Transform, height: int, width: int, file: str
) -> tuple[float, float]:
    ratios = _stretch(system, transform, height, width)
    if not len(ratios):
        raise InputError(
            f"the map does not lie on the Earth in its reference system '{system.name}'",
            file=file,
            mend="Check its georeferencing.",
        )
    low, high = float(ratios.min()), float(ratios.max())
    if max(high - 1, 1 - low) > REFUSED_DISTORTION:
        raise InputError(
            f"its projection '{system.name}' shows land at {low:.3f} to {high:.3f} times its true area, so pixels "
            "cannot be turned into hectares",
            file=file,
            mend="Reproject the maps by nearest neighbour to an equal-area grid such as EPSG:6933.",
        )
    return low, high


def _stretch(system: pyproj.CRS, transform: Transform, height: int, width: int) -> NDArray[np.float64]:
    """Planar over ellipsoidal area of a small square at 25 places spread over the map (those on the Earth)."""
    a, _, c, _, e, f = transform
    unit = float(system.axis_info[0].unit_conversion_factor)
    side = CHECK_SIDE_METRES / unit
    steps = np.linspace(0, 1, 5)
    x, y = (v.ravel() for v in np.meshgrid(c + a * width * steps, f + e * height * steps))
    corners = [(x + dx * side, y + dy * side) for dx, dy in ((-0.5, -0.5), (0.5, -0.5), (0.5, 0.5), (-0.5, 0.5))]
    projection, geod = pyproj.Proj(system), ellipsoid(system)
    lon, lat = (np.stack(v) for v in zip(*(projection(*corner, inverse=True) for corner in corners), strict=True))
    on_earth = (np.isfinite(lon) & np.isfinite(lat)).all(axis=0)
    true = [abs(geod.polygon_area_perimeter(lon[:, i], lat[:, i])[0]) for i in np.flatnonzero(on_earth)]
    return CHECK_SIDE_METRES**2 / np.array([area for area in true if area > 0])
