from concurrent.futures import ThreadPoolExecutor
from itertools import pairwise
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import rasterio
from rasters import DEGREES, random_maps, write_map

from change_assess.errors import InputError
from change_assess.legend import ChangeClass, ChangeClasses, Legend, LegendClass
from change_assess.maps import count
from change_assess.maps import tally as tally_module
from change_assess.maps.count import CombinationCounts
from change_assess.maps.strata import stratify
from change_assess.maps.tally import tally

DATA = Path(__file__).parent / "data"
FOREST = [3, 4, 5, 6, 49]
FOREST_LEGEND = Legend((LegendClass(1, "forest"), LegendClass(2, "non-forest")))
NEIBA = [DATA / "hispaniola" / f"forest_{year}.tif" for year in (2000, 2010, 2023)]


def amapa(site):
    path = DATA / "amapa" / f"{site}_85a22.tif"
    return tally([f"{path}:1", f"{path}:mapbiomas_cover_2022"])


def expected_trajectories(maps, nodata=()):
    """Counts by pandas of the pixels that hold no no-data code at any date."""
    frame = pd.DataFrame({str(i): m.ravel().astype(int) for i, m in enumerate(maps)})
    frame = frame[~frame.isin(list(nodata)).any(axis=1)]
    return frame.value_counts().sort_index().rename("units").reset_index()


@pytest.mark.parametrize("site", ["lorenco", "vilanova"])
def test_amapa_transitions_equal_the_published_table_cell_by_cell(site):
    """Bands 1985 and 2022 of a file of 38 bands give every count of the table made with another tool."""
    pairs = amapa(site).trajectories.pivot(index="1985", columns="2022", values="units").fillna(0).astype(int)
    published = pd.read_csv(DATA / "amapa" / f"{site}_transitions_1985_2022_pixels.csv", index_col=0)
    published.columns = published.columns.astype(int)
    pd.testing.assert_frame_equal(pairs, published, check_names=False)


@pytest.mark.parametrize(
    ("site", "valid", "forest", "lost", "gained", "moved", "mining"),
    [
        ("lorenco", 1_795_390, 158_958.8, 1_208.9, 68.1, 17_628, 7_744),
        ("vilanova", 1_795_600, 159_960.2, 2_084.0, 38.8, 27_209, 7_724),
    ],
)
def test_amapa_areas_equal_the_stated_ones(site, valid, forest, lost, gained, moved, mining):
    """Forest area, loss, gain and counts of changed cells are those stated with the data."""
    result = amapa(site)
    table = result.trajectories
    before, after = table["1985"].isin(FOREST), table["2022"].isin(FOREST)
    assert table["units"].sum() == valid
    assert round(table.loc[before, "area_ha"].sum(), 1) == forest
    assert table.loc[before & ~after, "area_ha"].sum() == pytest.approx(lost, abs=0.06)
    assert round(table.loc[~before & after, "area_ha"].sum(), 1) == gained
    assert table.loc[table["1985"] != table["2022"], "units"].sum() == moved
    assert table.loc[(table["1985"] == 3) & (table["2022"] == 30), "units"].sum() == mining
    assert table["units"].sum() + result.unmapped["units"].sum() == {"lorenco": 1341**2, "vilanova": 1340**2}[site]
    assert result.warnings == ()


def test_neiba_areas_on_the_ellipsoid_equal_the_stated_ones():
    """Hectares of a longitude/latitude grid are geodesic: forest, loss and the rest as stated with the data."""
    result = tally([NEIBA[0], NEIBA[2]], legend=FOREST_LEGEND)
    area = result.trajectories.set_index(["2000", "2023"])["area_ha"]
    assert round(area["forest"].sum(), 1) == 2660.7
    assert round(area["forest", "non-forest"], 1) == 220.1
    assert round(area["forest", "forest"], 1) == 2440.5
    assert area["non-forest", "non-forest"] + result.unmapped["area_ha"].sum() == pytest.approx(436.36, abs=0.01)


