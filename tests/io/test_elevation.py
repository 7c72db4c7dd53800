"""Elevation grids: what is read, and what is refused."""

import hashlib
import subprocess
import sys
import threading
import tracemalloc
import warnings
from pathlib import Path

import numpy as np
import pytest
import rasterio
import rasterio.shutil
from affine import Affine

from viewshed.errors import DataError, InputError, ViewshedWarning
from viewshed.io import _cells
from viewshed.io.elevation import HEIGHT_UNITS, open_terrain

PLAIN = np.arange(12 * 10, dtype=np.float32).reshape(12, 10)
NORTH_UP = Affine(30, 0, 400_000, 0, -30, 6_000_000)
ALL = (0, 0, 12, 10)
US_FOOT = 1200.0 / 3937.0


def test_one_file(make_dem):
    path = make_dem()
    terrain = open_terrain(path)
    assert terrain.paths == (path,)
    assert terrain.grid.shape == (12, 10)
    assert terrain.grid.transform == NORTH_UP
    assert "UTM zone 33N" in terrain.grid.crs_wkt
    assert (terrain.height_factor, terrain.height_unit_origin) == (1.0, "assumed metres")
    heights = terrain.read(*ALL)
    assert heights.dtype == np.float32
    assert heights.flags.c_contiguous
    np.testing.assert_array_equal(heights, PLAIN)
    np.testing.assert_array_equal(terrain.read(3, 2, 4, 5), PLAIN[3:7, 2:7])


@pytest.mark.parametrize("window", [(-1, 0, 3, 3), (0, 8, 3, 3), (11, 0, 2, 2), (0, 0, 0, 4)])
def test_window_outside(make_dem, window):
    with pytest.raises(InputError, match=r"not inside the grid"):
        open_terrain(make_dem()).read(*window)


@pytest.mark.parametrize("shape", [(1, 1), (1, 9), (9, 1)])
def test_one_row_or_column(make_dem, shape):
    array = np.full(shape, 7, np.float32)
    assert (open_terrain(make_dem(array=array)).read(0, 0, *shape) == 7).all()


@pytest.mark.parametrize(
    "transform",
    [
        Affine(30, 0, 4e5, 0, 30, 6e6),
        Affine(-30, 0, 4e5, 0, -30, 6e6),
        Affine(30, 0, 4e5, 0, -30, 6e6) @ Affine.rotation(25),
        Affine(0, 30, 4e5, 30, 0, 6e6),
        Affine(30, 4, 4e5, 7, -25, 6e6),
    ],
)
def test_any_transform(make_dem, transform):
    terrain = open_terrain(make_dem(transform=transform))
    assert terrain.grid.transform.almost_equals(transform, precision=1e-9)
    np.testing.assert_array_equal(terrain.read(*ALL), PLAIN)


@pytest.mark.parametrize(
    ("dtype", "nodata"),
    [
        ("int16", -32768),
        ("uint8", 0),
        ("uint16", 65535),
        ("int32", -9999),
        ("float32", -9999),
        ("float32", np.nan),
        ("float64", -1.7976931348623157e308),
        ("float32", float(np.finfo(np.float32).min)),
        ("float32", -np.inf),
    ],
)
def test_declared_voids(make_dem, dtype, nodata):
    array = (PLAIN + 1).astype(dtype)
    array[2, 3] = array[11, 9] = nodata
    heights = open_terrain(make_dem(array=array, nodata=nodata)).read(*ALL)
    expected = PLAIN + 1
    expected[2, 3] = expected[11, 9] = np.nan
    np.testing.assert_array_equal(heights, expected)


def test_nan_is_void_whatever_is_declared(make_dem):
    array = PLAIN.copy()
    array[0, 0], array[1, 1] = np.nan, -9999
    heights = open_terrain(make_dem(array=array, nodata=-9999)).read(*ALL)
    assert np.isnan(heights[[0, 1], [0, 1]]).all()
    assert np.isnan(heights).sum() == 2


def test_huge_nodata_that_was_rounded(make_dem):
    array = PLAIN.copy()
    array[4, 4] = np.float32(-3.40282e38)
    path = make_dem(array=array, nodata=float(np.finfo(np.float32).min))
    assert np.isnan(open_terrain(path).read(*ALL)[4, 4])


