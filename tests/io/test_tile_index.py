"""Headers of tiles that need not be read anew: kept in an index, or like those of another tile."""

import json
import os

import numpy as np
import pytest
import rasterio
import rasterio.shutil
from affine import Affine

import viewshed.io._header
from viewshed.errors import DataError, OutputError, ViewshedWarning
from viewshed.io._geotiff import Twins
from viewshed.io._header import read_header, reading_env
from viewshed.io.elevation import open_terrain

NORTH_UP = Affine(30, 0, 400_000, 0, -30, 6_000_000)


def at(row, col):
    """Transform of a tile that begins at a row and column of the mosaic."""
    return NORTH_UP @ Affine.translation(col, row)


# --- the index ----------------------------------------------------------------------------------


@pytest.fixture
def count_headers(monkeypatch):
    """List of the files whose headers the raster library reads."""
    seen = []
    real = viewshed.io._header.read_header

    def read(path):
        seen.append(path.name)
        return real(path)

    monkeypatch.setattr("viewshed.io.tiles.read_header", read)
    return seen


def test_index_saves_reading_headers(tiles, tmp_path, count_headers):
    folder, whole = tiles
    index = tmp_path / "run" / "index.json"
    index.parent.mkdir()
    first = open_terrain(folder, index=index)
    assert len(count_headers) == 6
    first.save_index(index)
    again = open_terrain(folder, index=index)
    assert len(count_headers) == 6
    assert again == first
    np.testing.assert_array_equal(again.read(0, 0, 40, 60), whole)


def test_index_is_the_same_bytes_each_time(tiles, tmp_path):
    folder, _ = tiles
    index = tmp_path / "index.json"
    open_terrain(folder).save_index(index)
    first = index.read_bytes()
    open_terrain(folder, index=index).save_index(index)
    assert index.read_bytes() == first
    assert json.loads(first)["format"] == "viewshed index of tiles"
    assert str(tmp_path).encode() not in first
    assert sorted(p.name for p in tmp_path.iterdir()) == ["index.json", "tiles"]


def test_index_moves_with_the_tiles(tiles, tmp_path, count_headers):
    folder, whole = tiles
    open_terrain(folder).save_index(tmp_path / "index.json")
    moved = tmp_path / "elsewhere"
    moved.mkdir()
    (tmp_path / "index.json").rename(moved / "index.json")
    folder.rename(moved / "tiles")
    count_headers.clear()
    terrain = open_terrain(moved / "tiles", index=moved / "index.json")
    assert count_headers == []
    np.testing.assert_array_equal(terrain.read(0, 0, 40, 60), whole)


def test_tile_that_changed_is_read_again(tiles, tmp_path, make_dem, count_headers):
    folder, whole = tiles
    index = tmp_path / "index.json"
    open_terrain(folder).save_index(index)
    count_headers.clear()
    make_dem("tiles/20-40.tif", whole[:10, :20], transform=at(20, 40))
    terrain = open_terrain(folder, index=index)
    assert count_headers == ["20-40.tif"]
    np.testing.assert_array_equal(terrain.read(20, 40, 10, 20), whole[:10, :20])


def test_a_file_that_came_beside_a_tile_has_its_header_read_again(tiles, tmp_path, count_headers):
    folder, whole = tiles
    index = tmp_path / "index.json"
    open_terrain(folder).save_index(index)
    count_headers.clear()
    (folder / "20-40.tif.aux.xml").write_text(
        '<PAMDataset><PAMRasterBand band="1"><NoDataValue>'
        f"{whole[25, 45]}</NoDataValue></PAMRasterBand></PAMDataset>",
        encoding="utf-8",
    )
    terrain = open_terrain(folder, index=index)
    assert count_headers == ["20-40.tif"]
    assert np.isnan(terrain.read(20, 40, 10, 20)[5, 5])
    terrain.save_index(index)
    (folder / "20-40.tif.aux.xml").unlink()
    count_headers.clear()
    assert open_terrain(folder, index=index).read(20, 40, 10, 20)[5, 5] == whole[25, 45]
    assert count_headers == ["20-40.tif"]