@pytest.mark.parametrize(
    "profile",
    [
        {"tiled": True, "blockxsize": 16, "blockysize": 32, "compress": "deflate"},
        {"blockysize": 1, "compress": "lzw"},
        {"blockysize": 13},
    ],
)
@pytest.mark.parametrize("dates", [2, 3, 10])
@pytest.mark.parametrize("dtype", ["uint8", "int16", "uint32"])
def test_counts_equal_a_plain_cross_table(tmp_path, profile, dates, dtype):
    """For any number of dates, type and block layout the counts are those of a plain count of rows."""
    rng = np.random.default_rng(dates)
    codes = [0, 1, 2, 7, 200] if dtype == "uint8" else [0, 1, 2, 700, 30_000]
    maps = random_maps(rng, (123, 211), dates, codes, dtype=dtype)
    paths = [write_map(tmp_path / f"{i}.tif", m, nodata=0, **profile) for i, m in enumerate(maps)]
    result = tally(paths, dates=range(dates), workers=2).trajectories
    pd.testing.assert_frame_equal(result.drop(columns="area_ha"), expected_trajectories(maps, [0]), check_dtype=False)
    np.testing.assert_allclose(result["area_ha"], result["units"] * 0.09, rtol=1e-12)


@pytest.mark.parametrize("codes", [[1, 2, 3], list(range(1, 60))])
@pytest.mark.parametrize("change", [0.0, 0.02, 1.0])
@pytest.mark.parametrize("shape", [(1, 1), (3, 5), (40, 3000), (300, 7)])
def test_kernel_counts_and_row_weights_are_exact(monkeypatch, codes, change, shape):
    """Few or many codes, no change or nothing but change, any shape: counts and weights equal plain sums."""
    monkeypatch.setattr(count, "CHUNK_PIXELS", 2048)
    monkeypatch.setattr(count, "PENDING_PIXELS", 500)
    rng = np.random.default_rng(3)
    for dates in (2, 3):
        maps = random_maps(rng, shape, dates, codes, change)
        weights = rng.integers(1 << 35, 1 << 36, shape[0])
        counts = CombinationCounts(dates, weights)
        counts.add(maps, 0)
        frame = pd.DataFrame({i: m.ravel() for i, m in enumerate(maps)})
        frame["weight"] = np.repeat(weights, shape[1]).astype(object)
        sums = frame.groupby(list(range(dates)))["weight"].agg(["size", "sum"])
        assert counts.finish() == {
            bytes(map(int, key)): tuple(row) for key, row in zip(sums.index, sums.to_numpy(), strict=True)
        }


def test_long_runs_do_not_overflow_the_kernel(monkeypatch):
    """Flushing the running sums in between does not change them."""
    monkeypatch.setattr(count, "WEIGHT_BITS", 50)
    counts = CombinationCounts(2, np.full(64, 1 << 36))
    block = np.ones((64, 512), np.uint8)
    for _ in range(3):
        counts.add([block, block], 0)
    assert counts.finish() == {b"\1\1": (3 * 64 * 512, 3 * 64 * 512 << 36)}


@pytest.mark.parametrize("place", [{}, {"place": DEGREES}])
def test_the_result_does_not_depend_on_workers_or_block_layout(tmp_path, monkeypatch, place):
    """One, two or four workers and another storage of the same maps give identical numbers to the last bit."""
    monkeypatch.setattr(tally_module, "JOB_PIXELS", 5_000)
    monkeypatch.setattr("change_assess.maps.grid.WINDOW_PIXELS", 64 * 64)
    maps = random_maps(np.random.default_rng(5), (300, 280), 3, [0, 1, 2, 3])
    layouts = [{"tiled": True, "blockxsize": 64, "blockysize": 64}, {"blockysize": 3}]
    results = []
    for name, profile in zip("ab", layouts, strict=True):
        paths = [write_map(tmp_path / f"{name}{i}.tif", m, nodata=0, **place, **profile) for i, m in enumerate(maps)]
        results += [tally(paths, dates="123", workers=n) for n in (1, 2, 4)]
    with ThreadPoolExecutor(3) as executor:
        results.append(tally(paths, dates="123", workers=executor))
    for other in results[1:]:
        pd.testing.assert_frame_equal(other.trajectories, results[0].trajectories, check_exact=True)
        pd.testing.assert_frame_equal(other.transitions, results[0].transitions, check_exact=True)