def test_nodata_that_the_type_cannot_hold_is_no_void(make_dem):
    path = make_dem("dem.asc.tif", array=PLAIN.astype("int16"), nodata=-9999)
    np.testing.assert_array_equal(open_terrain(path).read(*ALL), PLAIN)


def test_mask_band(make_dem):
    mask = np.full(PLAIN.shape, 255, np.uint8)
    mask[5, 5] = 0
    heights = open_terrain(make_dem(mask=mask)).read(*ALL)
    assert np.isnan(heights[5, 5])
    assert np.isnan(heights).sum() == 1


def test_scale_and_offset(make_dem):
    path = make_dem(
        array=PLAIN.astype("int16"), scale=0.1, offset=-5.0, unit="ft", nodata=7, crs="EPSG:32633"
    )
    expected = ((PLAIN.astype(np.float64) * 0.1 - 5.0) * 0.3048).astype(np.float32)
    expected[0, 7] = np.nan
    np.testing.assert_allclose(open_terrain(path).read(*ALL), expected, rtol=1e-6)


@pytest.mark.parametrize("layout", [{}, {"tiled": True, "blockxsize": 16, "blockysize": 16}])
def test_blocks_that_were_never_written(make_dem, layout):
    array = np.zeros((64, 64), np.float32)
    array[:16, :16] = 5
    sparse = open_terrain(make_dem("a.tif", array, sparse_ok=True, compress="lzw", **layout))
    whole = open_terrain(make_dem("b.tif", array, compress="lzw", **layout))
    void = open_terrain(make_dem("c.tif", array, sparse_ok=True, nodata=0, **layout))
    if layout:
        with pytest.warns(ViewshedWarning, match=r"a\.tif: 15 blocks of cells are missing"):
            assert sparse.read(0, 0, 64, 64).sum() == 5 * 256
    assert sparse.read(0, 0, 16, 16).sum() == 5 * 256
    assert whole.read(0, 0, 64, 64).sum() == 5 * 256
    assert np.isnan(void.read(0, 0, 64, 64)).sum() == 64 * 64 - 256


# --- units --------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("unit", "factor"),
    [
        *((u, 1.0) for u in ("m", "metre", "Meters", "[m]")),
        *((u, 0.3048) for u in ("ft", "foot", "Feet", "international foot")),
        *((u, US_FOOT) for u in ("us-ft", "US survey foot", "us_ft", "ftUS", "U.S. Survey Feet")),
        ("cm", 0.01),
    ],
)
def test_unit_of_the_band(make_dem, unit, factor):
    terrain = open_terrain(make_dem(unit=unit))
    assert terrain.height_factor == pytest.approx(factor, rel=1e-12)
    assert terrain.height_unit_origin == "band"
    np.testing.assert_allclose(terrain.read(*ALL), PLAIN * factor, rtol=1e-6)


@pytest.mark.parametrize(("crs", "factor"), [("EPSG:26910+5703", 1.0), ("EPSG:2263+6360", US_FOOT)])
def test_unit_of_a_compound_crs(make_dem, crs, factor):
    terrain = open_terrain(make_dem(crs=crs))
    assert terrain.height_factor == pytest.approx(factor, rel=1e-9)
    assert terrain.height_unit_origin in {"band", "crs"}


def test_stated_compound_crs_adds_the_unit(make_dem):
    terrain = open_terrain(make_dem(crs="EPSG:2263"), crs="EPSG:2263+6360")
    assert terrain.height_factor == pytest.approx(US_FOOT, rel=1e-9)
    assert terrain.height_unit_origin == "crs"


@pytest.mark.parametrize("crs", ["EPSG:2263", "EPSG:2222"])
def test_foot_grid_needs_a_stated_unit(make_dem, crs):
    path = make_dem(crs=crs)
    with pytest.raises(InputError, match=r"dem\.tif.*units of 0\.3048.* --height-unit m, ft or us"):
        open_terrain(path)
    for unit, factor in HEIGHT_UNITS.items():
        terrain = open_terrain(path, height_unit=unit)
        assert (terrain.height_factor, terrain.height_unit_origin) == (factor, "option")


def test_unknown_units(make_dem):
    path = make_dem(unit="fathom")
    with pytest.raises(InputError, match=r"'fathom' is not known; state it with --height-unit"):
        open_terrain(path)
    assert open_terrain(path, height_unit="ft").height_factor == 0.3048
    with pytest.raises(InputError, match=r"'yard' is not known; use m, ft or us-ft"):
        open_terrain(path, height_unit="yard")


