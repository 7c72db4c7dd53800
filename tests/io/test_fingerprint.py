"""Files are the same at the end of a run as at its beginning, or it says so."""

import hashlib
import os
import shutil
from pathlib import Path

import geopandas
import numpy as np
import pytest
import shapely
from affine import Affine

from viewshed.errors import DataError, InputError
from viewshed.io._files import file_sha256
from viewshed.io.elevation import open_terrain

ALL = (0, 0, 12, 10)


def names(found):
    return [Path(entry["path"]).name for entry in found.entries]


def test_entries(make_dem):
    path = make_dem()
    entries = open_terrain(path).fingerprint(*ALL).entries
    assert entries == [
        {
            "path": str(path),
            "size": path.stat().st_size,
            "sha256": hashlib.sha256(path.read_bytes()).hexdigest(),
        }
    ]


def test_only_tiles_that_reach_into_the_window(tiles):
    terrain = open_terrain(tiles[0])
    assert names(terrain.fingerprint(0, 0, 20, 20)) == ["00-00.tif"]
    assert names(terrain.fingerprint(19, 20, 2, 21)) == [
        "00-20.tif", "00-40.tif", "20-20.tif", "20-40.tif",
    ]  # fmt: skip
    with pytest.raises(InputError, match="not inside the grid"):
        terrain.fingerprint(0, 0, 41, 1)


def test_files_of_the_void_mask_stand_apart(make_dem, tmp_path):
    mask = tmp_path / "sea.shp"
    geopandas.GeoDataFrame(
        {"n": [1]}, geometry=[shapely.box(4e5, 5e6, 5e5, 6e6)], crs="EPSG:32633"
    ).to_file(mask)
    terrain = open_terrain(make_dem(), void_height=0, void_mask=mask)
    found = terrain.fingerprint(*ALL)
    assert names(found) == ["dem.tif"]
    assert [Path(entry["path"]).name for entry in found.mask_entries] == [
        "sea.shp", "sea.shx", "sea.dbf", "sea.prj", "sea.cpg",
    ]  # fmt: skip


def test_files_that_stayed_the_same_are_not_read_again(make_dem, monkeypatch):
    found = open_terrain(make_dem()).fingerprint(*ALL)
    monkeypatch.setattr("viewshed.io.fingerprint.file_sha256", lambda path: "other")
    found.confirm()


def test_file_that_was_touched_is_read_again(make_dem):
    path = make_dem()
    found = open_terrain(path).fingerprint(*ALL)
    os.utime(path, ns=(1, 1))
    found.confirm()
    copy = path.with_name("copy.tif")
    shutil.copy(path, copy)
    copy.replace(path)
    found.confirm()


def test_file_that_was_replaced(make_dem):
    path = make_dem()
    found = open_terrain(path).fingerprint(*ALL)
    make_dem(array=np.ones((12, 10), np.float32))
    with pytest.raises(DataError, match=r"dem\.tif: was replaced while it was read; start again"):
        found.confirm()


def test_file_that_was_replaced_and_looks_the_same(make_dem):
    path = make_dem()
    found = open_terrain(path).fingerprint(*ALL)
    before = path.stat()
    make_dem(array=np.arange(120, dtype=np.float32)[::-1].reshape(12, 10).copy())
    os.utime(path, ns=(before.st_atime_ns, before.st_mtime_ns))
    assert path.stat().st_size == before.st_size
    with pytest.raises(DataError, match=r"was replaced while it was read"):
        found.confirm()


def test_file_that_went_away(make_dem):
    path = make_dem()
    terrain = open_terrain(path)
    found = terrain.fingerprint(*ALL)
    path.unlink()
    with pytest.raises(DataError, match=r"dem\.tif: went away while it was read; get it back"):
        found.confirm()
    with pytest.raises(DataError, match=r"dem\.tif: cannot be read: No such file"):
        terrain.fingerprint(*ALL)


def test_file_given_twice_is_taken_once(make_dem):
    step = Affine(30, 0, 400_300, 0, -30, 6_000_000)
    paths = [make_dem("a.tif"), make_dem("b.tif", transform=step)]
    assert names(open_terrain([*paths, paths[0]]).fingerprint(0, 0, 12, 20)) == ["a.tif", "b.tif"]


def test_taken_while_the_file_is_read(make_dem):
    path = make_dem()
    found = open_terrain(path).fingerprint(*ALL, meanwhile=True)
    assert found.entries == open_terrain(path).fingerprint(*ALL).entries
    found.confirm()
    make_dem(array=np.ones((12, 10), np.float32))
    with pytest.raises(DataError, match=r"dem\.tif: was replaced while it was read; start again"):
        found.confirm()


def test_file_that_was_replaced_before_it_was_hashed(make_dem, monkeypatch):
    terrain = open_terrain(make_dem())

    def late(path):
        make_dem(array=np.ones((12, 10), np.float32))
        return file_sha256(path)

    monkeypatch.setattr("viewshed.io.fingerprint.file_sha256", late)
    found = terrain.fingerprint(*ALL, meanwhile=True)
    with pytest.raises(DataError, match=r"dem\.tif: was replaced while it was read; start again"):
        found.confirm()


def test_file_that_went_away_before_it_was_hashed(make_dem, monkeypatch):
    path = make_dem()

    def late(file):
        path.unlink()
        return file_sha256(file)

    monkeypatch.setattr("viewshed.io.fingerprint.file_sha256", late)
    found = open_terrain(path).fingerprint(*ALL, meanwhile=True)
    with pytest.raises(DataError, match=r"dem\.tif: cannot be read: No such file"):
        _ = found.entries
