"""CPU time of the tally over a bare tuned read of the same windows, measured in the same run.

Run with ``pytest -m bench -s tests/bench/test_bench_tally.py``. The side of the invented maps is 8,000 pixels, or
the value of the environment variable ``BENCH_SIDE``.
"""

import os
import time

import numpy as np
import pandas as pd
import pytest
import rasterio
from rasterio.transform import from_origin

from change_assess.legend import ChangeClass, ChangeClasses, Legend
from change_assess.maps.count import CombinationCounts
from change_assess.maps.grid import Reader, block_cache, open_maps
from change_assess.maps.strata import stratify
from change_assess.maps.tally import count_stack
from change_assess.sample.draw import draw

pytestmark = pytest.mark.bench

SIDE = int(os.environ.get("BENCH_SIDE", "8000"))
PROFILES = {
    "deflate 512": {"tiled": True, "blockxsize": 512, "blockysize": 512, "compress": "deflate"},
    "lzw strips": {"compress": "lzw", "blockysize": 1},
    "uncompressed 512": {"tiled": True, "blockxsize": 512, "blockysize": 512},
}
PLANAR = {"crs": "EPSG:32633", "transform": from_origin(500_000, 5_000_000, 30, 30)}
GEOGRAPHIC = {"crs": "EPSG:4326", "transform": from_origin(10, 45, 0.00025, 0.00025)}


def patchy(rng, side, classes):
    """Classes in patches of about ten pixels with smooth outlines, 0 on a twentieth of the map."""
    coarse = rng.normal(size=(side // 16 + 2, side // 16 + 2))
    rows = np.linspace(0, side // 16, side)
    low, part = rows.astype(int), (rows % 1).astype(np.float32)
    field = np.empty((side, side), np.float32)
    bands = coarse.astype(np.float32)
    across = bands[:, low] * (1 - part) + bands[:, low + 1] * part
    for i in range(side):
        field[i] = across[low[i]] * (1 - part[i]) + across[low[i] + 1] * part[i]
    edges = np.quantile(field[:: max(1, side // 500)], np.linspace(0.05, 1, classes + 1)[:-1])
    return np.searchsorted(edges, field.ravel()).reshape(side, side).astype(np.uint8)


def changed(rng, codes, share, classes):
    """Change `share` of the map in square patches of 12 pixels."""
    new = codes.copy()
    for row, column in rng.integers(0, len(codes) - 12, size=(int(share * codes.size / 144), 2)):
        patch = new[row : row + 12, column : column + 12]
        patch[patch > 0] = rng.integers(1, classes + 1)
    return new


@pytest.fixture(scope="module")
def arrays():
    rng = np.random.default_rng(20260801)
    dates = [patchy(rng, SIDE, 6)]
    for _ in range(4):
        dates.append(changed(rng, dates[-1], 0.02, 6))
    return dates


def written(folder, arrays, profile, place):
    paths = []
    for i, codes in enumerate(arrays):
        paths.append(folder / f"map_{2000 + i}.tif")
        size = {"height": SIDE, "width": SIDE, "count": 1, "dtype": "uint8", "nodata": 0}
        with rasterio.open(paths[-1], "w", driver="GTiff", **size, **profile, **place) as data:
            data.write(codes, 1)
    return paths


def cpu(function, repeats=5):
    """Median CPU seconds of the whole process."""
    spent = []
    for _ in range(repeats):
        start = time.process_time()
        function()
        spent.append(time.process_time() - start)
    return float(np.median(spent))


def bare_read(stack):
    with block_cache(stack), Reader(stack) as reader:
        for window in stack.windows():
            reader.read_all(window)


def ratio(name, stack, job):
    bare = cpu(lambda: bare_read(stack))
    whole = cpu(job)
    pixels = SIDE * SIDE
    print(f"\n{name}: bare {1e9 * bare / pixels:.2f} ns, job {1e9 * whole / pixels:.2f} ns, ratio {whole / bare:.2f}")
    return whole / bare


@pytest.mark.parametrize(
    ("layout", "dates", "place", "most"),
    [
        ("deflate 512", 2, PLANAR, 3.0),
        ("lzw strips", 2, PLANAR, 2.2),
        ("uncompressed 512", 2, PLANAR, 6.0),
        ("deflate 512", 2, GEOGRAPHIC, 4.5),
        ("deflate 512", 5, PLANAR, 4.0),
    ],
)
def test_tally_costs_little_more_than_reading(tmp_path, arrays, layout, dates, place, most):
    """The tally takes at most a small multiple of the CPU time of decoding the same maps."""
    stack = open_maps(written(tmp_path, arrays[:dates], PROFILES[layout], place))
    name = f"tally, {layout}, {dates} dates, {place['crs']}"
    assert ratio(name, stack, lambda: count_stack(stack, workers=1)) < most


def test_kernel_is_far_faster_than_crosstab(arrays):
    """Counting pairs in memory is at least ten times faster than a generic cross table of the same arrays."""
    first, second = (a[:1000].copy() for a in arrays[:2])

    def kernel():
        counts = CombinationCounts(2)
        counts.add([first, second], 0)
        return counts.finish()

    slow, fast = cpu(lambda: pd.crosstab(first.ravel(), second.ravel()), 3), cpu(kernel)
    print(f"\ncrosstab / kernel: {slow / fast:.0f}")
    assert slow / fast > 10


def test_stratify_and_draw_cost_a_few_readings(tmp_path, arrays):
    """Making the stratum raster, and drawing from it, stay within a small multiple of a bare read."""
    paths = written(tmp_path, arrays[:2], PROFILES["deflate 512"], PLANAR)
    stack = open_maps(paths)
    legend = Legend.of_names(["forest", "crop", "pasture", "water", "urban", "bare"])
    recipes = ChangeClasses((ChangeClass("forest loss", ("forest",), ("*",)),))
    out = tmp_path / "strata.tif"
    made = []
    making = ratio("stratify", stack, lambda: made.append(stratify(paths, recipes, legend, out=out, workers=1)))
    sizes = dict.fromkeys(made[0]["stratum"], 33)
    drawing = ratio("draw 33 a stratum", stack, lambda: draw(out, made[0], sizes, seed=1))
    assert making < 12
    assert drawing < 5
