import math

import numpy as np
import pyproj
import pytest
import rasterio
from rasterio.transform import Affine
from rasters import DEGREES, UTM, write_map

from change_assess.errors import FileError, InputError
from change_assess.maps.area import parsed, pixel_areas, zone_areas
from change_assess.maps.grid import Coder, Reader, open_maps

WGS84 = pyproj.CRS.from_epsg(4326).to_wkt()
CODES = np.ones((40, 50), np.uint8)


def wkt(code):
    return pyproj.CRS.from_user_input(code).to_wkt()


@pytest.mark.parametrize("latitude", [0.0, 15.0, 30.0, 45.0, 60.0, 75.0, 84.0, -0.1, -33.0, -60.0, -84.0])
@pytest.mark.parametrize("size", [0.25, 0.01])
def test_geographic_pixel_areas_agree_with_geodesic_polygons(latitude, size):
    """Cells bounded by parallels, taken as polygons with many points, have the area that the closed form gives."""
    geod = pyproj.Geod(ellps="WGS84")
    steps = np.linspace(10, 10 + size, 2001)
    longitude = np.concatenate([steps, steps[::-1]])
    outline = np.concatenate([np.full(2001, latitude), np.full(2001, latitude + size)])
    expected = abs(geod.polygon_area_perimeter(longitude, outline)[0]) / 1e4
    ours = pixel_areas(WGS84, (size, 0, 10, 0, -size, latitude + size), 1, 1, "map.tif").hectares[0]
    assert ours == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize(("latitude", "square_metres"), [(0, 769.32), (15, 743.77), (45, 547.65), (60, 388.55)])
def test_thirty_metre_cells_have_their_published_areas(latitude, square_metres):
    """Cells of 0.00025 degree have the areas worked out from the zone formula at four latitudes."""
    areas = pixel_areas(WGS84, (0.00025, 0, 0, 0, -0.00025, latitude + 0.000125), 1, 1, "map.tif")
    assert areas.hectares[0] * 1e4 == pytest.approx(square_metres, abs=0.006)


def test_all_cells_of_the_earth_add_up_to_its_surface():
    """The rows of a global grid of one degree cover the ellipsoid, and the hemispheres are mirror images."""
    rows = pixel_areas(WGS84, (1, 0, -180, 0, -1, 90), 180, 360, "map.tif").hectares
    assert rows.sum() * 360 == pytest.approx(51_006_562_172.4, rel=1e-9)
    np.testing.assert_allclose(rows, rows[::-1], rtol=1e-14)


def test_areas_on_a_sphere_follow_the_sine():
    """Without flattening, a cell has the area width times difference of sines."""
    found = zone_areas(np.array([0.5]), 0.2, 0.1, 10.0, 0.0)
    assert found[0] == pytest.approx(0.1 * 100 * (math.sin(0.6) - math.sin(0.4)), rel=1e-14)


def test_a_south_up_grid_has_the_same_areas_in_reverse_order():
    """Rows that run northwards have the pixel areas of the same rows running southwards, turned round."""
    down = pixel_areas(WGS84, (0.1, 0, 0, 0, -0.1, 50), 20, 1, "map.tif").hectares
    up = pixel_areas(WGS84, (0.1, 0, 0, 0, 0.1, 48), 20, 1, "map.tif").hectares
    np.testing.assert_allclose(up, down[::-1], rtol=1e-12)


def test_planar_areas_honour_the_unit_of_the_projection():
    """A grid in US survey feet is converted to hectares by the foot of its reference system."""
    areas = pixel_areas(wkt("EPSG:2263"), (100, 0, 985_000, 0, -100, 200_000), 10, 10, "map.tif")
    assert areas.hectares[0] == pytest.approx((100 * 1200 / 3937) ** 2 / 1e4, rel=1e-12)
    assert not areas.by_row


def test_equal_area_and_transverse_mercator_grids_are_accepted():
    """Equal-area grids have no stretch at all, and a UTM zone stays within two tenths of a percent."""
    equal = pixel_areas(wkt("EPSG:6933"), (1000, 0, 0, 0, -1000, 5_000_000), 1000, 1000, "map.tif")
    utm = pixel_areas(wkt("EPSG:32633"), (30, 0, 300_000, 0, -30, 5_000_000), 1000, 1000, "map.tif")
    assert equal.stretch == pytest.approx((1, 1), abs=1e-5)
    assert 0.998 < utm.stretch[0] <= utm.stretch[1] < 1.002


@pytest.mark.parametrize("code", ["EPSG:3857", "EPSG:3395"])
def test_mercator_grids_are_refused_with_the_size_of_the_fault(code):
    """A Mercator map far from the equator would give wrong hectares, so it is refused with numbers and a remedy."""
    with pytest.raises(
        InputError, match=r"at 1\.9\d\d to 2\.\d\d\d times its true area.*equal-area grid such as EPSG:6933"
    ):
        pixel_areas(wkt(code), (300, 0, 1_000_000, 0, -300, 5_650_000), 200, 200, "map.tif")