def test_stated_unit_against_the_band(make_dem):
    with pytest.warns(ViewshedWarning, match=r"a unit of height is 1 m; taken as ft"):
        terrain = open_terrain(make_dem(unit="m"), height_unit="ft")
    assert terrain.height_factor == 0.3048


# --- coordinate reference systems ---------------------------------------------------------------


def test_no_crs(make_dem):
    path = make_dem(crs=None)
    with pytest.raises(InputError, match=r"dem\.tif: has no coordinate reference.*--crs"):
        open_terrain(path)
    assert "32633" in open_terrain(path, crs="EPSG:32633").grid.crs_wkt
    with pytest.raises(InputError, match="nonsense"):
        open_terrain(path, crs="nonsense")


def test_stated_crs_against_the_file(make_dem):
    path = make_dem()
    assert open_terrain(path, crs="EPSG:32633").grid.shape == (12, 10)
    with pytest.raises(InputError, match=r"zone 33N.*--crs says .*zone 34N"):
        open_terrain(path, crs="EPSG:32634")


LOCAL = 'LOCAL_CS["site grid",UNIT["metre",1],AXIS["Easting",EAST],AXIS["Northing",NORTH]]'


@pytest.mark.parametrize("crs", ["EPSG:4978", LOCAL], ids=["geocentric", "local"])
def test_crs_without_places(make_dem, crs):
    path = make_dem(crs=crs)
    with pytest.raises(DataError, match=r"dem\.tif: .*projected or geographic"):
        open_terrain(path)


def test_local_crs_may_be_stated(make_dem):
    assert "32633" in open_terrain(make_dem(crs=LOCAL), crs="EPSG:32633").grid.crs_wkt


def test_geographic(make_dem):
    path = make_dem(crs="EPSG:4326", transform=Affine(1 / 3600, 0, 10, 0, -1 / 3600, 60))
    assert open_terrain(path).height_unit_origin == "assumed metres"


# --- several files ------------------------------------------------------------------------------


def test_mosaic(make_dem):
    whole = np.random.default_rng(1).random((40, 50)).astype(np.float32)
    paths = [
        make_dem(
            f"{r}-{c}.tif",
            whole[r : r + 20, c : c + 25],
            transform=NORTH_UP @ Affine.translation(c, r),
        )
        for r, c in [(20, 25), (0, 0), (20, 0)]
    ]
    terrain = open_terrain(paths)
    assert terrain.grid.shape == (40, 50)
    assert terrain.grid.transform.almost_equals(NORTH_UP, precision=1e-9)
    expected = whole.copy()
    expected[:20, 25:] = np.nan
    np.testing.assert_array_equal(terrain.read(0, 0, 40, 50), expected)
    np.testing.assert_array_equal(terrain.read(15, 20, 9, 11), expected[15:24, 20:31])
    with pytest.raises(DataError, match=r"only voids in the 5 x 5 cells from row 2"):
        terrain.read(2, 30, 5, 5)


def test_overlap_takes_the_first_known(make_dem):
    first, second = np.full((10, 10), 1, np.float32), np.full((10, 10), 2, np.float32)
    first[:, 8] = np.nan
    right = NORTH_UP @ Affine.translation(7, 0)
    paths = [make_dem("a.tif", first), make_dem("b.tif", second, transform=right)]
    with pytest.warns(ViewshedWarning, match=r"a\.tif and .*b\.tif overlap and differ .* 1 m; the"):
        heights = open_terrain(paths).read(0, 6, 1, 5)
    np.testing.assert_array_equal(heights, [[1, 1, 2, 1, 2]])
    with pytest.warns(ViewshedWarning, match=r"b\.tif and .*a\.tif overlap"):
        heights = open_terrain(paths[::-1]).read(0, 6, 1, 3)
    np.testing.assert_array_equal(heights, [[1, 2, 2]])


def test_tiles_with_rounded_corners_fit(make_dem):
    step = 1 / 3600
    one = Affine(step, 0, 10, 0, -step, 60)
    two = Affine(round(step, 12), 0, round(10 + 10 * step, 7), 0, -round(step, 12), 60)
    paths = [
        make_dem("a.tif", crs="EPSG:4326", transform=one),
        make_dem("b.tif", crs="EPSG:4326", transform=two),
    ]
    assert open_terrain(paths).grid.shape == (12, 20)


