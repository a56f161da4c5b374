from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import rasterio
from rasters import DEGREES, UTM, write_map
from scipy import stats

from change_assess.errors import DesignError, InputError
from change_assess.legend import Legend
from change_assess.maps.cells import codes_at
from change_assess.maps.grid import open_maps
from change_assess.sample.draw import draw, interleaved

NEIBA = Path(__file__).parent / "data" / "hispaniola"
FOREST_LEGEND = Legend.of_names(["forest", "non-forest"])
SIZES = {"stable": 60, "loss": 30, "gain": 10}


def table_of(codes, names=("stable", "loss", "gain")):
    units = [int((codes == code).sum()) for code in range(1, len(names) + 1)]
    return pd.DataFrame({"stratum": names, "code": range(1, len(names) + 1), "units": units})


@pytest.fixture(scope="module")
def codes():
    """A stratum raster larger than one cell in both directions, with a rare and a very rare stratum."""
    rng = np.random.default_rng(11)
    return rng.choice(np.array([0, 1, 2, 3], np.uint8), p=[0.1, 0.88, 0.019, 0.001], size=(700, 1150))


@pytest.fixture
def raster(tmp_path, codes):
    return write_map(tmp_path / "strata.tif", codes, nodata=0, tiled=True, blockxsize=256, blockysize=256)


def rows_and_columns(sample, place=UTM):
    across = ~place["transform"]
    column, row = across.a * sample["x"] + across.c, across.e * sample["y"] + across.f
    return np.floor(row.to_numpy()).astype(int), np.floor(column.to_numpy()).astype(int)


def test_every_drawn_pixel_lies_in_its_stratum_and_none_twice(raster, codes):
    """Coordinates lead back to distinct pixels of the stated stratum, in the numbers asked for."""
    sample = draw(raster, table_of(codes), SIZES, seed=4).sample
    row, column = rows_and_columns(sample)
    assert (table_of(codes)["stratum"].to_numpy()[codes[row, column] - 1] == sample["stratum"]).all()
    assert len(set(zip(row, column, strict=True))) == 100
    assert sample["stratum"].value_counts().to_dict() == SIZES


def test_inclusion_probabilities_are_sample_over_population(raster, codes):
    """Each unit carries n_h / N_h of its stratum, and their inverses add up to the population."""
    strata = table_of(codes)
    sample = draw(raster, strata, SIZES, seed=4).sample
    for name, units in zip(strata["stratum"], strata["units"], strict=True):
        assert sample.loc[sample["stratum"] == name, "inclusion_probability"].unique() == [SIZES[name] / units]
    assert (1 / sample["inclusion_probability"]).sum() == pytest.approx(strata["units"].sum())


@pytest.mark.parametrize(
    "profile", [{"blockysize": 3, "compress": "lzw"}, {"tiled": True, "blockxsize": 48, "blockysize": 80}]
)
def test_the_sample_depends_on_the_seed_and_not_on_the_storage_of_the_raster(tmp_path, raster, codes, profile):
    """Other blocks, type or order of the strata table give the same units; another seed gives others."""
    other = write_map(tmp_path / "other.tif", codes.astype(np.uint16), nodata=0, **profile)
    first = draw(raster, table_of(codes), SIZES, seed=7)
    again = draw(other, table_of(codes)[::-1], dict(reversed(SIZES.items())), seed=7)
    pd.testing.assert_frame_equal(first.sample, again.sample)
    assert not first.sample["x"].equals(draw(raster, table_of(codes), SIZES, seed=8).sample["x"])


def test_the_units_of_one_stratum_do_not_depend_on_the_size_of_another(raster, codes):
    """Each stratum has a random stream of its own."""
    few, many = (draw(raster, table_of(codes), SIZES | {"loss": n}, seed=7).sample for n in (5, 50))
    gain = [s.loc[s["stratum"] == "gain", ["x", "y"]].reset_index(drop=True) for s in (few, many)]
    pd.testing.assert_frame_equal(*gain)


@pytest.mark.parametrize("sizes", [[7], [4, 2], [1000, 3, 50, 50, 2], [30] * 20, [2, 2, 997], list(range(2, 30))])
def test_any_first_part_of_the_order_holds_each_stratum_within_one_unit_of_its_share(sizes):
    """The deviation from proportional shares stays below one unit at every step, and ends at zero."""
    turns = interleaved(sizes)
    held = np.cumsum(turns[:, None] == np.arange(len(sizes)), axis=0)
    share = np.arange(1, len(turns) + 1)[:, None] * np.array(sizes) / sum(sizes)
    assert np.abs(held - share).max() < 1
    assert held[-1].tolist() == sizes