def test_rows_beyond_a_pole_are_refused():
    """A longitude/latitude grid cannot go past 90 degrees."""
    with pytest.raises(InputError, match="rows beyond a pole"):
        pixel_areas(WGS84, (1, 0, 0, 0, -1, 95), 10, 10, "map.tif")


def test_a_local_reference_system_is_refused():
    """A reference system that has no place on the Earth gives no area."""
    local = 'LOCAL_CS["site",UNIT["metre",1]]'
    with pytest.raises(InputError, match=r"map\.tif: the coordinate reference system 'site' is neither projected"):
        pixel_areas(parsed(local).to_wkt(), (1, 0, 0, 0, -1, 0), 2, 2, "map.tif")


@pytest.mark.parametrize(
    ("place", "message"),
    [
        (UTM | {"transform": Affine(30, 0, 500_015, 0, -30, 5_000_000)}, r"by 0\.5 pixels in x and 0 pixels in y \(15"),
        (UTM | {"transform": Affine(30.001, 0, 500_000, 0, -30, 5_000_000)}, "its pixels are 30.001 by 30"),
        (UTM | {"transform": Affine(30.00001, 0, 500_003, 0, -30, 5_000_000)}, "shifted by 0.1 pixels in x"),
        (UTM | {"transform": Affine(10, 0, 500_000, 0, -10, 5_000_000)}, "its pixels are 10 by 10, not 30 by 30"),
        (UTM | {"crs": "EPSG:32634"}, r"WGS 84 / UTM zone 34N \(EPSG:32634\), not WGS 84 / UTM zone 33N"),
        (DEGREES, "its reference system is WGS 84"),
    ],
)
def test_maps_on_different_grids_are_refused_with_what_differs(tmp_path, place, message):
    """The message names both files, says what differs and how to warp."""
    first, other = write_map(tmp_path / "a.tif", CODES), write_map(tmp_path / "b.tif", CODES, place=place)
    with pytest.raises(InputError, match=message) as caught:
        open_maps([first, other])
    assert f"{other}: it does not lie on the grid of {first}" in str(caught.value)
    assert f"--like {first}" in str(caught.value)


def test_maps_of_different_extent_are_refused(tmp_path):
    """Equal corners are not enough: the number of rows and columns counts too."""
    paths = [write_map(tmp_path / "a.tif", CODES), write_map(tmp_path / "b.tif", CODES[:, :45])]
    with pytest.raises(InputError, match="it has 40 rows and 45 columns, not 40 and 50"):
        open_maps(paths)


def test_rounding_of_the_geotransform_is_no_misalignment(tmp_path):
    """Grids that differ by a ten-millionth of a pixel are one grid."""
    nearly = UTM | {"transform": Affine(30 + 1e-9, 0, 500_000 + 3e-6, 0, -30, 5_000_000)}
    paths = [write_map(tmp_path / "a.tif", CODES), write_map(tmp_path / "b.tif", CODES, place=nearly)]
    assert len(open_maps(paths).bands) == 2


@pytest.mark.filterwarnings("ignore:Dataset has no geotransform")
@pytest.mark.parametrize(
    ("codes", "place", "message"),
    [
        (CODES.astype("float32"), UTM, r"bad\.tif: its pixels are float32 numbers, not whole class codes.*-ot Byte"),
        (CODES.astype("complex64"), UTM, "its pixels are complex64 numbers"),
        (CODES, {"crs": "EPSG:32633", "transform": None}, "does not say where its pixels lie.*rio edit-info"),
        (CODES, {"crs": None, "transform": UTM["transform"]}, "no coordinate reference system.*gdal_edit.py -a_srs"),
        (CODES, UTM | {"transform": Affine(30, 5, 0, 5, -30, 0)}, "its grid is rotated or sheared.*gdalwarp -r near"),
    ],
)
def test_rasters_that_cannot_be_tallied_are_refused_with_a_remedy(tmp_path, codes, place, message):
    """Each unusable raster gets one sentence on what is wrong and one on how to mend it."""
    path = write_map(tmp_path / "bad.tif", codes, place=place)
    with pytest.raises(InputError, match=message):
        open_maps(path)


def test_a_missing_file_is_named(tmp_path):
    """A path that does not exist is said to be missing, without talk of formats."""
    with pytest.raises(FileError, match=r"gone\.tif does not exist"):
        open_maps(tmp_path / "gone.tif")


def test_a_file_that_is_no_raster_is_named(tmp_path):
    """A text file given as a map is refused as such."""
    path = tmp_path / "note.tif"
    path.write_text("not a raster")
    with pytest.raises(FileError, match=r"note\.tif cannot be opened as a raster"):
        open_maps(path)


