"""Many tiles: how they are found, whether they fit, where they overlap."""

import shutil
from pathlib import Path

import geopandas
import numpy as np
import pytest
import rasterio
import shapely
from affine import Affine

from viewshed.errors import DataError, InputError, ViewshedWarning
from viewshed.io.elevation import open_terrain
from viewshed.io.mosaic import Layout, Tile

NORTH_UP = Affine(30, 0, 400_000, 0, -30, 6_000_000)
PLAIN = np.arange(12 * 10, dtype=np.float32).reshape(12, 10)


def at(row, col):
    """Transform of a tile that begins at a row and column of the mosaic."""
    return NORTH_UP @ Affine.translation(col, row)


def names(terrain):
    return [path.name for path in terrain.paths]


# --- finding them -------------------------------------------------------------------------------


def test_folder_of_tiles(tiles):
    folder, whole = tiles
    terrain = open_terrain(folder)
    assert names(terrain) == [f"{r:02d}-{c:02d}.tif" for r in (0, 20) for c in (0, 20, 40)]
    assert terrain.given == (str(folder),)
    np.testing.assert_array_equal(terrain.read(0, 0, 40, 60), whole)
    np.testing.assert_array_equal(terrain.read(15, 15, 10, 30), whole[15:25, 15:45])


@pytest.mark.parametrize("name", ["readme.txt", "x.aux.xml", "x.tfw", "x.prj", "x.md", "x.shp"])
def test_side_files_are_passed_over(tiles, name):
    folder, whole = tiles
    (folder / name).write_text("no raster")
    np.testing.assert_array_equal(open_terrain(folder).read(0, 0, 40, 60), whole)


def test_what_else_lies_in_folders(tiles):
    folder, whole = tiles
    (folder / ".hidden.tif").write_text("no raster")
    (folder / "LICENSE").write_text("no raster")
    (folder / "old.orig").touch()
    (folder / "preview.png").write_bytes(b"\x89PNG")
    (folder / "more").mkdir()
    shutil.copy(folder / "00-00.tif", folder / "more" / "a.tif")
    terrain = open_terrain(folder)
    assert len(terrain.paths) == 6
    np.testing.assert_array_equal(terrain.read(0, 0, 40, 60), whole)


def test_vector_file_in_a_folder(tiles):
    folder, whole = tiles
    frame = geopandas.GeoDataFrame(geometry=[shapely.Point(4e5, 6e6)], crs="EPSG:32633")
    frame.to_file(folder / "peaks.gpkg")
    np.testing.assert_array_equal(open_terrain(folder).read(0, 0, 40, 60), whole)


@pytest.mark.parametrize("content", [b"", b"no raster", b"II*\0\x08\0\0\0"])
def test_broken_raster_in_a_folder(tiles, content):
    folder, _ = tiles
    (folder / "10-10.tif").write_bytes(content)
    with pytest.raises(DataError, match=r"^[^\n]*10-10\.tif: [^\n]*(empty|damaged)[^\n]*$"):
        open_terrain(folder)


def test_picture_of_three_bands_in_a_folder(tiles, make_dem):
    make_dem("tiles/aerial.tif", np.zeros((3, 9, 9), np.uint8))
    with pytest.raises(DataError, match=r"aerial\.tif: has 3 bands"):
        open_terrain(tiles[0])


def test_results_are_no_elevation(tiles, make_dem):
    folder, whole = tiles
    path = make_dem("tiles/visible.tif", np.zeros((40, 60), np.uint8))
    with rasterio.open(path, "r+") as file:
        file.update_tags(VIEWSHED_VERSION="1")
    with pytest.raises(DataError, match=r"visible\.tif: is a result of viewshed and no elevation"):
        open_terrain(path)
    with pytest.warns(ViewshedWarning, match=r"visible\.tif: result of viewshed .* left out"):
        terrain = open_terrain(folder)
    np.testing.assert_array_equal(terrain.read(0, 0, 40, 60), whole)


def test_folder_without_rasters(tmp_path):
    (tmp_path / "readme.txt").write_text("nothing")
    with pytest.raises(DataError, match=r"holds no elevation raster; name the folder that does"):
        open_terrain(tmp_path)
    (tmp_path / "notes").write_text("nothing")
    with pytest.raises(DataError, match=r"notes: neither it nor any file beside it is an elev"):
        open_terrain(tmp_path)


def test_folder_of_another_format(tmp_path):
    for name in ("hdr.adf", "w001001.adf", "sta.adf"):
        (tmp_path / name).write_bytes(b"no grid")
    with pytest.raises(DataError, match=r"hdr\.adf: cannot be opened as a raster"):
        open_terrain(tmp_path)