def test_names_tell_nothing_about_stratum_or_order(raster, codes):
    """Unit names are numbered at random: their rank is unrelated to the draw order and to the stratum."""
    sample = draw(raster, table_of(codes), {"stable": 400, "loss": 400, "gain": 200}, seed=9).sample
    assert sample["draw_order"].tolist() == list(range(1, 1001))
    assert sorted(sample["unit"]) == [f"u{i:05d}" for i in range(1, 1001)]
    number = sample["unit"].str[1:].astype(int)
    assert abs(stats.spearmanr(number, sample["draw_order"]).statistic) < 0.12
    assert stats.kruskal(*(g for _, g in number.groupby(sample["stratum"]))).pvalue > 0.001


def test_every_pixel_of_a_stratum_is_equally_likely(tmp_path):
    """Over 2,000 draws, the counts of all pixels of a small raster fit equal chances, alone and in pairs of halves."""
    codes = np.array([[1, 1, 2, 1], [2, 1, 1, 0], [1, 2, 1, 1], [1, 1, 2, 2]], np.uint8)
    path = write_map(tmp_path / "strata.tif", codes, nodata=0)
    strata = table_of(codes, ("a", "b"))
    hits, first = np.zeros(codes.shape), np.zeros(codes.shape)
    for seed in range(2000):
        sample = draw(path, strata, {"a": 3, "b": 2}, seed=seed).sample
        np.add.at(hits, rows_and_columns(sample), 1)
        np.add.at(first, rows_and_columns(sample.drop_duplicates("stratum")), 1)
    for code, size in ((1, 3), (2, 2)):
        found, units = hits[codes == code], (codes == code).sum()
        variance = 2000 * size / units * (1 - size / units) * units / (units - 1)
        assert stats.chi2.sf(((found - 2000 * size / units) ** 2).sum() / variance, units - 1) > 0.001
        assert stats.chisquare(first[codes == code]).pvalue > 0.001
    assert hits[codes == 0].sum() == 0


def test_a_whole_stratum_can_be_drawn(tmp_path):
    """A census of a stratum, even of one pixel, holds each of its pixels once."""
    codes = np.array([[1, 1, 2, 1, 3]], np.uint8)
    path = write_map(tmp_path / "strata.tif", codes)
    sample = draw(path, table_of(codes), {"stable": 3, "loss": 1, "gain": 1}, seed=1).sample
    assert sorted(sample["x"]) == [500_015 + 30 * i for i in range(5)]
    assert (sample["inclusion_probability"] == 1).all()


def test_map_labels_and_coordinates_are_those_of_the_pixels(tmp_path):
    """On Sierra de Neiba labels agree with the strata, and coordinates are pixel centres in degrees."""
    change = NEIBA / "change_2000_2023.tif"
    with rasterio.open(change) as data:
        codes, transform = data.read(1), data.transform
    names = ("stable forest", "forest loss", "non-forest")
    sizes = dict.fromkeys(names, 40)
    maps = [NEIBA / "forest_2000.tif", NEIBA / "forest_2023.tif"]
    sample = draw(change, table_of(codes, names), sizes, seed=3, maps=maps, legend=FOREST_LEGEND).sample
    pairs = sample.groupby("stratum")[["map_2000", "map_2023"]].agg(lambda column: "/".join(sorted(set(column))))
    assert pairs.loc["stable forest"].tolist() == ["forest", "forest"]
    assert pairs.loc["forest loss"].tolist() == ["forest", "non-forest"]
    assert pairs.loc["non-forest", "map_2023"] == "non-forest"
    np.testing.assert_allclose(sample["longitude"], sample["x"], atol=1e-12)
    inside = (sample["x"] - transform.c) / transform.a % 1
    np.testing.assert_allclose(inside, 0.5, atol=1e-6)
    assert "area_ha" not in sample


def test_codes_of_maps_are_written_where_there_is_no_legend(raster, codes, tmp_path):
    """Without a legend labels are codes, empty where a map has no data, under the name that was asked for."""
    path = write_map(tmp_path / "cover_2020.tif", codes * 2, nodata=2)
    sample = draw(raster, table_of(codes), SIZES, seed=4, maps=[path], map_name="alerts").sample
    expected = sample["stratum"].map({"stable": pd.NA, "loss": 4, "gain": 6})
    assert sample["alerts_2020"].astype(object).equals(expected.astype(object))


def test_unit_areas_are_written_where_pixels_differ_in_area(tmp_path):
    """On a longitude/latitude grid that spans degrees each unit has its own area, that of its row."""
    codes = np.ones((300, 40), np.uint8)
    path = write_map(tmp_path / "strata.tif", codes, place=DEGREES)
    sample = draw(path, table_of(codes, ("all",)), {"all": 50}, seed=2).sample
    row, _ = rows_and_columns(sample, DEGREES)
    np.testing.assert_array_equal(sample["area_ha"], open_maps(path).areas.hectares[row])


