"""The invented region: rare change, plausible map errors, imperfect interpreters, and the same again for one seed."""

from __future__ import annotations

from itertools import pairwise
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import rasterio
from numpy.typing import NDArray

from change_assess import interpreters, scenario
from change_assess.errors import FileError, InputError
from change_assess.interpreters import SURENESS, simulate_labels
from change_assess.scenario import FOREST, LEGEND, ScenarioMaps, build_maps, true_areas

SIZE = 600


@pytest.fixture(scope="module")
def maps(tmp_path_factory: pytest.TempPathFactory) -> ScenarioMaps:
    return build_maps(tmp_path_factory.mktemp("scenario"), size=SIZE)


def read(path: Path) -> NDArray[np.uint8]:
    with rasterio.open(path) as source:
        return source.read(1)


def covers(maps: ScenarioMaps) -> tuple[list[NDArray[np.uint8]], list[NDArray[np.uint8]]]:
    truths, seen = ([read(p) for p in paths.values()] for paths in (maps.truth, maps.maps))
    inside = truths[0] > 0
    return [t[inside] for t in truths], [m[inside] for m in seen]


def loss(first: NDArray[np.uint8], last: NDArray[np.uint8]) -> NDArray[np.bool_]:
    return (first == FOREST) & (last != FOREST)


def units(maps: ScenarioMaps, n: int) -> pd.DataFrame:
    rng = np.random.default_rng(5)
    rows, columns = np.nonzero(read(maps.districts))
    at = rng.choice(rows.size, n, replace=False)
    with rasterio.open(maps.districts) as source:
        x, y = source.xy(rows[at], columns[at])
    return pd.DataFrame({"unit": [f"u{i}" for i in range(n)], "x": x, "y": y})


def test_rasters_share_one_equal_area_grid_and_leave_the_outside_empty(maps: ScenarioMaps) -> None:
    """All rasters are tiled bytes on one equal-area grid, and 0 marks the outside in each of them."""
    outside = read(maps.districts) == 0
    assert 0.2 < outside.mean() < 0.7
    for path in [*maps.truth.values(), *maps.maps.values()]:
        with rasterio.open(path) as source:
            assert (source.crs.to_epsg(), source.nodata, source.dtypes) == (6933, 0, ("uint8",))
            assert source.block_shapes == [(512, 512)]
            assert source.res == (scenario.PIXEL_M, scenario.PIXEL_M)
        assert np.array_equal(read(path) == 0, outside)


def test_every_class_and_district_is_present(maps: ScenarioMaps) -> None:
    """The maps hold exactly the classes of the legend, the districts exactly those named."""
    for path in [*maps.truth.values(), *maps.maps.values()]:
        assert sorted(set(np.unique(read(path))) - {0}) == LEGEND.codes
    assert np.unique(read(maps.districts)).tolist() == [0, *range(1, len(scenario.DISTRICTS) + 1)]


def test_change_is_rare_and_gain_smaller_than_loss(maps: ScenarioMaps) -> None:
    """In each period forest loss takes 0.5–0.8 % of the province, and forest gain less than half of that."""
    truths, _ = covers(maps)
    for first, last in pairwise(truths):
        share = loss(first, last).mean()
        assert 0.005 <= share <= 0.008
        assert 0 < loss(last, first).mean() < share / 2


@pytest.mark.parametrize("seed", [1, 2, 2016])
def test_map_errors_are_those_of_an_ordinary_map(tmp_path: Path, seed: int) -> None:
    """Overall accuracy is 0.90–0.97; forest loss has user's accuracy 0.70–0.90 and producer's 0.60–0.85."""
    truths, seen = covers(build_maps(tmp_path, size=SIZE, seed=seed))
    assert all(0.90 < (t == m).mean() < 0.97 for t, m in zip(truths, seen, strict=True))
    for period in range(len(truths) - 1):
        true, mapped = (loss(*c[period : period + 2]) for c in (truths, seen))
        both = np.count_nonzero(true & mapped)
        assert 0.70 <= both / np.count_nonzero(mapped) <= 0.90
        assert 0.60 <= both / np.count_nonzero(true) <= 0.85


def test_most_map_errors_persist(maps: ScenarioMaps) -> None:
    """Four fifths of the pixels that are wrong at the first date and did not change are wrong the same way later."""
    truths, seen = covers(maps)
    still = (truths[0] == truths[1]) & (seen[0] != truths[0])
    assert (seen[1] == seen[0])[still].mean() > 0.8


def test_small_clearings_are_missed_more_often(tmp_path: Path) -> None:
    """The map shows loss on more of the area of large true clearings than of small ones."""
    from scipy.ndimage import label

    maps = build_maps(tmp_path, size=1200)
    truth, seen = ([read(p) for p in paths.values()] for paths in (maps.truth, maps.maps))
    patches, _ = label(loss(truth[0], truth[1]))
    sizes = np.bincount(patches.ravel())[patches]
    found = loss(seen[0], seen[1])
    small, large = (patches > 0) & (sizes <= 9), (patches > 0) & (sizes >= 60)
    assert found[small].mean() + 0.2 < found[large].mean()