def test_tile_that_changed_unseen_is_found_out(tiles, tmp_path, make_dem):
    folder, whole = tiles
    index, path = tmp_path / "index.json", folder / "20-40.tif"
    open_terrain(folder).save_index(index)
    before = path.stat()
    make_dem("tiles/20-40.tif", whole[:20, :20], transform=at(20, 41))
    os.utime(path, ns=(before.st_atime_ns, before.st_mtime_ns))
    assert path.stat().st_size == before.st_size
    with pytest.raises(DataError, match=r"20-40\.tif: has changed .* without the index of tiles"):
        open_terrain(folder, index=index).read(0, 0, 40, 60)


@pytest.mark.parametrize("nodata", [None, -9999.0, np.nan, -np.inf])
def test_index_keeps_every_fact(make_dem, tmp_path, nodata):
    path = make_dem(
        nodata=nodata, scale=0.1, offset=3.5, unit="ft", crs="EPSG:32633+5773", tiled=True,
        blockxsize=16, blockysize=16,
    )  # fmt: skip
    first = open_terrain(path)
    first.save_index(tmp_path / "index.json")
    again = open_terrain(path, index=tmp_path / "index.json")
    assert repr(again.tiles) == repr(first.tiles)
    np.testing.assert_array_equal(again.read(0, 0, 12, 10), first.read(0, 0, 12, 10))


def test_virtual_rasters_are_not_indexed(make_dem, tmp_path, count_headers):
    virtual, index = tmp_path / "v.vrt", tmp_path / "index.json"
    rasterio.shutil.copy(make_dem("a.tif"), virtual, driver="VRT")
    open_terrain(virtual).save_index(index)
    open_terrain(virtual, index=index)
    assert count_headers == ["v.vrt", "v.vrt"]


def damaged(text):
    """An index with one digit of a transform changed."""
    return text.replace("400000.0", "400030.0", 1)