@pytest.mark.parametrize(
    ("options", "how"),
    [
        ({"crs": "EPSG:32634"}, r"CRS '.*33N' against '.*34N'"),
        ({"transform": Affine(25, 0, 4e5, 0, -25, 6e6)}, r"cell size 30 x -30 against 25 x -25"),
        ({"transform": Affine(30, 0, 4e5, 0, 30, 6e6)}, r"cell size 30 x -30 against 30 x 30"),
        ({"transform": NORTH_UP @ Affine.translation(0.5, 3)}, r"shifted by 0\.50 of a cell acr"),
        ({"transform": NORTH_UP @ Affine.rotation(2)}, r"turned"),
        ({"unit": "ft"}, r"a unit of height is 1 m against 0\.3048 m"),
    ],
)
def test_tiles_that_do_not_fit(make_dem, options, how):
    paths = [make_dem("one.tif"), make_dem("two.tif", **options)]
    with pytest.raises(DataError, match=rf"one\.tif and .*two\.tif do not fit together: .*{how}"):
        open_terrain(paths)


# --- bad files ----------------------------------------------------------------------------------


def test_nothing_given():
    with pytest.raises(InputError, match="name at least one"):
        open_terrain([])


def test_missing_file_empty_folder_empty_file_and_no_raster(tmp_path):
    with pytest.raises(DataError, match=r"none\.tif: no such file"):
        open_terrain(tmp_path / "none.tif")
    with pytest.raises(DataError, match="holds no elevation raster; name the folder that does"):
        open_terrain(str(tmp_path))
    empty = tmp_path / "empty.tif"
    empty.touch()
    with pytest.raises(DataError, match=r"empty\.tif: is empty"):
        open_terrain(empty)
    text = tmp_path / "text.tif"
    text.write_text("heights, more or less\n" * 50)
    with pytest.raises(DataError, match=r"text\.tif: cannot be opened as a raster"):
        open_terrain(text)


def test_three_bands(make_dem):
    with pytest.raises(DataError, match=r"dem\.tif: has 3 bands"):
        open_terrain(make_dem(array=np.zeros((3, 5, 5), np.uint8)))


def test_complex_cells(make_dem):
    with pytest.raises(DataError, match="complex64 are not heights"):
        open_terrain(make_dem(array=np.zeros((5, 5), np.complex64)))


def test_no_position(tmp_path):
    path = tmp_path / "picture.png"
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        with rasterio.open(
            path, "w", driver="PNG", width=9, height=9, count=1, dtype="uint8"
        ) as file:
            file.write(np.ones((1, 9, 9), np.uint8))
    with pytest.raises(DataError, match=r"picture\.png: a grid needs a position"):
        open_terrain(path, crs="EPSG:32633")


@pytest.mark.parametrize("value", [np.inf, -np.inf])
@pytest.mark.parametrize("nodata", [None, -9999.0])
def test_infinite_heights(make_dem, value, nodata):
    array = PLAIN.copy()
    array[7, 4] = value
    terrain = open_terrain(make_dem(array=array, nodata=nodata))
    with pytest.raises(DataError, match=r"dem\.tif: the height at row 7, column 4 is infinite"):
        terrain.read(5, 3, 5, 5)
    assert terrain.read(0, 0, 5, 5).shape == (5, 5)


def test_heights_beyond_float32_are_infinite(make_dem):
    array = PLAIN.astype(np.float64)
    array[1, 2] = 1e300
    with pytest.raises(DataError, match="row 1, column 2 is infinite"):
        open_terrain(make_dem(array=array)).read(*ALL)


def test_all_void(make_dem):
    array = PLAIN.copy()
    array[:6] = -9999
    terrain = open_terrain(make_dem(array=array, nodata=-9999))
    with pytest.raises(DataError, match=r"dem\.tif: only voids in the 6 x 10 cells"):
        terrain.read(0, 0, 6, 10)
    assert np.isnan(terrain.read(*ALL)).sum() == 60


LAYOUTS = {
    "strips": {},
    "tiles": {"tiled": True, "blockxsize": 128, "blockysize": 128},
    "deflate": {"compress": "deflate"},
    "lzw tiles": {"tiled": True, "compress": "lzw"},
}