def test_areas_by_row_equal_a_sum_over_pixels(tmp_path):
    """On a longitude/latitude grid the area of a combination is the sum of the areas of its pixels."""
    maps = random_maps(np.random.default_rng(6), (200, 90), 2, [1, 2, 3])
    paths = [write_map(tmp_path / f"{i}.tif", m, place=DEGREES) for i, m in enumerate(maps)]
    result = tally(paths, dates=["a", "b"])
    from change_assess.maps.grid import open_maps

    row = np.repeat(open_maps(paths[:1]).areas.hectares, 90)
    frame = pd.DataFrame({"a": maps[0].ravel(), "b": maps[1].ravel(), "area": row})
    np.testing.assert_allclose(result.trajectories["area_ha"], frame.groupby(["a", "b"])["area"].sum(), rtol=1e-10)
    assert result.trajectories["area_ha"].sum() == pytest.approx(row.sum(), rel=1e-11)


def test_unmapped_pixels_are_counted_by_situation(tmp_path):
    """Pixels without data at every date and at some dates are reported apart, with the dates that lack it."""
    first, second = np.array([[0, 0, 1, 1]], np.uint8), np.array([[9, 5, 9, 5]], np.uint8)
    paths = [write_map(tmp_path / "a.tif", first, nodata=0), write_map(tmp_path / "b.tif", second, nodata=9)]
    result = tally(paths)
    assert result.unmapped.drop(columns="area_ha").to_numpy().tolist() == [
        ["no data at every date", "a, b", 1],
        ["no data at some dates", "a", 1],
        ["no data at some dates", "b", 1],
    ]
    assert result.trajectories.drop(columns="area_ha").to_numpy().tolist() == [[1, 5, 1]]
    assert [(w.code, w.facts) for w in result.warnings] == [
        ("no-data-at-some-dates", {"units": 2, "area_ha": pytest.approx(0.18)})
    ]


def test_transitions_cover_each_period_and_the_whole_span():
    """With three dates there are two periods and the span, all over the same pixels."""
    result = tally(NEIBA, legend=FOREST_LEGEND)
    table = result.transitions
    assert list(dict.fromkeys(table["period"])) == ["2000-2010", "2010-2023", "2000-2023"]
    assert table.groupby("period")["units"].sum().nunique() == 1
    lost = table[(table["from"] == "forest") & (table["to"] == "non-forest")].set_index("period")["units"]
    assert lost["2000-2010"] + lost["2010-2023"] == lost["2000-2023"] == 3016


def test_rows_follow_the_order_of_the_legend(tmp_path):
    """Class names stand in legend order, not in that of the alphabet or the codes."""
    legend = Legend((LegendClass(9, "zebra"), LegendClass(2, "ant"), LegendClass(5, "never there")))
    codes = np.array([[2, 9, 2, 9]], np.uint8)
    paths = [write_map(tmp_path / "a.tif", codes), write_map(tmp_path / "b.tif", codes[:, ::-1].copy())]
    result = tally(paths, legend=legend)
    assert result.trajectories[["a", "b"]].to_numpy().tolist() == [["zebra", "ant"], ["ant", "zebra"]]
    assert result.transitions[["from", "to"]].to_numpy().tolist() == [["zebra", "ant"], ["ant", "zebra"]]
    assert result.crossing().columns.tolist() == ["a", "b", "units", "area_ha"]