def test_longitude_and_latitude_are_geographic_for_projected_grids(raster, codes):
    """A UTM grid at its central meridian lies at 15 degrees east."""
    sample = draw(raster, table_of(codes), SIZES, seed=4).sample
    assert sample["longitude"].between(15, 15.5).all()
    assert sample["latitude"].between(44.9, 45.2).all()


def test_the_record_is_enough_to_draw_again(raster, codes):
    """Seed, generator, sizes and the checksum of the raster are kept."""
    record = draw(raster, table_of(codes), SIZES, seed=4).record
    assert (record["format"], record["generator"], record["seed"], record["ranks_drawn"]) == (1, "PCG64", 4, 100)
    assert [(s["stratum"], s["n_h"]) for s in record["strata"]] == list(SIZES.items())
    assert [s["N_h"] for s in record["strata"]] == table_of(codes)["units"].tolist()
    assert len(record["stratum_raster"]["sha256"]) == 64


def test_codes_at_reads_any_pixels(raster, codes):
    """Single pixels are read from the cells that hold them, in the order asked for."""
    rng = np.random.default_rng(5)
    rows, columns = rng.integers(0, 700, 60), rng.integers(0, 1150, 60)
    assert (codes_at(open_maps(raster), rows, columns)[0] == codes[rows, columns]).all()


@pytest.mark.parametrize(
    ("sizes", "error", "message"),
    [
        (SIZES | {"gain": 100_000}, DesignError, r"Stratum 'gain' has \d+ pixels, and 100000 were asked for"),
        (SIZES | {"gain": 1}, DesignError, r"'gain' would get 1 of its \d+ pixels; a variance needs at least 2"),
        ({"stable": 60, "loss": 30}, DesignError, "'gain' would get 0"),
        (SIZES | {"gian": 5}, InputError, "'gian', which is not in the strata table.*Did you mean 'gain'"),
        (SIZES | {"gain": 2.5}, InputError, r"sample size 2\.5 of stratum 'gain' is not a whole number"),
    ],
)
def test_sizes_that_the_strata_do_not_allow_are_refused(raster, codes, sizes, error, message):
    """Too many, too few, unnamed and unknown strata each have their sentence."""
    with pytest.raises(error, match=message):
        draw(raster, table_of(codes), sizes, seed=1)


@pytest.mark.parametrize("seed", [-1, 1.5, None, True])
def test_a_seed_is_a_whole_number(raster, codes, seed):
    """There is no draw without an explicit seed."""
    with pytest.raises(InputError, match="is not a whole number of 0 or more"):
        draw(raster, table_of(codes), SIZES, seed=seed)


def test_a_raster_that_is_not_the_one_of_the_table_is_refused(tmp_path, raster, codes):
    """Other counts, other codes, other types and other grids are noticed before anything is drawn."""
    strata = table_of(codes)
    with pytest.raises(DesignError, match=r"Stratum 'loss' has 5 pixels in the strata table and \d+ in"):
        draw(raster, strata.assign(units=[strata["units"][0], 5, strata["units"][2]]), SIZES | {"loss": 3}, seed=1)
    with pytest.raises(InputError, match="codes that are not in the strata table: 3"):
        draw(raster, strata[:2], {"stable": 60, "loss": 30}, seed=1)
    with pytest.raises(InputError, match=r"of type int32, and stratum codes are bytes or 16-bit numbers"):
        draw(write_map(tmp_path / "wide.tif", codes.astype(np.int32)), strata, SIZES, seed=1)
    with pytest.raises(InputError, match="does not lie on the grid"):
        draw(raster, strata, SIZES, seed=1, maps=[write_map(tmp_path / "small.tif", codes[:9])])


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (lambda t: t.drop(columns="code"), r"column 'code': the strata table lacks a column"),
        (lambda t: pd.concat([t, t[:1]]), "'stable' stands twice"),
        (lambda t: t.assign(code=[0, 1, 2]), "a stratum has a code below 1"),
    ],
)
def test_an_unusable_strata_table_is_refused(raster, codes, change, message):
    """Missing columns, repeated strata and code 0 are named."""
    with pytest.raises(InputError, match=message):
        draw(raster, change(table_of(codes)), SIZES, seed=1)


def test_a_map_with_codes_unknown_to_the_legend_is_refused(raster, codes, tmp_path):
    """Labels are never made up: an unknown code is listed."""
    path = write_map(tmp_path / "cover_2020.tif", codes)
    with pytest.raises(InputError, match=r"cover_2020\.tif: it holds codes that the legend does not: 3"):
        draw(raster, table_of(codes), SIZES, seed=4, maps=[path], legend=FOREST_LEGEND)