def test_a_truncated_file_is_reported_with_the_place_of_the_damage(tmp_path):
    """A file cut short opens, and the first window that cannot be read is named."""
    rng = np.random.default_rng(1)
    path = write_map(tmp_path / "cut.tif", rng.integers(1, 200, (300, 300), dtype=np.uint8), compress="deflate")
    content = (tmp_path / "cut.tif").read_bytes()
    (tmp_path / "cut.tif").write_bytes(content[: len(content) // 2])
    with pytest.raises(FileError, match=r"cut\.tif cannot be (read in rows 0 to 299, columns 0 to 299|opened)"):  # noqa: SIM117
        with Reader(stack := open_maps(path)) as reader:
            reader.read(0, stack.windows()[0])


def test_bands_are_named_by_number_by_description_or_in_a_pair(tmp_path):
    """The three ways of naming a band lead to the same band."""
    path = write_map(tmp_path / "series.tif", np.stack([CODES, CODES * 2, CODES * 3]))
    with rasterio.open(path, "r+") as data:
        data.descriptions = ("cover_1985", "cover_2000", "cover_2022")
    for source in (f"{path}:2", f"{path}:cover_2000", (path, 2), (path, "cover_2000")):
        stack = open_maps([source])
        assert (stack.bands[0].path, stack.bands[0].band, stack.dates) == (path, 2, ("2000",))
        with Reader(stack) as reader:
            assert (reader.read(0, stack.windows()[0]) == 2).all()


@pytest.mark.parametrize(
    ("suffix", "problem"), [("", "3 bands and none is named"), (":7", "no band '7'"), (":x", "no band 'x'")]
)
def test_an_unknown_or_missing_band_is_answered_with_the_bands_there_are(tmp_path, suffix, problem):
    """The message lists the bands of the file."""
    path = write_map(tmp_path / "series.tif", np.stack([CODES] * 3))
    with pytest.raises(
        InputError, match=rf"series\.tif: it has {problem}\. Name one as FILE:BAND; its bands are 1 to 3"
    ):
        open_maps([path + suffix])


def test_dates_come_from_years_in_names_or_else_from_the_names(tmp_path):
    """One year in each file name makes the labels; without it the file names do."""
    years = [write_map(tmp_path / f"cover_{y}.tif", CODES) for y in (1985, 2022)]
    names = [write_map(tmp_path / f"{n}.tif", CODES) for n in ("early", "late")]
    assert open_maps(years).dates == ("1985", "2022")
    assert open_maps(names).dates == ("early", "late")
    assert open_maps(names, [2001, 2002]).dates == ("2001", "2002")


@pytest.mark.parametrize(
    ("dates", "message"),
    [
        (["2000"], "1 dates are given for 2 maps"),
        (["1", "1"], "not all different: 1, 1"),
        (["units", "2"], "another column"),
    ],
)
def test_unusable_date_labels_are_refused(tmp_path, dates, message):
    """Labels must be as many as the maps, all different, and no name of another column."""
    paths = [write_map(tmp_path / f"{n}.tif", CODES) for n in "ab"]
    with pytest.raises(InputError, match=message):
        open_maps(paths, dates)


def test_a_file_named_twice_needs_dates(tmp_path):
    """The same map given twice has no two labels of its own."""
    path = write_map(tmp_path / "a.tif", CODES)
    with pytest.raises(InputError, match="Give the dates"):
        open_maps([path, path])


@pytest.mark.parametrize(
    "profile",
    [
        {"blockysize": 7},
        {"blockysize": 600},
        {"tiled": True, "blockxsize": 128, "blockysize": 256},
        {"tiled": True, "blockxsize": 512, "blockysize": 512},
    ],
)
@pytest.mark.parametrize("multiple", [1, 512])
def test_windows_cover_the_grid_once_and_respect_blocks(tmp_path, monkeypatch, profile, multiple):
    """Every pixel lies in exactly one window, and windows start on block edges of all files."""
    monkeypatch.setattr("change_assess.maps.grid.WINDOW_PIXELS", 512 * 512)
    codes = np.ones((1300, 1100), np.uint8)
    stack = open_maps(
        [write_map(tmp_path / "a.tif", codes, **profile), write_map(tmp_path / "b.tif", codes, blockysize=1)]
    )
    covered = np.zeros(codes.shape, int)
    for window in stack.windows(multiple=multiple):
        covered[window.row_off :, window.col_off :][: window.height, : window.width] += 1
        assert window.row_off % multiple == 0
        assert window.row_off % stack.bands[0].blocks[0] == 0 or multiple > 1
    assert (covered == 1).all()


def test_wide_codes_are_packed_into_bytes_and_back(tmp_path):
    """Any whole-number type is accepted as long as there are no more than 256 different codes."""
    codes = np.array([[-32768, 5, 1000], [70_000, 5, 2_000_000_000]], dtype=np.int32)
    coder = Coder(open_maps(write_map(tmp_path / "wide.tif", codes)))
    for block in (codes, codes[:, :2], codes[:1, 1:]):
        coded = coder.encode(block)
        assert coded.dtype == np.uint8
        assert (np.array(coder.codes)[coded] == block).all()


def test_a_measurement_in_whole_numbers_is_refused(tmp_path):
    """More than 256 different codes are no classes."""
    codes = np.arange(300, dtype=np.int16).reshape(15, 20)
    coder = Coder(open_maps(write_map(tmp_path / "elevation.tif", codes)))
    with pytest.raises(InputError, match="more than 256 different codes"):
        coder.encode(codes)