def test_folder_that_is_closed(tiles, monkeypatch):
    def refuse(path):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr("os.scandir", refuse)
    with pytest.raises(DataError, match=r"tiles: cannot be listed: Permission denied"):
        open_terrain(tiles[0])


@pytest.mark.parametrize(
    ("pattern", "count"),
    [("*.tif", 6), ("00-*.tif", 3), ("?0-20.*", 2), ("[0-1]*-00.tif", 1), ("*", 6), ("", 6)],
)
def test_patterns(tiles, pattern, count):
    folder, _ = tiles
    (folder / "readme.txt").write_text("no raster")
    assert len(open_terrain(folder / pattern).paths) == count


def test_patterns_over_folders(tiles, tmp_path):
    _, whole = tiles
    for pattern in ("ti*", "*/*.tif", "**/*.tif", "**"):
        terrain = open_terrain(f"{tmp_path}/{pattern}")
        np.testing.assert_array_equal(terrain.read(0, 0, 40, 60), whole)


def test_pattern_without_a_match(tiles):
    folder, _ = tiles
    with pytest.raises(DataError, match=r"9\*\.tif: matches no file; check the pattern"):
        open_terrain(folder / "9*.tif")
    (folder / "readme.txt").write_text("no raster")
    with pytest.raises(DataError, match=r"r\*\.txt: matches no raster; check the pattern"):
        open_terrain(folder / "r*.txt")


def test_each_file_counts_once_and_in_the_order_given(tiles, monkeypatch):
    folder, _ = tiles
    monkeypatch.chdir(folder)
    given = [folder / "20-00.tif", "./00-20.tif", folder, "20-00.tif", "*.tif"]
    terrain = open_terrain(given)
    assert names(terrain) == [
        "20-00.tif", "00-20.tif", "00-00.tif", "00-40.tif", "20-20.tif", "20-40.tif",
    ]  # fmt: skip
    assert terrain.paths[1] == Path("00-20.tif")
    assert terrain.given == tuple(map(str, given))


def test_tile_that_breaks_in_the_middle(make_dem, tmp_path):
    noise = np.random.default_rng(0).random((600, 700)).astype(np.float32)
    for number in range(3):
        make_dem(f"{number}.tif", noise, transform=at(0, 700 * number), compress="deflate")
    with (tmp_path / "1.tif").open("r+b") as file:
        file.truncate(file.seek(0, 2) * 3 // 4)
    with pytest.raises(DataError, match=r"^[^\n]*1\.tif: [^\n]*(truncated|damaged)[^\n]*$"):
        open_terrain(tmp_path).read(0, 0, 600, 2100)


# --- do they fit? -------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("one", "other", "how"),
    [
        ("EPSG:32633", "EPSG:32634", r"CRS '.*33N' against '.*34N'; warp one"),
        ("EPSG:32633+5773", "EPSG:32633+3855", r"heights 'EGM96 height' against 'EGM2008 height'"),
        ("EPSG:32633", "EPSG:32633+5773", r"heights unstated against 'EGM96 height'; .* --crs"),
        ("EPSG:32633+5773", "EPSG:32633", r"heights 'EGM96 height' against unstated; .* --crs"),
    ],
)
def test_crs_and_datum_must_be_the_same(make_dem, one, other, how):
    paths = [
        make_dem("one.tif", crs=one, unit="m"),
        make_dem("two.tif", crs=other, unit="m", transform=at(0, 10)),
    ]
    with pytest.raises(DataError, match=rf"one\.tif and .*two\.tif do not fit together: .*{how}"):
        open_terrain(paths)


def test_stated_datum_brings_tiles_together(make_dem):
    paths = [
        make_dem("one.tif", crs="EPSG:32633+5773"),
        make_dem("two.tif", transform=at(0, 10)),
        make_dem("three.tif", crs=None, transform=at(0, 20)),
    ]
    terrain = open_terrain(paths, crs="EPSG:32633+5773")
    assert terrain.grid.shape == (12, 30)
    assert terrain.datum == "EGM96 height"


@pytest.mark.parametrize(
    ("crs", "datum"),
    [
        ("EPSG:32633", "unstated"),
        ("EPSG:32633+5773", "EGM96 height"),
        ("EPSG:4979", "ellipsoid of WGS 84"),
    ],
)
def test_datum_is_as_stated(make_dem, crs, datum):
    step = Affine(0.001, 0, 10, 0, -0.001, 50) if crs == "EPSG:4979" else NORTH_UP
    assert open_terrain(make_dem(crs=crs, transform=step)).datum == datum