def test_codes_unknown_to_the_legend_are_listed_with_their_counts():
    """A legend that lacks codes of the map is refused with the codes and how often they occur."""
    path = DATA / "amapa" / "lorenco_85a22.tif"
    names = {3: "forest", 12: "grass", 15: "pasture", 30: "mine", 33: "water"}
    legend = Legend(tuple(LegendClass(code, name) for code, name in names.items()))
    with pytest.raises(InputError, match=r"codes that the legend does not: 6 \(42 pixels\), 11 \(66 pixels\)"):
        tally([f"{path}:1", f"{path}:38"], legend=legend)


def test_a_likely_no_data_code_that_is_not_declared_is_noted(tmp_path):
    """Code 0 in a file without a no-data value is counted as a class, and said so."""
    codes = np.array([[0, 1, 1]], np.uint8)
    paths = [write_map(tmp_path / f"{n}.tif", codes) for n in "ab"]
    assert [w.code for w in tally(paths).warnings] == ["nodata-not-declared"] * 2


def test_a_grid_that_stretches_areas_a_little_is_noted(tmp_path):
    """A transverse Mercator grid far outside its zone is used with a warning that gives the stretch."""
    place = {"crs": "EPSG:32633", "transform": rasterio.Affine(30, 0, 1_000_000, 0, -30, 1_000_000)}
    paths = [write_map(tmp_path / f"{n}.tif", np.ones((9, 9), np.uint8), place=place) for n in "ab"]
    (notice,) = tally(paths).warnings
    code, numbers = notice.code, notice.facts
    assert code == "area-distortion"
    assert 1.005 < numbers["highest"] < 1.006


def test_one_map_or_no_worker_is_refused(tmp_path):
    """A tally needs two maps and at least one worker."""
    path = write_map(tmp_path / "a.tif", np.ones((9, 9), np.uint8))
    with pytest.raises(InputError, match="Give one map for each date"):
        tally([path])
    with pytest.raises(InputError, match="0 workers"):
        tally([path, path], dates="ab", workers=0)


def test_progress_ends_at_the_number_of_pixels(tmp_path, monkeypatch):
    """Progress rises to the whole, in the thread that called."""
    monkeypatch.setattr(tally_module, "JOB_PIXELS", 2_000)
    monkeypatch.setattr("change_assess.maps.grid.WINDOW_PIXELS", 50 * 50)
    path = write_map(tmp_path / "a.tif", np.ones((200, 100), np.uint8), blockysize=1)
    seen = []
    tally([path, path], dates="ab", workers=2, progress=lambda done, whole: seen.append((done, whole)))
    assert len(seen) > 3
    assert seen == sorted(seen)
    assert seen[-1] == (20_000, 20_000)


def test_strata_of_two_dates_are_the_change_classes(tmp_path):
    """Loss, stable forest and the rest of Sierra de Neiba match the change map made with another tool."""
    texts = ["stable forest=forest>forest", "forest loss=forest>*", "non-forest=non-forest>non-forest"]
    recipes = ChangeClasses(tuple(map(ChangeClass.parse, texts)))
    out = tmp_path / "strata.tif"
    table = stratify([NEIBA[0], NEIBA[2]], recipes, FOREST_LEGEND, out=out, workers=2)
    assert table["stratum"].tolist() == ["stable forest", "forest loss", "non-forest"]
    assert table["code"].tolist() == [1, 2, 3]
    assert table["units"].tolist()[:2] == [33_438, 3_016]
    assert table["area_ha"].round(1).tolist()[:2] == [2440.5, 220.1]
    with rasterio.open(out) as ours, rasterio.open(DATA / "hispaniola" / "change_2000_2023.tif") as theirs:
        codes, change = ours.read(1), theirs.read(1)
        assert (ours.nodata, ours.dtypes[0], ours.transform, ours.crs) == (0, "uint8", theirs.transform, theirs.crs)
    assert (codes[change > 0] == change[change > 0]).all()


