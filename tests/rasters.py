"""Small invented rasters for the tests of the map wing."""

import numpy as np
import rasterio
from rasterio.transform import Affine

UTM = {"crs": "EPSG:32633", "transform": Affine(30, 0, 500_000, 0, -30, 5_000_000)}
DEGREES = {"crs": "EPSG:4326", "transform": Affine(0.01, 0, 10, 0, -0.01, 60)}


def write_map(path, codes, *, nodata=None, place=UTM, **profile):
    """Write a two-dimensional array as a single-band GeoTIFF, a three-dimensional one as a file of many bands."""
    bands = codes if codes.ndim == 3 else codes[None]
    size = {"count": len(bands), "height": bands.shape[1], "width": bands.shape[2], "dtype": codes.dtype.name}
    with rasterio.open(path, "w", driver="GTiff", nodata=nodata, **size, **place, **profile) as data:
        data.write(bands)
    return str(path)


def random_maps(rng, shape, dates, codes, change=0.05, dtype="uint8"):
    """Blocky maps of which a share changes at each later date."""
    patches = rng.choice(codes, size=(shape[0] // 5 + 1, shape[1] // 5 + 1))
    maps = [np.kron(patches, np.ones((5, 5), int))[: shape[0], : shape[1]].astype(dtype)]
    for _ in range(dates - 1):
        new = maps[-1].copy()
        moved = rng.random(shape) < change
        new[moved] = rng.choice(codes, size=int(moved.sum())).astype(dtype)
        maps.append(new)
    return maps