def test_stated_crs_keeps_the_datum_of_the_file(make_dem):
    path = make_dem(crs="EPSG:32633+5773")
    assert open_terrain(path, crs="EPSG:32633").datum == "EGM96 height"
    with pytest.raises(InputError, match=r"count from 'EGM96 height' and --crs says 'EGM2008 hei"):
        open_terrain(path, crs="EPSG:32633+3855")


# --- overlaps -----------------------------------------------------------------------------------


def test_overlap_that_agrees(make_dem):
    paths = [make_dem("a.tif"), make_dem("b.tif", PLAIN[:, 6:], transform=at(0, 6))]
    assert open_terrain(paths).load(0, 0, 12, 10).overlap == (*paths, 0.0)
    assert open_terrain(paths).load(0, 0, 12, 6).overlap is None


def test_largest_difference_names_the_two_files(make_dem):
    flat = np.zeros((12, 10), np.float32)
    paths = [
        make_dem(f"{name}.tif", flat + height, transform=at(0, col))
        for name, height, col in [("a", 0, 0), ("b", 1, 6), ("c", 5, 12), ("d", 4.5, 3)]
    ]
    with pytest.warns(ViewshedWarning, match=r"a\.tif and .*d\.tif overlap and differ .* 4\.5 m;"):
        reading = open_terrain(paths).load(0, 0, 12, 22)
    assert reading.overlap == (paths[0], paths[3], 4.5)
    np.testing.assert_array_equal(reading.elevation[0], [0] * 10 + [1] * 6 + [5] * 6)


def test_difference_is_from_the_file_that_counted(make_dem):
    flat = np.zeros((12, 10), np.float32)
    first = flat.copy()
    first[:, 5:] = -9999
    paths = [
        make_dem("a.tif", first, nodata=-9999),
        make_dem("b.tif", flat + 1),
        make_dem("c.tif", np.where(np.arange(10) < 5, 0.5, 9).astype(np.float32) + flat),
    ]
    with pytest.warns(ViewshedWarning, match=r"b\.tif and .*c\.tif overlap"):
        reading = open_terrain(paths).load(0, 0, 12, 10)
    assert reading.overlap == (paths[1], paths[2], 8.0)
    np.testing.assert_array_equal(reading.elevation[0], [0] * 5 + [1] * 5)


def test_rounding_is_no_difference(make_dem):
    paths = [make_dem("a.tif"), make_dem("b.tif", PLAIN + np.float32(1e-4))]
    assert 0 < open_terrain(paths).load(0, 0, 12, 10).overlap[2] < 2e-4


def test_parts_of_a_window_are_those_a_slow_look_finds():
    rng = np.random.default_rng(5)
    placed = [tile_at(*box) for box in rng.integers([0, 0, 1, 1], [300, 300, 60, 60], (200, 4))]
    layout = Layout(placed)
    for row, col, rows, cols in rng.integers([0, 0, 1, 1], [300, 300, 80, 80], (50, 4)):
        window = (row, row + rows, col, col + cols)
        expected = [tile for tile in placed if common(window, edges(tile))]
        parts = layout.parts(row, col, rows, cols)
        assert [part.tile for part in parts] == expected
        for i, part in enumerate(parts):
            r, c = part.rows.start + row, part.cols.start + col
            assert (r - part.tile.row0, c - part.tile.col0) == (part.row, part.col)
            before = (common(common(window, edges(t)), edges(part.tile)) for t in expected[:i])
            shared = [
                (slice(b[0] - row, b[1] - row), slice(b[2] - col, b[3] - col)) for b in before if b
            ]
            assert list(part.shared) == shared


def tile_at(row, col, rows, cols):
    """A tile of which only the place matters."""
    return Tile(
        path=Path("t"), driver="GTiff", shape=(int(rows), int(cols)), transform=NORTH_UP,
        own_wkt="", dtype="float32", block=(1, 1), is_compressed=False, nodata=None,
        is_masked=False, scale=1.0, offset=0.0, unit="", files=(), row0=int(row), col0=int(col),
    )  # fmt: skip


def edges(tile):
    return tile.row0, tile.row0 + tile.shape[0], tile.col0, tile.col0 + tile.shape[1]


def common(one, other):
    """What two boxes (first row, last, first column, last) share, None if nothing."""
    top, bottom = max(one[0], other[0]), min(one[1], other[1])
    left, right = max(one[2], other[2]), min(one[3], other[3])
    return (top, bottom, left, right) if top < bottom and left < right else None