def slow_strata(maps, nodata, loss):
    """Stratum name of every pixel by the rule read out, pixel by pixel."""
    names = np.full(maps[0].shape, "", dtype=object)
    for at in np.ndindex(maps[0].shape):
        codes = [int(m[at]) for m in maps]
        if nodata in codes:
            continue
        names[at] = "no change"
        for period, (a, b) in enumerate(pairwise(codes)):
            if a != b:
                names[at] = f"{'loss' if (a, b) in loss else 'other change'} {period}-{period + 1}"
                break
    return names


@pytest.mark.parametrize("dtype", ["uint8", "int16"])
def test_strata_of_many_dates_name_the_first_change(tmp_path, monkeypatch, dtype):
    """With more than two dates the first change decides, whatever the type of the maps and the number of workers."""
    monkeypatch.setattr("change_assess.maps.grid.WINDOW_PIXELS", 512 * 512)
    maps = random_maps(np.random.default_rng(8), (70, 90), 4, [1, 2, 3, 44], dtype=dtype)
    paths = [write_map(tmp_path / f"{i}.tif", m, nodata=44) for i, m in enumerate(maps)]
    recipes = ChangeClasses((ChangeClass("loss", ("1",), ("*",)),))
    legend = Legend.of_names(["forest", "crop", "water"])
    outs = [tmp_path / f"strata{workers}.tif" for workers in (1, 2)]
    for out in outs:
        table = stratify(paths, recipes, legend, dates=range(4), out=out, workers=int(out.stem[-1]))
    assert outs[0].read_bytes() == outs[1].read_bytes()
    expected = slow_strata(maps, 44, {(1, 2), (1, 3)})
    with rasterio.open(outs[0]) as data:
        written = data.read(1)
    names = {0: ""} | dict(zip(table["code"], table["stratum"], strict=True))
    assert (np.vectorize(names.get)(written) == expected).all()
    assert [(expected == s).sum() for s in table["stratum"]] == table["units"].tolist()


def test_more_than_255_strata_are_written_in_16_bits(tmp_path):
    """Many dates and classes can make more strata than a byte holds."""
    rng = np.random.default_rng(9)
    maps = random_maps(rng, (120, 120), 10, range(1, 10), change=0.2)
    paths = [write_map(tmp_path / f"{i}.tif", m) for i, m in enumerate(maps)]
    legend = Legend.of_names("abcdefghi")
    recipes = ChangeClasses(
        tuple(ChangeClass(f"{a} to {b}", (a,), (b,)) for a in "abcdefghi" for b in "abcdefghi" if a != b)
    )
    table = stratify(paths, recipes, legend, dates=range(10), out=tmp_path / "strata.tif")
    with rasterio.open(tmp_path / "strata.tif") as data:
        codes, counts = np.unique(data.read(1), return_counts=True)
        assert data.dtypes[0] == "uint16"
    assert len(table) > 255
    assert dict(zip(codes, counts, strict=True)) == dict(zip(table["code"], table["units"], strict=True))


def test_a_map_is_never_replaced_by_the_stratum_raster(tmp_path):
    """Writing the strata over one of the maps is refused, and the map stays as it was."""
    paths = [write_map(tmp_path / f"{n}.tif", np.ones((5, 5), np.uint8)) for n in "ab"]
    before = Path(paths[1]).read_bytes()
    with pytest.raises(InputError, match="would replace this map"):
        stratify(paths, ChangeClasses(), Legend.of_names(["x"]), out=tmp_path / "b.tif")
    assert Path(paths[1]).read_bytes() == before


def test_maps_without_a_common_pixel_leave_no_stratum_and_no_file(tmp_path):
    """Nothing to stratify is an error, and nothing is written."""
    first, second = np.array([[0, 1]], np.uint8), np.array([[1, 0]], np.uint8)
    paths = [write_map(tmp_path / f"{n}.tif", m, nodata=0) for n, m in (("a", first), ("b", second))]
    with pytest.raises(InputError, match="no pixel has data at every date"):
        stratify(paths, ChangeClasses(), Legend.of_names(["x"]), out=tmp_path / "out.tif")
    assert not (tmp_path / "out.tif").exists()