def test_same_seed_gives_the_same_files(maps: ScenarioMaps, tmp_path: Path) -> None:
    """The rasters depend on the seed and on nothing else."""
    again, other = build_maps(tmp_path / "a", size=SIZE), build_maps(tmp_path / "b", size=SIZE, seed=7)
    for date in maps.dates:
        assert maps.maps[date].read_bytes() == again.maps[date].read_bytes()
        assert maps.truth[date].read_bytes() == again.truth[date].read_bytes()
        assert maps.maps[date].read_bytes() != other.maps[date].read_bytes()


def test_true_areas_are_counted_from_the_truth(maps: ScenarioMaps) -> None:
    """The true area of forest loss is its pixels times 0.04 ha."""
    truths, _ = covers(maps)
    table = true_areas(maps)
    period = table[table["period"] == table["period"].iloc[0]]
    lost = period[(period["from"] == "forest") & (period["to"] != "forest")]
    pixels = np.count_nonzero(loss(truths[0], truths[1]))
    assert lost["units"].sum() == pixels
    assert lost["area_ha"].sum() == pytest.approx(pixels * 0.04)
    assert period["units"].sum() == truths[0].size


def test_labels_are_nearly_the_truth(maps: ScenarioMaps) -> None:
    """Interpreters agree with the truth on 95–99.9 % of the units, and leave a few without a label."""
    sample = units(maps, 3000)
    table = pd.concat(simulate_labels(sample, maps.truth, seed=1))
    columns = [f"ref_{d}" for d in maps.dates]
    assert table.columns.tolist() == ["unit", "interpreter", *columns, "sureness"]
    place = table["unit"].str[1:].astype(int).to_numpy()
    names = np.array(["", *LEGEND.names], dtype=object)
    truth = names[interpreters._codes_at(sample, list(maps.truth.values()))][place]
    labels = table[columns].to_numpy()
    blank = (labels == "").any(axis=1)
    assert 0 < blank.mean() < 0.02
    assert 0.95 < (labels == truth).all(axis=1)[~blank].mean() < 0.999
    assert set(table["sureness"]) == {*SURENESS, ""}


def test_errors_of_interpreters_make_no_change_where_there_is_none(maps: ScenarioMaps) -> None:
    """A unit without true change that is mislabelled gets the same wrong label at all dates."""
    sample = units(maps, 3000)
    codes = interpreters._codes_at(sample, list(maps.truth.values()))
    stable = set(sample["unit"][(codes == codes[:, :1]).all(axis=1)])
    table = pd.concat(simulate_labels(sample, maps.truth, seed=1))
    columns = [f"ref_{d}" for d in maps.dates]
    full = table[table["unit"].isin(stable) & (table[columns] != "").all(axis=1)]
    assert (full[columns].nunique(axis=1) == 1).all()


def test_a_stated_share_of_units_is_labelled_twice(maps: ScenarioMaps) -> None:
    """With a repeat share of 15 %, 150 of 1,000 units come back from two different interpreters."""
    tables = simulate_labels(units(maps, 1000), maps.truth, seed=1, interpreters=4, repeat_share=0.15)
    times = pd.concat(tables).groupby("unit")["interpreter"].nunique()
    assert (len(tables), len(times), (times == 2).sum(), times.max()) == (4, 1000, 150, 2)
    alone = simulate_labels(units(maps, 50), maps.truth, seed=1, interpreters=1)
    assert [len(t) for t in alone] == [50]


def test_labels_depend_only_on_the_seed(maps: ScenarioMaps) -> None:
    """The same seed gives the same labels, another seed others, and the sample stays as it was."""
    sample = units(maps, 500)
    before = sample.copy()
    first, again, other = (pd.concat(simulate_labels(sample, maps.truth, seed=s)) for s in (1, 1, 2))
    pd.testing.assert_frame_equal(first, again)
    pd.testing.assert_frame_equal(sample, before)
    assert not first.equals(other)


def test_mistakes_are_named(maps: ScenarioMaps, tmp_path: Path) -> None:
    """Too small a region, a sample without coordinates, units outside, and odd options are refused in plain words."""
    sample = units(maps, 10)
    with pytest.raises(InputError, match="too small"):
        build_maps(tmp_path, size=100)
    with pytest.raises(InputError, match="no column 'y'"):
        simulate_labels(sample.drop(columns="y"), maps.truth, seed=1)
    with pytest.raises(InputError, match="unit u3 lies where"):
        simulate_labels(sample.assign(x=[*sample["x"][:3], 0.0, *sample["x"][4:]]), maps.truth, seed=1)
    with pytest.raises(InputError, match="0 interpreters"):
        simulate_labels(sample, maps.truth, seed=1, interpreters=0)
    with pytest.raises(InputError, match="share of repeated units is 2"):
        simulate_labels(sample, maps.truth, seed=1, repeat_share=2)
    with pytest.raises(FileError, match="does not exist"):
        simulate_labels(sample, {"2016": tmp_path / "none.tif"}, seed=1)