@pytest.mark.parametrize("threads", ["1", "2"])
@pytest.mark.parametrize("share", [0.05, 0.4, 0.97])
@pytest.mark.parametrize("layout", LAYOUTS)
def test_truncated_geotiff(make_dem, layout, share, threads, monkeypatch, capfd):
    monkeypatch.setenv("GDAL_NUM_THREADS", threads)
    array = np.random.default_rng(0).random((600, 700)).astype(np.float32)
    path = make_dem(array=array, **LAYOUTS[layout])
    size = path.stat().st_size
    with path.open("r+b") as file:
        file.truncate(int(size * share))
    with pytest.raises(DataError, match=r"^[^\n]*dem\.tif: [^\n]*(truncated|damaged)[^\n]*$"):
        open_terrain(path).read(0, 0, 600, 700)
    assert capfd.readouterr().err == ""


@pytest.mark.parametrize(
    ("driver", "name"),
    [
        ("COG", "t.tif"),
        ("AAIGrid", "t.asc"),
        ("ENVI", "t.img"),
        ("HFA", "t.img"),
        ("netCDF", "t.nc"),
    ],
)
def test_truncated_in_other_formats(make_dem, tmp_path, driver, name):
    array = np.random.default_rng(0).random((600, 700)).astype(np.float32) + 5
    source, path = make_dem(array=array), tmp_path / name
    with rasterio.Env(GDAL_PAM_ENABLED="NO"):
        rasterio.shutil.copy(source, path, driver=driver)
    size = path.stat().st_size
    with path.open("r+b") as file:
        file.truncate(size * 2 // 3)
    with pytest.raises(DataError, match=rf"^[^\n]*{name}: [^\n]*(truncated|damaged)[^\n]*$"):
        open_terrain(path, crs="EPSG:32633").read(0, 0, 600, 700)


def test_file_that_changes(make_dem):
    terrain = open_terrain(make_dem())
    make_dem(array=np.zeros((5, 5), np.float32))
    with pytest.raises(DataError, match=r"dem\.tif: has changed since its header was read; start"):
        terrain.read(*ALL)


def test_file_that_goes_away(make_dem):
    path = make_dem()
    terrain = open_terrain(path)
    path.unlink()
    with pytest.raises(DataError, match="no such file"):
        terrain.read(*ALL)
    with pytest.raises(DataError, match=r"dem\.tif: cannot be read"):
        terrain.fingerprints()


# --- manners ------------------------------------------------------------------------------------


def test_nothing_is_left_beside_the_data(make_dem, tmp_path):
    source = make_dem("länge und breite #1.tif")
    for driver, name in [("AAIGrid", "a.asc"), ("HFA", "b.img"), ("ENVI", "c.dat")]:
        with rasterio.Env(GDAL_PAM_ENABLED="NO"):
            rasterio.shutil.copy(source, tmp_path / name, driver=driver)
    before = sorted(tmp_path.iterdir())
    for name in (source.name, "a.asc", "b.img", "c.dat"):
        open_terrain(tmp_path / name, crs="EPSG:32633").read(*ALL)
    assert sorted(tmp_path.iterdir()) == before


def test_nothing_on_stderr(make_dem):
    path = make_dem(array=np.ones((600, 700), np.float32))
    with path.open("r+b") as file:
        file.truncate(path.stat().st_size // 2)
    code = (
        "from viewshed.io.elevation import open_terrain\n"
        "from viewshed.errors import DataError\n"
        "import sys\n"
        "try:\n    open_terrain(sys.argv[1]).read(0, 0, 600, 700)\n"
        "except DataError as error:\n    print(error)\n"
    )
    root = Path(__file__).parents[2]
    done = subprocess.run(
        [sys.executable, "-c", code, str(path)],
        cwd=root, capture_output=True, text=True, check=True,
    )  # fmt: skip
    assert done.stderr == ""
    assert "truncated" in done.stdout


def test_fingerprints(make_dem, tmp_path):
    one, two = make_dem("a.tif"), make_dem("b.tif", PLAIN + 1)
    found = open_terrain([two, one]).fingerprints()
    assert [f["path"] for f in found] == [str(two), str(one)]
    assert found[1]["sha256"] == hashlib.sha256(one.read_bytes()).hexdigest()
    assert found[1]["size"] == one.stat().st_size
    virtual = tmp_path / "v.vrt"
    rasterio.shutil.copy(one, virtual, driver="VRT")
    assert [Path(f["path"]).name for f in open_terrain(virtual).fingerprints()] == [
        "v.vrt",
        "a.tif",
    ]


def test_threads_read_alike(make_dem):
    array = np.random.default_rng(3).random((900, 800)).astype(np.float32)
    path = make_dem(array=array, tiled=True, blockxsize=256, blockysize=256, compress="deflate")
    terrain = open_terrain(path)
    wrong = []

    def read(seed):
        rng = np.random.default_rng(seed)
        for _ in range(10):
            r, c = rng.integers(0, 700), rng.integers(0, 600)
            if not np.array_equal(terrain.read(r, c, 200, 200), array[r : r + 200, c : c + 200]):
                wrong.append((r, c))

    threads = [threading.Thread(target=read, args=(seed,)) for seed in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert not wrong


@pytest.mark.parametrize("layout", LAYOUTS)
def test_memory_is_the_result_and_a_strip(make_dem, layout):
    array = np.ones((5000, 4000), np.int16)
    terrain = open_terrain(make_dem(array=array, **LAYOUTS[layout]))
    tracemalloc.start()
    try:
        out = terrain.read(0, 0, *array.shape)
        peak = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    assert peak < out.nbytes + 60e6


@pytest.mark.parametrize("block", [16, 64])
@pytest.mark.parametrize("dtype", ["int16", "float32", "float64"])
@pytest.mark.parametrize("options", [{}, {"scale": 0.5, "offset": -3.0}])
def test_boxes_and_threads_change_nothing(make_dem, monkeypatch, block, dtype, options):
    heights = np.random.default_rng(3).integers(-400, 3000, (150, 170)).astype(dtype)
    heights[40:44, 100:130] = -999
    path = make_dem(
        array=heights, nodata=-999, tiled=True, blockxsize=block, blockysize=block, **options
    )
    window = (7, 5, 140, 160)
    whole = open_terrain(path).read(*window)
    monkeypatch.setattr(_cells, "_STRIP_CELLS", 2 * block * block)
    monkeypatch.setattr(_cells, "threads_allowed", lambda: 3)
    np.testing.assert_array_equal(open_terrain(path).read(*window), whole)
    assert np.isnan(whole).sum() == 4 * 30


def test_what_is_noticed_does_not_depend_on_threads(make_dem, monkeypatch):
    heights = np.random.default_rng(3).normal(size=(150, 170)).astype(np.float32)
    heights[[3, 90, 149], [5, 100, 169]] = -9999
    shift = Affine(30, 0, 400_000, 0, -30, 6_000_000)
    other = heights + np.float32(1.0)
    other[120, 33] += 5
    tiled = {"tiled": True, "blockxsize": 16, "blockysize": 16, "transform": shift}
    paths = [make_dem("a.tif", heights, **tiled), make_dem("b.tif", other, **tiled)]
    found = []
    for strip, threads in ((1 << 22, 1), (512, 3)):
        monkeypatch.setattr(_cells, "_STRIP_CELLS", strip)
        monkeypatch.setattr(_cells, "threads_allowed", lambda threads=threads: threads)
        with pytest.warns(ViewshedWarning) as told:
            reading = open_terrain(paths).load(0, 0, 150, 170)
        told = [str(one.message) for one in told]
        found.append((told, reading.overlap, reading.undeclared_voids))
    assert found[0] == found[1]
    assert found[0][1][2] == pytest.approx(6.0)


def test_a_damaged_file_is_one_line_whichever_thread_meets_it(make_dem, monkeypatch):
    heights = np.random.default_rng(3).normal(size=(150, 170)).astype(np.float32)
    path = make_dem(array=heights, tiled=True, blockxsize=16, blockysize=16, compress="deflate")
    data = bytearray(path.read_bytes())
    data[len(data) // 2 : len(data) // 2 + 4000] = bytes(4000)
    path.write_bytes(data)
    monkeypatch.setattr(_cells, "_STRIP_CELLS", 512)
    monkeypatch.setattr(_cells, "threads_allowed", lambda: 3)
    with pytest.raises(DataError, match=r"dem\.tif: cannot be read, the file is truncated"):
        open_terrain(path).read(0, 0, 150, 170)