@pytest.mark.parametrize(
    "spoil",
    [
        damaged,
        lambda text: text[: len(text) // 2],
        lambda text: "",
        lambda text: "{}",
        lambda text: "[1, 2]",
        lambda text: '{"type": "FeatureCollection", "features": []}',
        lambda text: "\udcff",
    ],
    ids=["damaged", "cut", "empty", "no keys", "list", "GeoJSON", "no text"],
)
def test_index_that_is_none(tiles, tmp_path, spoil):
    folder, whole = tiles
    index = tmp_path / "index.json"
    open_terrain(folder).save_index(index)
    index.write_text(spoil(index.read_text()), errors="surrogateescape")
    with pytest.warns(ViewshedWarning, match=r"index\.json: is not used as index of tiles \(no"):
        terrain = open_terrain(folder, index=index)
    np.testing.assert_array_equal(terrain.read(0, 0, 40, 60), whole)


def test_index_that_is_a_folder(tiles, tmp_path):
    with pytest.warns(ViewshedWarning, match=r"not used as index of tiles \(Is a directory\)"):
        open_terrain(tiles[0], index=tmp_path)


def test_index_of_another_version(tiles, tmp_path, count_headers, monkeypatch):
    folder, _ = tiles
    open_terrain(folder).save_index(tmp_path / "index.json")
    count_headers.clear()
    monkeypatch.setattr("viewshed.io._index.__version__", "0.0.1")
    open_terrain(folder, index=tmp_path / "index.json")
    assert len(count_headers) == 6


def test_index_spares_other_files(tiles, tmp_path):
    terrain = open_terrain(tiles[0])
    other = tmp_path / "record.json"
    other.write_text('{"format": "viewshed record"}')
    with pytest.raises(OutputError, match=r"record\.json: exists and is no index of tiles"):
        terrain.save_index(other)
    with pytest.raises(OutputError, match=r"no index of tiles; choose another name"):
        terrain.save_index(tmp_path)
    with pytest.raises(OutputError, match=r"i\.json: cannot be written: No such file"):
        terrain.save_index(tmp_path / "none" / "i.json")
    assert other.read_text() == '{"format": "viewshed record"}'


# --- GeoTIFFs that say the same -----------------------------------------------------------------

KINDS = {
    "plain": {},
    "nodata": {"nodata": -9999},
    "scaled": {"scale": 0.1, "offset": 2.0, "unit": "ft"},
    "tiled": {"tiled": True, "blockxsize": 16, "blockysize": 16, "compress": "deflate"},
    "compound": {"crs": "EPSG:32633+5773"},
    "point": {"tags": {"AREA_OR_POINT": "Point"}},
    "BigTIFF": {"bigtiff": "yes"},
    "big-endian": {"endianness": "big"},
    "mask": {"mask": np.eye(12, 10, dtype=np.uint8) * 255},
}


def write(make_dem, name, transform, kind):
    options = dict(KINDS[kind])
    tags = options.pop("tags", {})
    path = make_dem(name, transform=transform, **options)
    if tags:
        with rasterio.open(path, "r+") as file:
            file.update_tags(**tags)
    return path


@pytest.mark.parametrize("kind", KINDS)
def test_twin_gets_the_header_that_the_library_would_give(make_dem, kind):
    step = Affine(1 / 3.0, 0, 400_000.1, 0, -1 / 3.0, 6_000_000.7)
    with reading_env():
        twins = Twins()
        first = write(make_dem, "a.tif", step, kind)
        assert twins.get(first) is None
        twins.learn(read_header(first))
        for n in range(1, 20):
            path = write(make_dem, f"{n}.tif", step @ Affine.translation(n * 7, n * 11), kind)
            assert twins.get(path) == read_header(path)


@pytest.mark.parametrize("kind", [kind for kind in KINDS if kind != "plain"])
def test_what_says_something_else_is_no_twin(make_dem, kind):
    with reading_env():
        twins = Twins()
        plain = write(make_dem, "a.tif", NORTH_UP, "plain")
        assert twins.get(plain) is None
        twins.learn(read_header(plain))
        assert twins.get(write(make_dem, "b.tif", at(0, 10), kind)) is None


@pytest.mark.parametrize(
    "transform",
    [at(0, 10) @ Affine.rotation(3), Affine(30, 0, 4e5, 0, 30, 6e6), at(0, 10) @ Affine.scale(2)],
    ids=["turned", "south-up", "coarser"],
)
def test_another_kind_of_grid_is_no_twin(make_dem, transform):
    with reading_env():
        twins = Twins()
        plain = make_dem("a.tif")
        assert twins.get(plain) is None
        twins.learn(read_header(plain))
        other = make_dem("b.tif", transform=transform)
        assert twins.get(other) is None


@pytest.mark.parametrize("name", ["b.tfw", "b.tif.ovr", "bc.xml", "c.tif.aux.xml"])
def test_file_with_others_beside_it_that_change_nothing(make_dem, tmp_path, name):
    with reading_env():
        first, second = make_dem("a.tif"), make_dem("b.tif", transform=at(0, 10))
        (tmp_path / name).write_text("30\n0\n0\n-30\n15\n15\n")
        twins = Twins()
        assert twins.get(first) is None
        twins.learn(read_header(first))
        assert twins.get(second) == read_header(second)


@pytest.mark.parametrize("name", ["b.tif.aux.xml", "b.tif.msk", "B.XML", "b_rpc.txt"])
def test_file_with_others_beside_it_is_no_twin(make_dem, tmp_path, name):
    with reading_env():
        first, second = make_dem("a.tif"), make_dem("b.tif", transform=at(0, 10))
        (tmp_path / name).write_text("<x/>")
        twins = Twins()
        assert twins.get(first) is None
        twins.learn(read_header(first))
        assert twins.get(second) is None


@pytest.mark.parametrize(
    "content", [b"", b"II", b"II*\0", b"II*\0\xff\xff\xff\x7f", b"MM\0*\0\0\0\x08"]
)
def test_what_is_no_geotiff_is_no_twin(tmp_path, content):
    path = tmp_path / "x.tif"
    path.write_bytes(content)
    assert Twins().get(path) is None
    assert Twins().get(tmp_path / "none.tif") is None


def test_many_tiles_are_read_like_few(make_dem, tmp_path, count_headers):
    whole = np.random.default_rng(2).random((60, 120)).astype(np.float32)
    for r in range(0, 60, 10):
        for c in range(0, 120, 12):
            make_dem(f"{r}-{c}.tif", whole[r : r + 10, c : c + 12], transform=at(r, c))
    terrain = open_terrain(tmp_path)
    assert len(terrain.paths) == 60
    assert len(count_headers) == 1
    np.testing.assert_array_equal(terrain.read(0, 0, 60, 120), whole)
